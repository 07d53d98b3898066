//! Plots as SVG.

use std::ops::Range;

use plotters::{coord::Shift, prelude::*};

use super::ReportError;

/// Drawn twice as large as it is shown: coordinates of the SVG are whole numbers.
const WIDE: (u32, u32) = (2_000, 760);
const INK: RGBColor = RGBColor(40, 40, 40);
const BAND: RGBColor = RGBColor(20, 90, 120);
const GOOD: RGBColor = RGBColor(0, 110, 60);
const GRID: RGBColor = RGBColor(225, 225, 225);
const DOUBT: RGBColor = RGBColor(170, 95, 0);

/// A stretch of time in which the voltage lay between two values: one column of the plot.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Span {
    pub from_s: f64,
    pub until_s: f64,
    pub lowest: f64,
    pub highest: f64,
}

/// A frame in a plot.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Dot {
    pub x: f64,
    pub y: f64,
    pub good: bool,
}

fn failed(error: impl ToString) -> ReportError {
    ReportError::Plot(error.to_string())
}

/// Makes a plot readable by those who do not see it.
fn named(svg: String, title: &str, description: &str) -> String {
    let id = title.replace(' ', "-").to_lowercase();
    let open = format!(
        " role=\"img\" aria-labelledby=\"{id}-t {id}-d\"><title id=\"{id}-t\">{title}</title><desc id=\"{id}-d\">{description}</desc>"
    );
    // Colours come from the page, so that they follow light, dark and print; `html` has the rule for each. A column that
    // rounding left without width is one wide.
    svg.replacen('>', &open, 1)
        .replace(" opacity=\"1\"", "")
        .replace("#FFFFFF", "none")
        .replace("width=\"0\"", "width=\"1\"")
}

/// A number on an axis, with no decimal that says nothing.
fn plain(value: &f64) -> String {
    let text = format!("{value:.4}");
    text.trim_end_matches('0').trim_end_matches('.').to_owned()
}

fn range(values: impl Iterator<Item = f64>) -> (f64, f64) {
    let (low, high) = values.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), v| (low.min(v), high.max(v)));
    if low > high {
        return (0.0, 1.0);
    }
    let room = (0.06 * (high - low)).max(1e-3 * high.abs()).max(1e-9);
    (low - room, high + room)
}

/// Voltage over time, with frames as dots and events as marks on the axis.
///
/// Crosses along the top are refused frames, which have no value of their own.
pub(super) fn voltage(
    spans: &[Span],
    dots: &[Dot],
    refused: &[f64],
    events: &[f64],
    description: &str,
) -> Result<String, ReportError> {
    let (x0, x1) = range(spans.iter().flat_map(|span| [span.from_s, span.until_s]));
    let (y0, highest) = range(spans.iter().flat_map(|span| [span.lowest, span.highest]));
    let y1 = highest + 0.08 * (highest - y0);
    let mut svg = String::new();
    {
        let root = SVGBackend::with_string(&mut svg, WIDE).into_drawing_area();
        let mut chart = axes(&root, x0..x1, y0..y1, ["time from the first reading, s", "accelerating voltage, V"])?;
        let thick = (y1 - y0) * 0.003;
        let columns = spans.iter().map(|span| {
            Rectangle::new([(span.from_s, span.lowest - thick), (span.until_s, span.highest + thick)], BAND.filled())
        });
        chart.draw_series(columns).map_err(failed)?;
        let tall = y0 + 0.05 * (y1 - y0);
        let marks = events.iter().map(|x| PathElement::new([(*x, y0), (*x, tall)], INK.stroke_width(4)));
        chart.draw_series(marks).map_err(failed)?;
        let top = y1 - 0.04 * (y1 - y0);
        let inside = refused.iter().filter(|x| (x0..=x1).contains(*x));
        chart.draw_series(inside.map(|x| Cross::new((*x, top), 8, DOUBT.stroke_width(4)))).map_err(failed)?;
        draw_dots(&mut chart, dots)?;
        root.present().map_err(failed)?;
    }
    Ok(named(svg, "Voltage over time", description))
}

type Chart<'a, 'b> = ChartContext<
    'a,
    SVGBackend<'b>,
    Cartesian2d<plotters::coord::types::RangedCoordf64, plotters::coord::types::RangedCoordf64>,
>;

/// The frame both plots share, with what its two axes show.
fn axes<'a, 'b>(
    root: &'a DrawingArea<SVGBackend<'b>, Shift>,
    x: Range<f64>,
    y: Range<f64>,
    [x_desc, y_desc]: [&str; 2],
) -> Result<Chart<'a, 'b>, ReportError> {
    let mut chart = ChartBuilder::on(root)
        .margin(24)
        .x_label_area_size(80)
        .y_label_area_size(140)
        .build_cartesian_2d(x, y)
        .map_err(failed)?;
    chart
        .configure_mesh()
        .x_desc(x_desc)
        .y_desc(y_desc)
        .x_label_formatter(&plain)
        .y_label_formatter(&plain)
        .label_style(("sans-serif", 30, &INK))
        .axis_desc_style(("sans-serif", 32, &INK))
        .light_line_style(WHITE)
        .bold_line_style(GRID.stroke_width(2))
        .axis_style(INK.stroke_width(2))
        .draw()
        .map_err(failed)?;
    Ok(chart)
}

/// Good frames are circles, doubtful ones triangles: shape tells them apart without colour.
fn draw_dots(chart: &mut Chart<'_, '_>, dots: &[Dot]) -> Result<(), ReportError> {
    let good = dots.iter().filter(|dot| dot.good).map(|dot| Circle::new((dot.x, dot.y), 7, GOOD.filled()));
    chart.draw_series(good).map_err(failed)?;
    let doubtful =
        dots.iter().filter(|dot| !dot.good).map(|dot| TriangleMarker::new((dot.x, dot.y), 12, DOUBT.filled()));
    chart.draw_series(doubtful).map_err(failed)?;
    Ok(())
}

/// Wavelength over voltage with the relativistic curve.
pub(super) fn wavelength(dots: &[Dot], curve: &[(f64, f64)], description: &str) -> Result<String, ReportError> {
    let (x0, x1) = range(dots.iter().map(|dot| dot.x).chain(curve.iter().map(|point| point.0)));
    let (y0, y1) = range(dots.iter().map(|dot| dot.y).chain(curve.iter().map(|point| point.1)));
    let mut svg = String::new();
    {
        let root = SVGBackend::with_string(&mut svg, WIDE).into_drawing_area();
        let mut chart = axes(&root, x0..x1, y0..y1, ["accelerating voltage, V", "electron wavelength, pm"])?;
        chart.draw_series(LineSeries::new(curve.iter().copied(), BAND.stroke_width(4))).map_err(failed)?;
        draw_dots(&mut chart, dots)?;
        root.present().map_err(failed)?;
    }
    Ok(named(svg, "Wavelength over voltage", description))
}
