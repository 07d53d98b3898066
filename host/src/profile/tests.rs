//! Profiles: every field of the table is walked, and every kind of damage is told with its line.

use std::path::{Path, PathBuf};

use proptest::prelude::*;

use super::*;
use crate::calibration;

fn example_file() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("examples/bench.toml")
}

/// The example with one field's value replaced, and the line it stands on.
fn with(field: &Field, value: &str) -> (String, usize) {
    let mut table = String::new();
    let mut at = 0;
    let lines: Vec<String> = example()
        .lines()
        .enumerate()
        .map(|(index, line)| {
            if let Some(header) = line.strip_prefix('[') {
                table = header.trim_end_matches(']').to_owned();
            }
            let hit = table == field.table() && line.starts_with(&format!("{} = ", field.key()));
            if hit {
                at = index + 1;
                format!("{} = {value}", field.key())
            } else {
                line.to_owned()
            }
        })
        .collect();
    assert!(at > 0, "{} is not in the example", field.path);
    (lines.join("\n"), at)
}

fn without(field: &Field) -> String {
    with(field, "0")
        .0
        .lines()
        .filter(|line| !line.starts_with(&format!("{} = 0", field.key())))
        .collect::<Vec<_>>()
        .join("\n")
}

fn faults(text: &str) -> Vec<Fault> {
    Profile::parse(text, "bench.toml").expect_err("this profile is wrong").faults().to_vec()
}

/// The one fault of a text, which must carry this field and line.
fn one_fault(text: &str, field: &str, line: Option<usize>) -> Fault {
    let found = faults(text);
    assert_eq!(found.len(), 1, "{found:?}");
    assert_eq!((found[0].field.as_str(), found[0].line), (field, line), "{}", found[0]);
    found[0].clone()
}

/// Set RINGVOLT_WRITE_EXAMPLES to write the file anew after a deliberate change.
#[test]
fn the_example_file_is_what_the_table_says() {
    if std::env::var_os("RINGVOLT_WRITE_EXAMPLES").is_some() {
        std::fs::write(example_file(), example()).unwrap();
    }
    assert_eq!(std::fs::read_to_string(example_file()).unwrap(), example());
}

#[test]
fn the_example_loads_and_goes_where_it_belongs() {
    let profile = Profile::load(&example_file()).unwrap();
    assert_eq!(profile.bench.name, "Simulated bench");
    assert_eq!(profile.tube.screen, ScreenShape::Bulb);
    assert_eq!((profile.tube.bulb_radius_mm, profile.tube.target_to_screen_mm), (66.0, 130.0));
    assert_eq!(profile.camera.time_source, TimeSource::Exif);
    assert_eq!(profile.camera.extensions, ["png"]);
    assert_eq!(profile.calibration.certificate, example_file().with_file_name("certificate.toml"));
    let certificate = calibration::Certificate::load(&profile.calibration.certificate).unwrap();
    assert_eq!(certificate.bench, profile.bench.name);
    assert_eq!(certificate.device, profile.controller.device);
    assert!(certificate.conditions.volts_max >= profile.controller.limit_volts);
}

#[test]
fn every_field_stands_in_a_known_table_once() {
    for (index, field) in fields().enumerate() {
        assert!(TABLES.iter().any(|(name, _)| *name == field.table()), "{}", field.path);
        assert!(fields().take(index).all(|other| other.path != field.path), "{} twice", field.path);
        assert!(field.about.ends_with('.'), "{}", field.path);
    }
}

/// Each number reaches its own member: two fields that share one would both read back the later value.
#[test]
fn every_number_has_its_own_place() {
    let mut profile = Profile::default();
    let places = fields().filter_map(|field| match field.kind {
        Kind::Number { at, .. } => Some((field.path, at)),
        _ => None,
    });
    for (index, (_, at)) in places.clone().enumerate() {
        *at(&mut profile) = 1000.0 + index as f64;
    }
    for (index, (path, at)) in places.enumerate() {
        assert_eq!(*at(&mut profile), 1000.0 + index as f64, "{path}");
    }
}

#[test]
fn every_field_refuses_a_value_of_the_wrong_type_with_its_line() {
    for field in fields() {
        let wrong = match field.kind {
            Kind::Number { .. } | Kind::Whole { .. } | Kind::Count { .. } => "\"12\"",
            _ => "12",
        };
        let (text, line) = with(field, wrong);
        let fault = one_fault(&text, field.path, Some(line));
        assert!(fault.problem.contains(&field.permitted()), "{fault}");
        for wrong in ["{ a = 1 }", "2026-06-01"] {
            let (text, line) = with(field, wrong);
            one_fault(&text, field.path, Some(line));
        }
    }
}

#[test]
fn every_number_refuses_what_lies_outside_its_range_with_its_line() {
    for field in fields() {
        let outside: Vec<String> = match field.kind {
            Kind::Number { least, most, .. } => {
                let step = (most - least).abs() * 1e-6;
                [least - step, most + step, f64::NAN, f64::INFINITY]
                    .map(|value| format!("{value:?}").to_lowercase())
                    .into()
            }
            Kind::Numbers { count, least, most, .. } => {
                let long = vec![least.to_string(); count.1 + 1].join(", ");
                [
                    format!("[{}]", least * 0.999 - 1e-9),
                    format!("[{}]", most * 1.001),
                    "[nan]".to_owned(),
                    format!("[{long}]"),
                    "[\"1\"]".to_owned(),
                    "[[1]]".to_owned(),
                ]
                .into()
            }
            Kind::Count { least, most, .. } => {
                [i64::from(least) - 1, i64::from(most) + 1, -5].map(|value| value.to_string()).into()
            }
            Kind::Whole { .. } => ["0", "49", "61", "306", "-50", "99999999999999999999"].map(str::to_owned).into(),
            Kind::Word { .. } => ["\"\"", "\"Positive\"", "\"x\\u0007\""].map(str::to_owned).into(),
            Kind::Board { .. } => {
                ["\"5eed\"", "\"+eed000000000001\"", "\"zeed000000000001\""].map(str::to_owned).into()
            }
            Kind::Endings { .. } => ["[]", "[\".png\"]", "[\"PNG\"]", "[1]", "\"png\""].map(str::to_owned).into(),
            Kind::Line { .. } => vec![format!("\"{}\"", "x".repeat(201)), "\"two\\nlines\"".to_owned()],
            Kind::File { .. } => ["\"\"", "\"a\\u0000b\""].map(str::to_owned).into(),
            Kind::Switch { .. } => ["1", "\"true\""].map(str::to_owned).into(),
        };
        for value in outside {
            let (text, line) = with(field, &value);
            // An integer beyond 64 bits is already no TOML for the parser's taste; the line is what matters.
            let found = faults(&text);
            assert_eq!(found[0].line, Some(line), "{} = {value}: {}", field.path, found[0]);
            assert!(found[0].problem.contains(&field.permitted()), "{} = {value}: {}", field.path, found[0]);
        }
    }
}

#[test]
fn every_number_accepts_both_ends_of_its_range() {
    for field in fields() {
        if let Kind::Number { least, most, .. } = field.kind {
            for value in [least, most] {
                let (text, _) = with(field, &format!("{value:?}"));
                // A rule between fields may still object, but not the range.
                let refusal = format!("permitted are {}", field.permitted());
                if let Err(error) = Profile::parse(&text, "bench.toml") {
                    assert!(error.faults().iter().all(|fault| !fault.problem.contains(&refusal)), "{error}");
                }
            }
        }
    }
}

#[test]
fn every_field_is_required_or_has_a_default_that_passes_its_own_check() {
    for field in fields() {
        let text = without(field);
        match field.presence {
            Presence::Required => {
                let header = 1 + example().lines().position(|line| line == format!("[{}]", field.table())).unwrap();
                let fault = one_fault(&text, field.path, Some(header));
                assert!(
                    fault.problem.starts_with("is missing") && fault.problem.contains(&field.permitted()),
                    "{fault}"
                );
            }
            Presence::Default(value) => {
                parse::check_answer(field, value).unwrap();
                // Only the bulb's radius is needed by another field's value.
                let parsed = Profile::parse(&text, "bench.toml");
                assert!(parsed.is_ok() || field.path == "tube.bulb_radius_mm", "{}", parsed.unwrap_err());
            }
        }
    }
}

#[test]
fn an_unknown_field_is_refused_and_the_nearest_name_told() {
    let text = example().replace("bulb_radius_mm = 66.0", "bulb_radius_mm = 66.0\nbulb_radius = 66.0");
    let line = 1 + text.lines().position(|line| line.starts_with("bulb_radius = ")).unwrap();
    let fault = one_fault(&text, "tube.bulb_radius", Some(line));
    assert!(fault.problem.contains("did you mean tube.bulb_radius_mm?"), "{fault}");
    let text = format!("{}\n[zeppelin]\nx = 1\n", example());
    assert!(one_fault(&text, "zeppelin", Some(text.lines().count() - 1)).problem.contains("bench explain"));
}

#[test]
fn all_faults_are_told_at_once_in_the_order_of_their_lines() {
    let text = example().replace("glass_index = 1.52", "glass_index = 9").replace("mains_hz = 50", "mains_hz = 400");
    let found = faults(&text);
    assert_eq!(
        found.iter().map(|fault| fault.field.as_str()).collect::<Vec<_>>(),
        ["tube.glass_index", "controller.mains_hz"]
    );
}

#[test]
fn what_is_not_toml_is_refused_with_a_line() {
    let twice = example().replace("mains_hz = 50", "mains_hz = 50\nmains_hz = 50");
    let line = 2 + example().lines().position(|line| line == "mains_hz = 50").unwrap();
    assert_eq!(faults(&twice)[0].line, Some(line));
    for text in ["[", "tube = ", "a = \"", "\u{0}", &"[".repeat(100_000)] {
        let found = faults(text);
        assert!(found[0].line.is_some() && !found[0].to_string().contains('\n'), "{}", found[0]);
    }
    assert!(faults("tube = 5").iter().any(|fault| fault.field == "tube" && fault.line == Some(1)));
    assert!(faults("").iter().all(|fault| fault.problem.starts_with("is missing")));
}

#[test]
fn unreadable_files_are_refused_in_a_sentence() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("bench.toml");
    std::fs::write(&path, [b'a', b'\n', 0xff]).unwrap();
    assert!(Profile::load(&path).unwrap_err().to_string().contains("line 2"));
    std::fs::write(&path, "#".repeat(MAX_PROFILE_BYTES as usize + 1)).unwrap();
    assert!(Profile::load(&path).unwrap_err().to_string().contains("longer than"));
    assert!(Profile::load(&folder.path().join("absent.toml")).unwrap_err().to_string().contains("absent.toml"));
    assert!(Profile::load(folder.path()).is_err());
}

#[test]
fn fields_that_contradict_each_other_are_refused() {
    let cases = [
        ("tube.bulb_radius_mm", "0.0"),
        ("tube.target_to_screen_mm", "300.0"),
        ("limits.span_mark_fraction", "0.01"),
        ("limits.least_volts", "5300.0"),
        ("divider.nominal_volts_per_code", "0.625"),
        ("divider.nominal_cross_volts_per_code", "0.25"),
        ("divider.filter_seconds", "0.004"),
    ];
    for (path, value) in cases {
        let field = fields().find(|field| field.path == path).unwrap();
        let (text, line) = with(field, value);
        one_fault(&text, path, Some(line));
    }
    let sure = example().replace("apply_contact_potential = false", "apply_contact_potential = true");
    assert!(Profile::parse(&sure, "").is_ok());
    assert!(
        Profile::parse(&sure.replace("contact_potential_u_volts = 1.0", "contact_potential_u_volts = 0"), "").is_err()
    );
    let blind =
        example().replace("\"exif\"", "\"file-time\"").replace("exposure_seconds = 0.2", "exposure_seconds = 0");
    one_fault(
        &blind,
        "camera.exposure_seconds",
        Some(1 + blind.lines().position(|l| l == "exposure_seconds = 0").unwrap()),
    );
}

#[test]
fn a_table_of_parts_may_be_left_out_but_not_left_half_done() {
    let cut = |text: &str, table: &str| -> String {
        let mut keep = true;
        let keep_line = |line: &&str| {
            if line.starts_with('[') {
                keep = *line != format!("[{table}]");
            }
            keep
        };
        text.lines().filter(keep_line).collect::<Vec<_>>().join("\n")
    };
    let text = cut(&cut(&cut(&example(), "divider.sense"), "divider.cross"), "divider.supply");
    let divider = Profile::parse(&text, "").unwrap().divider;
    assert_eq!((divider.sense, divider.cross, divider.supply), (None, None, None));
    let half = format!("{text}\n[divider.supply]\nfarads = 1e-9\n");
    let found = faults(&half);
    assert_eq!((found[0].field.as_str(), found.len()), ("divider.supply.bleeder_ohms", 1), "{found:?}");
    let whole = Profile::parse(&example(), "").unwrap().divider;
    assert_eq!(whole.sense.unwrap().low_ohms, [80e3, 80e3]);
    assert_eq!(whole.cross.unwrap().elements, 12);
}

#[test]
fn explanations_name_every_field() {
    let text = explain();
    for field in fields() {
        assert!(text.contains(&format!("  {}\n", field.key())), "{}", field.path);
    }
}

#[test]
fn the_controller_is_told_what_the_profile_says() {
    let profile = Profile::parse(&example(), "").unwrap();
    let record = profile.settings_record(Some(&calibration::example())).unwrap();
    assert_eq!((record.window_ns, record.mains_hz, record.limit_mv), (10_000_000, 50, 5_300_000));
    // 5300 V / 0.3125625 V per code = 16956.6.
    assert!((16_955..=16_957).contains(&record.limit_code), "{}", record.limit_code);
    assert_eq!(profile.settings_record(None).unwrap().limit_code, 16_956);
    assert_eq!((record.discrepancy_ms, record.contactor_ms, record.grace_ms, record.bleed_ms), (500, 100, 5000, 1000));
    assert_eq!((record.noise_floor_millicodes, record.lamp.chip_us, record.lamp.on), (50, 73_000, false));
    let sixty = Profile::parse(&example().replace("mains_hz = 50", "mains_hz = 60"), "").unwrap();
    // 25000/3 us.
    assert_eq!(sixty.settings_record(None).unwrap().window_ns, 8_333_333);
}

#[test]
fn a_limit_the_converter_cannot_show_is_refused() {
    let text = example().replace("limit_volts = 5300.0", "limit_volts = 12000");
    let error = Profile::parse(&text, "").unwrap().settings_record(Some(&calibration::example())).unwrap_err();
    assert!(matches!(error, SettingsError::LimitBeyondConverter { .. }), "{error}");
}

#[test]
fn with_an_inverting_front_end_the_limit_is_the_size_of_the_code() {
    let negative = Profile::parse(&example().replace("\"positive\"", "\"negative\""), "").unwrap();
    let mut certificate = calibration::example();
    certificate.sense.coefficients = [0.2, -0.3125, 0.0];
    certificate.sense.code_min = 0;
    let code = negative.settings_record(Some(&certificate)).unwrap().limit_code;
    assert_eq!(code, 16_960);
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 500, failure_persistence: None, ..ProptestConfig::default() })]

    /// Damaged profiles load within their ranges or are refused with sentences that name the file.
    #[test]
    fn damaged_profiles_never_panic(edits in prop::collection::vec((any::<u16>(), any::<u8>()), 1..6)) {
        let mut bytes = example().into_bytes();
        for (at, value) in edits {
            let at = usize::from(at) % bytes.len();
            if value % 2 == 0 { bytes[at] = value / 2 } else { bytes.insert(at, value / 2) }
        }
        match Profile::parse(&String::from_utf8_lossy(&bytes), "bench.toml") {
            Ok(mut profile) => for field in fields() {
                if let Kind::Number { least, most, at } = field.kind {
                    prop_assert!((least..=most).contains(at(&mut profile)), "{}", field.path);
                }
            },
            Err(error) => prop_assert!(error.faults().iter().all(|fault| {
                let sentence = fault.to_string();
                sentence.starts_with("bench.toml") && !sentence.contains('\n')
            }), "{}", error),
        }
    }
}
