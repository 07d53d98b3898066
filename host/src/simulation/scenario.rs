//! What happens on the simulated bench, and when. `script.rs` reads it from a file.

/// Which string and converter.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Which {
    /// The main sense.
    Sense,
    /// The cross-sense.
    Cross,
}

/// One thing that happens.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum What {
    /// The supply's knob is turned at once; the voltage follows at the supply's own slew.
    SetVolts {
        /// To so many volts.
        volts: f64,
    },
    /// The knob is turned evenly.
    Ramp {
        /// To so many volts.
        volts: f64,
        /// So fast.
        volts_per_second: f64,
    },
    /// The mains sag, and the voltage with them.
    Sag {
        /// By this fraction.
        fraction: f64,
        /// For so long.
        seconds: f64,
    },
    /// The voltage jumps, and stays there.
    Jump {
        /// By this fraction.
        fraction: f64,
    },
    /// The tube breaks down: most of the charge is gone at once.
    Arc,
    /// The mains change.
    Mains {
        /// To this frequency.
        hertz: f64,
        /// To this share of the nominal level.
        level: f64,
    },
    /// A door opens: both loops.
    OpenDoor,
    /// It closes.
    CloseDoor,
    /// Loop A alone opens.
    OpenLoopA,
    /// Loop B alone opens.
    OpenLoopB,
    /// Loop A closes.
    CloseLoopA,
    /// Loop B closes.
    CloseLoopB,
    /// The reset button is pressed.
    PressButton,
    /// It is released.
    ReleaseButton,
    /// Someone attends from now on: whenever the controller waits for the door or the button, they do it.
    Attend,
    /// They go away.
    Leave,
    /// Both contactors weld, if they are closed then: the mains stays on.
    WeldContactor,
    /// One of the two contactors welds: the other still takes the mains away.
    WeldOne,
    /// Welded contactors are replaced.
    FreeContactor,
    /// A string reads this factor of the truth: 0 is open, 2 a low side half open, 1.11 one of ten elements shorted.
    StringFactor {
        /// Which.
        which: Which,
        /// The factor.
        factor: f64,
    },
    /// A converter stands at the end of its scale: its string's low side is open and the clamp holds the tap.
    OverRange {
        /// Which.
        which: Which,
    },
    /// A converter gives nothing.
    Silent {
        /// Which.
        which: Which,
    },
    /// A converter repeats itself.
    Frozen {
        /// Which.
        which: Which,
    },
    /// A string and its converter are whole again.
    Mend {
        /// Which.
        which: Which,
    },
    /// The camera begins to take frames.
    StartCamera,
    /// It stops.
    StopCamera,
    /// The camera's clock is off from now on.
    CameraOff {
        /// By so much.
        seconds: f64,
    },
    /// The camera loses frames.
    LoseFrames {
        /// So many.
        frames: u64,
    },
    /// The camera's strobe line is connected.
    ConnectStrobe,
    /// It is cut.
    CutStrobe,
    /// The room's temperature; the divider follows slowly.
    Celsius {
        /// Degrees.
        celsius: f64,
    },
    /// The controller loses power for a moment.
    Brownout,
    /// The controller's watchdog restarts it.
    WatchdogReset,
    /// The link's plug is pulled.
    Unplug,
    /// It is put back.
    Plug,
}

/// One happening.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Happening {
    /// When, seconds of true time.
    pub at_seconds: f64,
    /// What.
    pub what: What,
}

/// A script.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Scenario {
    /// In the order of time.
    pub happenings: Vec<Happening>,
}

/// When the camera of the built-in scenarios starts, seconds.
pub(super) const CAMERA_FROM: f64 = 4.0;

impl Scenario {
    /// From times in seconds and what happens, in any order; at equal times, in the order given.
    pub fn of(happenings: impl IntoIterator<Item = (f64, What)>) -> Self {
        let mut happenings: Vec<Happening> =
            happenings.into_iter().map(|(at_seconds, what)| Happening { at_seconds, what }).collect();
        happenings.sort_by(|a, b| a.at_seconds.total_cmp(&b.at_seconds));
        Self { happenings }
    }

    /// Someone tests the door, presses Reset and turns the knob: the tube is up some three seconds after `from`, later
    /// at higher voltages.
    pub fn start(from: f64, volts: f64) -> Vec<(f64, What)> {
        vec![
            (from, What::SetVolts { volts }),
            (from + 0.1, What::OpenDoor),
            (from + 0.6, What::CloseDoor),
            (from + 1.0, What::PressButton),
            (from + 1.2, What::ReleaseButton),
        ]
    }

    /// A steady tube at one voltage, from the start on, with the camera running from 4 s.
    pub fn steady(volts: f64) -> Self {
        let mut happenings = Self::start(0.3, volts);
        happenings.push((CAMERA_FROM, What::StartCamera));
        happenings.push((CAMERA_FROM, What::Attend));
        Self::of(happenings)
    }

    /// The scenario of `demo` and of `simulate` without a script: five voltages, with a step, a sag and an opened door
    /// in between, over `seconds` (20 or more).
    ///
    /// Someone attends, so that a host that comes late finds the tube started all the same.
    pub fn demonstration(seconds: f64) -> Self {
        let span = (seconds - CAMERA_FROM).max(16.0);
        let at = |share: f64| in_an_exposure(CAMERA_FROM + share * span);
        let mut happenings = Self::start(0.3, 2_500.0);
        happenings.push((CAMERA_FROM, What::StartCamera));
        happenings.push((CAMERA_FROM, What::Attend));
        happenings.push((at(0.12), What::Jump { fraction: 0.03 }));
        for (share, volts) in [(0.22, 3_000.0), (0.36, 3_500.0), (0.58, 4_000.0), (0.84, 4_500.0)] {
            happenings.push((at(share), What::SetVolts { volts }));
        }
        happenings.push((at(0.48), What::Sag { fraction: 0.04, seconds: 0.5 }));
        let door = at(0.68);
        happenings.push((door, What::Leave));
        happenings.push((door, What::OpenDoor));
        happenings.push((door + 0.6, What::CloseDoor));
        happenings.push((door + 1.0, What::PressButton));
        happenings.push((door + 1.2, What::ReleaseButton));
        happenings.push((door + 1.5, What::Attend));
        happenings.push((seconds - 0.8, What::StopCamera));
        Self::of(happenings)
    }
}

/// A moment soon after `at` that lies past the middle of an exposure of the usual camera: a change that begins there
/// touches the frame for certain and not by a hair's breadth.
fn in_an_exposure(at: f64) -> f64 {
    let (period, first) = (0.4, CAMERA_FROM + super::camera::FIRST_FRAME_SECONDS);
    first + period * libm::ceil((at - first) / period) + 0.12
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_demonstration_is_in_order_and_ends_in_time() {
        for seconds in [20.0, 40.0, 300.0] {
            let scenario = Scenario::demonstration(seconds);
            let times: Vec<f64> = scenario.happenings.iter().map(|happening| happening.at_seconds).collect();
            assert!(times.windows(2).all(|two| two[0] <= two[1]));
            assert!(*times.last().unwrap() <= seconds);
        }
    }

    #[test]
    fn planted_changes_begin_within_exposures() {
        for happening in Scenario::demonstration(40.0).happenings {
            if let What::Jump { .. } | What::Sag { .. } | What::OpenDoor = happening.what
                && happening.at_seconds > CAMERA_FROM
            {
                let phase = (happening.at_seconds - 4.01).rem_euclid(0.4);
                assert!((phase - 0.12).abs() < 1e-6, "{phase}");
            }
        }
    }
}
