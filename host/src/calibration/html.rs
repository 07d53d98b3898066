//! A certificate as a page that prints well: self-contained, readable without colour.

use std::fmt::Write as _;

use super::{Certificate, Channel, ChannelFit, assess, plot};

const STYLE: &str = "body{font:15px/1.45 system-ui,sans-serif;max-width:52rem;margin:2rem auto;padding:0 1rem;color:#111;background:#fff}\
h1{font-size:1.5rem}h2{font-size:1.1rem;margin-top:1.6rem}\
table{border-collapse:collapse;margin:.5rem 0;font-variant-numeric:tabular-nums}\
th,td{border:1px solid #777;padding:.15rem .5rem;text-align:right}th[scope=row],td.text{text-align:left}\
.mark{border:3px solid #111;padding:.4rem .8rem;font-weight:700}\
figure{margin:.5rem 0}.points{font-size:.8rem}.points td:nth-child(2){white-space:nowrap}svg{max-width:100%;height:auto}code{overflow-wrap:anywhere}\
@media print{body{margin:0;max-width:none;font-size:11px}h2{break-after:avoid}tr{break-inside:avoid}}";

/// The page.
pub fn certificate_page(certificate: &Certificate) -> String {
    let mut page = String::new();
    let title = format!("Calibration certificate {}", short(certificate));
    let _ = write!(
        page,
        "<!DOCTYPE html>\n<html lang=\"en\"><head><meta charset=\"utf-8\"><meta name=\"viewport\" content=\"width=device-width\">\
         <title>{title}</title><style>{STYLE}</style></head><body>\n<h1>{title}</h1>\n"
    );
    if certificate.simulated {
        page.push_str("<p class=\"mark\">SIMULATED: made with an invented bench. It certifies nothing.</p>\n");
    }
    identities(&mut page, certificate);
    remarks(&mut page, certificate);
    channel(&mut page, certificate, Channel::Sense);
    channel(&mut page, certificate, Channel::Cross);
    uncertainty(&mut page, certificate);
    points(&mut page, certificate);
    page.push_str(
        "<h2>Caution</h2>\n<p>A calibrated reading is no proof that a circuit is dead: before touching anything switch off, wait, \
         earth it with a stick and test with an independent indicator. The wired interlock chain protects people; this \
         instrument does not.</p>\n</body></html>\n",
    );
    page
}

fn short(certificate: &Certificate) -> String {
    certificate.hash.chars().take(16).collect()
}

/// Text that came from a person or a file, safe inside HTML.
fn safe(text: &str) -> String {
    text.replace('&', "&amp;").replace('<', "&lt;").replace('>', "&gt;").replace('"', "&quot;")
}

fn row(page: &mut String, name: &str, value: &str) {
    let _ = writeln!(page, "<tr><th scope=\"row\">{name}</th><td class=\"text\">{}</td></tr>", safe(value));
}

fn identities(page: &mut String, certificate: &Certificate) {
    let (reference, conditions, stability) = (&certificate.reference, &certificate.conditions, &certificate.stability);
    page.push_str("<table>\n");
    row(page, "Bench", &certificate.bench);
    row(page, "Board", &certificate.device);
    row(page, "Issued", &certificate.issued);
    row(page, "Valid until", &certificate.valid_until);
    row(page, "Made by", &certificate.operator);
    row(page, "Reference", &reference.identity);
    row(page, "Its certificate", &reference.certificate);
    row(page, "Its standard uncertainty (k = 1)", &format!("{} ppm and {} V", reference.u_ppm, reference.u_volts));
    row(page, "Range", &format!("{} to {} V at the divider's input", conditions.volts_min, conditions.volts_max));
    let (least, most) = (conditions.ambient_min_celsius, conditions.ambient_max_celsius);
    row(
        page,
        "Temperature",
        &format!("made at {:.1}, for use from {least:.1} to {most:.1} degrees Celsius", conditions.ambient_celsius),
    );
    let (slope, u) = (stability.temperature_ppm_per_kelvin, stability.temperature_u_ppm_per_kelvin);
    row(page, "Temperature coefficient", &format!("{slope:.2} ppm/K, standard uncertainty {u:.2} ppm/K"));
    row(
        page,
        "Drift",
        &format!("standard uncertainty {} ppm per year since the day of issue", stability.drift_u_ppm_per_year),
    );
    row(page, "SHA-256", &certificate.hash);
    page.push_str("</table>\n");
}

fn remarks(page: &mut String, certificate: &Certificate) {
    if certificate.remarks.is_empty() {
        return;
    }
    page.push_str("<h2>Remarks</h2>\n<ul>\n");
    for remark in &certificate.remarks {
        let _ = writeln!(page, "<li>{}</li>", safe(remark));
    }
    page.push_str("</ul>\n");
}

fn name(channel: Channel) -> &'static str {
    match channel {
        Channel::Sense => "Main sense",
        Channel::Cross => "Cross-sense",
    }
}

fn channel(page: &mut String, certificate: &Certificate, channel: Channel) {
    let fit: &ChannelFit = certificate.fit(channel);
    let name = name(channel);
    let _ = writeln!(
        page,
        "<h2>{name}</h2>\n<p>Signed volts = a0 + a1 N + a2 N<sup>2</sup>, N the mean code, {} to {}.</p>",
        fit.code_min, fit.code_max
    );
    page.push_str("<table>\n<tr><th scope=\"col\">Term</th><th scope=\"col\">Value</th><th scope=\"col\">Covariance with a0</th><th scope=\"col\">with a1</th><th scope=\"col\">with a2</th></tr>\n");
    for (index, (value, row)) in fit.coefficients.iter().zip(&fit.covariance).enumerate() {
        let _ = writeln!(
            page,
            "<tr><th scope=\"row\">a{index}</th><td>{value:.9e}</td><td>{:.3e}</td><td>{:.3e}</td><td>{:.3e}</td></tr>",
            row[0], row[1], row[2]
        );
    }
    let _ = writeln!(
        page,
        "</table>\n<p>Residual standard deviation {:.3} V; largest hysteresis {:.4} %.</p>",
        fit.residual_volts,
        100.0 * fit.hysteresis_fraction
    );
    picture(page, certificate, channel);
}

fn picture(page: &mut String, certificate: &Certificate, channel: Channel) {
    let given = (certificate.stability.temperature_ppm_per_kelvin, certificate.stability.temperature_u_ppm_per_kelvin);
    let Ok(found) = assess(&certificate.points, given) else { return };
    let report = if channel == Channel::Sense { &found.sense } else { &found.cross };
    let name = name(channel);
    let svg = plot::residual_svg(&certificate.points, report, &format!("{name}: residuals"));
    if !svg.is_empty() {
        let alt = format!(
            "{name}: residuals of {} points over voltage, largest {:.2} V",
            certificate.points.len(),
            largest(report)
        );
        let _ = writeln!(
            page,
            "<figure role=\"img\" aria-label=\"{alt}\">{svg}<figcaption>{}</figcaption></figure>",
            plot::LEGEND
        );
    }
}

fn largest(report: &super::FitReport) -> f64 {
    report.residuals.iter().filter(|residual| residual.used).map(|residual| residual.volts.abs()).fold(0.0, f64::max)
}

/// What a frame's voltage would be uncertain by at some voltages, on the last day of validity.
fn uncertainty(page: &mut String, certificate: &Certificate) {
    let conditions = &certificate.conditions;
    let largest = if conditions.volts_max.abs() >= conditions.volts_min.abs() {
        conditions.volts_max
    } else {
        conditions.volts_min
    };
    page.push_str("<h2>Uncertainty in use</h2>\n<p>Common to all frames, on the last day of validity, at the calibration's temperature. The parts are standard uncertainties (k = 1), U is expanded (k = 2).</p>\n<table>\n<tr><th scope=\"col\">Volts</th>");
    let parts_at = |share: f64| {
        let volts = share * largest;
        let code = certificate.sense.code(volts);
        certificate.common_u(volts, code, Some(conditions.ambient_celsius), certificate.expires_day())
    };
    for part in parts_at(1.0) {
        let _ = write!(page, "<th scope=\"col\">{}, V</th>", part.name);
    }
    page.push_str("<th scope=\"col\">U (k = 2), V</th><th scope=\"col\">U, ppm</th></tr>\n");
    for share in [0.25, 0.5, 0.75, 1.0] {
        let parts = parts_at(share);
        let expanded = 2.0 * super::combined_volts(&parts);
        let volts = share * largest;
        let _ = write!(page, "<tr><th scope=\"row\">{volts:.0}</th>");
        parts.iter().for_each(|part| _ = write!(page, "<td>{:.3}</td>", part.volts));
        let _ = writeln!(page, "<td>{expanded:.3}</td><td>{:.0}</td></tr>", 1e6 * expanded / volts.abs());
    }
    page.push_str("</table>\n");
}

fn points(page: &mut String, certificate: &Certificate) {
    page.push_str("<h2>Points</h2>\n<p>Off: main sense under this certificate less reference.</p>\n<table class=\"points\">\n<tr>");
    for head in [
        "No.",
        "Time, UTC",
        "Direction",
        "Reference, V",
        "Main sense, code",
        "Cross-sense, code",
        "Enclosure, &deg;C",
        "Off, V",
        "Remark",
    ] {
        let _ = write!(page, "<th scope=\"col\">{head}</th>");
    }
    page.push_str("</tr>\n");
    for (index, point) in certificate.points.iter().enumerate() {
        let off = certificate.volts(Channel::Sense, point.sense_code, point.enclosure_celsius) - point.reference_volts;
        let celsius =
            point.enclosure_celsius.map_or_else(|| "not measured".to_owned(), |celsius| format!("{celsius:.1}"));
        let left_out = point.left_out.as_ref().map_or_else(String::new, |reason| format!("left out: {}", safe(reason)));
        let _ = writeln!(
            page,
            "<tr><td>{}</td><td>{}</td><td class=\"text\">{}</td><td>{:.1}</td><td>{:.3}</td><td>{:.3}</td><td>{celsius}</td><td>{off:+.2}</td><td class=\"text\">{left_out}</td></tr>",
            index + 1,
            safe(&point.time_utc),
            safe(&point.direction),
            point.reference_volts,
            point.sense_code,
            point.cross_code
        );
    }
    page.push_str("</table>\n");
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::calibration::example;

    #[test]
    fn the_page_has_everything_and_is_balanced() {
        let page = certificate_page(&example());
        assert!(page.contains("SIMULATED") && page.contains(&example().hash));
        assert_eq!(page.matches("<svg").count(), 2);
        for tag in ["table", "tr", "td", "th", "h2", "figure", "svg", "ul", "p"] {
            let opened = page.matches(&format!("<{tag}>")).count() + page.matches(&format!("<{tag} ")).count();
            assert_eq!(opened, page.matches(&format!("</{tag}>")).count(), "{tag}");
        }
        assert_eq!(page.matches("<tr><td>").count(), example().points.len());
        // Nothing is fetched from anywhere; the SVG's own name space is no address that is opened.
        assert!(!page.replace("http://www.w3.org/2000/svg", "").contains("http"));
    }

    #[test]
    fn text_of_people_stays_text() {
        let mut certificate = example();
        certificate.operator = "<script>alert(1)</script>".to_owned();
        certificate.remarks = vec!["a < b & \"c\"".to_owned()];
        certificate.points[0].left_out = Some("<b>".to_owned());
        let page = certificate_page(&certificate);
        assert!(!page.contains("<script>") && !page.contains("<b>") && page.contains("a &lt; b &amp; &quot;c&quot;"));
    }

    #[test]
    fn a_certificate_without_points_still_has_a_page() {
        let mut certificate = example();
        certificate.points.clear();
        certificate.simulated = false;
        let page = certificate_page(&certificate);
        assert!(!page.contains("SIMULATED:") && !page.contains("<svg"));
    }
}
