//! Certificates: what they give, and what they refuse.

use std::path::Path;

use proptest::prelude::*;

use super::*;

fn close(found: f64, wanted: f64, relative: f64) {
    assert!((found - wanted).abs() <= relative * wanted.abs(), "found {found}, wanted {wanted}");
}

fn example_file() -> std::path::PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("examples/certificate.toml")
}

/// Set RINGVOLT_WRITE_EXAMPLES to write the file anew after a deliberate change.
#[test]
fn the_example_file_is_what_the_code_says() {
    let text = example().to_toml();
    if std::env::var_os("RINGVOLT_WRITE_EXAMPLES").is_some() {
        std::fs::write(example_file(), &text).unwrap();
    }
    assert_eq!(std::fs::read_to_string(example_file()).unwrap(), text);
    assert_eq!(Certificate::load(&example_file()).unwrap(), example());
}

#[test]
fn the_example_has_the_figures_of_the_invented_divider() {
    let certificate = example();
    close(certificate.sense.coefficients[1], 0.312_562_5, 20e-6);
    close(certificate.cross.coefficients[1], 0.33, 20e-6);
    assert!((certificate.sense.coefficients[0] - 0.21).abs() < 0.2);
    assert!(certificate.sense.residual_volts > 0.05 && certificate.sense.residual_volts < 0.2);
    assert!(certificate.sense.code_max < 32_000, "converter range leaves head-room");
    assert_eq!(certificate.points.len(), 63);
}

#[test]
fn a_changed_digit_is_noticed() {
    let text = example().to_toml().replace("u_ppm = 150.0", "u_ppm = 50.0");
    let error = Certificate::parse(&text, "c.toml").unwrap_err();
    assert!(matches!(error, CertificateError::Edited { .. }), "{error}");
    assert!(error.to_string().starts_with("c.toml was changed after it was sealed"), "{error}");
}

#[test]
fn comments_and_spacing_do_not_break_the_seal() {
    let text = format!("# kept in the drawer\n{}", example().to_toml().replace("u_ppm = 150.0", "u_ppm   =  150"));
    assert_eq!(Certificate::parse(&text, "c.toml").unwrap(), example());
}

#[test]
fn the_hash_is_the_sha256_of_the_text_with_an_empty_hash() {
    // The recipe the documentation gives to people, done by hand.
    use sha2::Digest;
    let certificate = example();
    let blank = certificate.to_toml().replacen(&certificate.hash, "", 1);
    let digest = sha2::Sha256::digest(blank.as_bytes());
    let hex: String = digest.iter().map(|byte| format!("{byte:02x}")).collect();
    assert_eq!(hex, certificate.hash);
    assert_eq!(certificate.hash8().0[..], digest[..8]);
}

#[test]
fn an_unsealed_certificate_is_refused() {
    let text = example().to_toml().replacen(&example().hash, "", 1);
    assert!(matches!(Certificate::parse(&text, "c"), Err(CertificateError::NotSealed { .. })));
    let mut open = example();
    open.hash.clear();
    assert_eq!(open.record(), Err(RecordError::NotSealed));
}

type Edit = fn(&mut Certificate);

/// Each edit makes one value impossible; the error must name the field, and a line where the field has one.
#[test]
fn impossible_values_are_refused_by_name() {
    let edits: [(&str, Edit); 22] = [
        ("schema", |c| c.schema = 2),
        ("hash", |c| c.hash = "xyz".into()),
        ("device", |c| c.device = "+eed000000000001".into()),
        ("bench", |c| c.bench = " ".into()),
        ("operator", |c| c.operator = "a\u{1b}[2J".into()),
        ("issued", |c| c.issued = "2026-13-01".into()),
        ("valid_until", |c| c.valid_until = "2020-01-01".into()),
        ("reference.u_ppm", |c| c.reference.u_ppm = f64::NAN),
        ("reference.u_volts", |c| c.reference.u_volts = -1.0),
        ("conditions.ambient_min_celsius", |c| c.conditions.ambient_min_celsius = 40.0),
        ("conditions.volts_max", |c| c.conditions.volts_max = -1.0),
        ("stability.drift_u_ppm_per_year", |c| c.stability.drift_u_ppm_per_year = f64::INFINITY),
        ("sense.coefficients", |c| c.sense.coefficients[1] = 0.0),
        ("cross.coefficients", |c| c.cross.coefficients[2] = 1e-5),
        ("sense.coefficients", |c| c.sense.coefficients[2] = -9e-6),
        ("sense.covariance", |c| c.sense.covariance[0][0] = -1.0),
        ("sense.covariance", |c| c.sense.covariance[0][1] = f64::NAN),
        ("cross.covariance", |c| c.cross.covariance[0][1] *= 2.0),
        ("sense.code_max", |c| c.sense.code_max = c.sense.code_min),
        ("cross.code_max", |c| c.cross.code_max = 32_767),
        ("points[0].time_utc", |c| c.points[0].time_utc = "yesterday".into()),
        ("points[3].sense_code", |c| c.points[3].sense_code = 1e300),
    ];
    for (field, edit) in edits {
        let mut certificate = example();
        edit(&mut certificate);
        let error = Certificate::parse(&certificate.to_toml(), "c.toml").unwrap_err();
        let CertificateError::Value { field: named, line, .. } = &error else { panic!("{field}: {error}") };
        assert_eq!(named, field, "{error}");
        assert!(line.is_some() || field.starts_with("points"), "{error}");
        assert!(certificate.record().is_err());
    }
}

#[test]
fn what_is_no_certificate_is_refused_in_a_sentence() {
    let deep = format!("a = {}", "[".repeat(100_000));
    let long = "x".repeat(3 << 20);
    for text in ["", "[", "schema = \"one\"", "schema = 1\nschema = 1", "\u{0}", deep.as_str(), long.as_str()] {
        let error = Certificate::parse(text, "c.toml").unwrap_err().to_string();
        assert!(error.starts_with("c.toml") && !error.contains('\n'), "{error}");
    }
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("c.toml");
    for bytes in [&[0xff, 0xfe, 0x00][..], long.as_bytes()] {
        std::fs::write(&path, bytes).unwrap();
        assert!(matches!(Certificate::load(&path), Err(CertificateError::Text(_))));
    }
    assert!(Certificate::load(folder.path()).is_err());
    assert!(Certificate::load(&folder.path().join("absent.toml")).unwrap_err().to_string().contains("absent.toml"));
}

#[test]
fn an_unknown_field_is_refused_with_its_line() {
    let text = example().to_toml().replace("u_ppm = 150.0", "u_ppm = 150.0\nu_percent = 1.0");
    let error = Certificate::parse(&text, "c.toml").unwrap_err().to_string();
    assert!(error.contains("u_percent") && error.contains("line "), "{error}");
}

#[test]
fn temperature_is_corrected_where_it_is_measured() {
    let certificate = example();
    let code = certificate.sense.code(5000.0);
    close(certificate.volts(Channel::Sense, code, None), 5000.0, 1e-12);
    // 5 ppm/K over 4 K of 5000 V is 0.1 V.
    close(certificate.volts(Channel::Sense, code, Some(27.0)) - 5000.0, 0.1, 1e-6);
}

#[test]
fn the_inverse_undoes_a_bent_curve() {
    let mut fit = example().sense;
    fit.coefficients = [-3.0, 0.3125, 1e-7];
    for volts in [-5500.0, -1.0, 0.0, 2500.0, 5500.0] {
        assert!((fit.volts(fit.code(volts)) - volts).abs() < 1e-9);
    }
}

#[test]
fn parts_of_the_uncertainty_are_as_computed_by_hand() {
    let certificate = example();
    let day = certificate.issued_day() + 731; // two years and half a day
    let parts = certificate.common_u(2500.0, certificate.sense.code(2500.0), Some(26.0), day);
    let part = |name: &str| parts.iter().find(|part| part.name == name).unwrap().volts;
    close(part("reference, proportional"), 0.375, 1e-12);
    close(part("reference, fixed"), 0.2, 1e-12);
    close(part("drift since issue"), 2500.0 * 60e-6 * 731.0 / 365.25, 1e-12);
    close(part("temperature"), 2500.0 * 3e-6 * 3.0, 1e-12);
    // Near the middle of the points the fit knows the curve to about s/sqrt(n).
    close(part("fit"), certificate.sense.residual_volts / libm::sqrt(63.0), 0.25);
    close(part("hysteresis"), 2500.0 * certificate.sense.hysteresis_fraction / libm::sqrt(12.0), 1e-12);
    // The sign of the voltage does not matter.
    assert_eq!(parts, certificate.common_u(-2500.0, certificate.sense.code(2500.0), Some(26.0), day));
    // Unmeasured: sqrt(5^2 + 3^2) ppm/K times 5 K/sqrt(3).
    let blind = certificate.common_u(2500.0, 8000.0, None, day);
    close(blind.last().unwrap().volts, 2500.0 * 1e-6 * libm::sqrt(34.0) * 5.0 / libm::sqrt(3.0), 1e-12);
}

#[test]
fn the_controllers_record_agrees_with_the_certificate_to_a_hundredth_of_a_code() {
    let certificate = example();
    let record = certificate.record().unwrap();
    assert_eq!(record.device, [0x5e, 0xed, 0, 0, 0, 0, 0, 1]);
    assert_eq!(record.hash, certificate.hash8());
    assert_eq!(record.expires_day, 22_644); // 2031-12-31: date -d 2031-12-31 +%s / 86400
    for code in [-100_i64, 0, 1, 8000, 17_600] {
        let exact = certificate.volts(Channel::Sense, code as f64, None);
        let picovolts =
            i128::from(record.sense.offset_nv) * 1000 + i128::from(record.sense.slope_pv) * i128::from(code);
        assert!((picovolts as f64 * 1e-12 - exact).abs() < 0.01 * 0.3125, "{code}");
    }
    // Drift of both strings to the last day, sqrt(2) * 60 ppm * 5.58 years, temperature, sqrt(2) * 16.8 ppm, and the
    // hysteresis the example's points happen to show.
    let loops = libm::hypot(certificate.sense.hysteresis_fraction, certificate.cross.hysteresis_fraction) * 1e6
        / libm::sqrt(12.0);
    let others = libm::sqrt(2.0) * libm::hypot(60.0 * 2039.0 / 365.25, 16.83);
    close(f64::from(record.difference_ppm), libm::hypot(others, loops), 0.003);
    assert!(record.difference_mv > 10 && record.difference_mv < 100, "{}", record.difference_mv);
}

#[test]
fn days_of_validity_include_both_ends() {
    let certificate = example();
    let (first, last) = (certificate.issued_day(), certificate.expires_day());
    assert_eq!(certificate.validity(first - 1), Validity::NotYet);
    assert_eq!(certificate.validity(first), Validity::Valid);
    assert_eq!(certificate.validity(last), Validity::Valid);
    assert_eq!(certificate.validity(last + 1), Validity::Expired);
    assert_eq!(day_of_utc_ns(-1), -1);
    assert_eq!(day_of_utc_ns(86_400_000_000_000), 1);
}

#[test]
fn use_outside_the_calibrated_range_is_told() {
    let certificate = example();
    let outside = |code, celsius| certificate.outside(Channel::Sense, code, celsius);
    assert_eq!(outside(8000.0, Some(23.0)), Outside::default());
    assert!(outside(20_000.0, None).code && outside(f64::NAN, None).code);
    assert!(outside(8000.0, Some(28.1)).temperature && outside(8000.0, Some(17.9)).temperature);
    assert!(!outside(8000.0, None).temperature);
}

/// Damages a text in a few places.
fn damaged(text: &str, edits: &[(usize, u8)]) -> String {
    let mut bytes = text.as_bytes().to_vec();
    for (at, value) in edits {
        let at = at % bytes.len();
        match value % 3 {
            0 => bytes[at] = value / 2,
            1 => _ = bytes.remove(at),
            _ => bytes.insert(at, value / 2),
        }
    }
    String::from_utf8_lossy(&bytes).into_owned()
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 300, failure_persistence: None, ..ProptestConfig::default() })]

    /// A damaged certificate is refused in one sentence, unless the damage is in a comment or spacing.
    #[test]
    fn damaged_certificates_never_pass_and_never_panic(edits in prop::collection::vec((0_usize..2000, any::<u8>()), 1..4)) {
        let text = damaged(&example().to_toml(), &edits);
        match Certificate::parse(&text, "c.toml") {
            Ok(certificate) => prop_assert_eq!(certificate, example()),
            Err(error) => prop_assert!(!error.to_string().contains('\n'), "{}", error),
        }
    }

    /// Whatever the numbers, a certificate that passes its checks gives a record and finite volts.
    #[test]
    fn accepted_numbers_give_finite_volts(values in prop::collection::vec(prop_oneof![any::<f64>(), -10.0..10.0_f64], 12), code in any::<i16>()) {
        let mut certificate = example();
        certificate.sense.coefficients = [values[0], values[1], values[2] * 1e-8];
        certificate.cross.coefficients = [values[3], values[4], 0.0];
        certificate.stability.temperature_ppm_per_kelvin = values[5];
        certificate.reference.u_ppm = values[6];
        certificate.conditions.volts_max = values[7];
        certificate.sense.covariance[0][0] = values[8];
        certificate.sense.hysteresis_fraction = values[9];
        certificate.seal();
        if certificate.record().is_ok() {
            let volts = certificate.volts(Channel::Sense, f64::from(code), Some(30.0));
            prop_assert!(volts.is_finite());
            let parts = certificate.common_u(volts, f64::from(code), None, certificate.expires_day());
            prop_assert!(combined_volts(&parts).is_finite());
        }
    }

    /// Points of any kind end in a fit or a sentence.
    #[test]
    fn any_points_are_fitted_or_refused(values in prop::collection::vec((-40_000.0..40_000.0_f64, any::<i16>(), any::<i16>(), 0_usize..3), 0..40)) {
        let point = |(volts, sense, cross, direction): (f64, i16, i16, usize)| Point {
            time_utc: "2026-06-01T08:00:00Z".to_owned(),
            direction: ["zero", "up", "down"][direction].to_owned(),
            reference_volts: volts,
            sense_code: f64::from(sense),
            cross_code: f64::from(cross),
            enclosure_celsius: None,
            left_out: None,
        };
        let points: Vec<Point> = values.into_iter().map(point).collect();
        if let Ok(found) = assess(&points, (0.0, 10.0)) {
            prop_assert!(found.sense.fit.coefficients.iter().all(|value| value.is_finite()));
        }
    }
}
