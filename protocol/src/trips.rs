//! The one table of trips: from it come the controller's codes, the messages people read, the documentation and tests.

use crate::event::Trip;

/// One row of the table.
#[derive(Clone, Copy, Debug)]
pub struct TripRow {
    /// Which.
    pub trip: Trip,
    /// Stable code for tables.
    pub code: &'static str,
    /// The rule that detects it.
    pub detection: &'static str,
    /// Time from the cause to the withdrawal of the permit, at most, microseconds.
    pub latency_us: u32,
    /// The sentence for a person.
    pub sentence: &'static str,
    /// How it is cleared, beside the press of the reset button.
    pub clearing: &'static str,
    /// Whether no number on the screen may be trusted.
    pub treat_as_live: bool,
}

/// All trips, in the order of their numbers.
pub const TRIPS: [TripRow; 23] = [
    TripRow {
        trip: Trip::LoopOpened,
        code: "loop-opened",
        detection: "both loops open within the discrepancy time of each other while the permit is given (200 us each; the first withdraws it)",
        latency_us: 1_000,
        sentence: "A door, cover or stop opened: close it, then press and release Reset.",
        clearing: "both loops closed again",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::LoopsDisagree,
        code: "loops-disagree",
        detection: "one loop opens while the permit is given (200 us, which withdraws it) and the other does not follow, or the loops differ, for the discrepancy time",
        latency_us: 1_000,
        sentence: "Loops A and B disagree: one contact or wire is faulty; have it serviced.",
        clearing: "both loops seen open and closed again",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::ContactorWelded,
        code: "contactor-welded",
        detection: "the mirror contacts do not report both contactors released within the contactor time of a withdrawal",
        latency_us: 0,
        sentence: "A contactor has not released: high voltage may still be on. Pull the mains plug.",
        clearing: "cannot be reset while the mirror contacts are open",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::ContactorDropped,
        code: "contactor-dropped",
        detection: "the mirror contacts report both contactors released later than the contactor time after the permit was given",
        latency_us: 2_001_000,
        sentence: "The contactors did not pull in, or dropped out: look for a stop or a fault in the hard-wired chain.",
        clearing: "none beyond the usual",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::ButtonStuck,
        code: "button-stuck",
        detection: "the reset button is pressed for 30 s",
        latency_us: 30_001_000,
        sentence: "The reset button is stuck: free it or have it replaced.",
        clearing: "the button released",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::SenseSilent,
        code: "sense-silent",
        detection: "no conversion of the main sense for 5.2 ms (three in a row missed)",
        latency_us: 6_200,
        sentence: "The main converter gives no reading: do not assume 0 V, treat as live.",
        clearing: "conversions come again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::CrossSilent,
        code: "cross-silent",
        detection: "no conversion of the cross-sense for 5.2 ms (three in a row missed)",
        latency_us: 6_200,
        sentence: "The second converter gives no reading: nothing checks the first, treat as live.",
        clearing: "conversions come again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::SenseFrozen,
        code: "sense-frozen",
        detection: "128 equal codes while the other sense moves by 24 codes, or less noise over a second than the floor",
        latency_us: 2_100_000,
        sentence: "The main reading is frozen: treat as live.",
        clearing: "the code moves again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::CrossFrozen,
        code: "cross-frozen",
        detection: "128 equal codes while the other sense moves by 24 codes, or less noise over a second than the floor",
        latency_us: 2_100_000,
        sentence: "The second reading is frozen: treat as live.",
        clearing: "the code moves again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::SensesDisagree,
        code: "senses-disagree",
        detection: "means over 1 s differ by more than 0.25 % and by more than four standard uncertainties of their difference",
        latency_us: 1_210_000,
        sentence: "The two senses disagree: treat as live and have the dividers checked.",
        clearing: "the senses agree again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::SenseLost,
        code: "sense-lost",
        detection: "the main sense reads less than a tenth of the cross-sense, which is above 100 V, in three windows in a row",
        latency_us: 220_000,
        sentence: "The main divider reads nothing though voltage is there (open string?): treat as live.",
        clearing: "the senses agree again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::CrossLost,
        code: "cross-lost",
        detection: "the cross-sense reads less than a tenth of the main sense, which is above 100 V, in three windows in a row",
        latency_us: 220_000,
        sentence: "The second divider reads nothing though voltage is there (open string?): treat as live.",
        clearing: "the senses agree again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::RatioChanged,
        code: "ratio-changed",
        detection: "above 300 V, the ratio of the senses over 500 ms lies 0.25 % from its running value",
        latency_us: 720_000,
        sentence: "The ratio of the two dividers has changed (an element failed?): treat as live.",
        clearing: "the ratio is back, or the permit has been withdrawn and the senses agree",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::TapOverRange,
        code: "tap-over-range",
        detection: "two conversions in a row at the end of the converter's scale",
        latency_us: 3_600,
        sentence: "A tap is over range (open low side or conducting clamp): treat as live, do not touch the tap.",
        clearing: "codes are within the scale again",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::OverVoltage,
        code: "over-voltage",
        detection: "two conversions in a row above the approved voltage, or above its raw code",
        latency_us: 3_600,
        sentence: "The voltage passed its approved limit: turn the supply down before the next start.",
        clearing: "the voltage is below the limit",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::Comparator,
        code: "comparator",
        detection: "the hardware over-voltage comparator is tripped",
        latency_us: 1_000,
        sentence: "The hardware over-voltage comparator tripped: turn the supply down before the next start.",
        clearing: "the comparator is back",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::OverCurrent,
        code: "over-current",
        detection: "the beam current is above its limit for 2 ms",
        latency_us: 4_000,
        sentence: "The beam current passed its limit: check the vacuum, the filament and the bias.",
        clearing: "the current is below the limit",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::Arc,
        code: "arc",
        detection: "above 300 V, a conversion of the main sense lies more than 15 % below the window before, and one of the cross-sense half of that, both by more than twice what bleeding explains",
        latency_us: 25_000,
        sentence: "The voltage broke down (an arc?): check the vacuum before the next start.",
        clearing: "none beyond the usual",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::VoltageAfterOff,
        code: "voltage-after-off",
        detection: "the contactors released, but above 60 V remain after one and a half times the bleed-down",
        latency_us: 0,
        sentence: "Voltage remains though the contactors released: treat as live, a bleeder may be open.",
        clearing: "below 60 V",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::HostLost,
        code: "host-lost",
        detection: "no valid message from the host for the grace time",
        latency_us: 60_001_000,
        sentence: "The computer was not heard: the permit is withdrawn, readings are kept for it.",
        clearing: "the host is heard",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::Restarted,
        code: "restarted",
        detection: "the controller restarted for another reason than power-up",
        latency_us: 0,
        sentence: "The controller restarted: its clock began anew; start again with Reset.",
        clearing: "none beyond the usual",
        treat_as_live: false,
    },
    TripRow {
        trip: Trip::NoCertificate,
        code: "no-certificate",
        detection: "the store holds no readable certificate for this board",
        latency_us: 0,
        sentence: "There is no valid calibration: calibrate, or start uncalibrated by pressing Reset for 5 to 15 s.",
        clearing: "a certificate is stored, or a person's long press for one start",
        treat_as_live: true,
    },
    TripRow {
        trip: Trip::SettingsUnreadable,
        code: "settings-unreadable",
        detection: "the settings record in the store is damaged",
        latency_us: 0,
        sentence: "The controller's settings are unreadable: write them again with ringvolt calibrate store.",
        clearing: "settings are stored",
        treat_as_live: false,
    },
];

impl Trip {
    /// Its row.
    pub const fn row(self) -> &'static TripRow {
        &TRIPS[self as usize]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_trip_finds_its_own_row() {
        for (index, row) in TRIPS.iter().enumerate() {
            assert_eq!(row.trip as usize, index);
            assert_eq!(Trip::ALL[index], row.trip);
            assert!(row.sentence.ends_with('.'));
            assert!(
                !row.treat_as_live
                    || row.sentence.contains("live")
                    || row.sentence.contains("mains plug")
                    || row.trip == Trip::NoCertificate
            );
        }
    }
}
