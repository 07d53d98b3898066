//! In which order the points of a calibration are taken.

use serde::{Deserialize, Serialize};

/// From which side a point was approached.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize, Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Direction {
    /// High voltage off, input shorted.
    Zero,
    /// From below.
    Up,
    /// From above.
    Down,
}

impl Direction {
    /// The word used in certificates and tables.
    pub const fn word(self) -> &'static str {
        match self {
            Self::Zero => "zero",
            Self::Up => "up",
            Self::Down => "down",
        }
    }

    /// From the word used in certificates and tables.
    pub fn from_word(word: &str) -> Option<Self> {
        [Self::Zero, Self::Up, Self::Down].into_iter().find(|direction| direction.word() == word)
    }
}

/// One point to be taken.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Step {
    /// Which cycle, from 1.
    pub cycle: u32,
    /// From which side.
    pub direction: Direction,
    /// The accelerating voltage to set, volts, not negative.
    pub target_volts: f64,
}

/// Why there is no such plan.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
pub enum PlanError {
    /// Too few or too many levels.
    #[error("{0} levels: 4 to 50 are permitted (10 is usual)")]
    Levels(u32),
    /// Too few or too many cycles.
    #[error("{0} cycles: 1 to 20 are permitted (3 is usual)")]
    Cycles(u32),
    /// The highest voltage is none.
    #[error("a highest voltage of {0} V: 100 to 30000 V are permitted, and never more than your bench is approved for")]
    Highest(f64),
}

/// The points of a calibration in order: in every cycle zero, `levels` equal steps up to the highest voltage and down
/// again; a last zero closes the plan.
///
/// # Errors
/// When a number makes no sense.
pub fn plan(highest_volts: f64, levels: u32, cycles: u32) -> Result<Vec<Step>, PlanError> {
    if !(100.0..=30_000.0).contains(&highest_volts) {
        return Err(PlanError::Highest(highest_volts));
    }
    if !(4..=50).contains(&levels) {
        return Err(PlanError::Levels(levels));
    }
    if !(1..=20).contains(&cycles) {
        return Err(PlanError::Cycles(cycles));
    }
    let volts = |level: u32| highest_volts * f64::from(level) / f64::from(levels);
    let mut steps = Vec::new();
    for cycle in 1..=cycles {
        let mut add = |direction, level| steps.push(Step { cycle, direction, target_volts: volts(level) });
        add(Direction::Zero, 0);
        (1..=levels).for_each(|level| add(Direction::Up, level));
        (1..levels).rev().for_each(|level| add(Direction::Down, level));
    }
    steps.push(Step { cycle: cycles, direction: Direction::Zero, target_volts: 0.0 });
    Ok(steps)
}

impl Step {
    /// What the person is to do, in one sentence.
    pub fn instruction(&self) -> String {
        match self.direction {
            Direction::Zero => {
                "Switch the high voltage off, wait until it has bled down, and leave it off: zero point.".to_owned()
            }
            Direction::Up => format!("Raise the voltage slowly to about {:.0} V; do not overshoot.", self.target_volts),
            Direction::Down => {
                format!("Lower the voltage slowly to about {:.0} V; do not undershoot.", self.target_volts)
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_cycle_goes_up_and_comes_down_by_the_same_levels() {
        let steps = plan(5000.0, 10, 3).unwrap();
        assert_eq!(steps.len(), 3 * 20 + 1);
        let first: Vec<_> = steps.iter().filter(|step| step.cycle == 1).map(|step| step.target_volts).collect();
        assert_eq!(first[..3], [0.0, 500.0, 1000.0]);
        assert_eq!(first[10..12], [5000.0, 4500.0]);
        for pair in steps.windows(2) {
            match pair[1].direction {
                Direction::Up => assert!(pair[1].target_volts > pair[0].target_volts),
                Direction::Down => assert!(pair[1].target_volts < pair[0].target_volts),
                Direction::Zero => assert_eq!(pair[1].target_volts, 0.0),
            }
        }
        assert_eq!(steps.last().unwrap().direction, Direction::Zero);
    }

    #[test]
    fn senseless_plans_are_refused() {
        assert!(matches!(plan(f64::NAN, 10, 3), Err(PlanError::Highest(_))));
        assert_eq!(plan(5000.0, 0, 3), Err(PlanError::Levels(0)));
        assert_eq!(plan(5000.0, 10, 1000), Err(PlanError::Cycles(1000)));
    }
}
