//! The fields of the optional tables that describe the divider's parts.

use super::field::{
    Field, Kind,
    Presence::{self, Required},
    field, number,
};

pub(super) const SENSE: &str = "divider.sense";
pub(super) const CROSS: &str = "divider.cross";
pub(super) const SUPPLY: &str = "divider.supply";

pub(super) const FIELDS: &[&[Field]] = &[SENSE_FIELDS, CROSS_FIELDS, SUPPLY_FIELDS];

const fn or(value: &'static str) -> Presence {
    Presence::Default(value)
}

/// The same fields for both strings; what differs is where they go and the example.
macro_rules! string_fields {
    ($table:literal, $part:ident, $elements:literal, $ohms:literal, $low:literal) => {
        &[
            field(
                concat!($table, ".elements"),
                "",
                Required,
                $elements,
                Kind::Count { least: 1, most: 1000, at: |p| &mut p.divider.$part.get_or_insert_default().elements },
                "Equal elements of the string, from the high voltage to the tap.",
            ),
            field(
                concat!($table, ".element_ohms"),
                "ohm",
                Required,
                $ohms,
                number(1e4, 1e11, |p| &mut p.divider.$part.get_or_insert_default().element_ohms),
                "Resistance of one element.",
            ),
            field(
                concat!($table, ".element_tolerance"),
                "",
                or("0.01"),
                "0.01",
                number(0.0, 0.5, |p| &mut p.divider.$part.get_or_insert_default().element_tolerance),
                "Its tolerance, as a fraction.",
            ),
            field(
                concat!($table, ".element_ppm_per_kelvin"),
                "ppm/K",
                or("100.0"),
                "25.0",
                number(-2000.0, 2000.0, |p| &mut p.divider.$part.get_or_insert_default().element_ppm_per_kelvin),
                "Its temperature coefficient.",
            ),
            field(
                concat!($table, ".element_ppm_per_volt"),
                "ppm/V",
                or("2.0"),
                "1.0",
                number(-1000.0, 1000.0, |p| &mut p.divider.$part.get_or_insert_default().element_ppm_per_volt),
                "Its voltage coefficient.",
            ),
            field(
                concat!($table, ".element_kelvin_per_watt"),
                "K/W",
                or("100.0"),
                "100.0",
                number(0.0, 10_000.0, |p| &mut p.divider.$part.get_or_insert_default().element_kelvin_per_watt),
                "How much warmer than its surroundings it gets for the power in it.",
            ),
            field(
                concat!($table, ".element_rated_volts"),
                "V",
                Required,
                "3500.0",
                number(10.0, 100_000.0, |p| &mut p.divider.$part.get_or_insert_default().element_rated_volts),
                "Its rated voltage.",
            ),
            field(
                concat!($table, ".element_rated_watts"),
                "W",
                Required,
                "1.0",
                number(0.01, 100.0, |p| &mut p.divider.$part.get_or_insert_default().element_rated_watts),
                "Its rated power.",
            ),
            field(
                concat!($table, ".low_ohms"),
                "ohm",
                Required,
                $low,
                Kind::Numbers {
                    count: (1, 16),
                    least: 1.0,
                    most: 1e8,
                    at: |p| &mut p.divider.$part.get_or_insert_default().low_ohms,
                },
                "The low-side resistors in parallel; two at least, so that one that opens leaves the other.",
            ),
            field(
                concat!($table, ".low_tolerance"),
                "",
                or("0.001"),
                "0.001",
                number(0.0, 0.5, |p| &mut p.divider.$part.get_or_insert_default().low_tolerance),
                "Their tolerance, as a fraction.",
            ),
            field(
                concat!($table, ".low_ppm_per_kelvin"),
                "ppm/K",
                or("25.0"),
                "15.0",
                number(-2000.0, 2000.0, |p| &mut p.divider.$part.get_or_insert_default().low_ppm_per_kelvin),
                "Their temperature coefficient.",
            ),
            field(
                concat!($table, ".input_ohms"),
                "ohm",
                or("1.0e12"),
                "1.0e12",
                number(1e4, 1e15, |p| &mut p.divider.$part.get_or_insert_default().input_ohms),
                "What loads the tap: buffer and pull-down together.",
            ),
            field(
                concat!($table, ".series_ohms"),
                "ohm",
                or("10000.0"),
                "10000.0",
                number(0.0, 1e7, |p| &mut p.divider.$part.get_or_insert_default().series_ohms),
                "Resistance between the tap and its clamp.",
            ),
            field(
                concat!($table, ".leakage_amperes"),
                "A",
                or("1.0e-11"),
                "1.0e-11",
                number(0.0, 1e-3, |p| &mut p.divider.$part.get_or_insert_default().leakage_amperes),
                "Leakage of the clamp and bias current of the buffer together.",
            ),
            field(
                concat!($table, ".string_leak_ohms"),
                "ohm",
                or("1.0e13"),
                "1.0e13",
                number(1e6, 1e18, |p| &mut p.divider.$part.get_or_insert_default().string_leak_ohms),
                "Leakage resistance across the whole string.",
            ),
            field(
                concat!($table, ".filter_farads"),
                "F",
                Required,
                "10.0e-9",
                number(0.0, 1e-3, |p| &mut p.divider.$part.get_or_insert_default().filter_farads),
                "Capacitor across the low side.",
            ),
            field(
                concat!($table, ".full_scale_volts"),
                "V",
                or("2.048"),
                "2.048",
                number(0.1, 10.0, |p| &mut p.divider.$part.get_or_insert_default().full_scale_volts),
                "Positive full scale of the converter.",
            ),
        ]
    };
}

#[rustfmt::skip]
const SENSE_FIELDS: &[Field] = string_fields!("divider.sense", sense, "10", "20.0e6", "[80.0e3, 80.0e3]");
#[rustfmt::skip]
const CROSS_FIELDS: &[Field] = string_fields!("divider.cross", cross, "12", "25.0e6", "[113.66e3, 113.66e3]");
#[rustfmt::skip]
const SUPPLY_FIELDS: &[Field] = &[
    field("divider.supply.farads", "F", Required, "5.0e-9",
        number(1e-13, 1e-3, |p| &mut p.divider.supply.get_or_insert_default().farads),
        "Capacitance of the supply's output with everything on it."),
    field("divider.supply.bleeder_ohms", "ohm", Required, "[200.0e6, 200.0e6]",
        Kind::Numbers { count: (0, 16), least: 1e3, most: 1e12, at: |p| &mut p.divider.supply.get_or_insert_default().bleeder_ohms },
        "Bleeders across it, each; an empty list where there is none."),
];
