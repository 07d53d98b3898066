//! Residuals as a picture: in characters for the terminal, as SVG for the page.

use std::fmt::Write as _;

use plotters::{
    prelude::{
        ChartBuilder, Circle, Cross, DrawingAreaErrorKind, EmptyElement, IntoDrawingArea, LineSeries, PathElement,
        SVGBackend, TriangleMarker,
    },
    style::{BLACK, Color, WHITE},
};

use super::{FitReport, Point};

/// Characters on either side of zero.
const HALF: usize = 25;

fn scale_volts(report: &FitReport) -> f64 {
    let largest = report
        .residuals
        .iter()
        .filter(|residual| residual.used)
        .map(|residual| residual.volts.abs())
        .fold(0.0, f64::max);
    if largest > 0.0 { largest } else { 1.0 }
}

fn mark(point: &Point, used: bool) -> char {
    match (used, point.direction.as_str()) {
        (false, _) => 'x',
        (_, "up") => '^',
        (_, "down") => 'v',
        _ => 'o',
    }
}

/// One line a point in the order of voltage, the residual to the left or right of zero. Readable without colour.
pub fn residual_lines(points: &[Point], report: &FitReport) -> String {
    let scale = scale_volts(report);
    let mut order: Vec<usize> = (0..points.len()).collect();
    order.sort_by(|a, b| points[*a].reference_volts.total_cmp(&points[*b].reference_volts));
    let mut text = format!(
        "{:>4} {:>10}  residual, V; full width {scale:.2} V; ^ up, v down, o zero, x not used\n",
        "no.", "reference"
    );
    for index in order {
        let residual = &report.residuals[index];
        let share = (residual.volts / scale).clamp(-1.0, 1.0);
        let at = (HALF as f64 + libm::round(share * HALF as f64)) as usize;
        let mut bar: Vec<char> = vec![' '; 2 * HALF + 1];
        bar[HALF] = '|';
        bar[at.min(2 * HALF)] = mark(&points[index], residual.used);
        let bar: String = bar.into_iter().collect();
        let _ =
            writeln!(text, "{:>4} {:>10.1} [{bar}] {:+.2}", index + 1, points[index].reference_volts, residual.volts);
    }
    text
}

/// What the marks of [`residual_svg`] mean.
pub(super) const LEGEND: &str = "Filled triangle: taken upwards; circle: downwards; square: zero; cross: not used.";

/// The residuals over voltage as an SVG picture; an empty string where there is nothing to draw.
pub(super) fn residual_svg(points: &[Point], report: &FitReport, title: &str) -> String {
    let mut svg = String::new();
    match draw(&mut svg, points, report, title) {
        Ok(()) => svg,
        Err(_) => String::new(),
    }
}

type DrawError = DrawingAreaErrorKind<std::io::Error>;

fn draw(svg: &mut String, points: &[Point], report: &FitReport, title: &str) -> Result<(), DrawError> {
    let area = SVGBackend::with_string(svg, (720, 300)).into_drawing_area();
    area.fill(&WHITE)?;
    let scale = 1.2 * scale_volts(report);
    let ends = points.iter().fold((f64::INFINITY, f64::NEG_INFINITY), |ends: (f64, f64), point| {
        (ends.0.min(point.reference_volts), ends.1.max(point.reference_volts))
    });
    let margin = 0.03 * (ends.1 - ends.0).max(1.0);
    let volts = ends.0 - margin..ends.1 + margin;
    let mut chart = ChartBuilder::on(&area)
        .caption(title, ("sans-serif", 16))
        .margin(8)
        .x_label_area_size(36)
        .y_label_area_size(56)
        .build_cartesian_2d(volts.clone(), -scale..scale)?;
    let mesh = &mut chart.configure_mesh();
    mesh.x_desc("reference, V").y_desc("reference less fit, V").light_line_style(WHITE).draw()?;
    chart.draw_series(LineSeries::new([(volts.start, 0.0), (volts.end, 0.0)], &BLACK))?;
    for (index, point) in points.iter().enumerate() {
        let residual = &report.residuals[index];
        let at = (point.reference_volts, residual.volts.clamp(-scale, scale));
        // The shape tells the direction; colour would be lost in print.
        match mark(point, residual.used) {
            '^' => chart.draw_series([TriangleMarker::new(at, 5, BLACK.filled())])?,
            'v' => chart.draw_series([Circle::new(at, 4, BLACK.stroke_width(1))])?,
            'o' => {
                chart
                    .draw_series([EmptyElement::at(at)
                        + PathElement::new(vec![(-4, -4), (4, -4), (4, 4), (-4, 4), (-4, -4)], BLACK)])?
            }
            _ => chart.draw_series([Cross::new(at, 5, BLACK.stroke_width(2))])?,
        };
    }
    area.present()
}
