//! What a meter's answer means.

/// A voltage from a reply such as `+2.19987E+00`.
///
/// # Errors
/// Overload (SCPI's 9.9E37), not-a-number (9.91E37), or text that is no number.
pub fn parse_volts(reply: &str) -> Result<f64, &'static str> {
    // Some meters answer several values; taking the first of them silently would be a guess.
    let value: f64 = reply.trim().parse().map_err(|_| "a single number was expected")?;
    if value.is_nan() || value == 9.91e37 {
        return Err("that is SCPI's word for not a number; check what the meter is set to");
    }
    if value.abs() >= 9.9e37 {
        return Err("that is SCPI's word for overload; choose a higher range or the probe");
    }
    if value.abs() > 1e6 {
        return Err("no meter here shows more than a million volts");
    }
    Ok(value)
}
