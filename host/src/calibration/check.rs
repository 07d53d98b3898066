//! Whether the numbers of a certificate can be: a file may come from anywhere.

use std::ops::RangeInclusive;

use jiff::{Timestamp, civil::Date};

use super::{Certificate, ChannelFit, Point, seal::parse_hex8};

/// A value that cannot be.
#[derive(Debug, PartialEq)]
pub(super) struct Fault {
    /// Dotted path of the field.
    pub field: String,
    /// What is wrong and what is permitted.
    pub problem: String,
}

type Checked = Result<(), Fault>;

fn fault(field: &str, problem: impl Into<String>) -> Fault {
    Fault { field: field.to_owned(), problem: problem.into() }
}

fn within(field: &str, value: f64, range: RangeInclusive<f64>, unit: &str) -> Checked {
    if range.contains(&value) {
        return Ok(());
    }
    Err(fault(field, format!("is {value}; permitted are {} to {} {unit}", range.start(), range.end())))
}

fn line_of_text(field: &str, value: &str, may_be_empty: bool) -> Checked {
    if value.chars().count() > 300 || value.chars().any(char::is_control) {
        return Err(fault(field, "must be one line of at most 300 characters"));
    }
    if value.trim().is_empty() && !may_be_empty {
        return Err(fault(field, "is empty; say who or what it is"));
    }
    Ok(())
}

/// Days since 1970-01-01 of a `YYYY-MM-DD`, from 1970 to 2199.
pub(super) fn day(text: &str) -> Option<i64> {
    // A leading sign or other spelling would give the same day under another hash.
    let date: Date = (text.len() == 10).then(|| text.parse().ok())??;
    let epoch = jiff::civil::date(1970, 1, 1);
    (1970..2200).contains(&date.year()).then(|| i64::from((date - epoch).get_days()))
}

/// `YYYY-MM-DD` of days since 1970-01-01, from 1970 to 2199.
pub(super) fn day_text(days: i64) -> Option<String> {
    let days = i32::try_from(days).ok().filter(|days| (0..84_006).contains(days))?;
    let date = jiff::civil::date(1970, 1, 1).checked_add(jiff::Span::new().days(days)).ok()?;
    Some(date.to_string())
}

/// Checks everything but the hash's value.
pub(super) fn check(certificate: &Certificate) -> Checked {
    identities(certificate)?;
    conditions(certificate)?;
    let volts = certificate.conditions.volts_min..=certificate.conditions.volts_max;
    channel("sense", &certificate.sense, &volts)?;
    channel("cross", &certificate.cross, &volts)?;
    if certificate.points.len() > 5000 {
        return Err(fault("points", format!("has {} entries; at most 5000 are permitted", certificate.points.len())));
    }
    certificate.points.iter().enumerate().try_for_each(|(index, entry)| point(index, entry))
}

fn identities(certificate: &Certificate) -> Checked {
    if certificate.schema != 1 {
        let problem = format!("is {}; this program reads version 1", certificate.schema);
        return Err(fault("schema", problem));
    }
    let hash = certificate.hash.as_bytes();
    let lower_hex = |byte: &u8| byte.is_ascii_digit() || (b'a'..=b'f').contains(byte);
    if !(hash.is_empty() || hash.len() == 64 && hash.iter().all(lower_hex)) {
        return Err(fault("hash", "must be 64 lower-case hexadecimal digits"));
    }
    if parse_hex8(&certificate.device).is_none() {
        return Err(fault("device", "must be the board's identity, sixteen hexadecimal digits"));
    }
    line_of_text("bench", &certificate.bench, false)?;
    line_of_text("operator", &certificate.operator, false)?;
    if certificate.remarks.len() > 20 {
        return Err(fault("remarks", "has more than 20 entries"));
    }
    certificate.remarks.iter().try_for_each(|remark| line_of_text("remarks", remark, false))?;
    line_of_text("reference.identity", &certificate.reference.identity, false)?;
    line_of_text("reference.certificate", &certificate.reference.certificate, true)?;
    let issued = day(&certificate.issued).ok_or_else(|| fault("issued", "must be a day, YYYY-MM-DD"))?;
    let until = day(&certificate.valid_until).ok_or_else(|| fault("valid_until", "must be a day, YYYY-MM-DD"))?;
    if until < issued {
        return Err(fault("valid_until", "lies before the day of issue"));
    }
    Ok(())
}

fn conditions(certificate: &Certificate) -> Checked {
    let reference = &certificate.reference;
    within("reference.u_ppm", reference.u_ppm, 0.0..=100_000.0, "ppm")?;
    within("reference.u_volts", reference.u_volts, 0.0..=1000.0, "V")?;
    let found = &certificate.conditions;
    within("conditions.ambient_celsius", found.ambient_celsius, -40.0..=100.0, "degrees Celsius")?;
    within(
        "conditions.ambient_min_celsius",
        found.ambient_min_celsius,
        -40.0..=found.ambient_celsius,
        "degrees Celsius",
    )?;
    within(
        "conditions.ambient_max_celsius",
        found.ambient_max_celsius,
        found.ambient_celsius..=100.0,
        "degrees Celsius",
    )?;
    within("conditions.volts_min", found.volts_min, -50_000.0..=50_000.0, "V")?;
    within("conditions.volts_max", found.volts_max, -50_000.0..=50_000.0, "V")?;
    if found.volts_max <= found.volts_min {
        return Err(fault("conditions.volts_max", "must be above volts_min"));
    }
    let stability = &certificate.stability;
    let (slope, slope_u) = (stability.temperature_ppm_per_kelvin, stability.temperature_u_ppm_per_kelvin);
    within("stability.temperature_ppm_per_kelvin", slope, -1000.0..=1000.0, "ppm/K")?;
    within("stability.temperature_u_ppm_per_kelvin", slope_u, 0.0..=1000.0, "ppm/K")?;
    within("stability.drift_u_ppm_per_year", stability.drift_u_ppm_per_year, 0.0..=100_000.0, "ppm per year")
}

fn channel(name: &str, fit: &ChannelFit, volts: &RangeInclusive<f64>) -> Checked {
    let field = |part: &str| format!("{name}.{part}");
    coefficients(&field("coefficients"), &fit.coefficients)?;
    covariance(&field("covariance"), &fit.covariance)?;
    within(&field("residual_volts"), fit.residual_volts, 0.0..=1000.0, "V")?;
    within(&field("hysteresis_fraction"), fit.hysteresis_fraction, 0.0..=0.1, "(a fraction)")?;
    if fit.code_min >= fit.code_max {
        return Err(fault(&field("code_max"), "must be above code_min"));
    }
    monotonic(&field("coefficients"), fit)?;
    let (margin, span) = (0.1 * (volts.end() - volts.start()), fit.volts_at_ends());
    if span.0 < volts.start() - margin || span.1 > volts.end() + margin {
        let problem = format!(
            "spans {:.1} to {:.1} V, which does not fit the conditions' volts_min and volts_max",
            span.0, span.1
        );
        return Err(fault(&field("code_max"), problem));
    }
    Ok(())
}

fn coefficients(field: &str, [offset, slope, bend]: &[f64; 3]) -> Checked {
    within(field, *offset, -10_000.0..=10_000.0, "V for the first")?;
    within(field, slope.abs(), 1e-3..=10.0, "V per code for the second")?;
    within(field, *bend, -1e-6..=1e-6, "V per code squared for the third")
}

/// A curve that turns back within its range would give two codes the same voltage.
fn monotonic(field: &str, fit: &ChannelFit) -> Checked {
    let [_, slope, bend] = fit.coefficients;
    let least = [fit.code_min, fit.code_max].map(|code| (slope + 2.0 * bend * f64::from(code)) / slope);
    if least.iter().all(|share| *share > 0.5) {
        return Ok(());
    }
    Err(fault(field, "bend so much that the slope halves within the calibrated codes; this is no divider"))
}

fn covariance(field: &str, rows: &[[f64; 3]; 3]) -> Checked {
    for (i, row) in rows.iter().enumerate() {
        for (j, value) in row.iter().enumerate() {
            let bound = (rows[i][i] * rows[j][j]).max(0.0);
            // NaN fails every comparison and so ends here.
            let possible = value.is_finite() && value.abs() <= 1e6 && *value == rows[j][i];
            if !possible || (i == j && *value < 0.0) || value * value > bound * (1.0 + 1e-6) {
                return Err(fault(
                    field,
                    "is not a covariance: symmetric, no negative variance, no correlation above 1",
                ));
            }
        }
    }
    Ok(())
}

fn point(index: usize, point: &Point) -> Checked {
    let field = |part: &str| format!("points[{index}].{part}");
    if point.time_utc.len() > 40 || point.time_utc.parse::<Timestamp>().is_err() {
        return Err(fault(&field("time_utc"), "must be a time such as 2026-06-01T08:00:00Z"));
    }
    if !["zero", "up", "down"].contains(&point.direction.as_str()) {
        return Err(fault(&field("direction"), "must be zero, up or down"));
    }
    line_of_text(&field("left_out"), point.left_out.as_deref().unwrap_or_default(), true)?;
    within(&field("reference_volts"), point.reference_volts, -50_000.0..=50_000.0, "V")?;
    within(&field("sense_code"), point.sense_code, -32_768.0..=32_767.0, "codes")?;
    within(&field("cross_code"), point.cross_code, -32_768.0..=32_767.0, "codes")?;
    point
        .enclosure_celsius
        .map_or(Ok(()), |celsius| within(&field("enclosure_celsius"), celsius, -40.0..=100.0, "degrees Celsius"))
}
