//! Whether the two senses tell the same voltage, and whether that voltage behaves like one.
//!
//! Windows are gathered to blocks of 100 ms (whole cycles of 50 Hz and 60 Hz mains), and blocks to half a second and a
//! second. Everything is in millivolts and parts per million; divisions happen once a block, not once a poll.

use ringvolt_protocol::{CertificateRecord, Trip, TripSet};

/// Length of a block, microseconds.
const BLOCK_US: u64 = 100_000;
/// Blocks in a second.
const BLOCKS: usize = 10;
/// Blocks in the half second over which a step of the ratio is seen.
const STEP_BLOCKS: usize = 5;
/// Senses may differ by this, parts per million of the larger.
const DIFFER_PPM: i64 = 2_500;
/// The ratio may step by this, ppm.
const STEP_PPM: i64 = 2_500;
/// Below this voltage the ratio says nothing, millivolts.
const RATIO_FROM_MV: i64 = 300_000;
/// The ratio is learned anew only while the voltage moves by less than this within the half second, ppm.
const STEADY_PPM: i64 = 50_000;
/// The two senses may follow a change by times that differ by this: their filters, and half a conversion each way.
const LAG_US: i64 = 5_000;
/// One sense is lost when the other is above this, millivolts.
const LOST_FROM_MV: i64 = 100_000;
/// Above this something is live, millivolts: 60 V dc, the usual touch limit (EN 61010-1, from memory).
pub const LIVE_MV: i32 = 60_000;
/// An arc takes at least this part of the voltage within one window, per mille.
const ARC_PER_MILLE: i64 = 150;

/// Means over one block.
#[derive(Clone, Copy, Debug, Default)]
struct Block {
    sense_mv: i64,
    cross_mv: i64,
    /// Lowest and highest window of either sense.
    low_mv: i64,
    high_mv: i64,
}

/// Compares the senses.
#[derive(Clone, Debug, Default)]
pub struct Agreement {
    sums: Block,
    windows: i64,
    from_us: u64,
    /// The latest first, and one more than a mean needs: a change at the edge of the oldest shows against the one before.
    blocks: [Block; BLOCKS + 1],
    /// Blocks since the last doubt, up to all of them.
    held: usize,
    /// Running ratio of sense to cross-sense, ppm, and the blocks it rests on.
    ratio_ppm: Option<i64>,
    /// Sense of the last window, for arcs.
    last_mv: Option<i64>,
    trips: TripSet,
    arc: bool,
}

/// What judging needs of certificate and settings.
#[derive(Clone, Copy, Debug)]
pub struct Judge<'a> {
    /// The certificate in force.
    pub certificate: &'a CertificateRecord,
    /// Time constant of the bleed, milliseconds; 0 where it is not known.
    pub bleed_ms: u16,
    /// Whether the permit is given: only then can a breakdown be an arc.
    pub permit: bool,
}

/// One window in volts: means of both senses, millivolts at the tube.
#[derive(Clone, Copy, Debug)]
pub struct WindowVolts {
    /// Start, microseconds.
    pub time_us: u64,
    /// Length, microseconds.
    pub duration_us: u16,
    /// Main sense; `None` without a conversion.
    pub sense_mv: Option<i32>,
    /// Cross-sense; `None` without a conversion.
    pub cross_mv: Option<i32>,
}

impl Agreement {
    /// Takes the next window.
    pub fn take(&mut self, window: &WindowVolts, judge: &Judge<'_>) {
        let (Some(sense), Some(cross)) = (window.sense_mv, window.cross_mv) else {
            self.doubt();
            return;
        };
        let (sense, cross) = (i64::from(sense), i64::from(cross));
        self.arc = judge.permit && self.last_mv.is_some_and(|last| broke_down(last, sense, window, judge.bleed_ms));
        self.last_mv = Some(sense);
        if self.windows == 0 {
            self.from_us = window.time_us;
            (self.sums.low_mv, self.sums.high_mv) = (sense, sense);
        }
        self.sums.low_mv = self.sums.low_mv.min(sense).min(cross);
        self.sums.high_mv = self.sums.high_mv.max(sense).max(cross);
        self.sums.sense_mv += sense;
        self.sums.cross_mv += cross;
        self.windows += 1;
        let end_us = window.time_us + u64::from(window.duration_us);
        // Rounding of window edges must not make a block one window longer.
        if end_us.saturating_sub(self.from_us) + 1_000 >= BLOCK_US {
            self.close_block(judge);
        }
    }

    /// Forgets what was gathered: a converter was silent or over range, so nothing before compares with what comes.
    pub fn doubt(&mut self) {
        *self = Self { ratio_ppm: self.ratio_ppm, ..Self::default() };
    }

    fn close_block(&mut self, judge: &Judge<'_>) {
        let Block { sense_mv, cross_mv, .. } = self.sums;
        let block = Block { sense_mv: sense_mv / self.windows, cross_mv: cross_mv / self.windows, ..self.sums };
        self.sums = Block::default();
        self.windows = 0;
        self.blocks.rotate_right(1);
        self.blocks[0] = block;
        self.held = (self.held + 1).min(BLOCKS + 1);
        self.trips = TripSet::EMPTY;
        if let Some(trip) = lost(&block).or_else(|| self.disagrees(judge)).or_else(|| self.stepped(judge)) {
            self.trips.insert(trip);
        }
    }

    /// What the senses may differ by in the mean over the last `count` blocks because the voltage moved meanwhile: the
    /// change of the voltage, by the part that the lag is of this time, millivolts.
    fn motion_mv(&self, count: usize) -> i64 {
        let blocks = &self.blocks[..=count];
        let low_mv = blocks.iter().map(|block| block.low_mv).min().unwrap_or(0);
        let high_mv = blocks.iter().map(|block| block.high_mv).max().unwrap_or(0);
        let moved_mv = high_mv - low_mv;
        moved_mv * LAG_US / (count as i64 * BLOCK_US as i64)
    }

    fn mean(&self, count: usize) -> Option<Block> {
        let blocks = self.blocks.get(..count).filter(|_| self.held > count)?;
        let sum = |of: fn(&Block) -> i64| blocks.iter().map(of).sum::<i64>() / count as i64;
        Some(Block { sense_mv: sum(|block| block.sense_mv), cross_mv: sum(|block| block.cross_mv), ..Block::default() })
    }

    fn disagrees(&self, judge: &Judge<'_>) -> Option<Trip> {
        let second = self.mean(BLOCKS)?;
        let size = second.sense_mv.abs().max(second.cross_mv.abs());
        let u_mv = size * i64::from(judge.certificate.difference_ppm) / 1_000_000;
        let fixed_mv = i64::from(judge.certificate.difference_mv);
        // The root of the sum of squares lies between the larger and the sum: compared as squares, no root is needed.
        let differ = (second.sense_mv - second.cross_mv).abs();
        let four_u = 16 * (u_mv * u_mv + fixed_mv * fixed_mv);
        let allowed = differ - self.motion_mv(BLOCKS);
        (allowed > size * DIFFER_PPM / 1_000_000 && allowed * allowed > four_u).then_some(Trip::SensesDisagree)
    }

    /// A step of the ratio; carries the running ratio on where there is none.
    fn stepped(&mut self, judge: &Judge<'_>) -> Option<Trip> {
        let half = self.mean(STEP_BLOCKS)?;
        let high = |block: &Block| block.sense_mv >= RATIO_FROM_MV && block.cross_mv >= RATIO_FROM_MV;
        if !self.blocks[..STEP_BLOCKS].iter().all(high) {
            return None;
        }
        let motion_ppm = self.motion_mv(STEP_BLOCKS) * 1_000_000 / half.cross_mv;
        let steady = motion_ppm * STEP_BLOCKS as i64 * BLOCK_US as i64 / LAG_US < STEADY_PPM;
        if self.ratio_ppm.is_none() && !steady {
            return None;
        }
        let now_ppm = half.sense_mv * 1_000_000 / half.cross_mv;
        let running = self.ratio_ppm.unwrap_or(now_ppm);
        let off = now_ppm - running;
        if off.abs() > STEP_PPM + motion_ppm && judge.permit {
            return Some(Trip::RatioChanged);
        }
        if !steady {
            return None;
        }
        // Follows within about six seconds, since strings drift with temperature.
        self.ratio_ppm = Some(if off.abs() > STEP_PPM { now_ppm } else { running + off / 64 });
        None
    }

    /// What the senses have against each other now.
    pub fn trips(&self) -> TripSet {
        let mut trips = self.trips;
        if self.arc {
            trips.insert(Trip::Arc);
        }
        trips
    }

    /// Means over the last block, millivolts: main sense and cross-sense.
    pub fn latest_mv(&self) -> Option<(i32, i32)> {
        let block = self.blocks.first().filter(|_| self.held > 0)?;
        Some((i32::try_from(block.sense_mv).ok()?, i32::try_from(block.cross_mv).ok()?))
    }
}

fn lost(block: &Block) -> Option<Trip> {
    let (sense, cross) = (block.sense_mv.abs(), block.cross_mv.abs());
    if cross > LOST_FROM_MV && sense * 10 < cross {
        Some(Trip::SenseLost)
    } else if sense > LOST_FROM_MV && cross * 10 < sense {
        Some(Trip::CrossLost)
    } else {
        None
    }
}

/// Whether the voltage fell by more than 15 %, and by more than twice what bleeding through its resistors takes.
fn broke_down(last_mv: i64, now_mv: i64, window: &WindowVolts, bleed_ms: u16) -> bool {
    let fell = last_mv - now_mv;
    let bled_per_mille = if bleed_ms == 0 { 0 } else { 2 * i64::from(window.duration_us) / i64::from(bleed_ms) };
    last_mv > RATIO_FROM_MV && fell * 1_000 > last_mv * ARC_PER_MILLE.max(bled_per_mille)
}

#[cfg(test)]
mod tests {
    use super::*;

    const CERTIFICATE: CertificateRecord = CertificateRecord {
        hash: ringvolt_protocol::CertificateHash([1; 8]),
        device: [0; 8],
        sense: ringvolt_protocol::CodeToVolts { offset_nv: 0, slope_pv: 0, bend_av: 0, code_min: 0, code_max: 0 },
        cross: ringvolt_protocol::CodeToVolts { offset_nv: 0, slope_pv: 0, bend_av: 0, code_min: 0, code_max: 0 },
        difference_ppm: 400,
        difference_mv: 200,
        expires_day: 0,
    };

    /// Feeds `seconds` of windows of 10 ms; gives the time at which a trip first showed, seconds.
    fn feed(agreement: &mut Agreement, seconds: f64, volts: impl Fn(f64) -> (f64, f64)) -> Option<(f64, TripSet)> {
        let judge = Judge { certificate: &CERTIFICATE, bleed_ms: 0, permit: true };
        for index in 0..(seconds * 100.0) as u64 {
            let (sense, cross) = volts(index as f64 * 0.01);
            let window = WindowVolts {
                time_us: index * 10_000,
                duration_us: 10_000,
                sense_mv: Some((sense * 1e3) as i32),
                cross_mv: Some((cross * 1e3) as i32),
            };
            agreement.take(&window, &judge);
            if agreement.trips() != TripSet::EMPTY {
                return Some((index as f64 * 0.01, agreement.trips()));
            }
        }
        None
    }

    fn only(trip: Trip) -> TripSet {
        let mut set = TripSet::EMPTY;
        set.insert(trip);
        set
    }

    #[test]
    fn senses_that_agree_within_their_uncertainty_do_not_trip() {
        assert_eq!(feed(&mut Agreement::default(), 20.0, |_| (2_500.0, 2_503.0)), None);
        // 60 V apart at nothing is no fault of a percentage, but 4u are 0.8 V.
        assert!(feed(&mut Agreement::default(), 20.0, |_| (2.0, 0.5)).is_some());
        assert_eq!(feed(&mut Agreement::default(), 20.0, |_| (0.6, 0.0)), None);
    }

    #[test]
    fn a_step_of_the_ratio_by_three_per_mille_is_seen_within_a_second() {
        let step = |t: f64| (2_500.0 * if t < 10.0 { 1.0 } else { 1.003 }, 2_500.0);
        let (at, trips) = feed(&mut Agreement::default(), 20.0, step).unwrap();
        assert!((10.3..10.7).contains(&at), "{at}");
        assert_eq!(trips, only(Trip::RatioChanged));
    }

    #[test]
    fn an_open_string_is_told_from_a_disagreement() {
        let open = |t: f64| (if t < 5.0 { 2_500.0 } else { 1.0 }, 2_500.0);
        let judge = Judge { certificate: &CERTIFICATE, bleed_ms: 0, permit: false };
        let mut agreement = Agreement::default();
        for index in 0..700u64 {
            let (sense, cross) = open(index as f64 * 0.01);
            let mv = |volts: f64| Some((volts * 1e3) as i32);
            let window =
                WindowVolts { time_us: index * 10_000, duration_us: 10_000, sense_mv: mv(sense), cross_mv: mv(cross) };
            agreement.take(&window, &judge);
        }
        assert_eq!(agreement.trips(), only(Trip::SenseLost));
    }

    #[test]
    fn a_slow_disagreement_is_seen_over_a_second() {
        let drift = |t: f64| (2_500.0 + t, 2_500.0);
        let (at, trips) = feed(&mut Agreement::default(), 20.0, drift).unwrap();
        assert!((6.0..8.0).contains(&at), "{at}");
        assert_eq!(trips, only(Trip::SensesDisagree));
    }

    #[test]
    fn a_breakdown_is_an_arc_and_a_bleed_is_not() {
        let arc = |t: f64| if t < 3.0 { (2_500.0, 2_500.0) } else { (1_200.0, 1_200.0) };
        assert_eq!(feed(&mut Agreement::default(), 5.0, arc).unwrap().1, only(Trip::Arc));
        let bleed = |t: f64| {
            let volts = 2_500.0 * (-(t - 3.0).max(0.0) / 0.1).exp();
            (volts, volts)
        };
        assert_eq!(feed(&mut Agreement::default(), 5.0, bleed), None);
    }

    #[test]
    fn switching_on_and_ramping_are_no_disagreement_though_one_filter_is_slower() {
        // The cross-sense follows 3 ms later and loses most of a conversion at the step.
        for seconds in [0.0, 0.01, 0.1, 0.5, 1.0, 3.0] {
            let at = |t: f64| {
                2_500.0 * if seconds == 0.0 { f64::from(t >= 3.004) } else { ((t - 3.004) / seconds).clamp(0.0, 1.0) }
            };
            let mean = |t: f64| (0..10).map(|part| at(t + f64::from(part) * 1e-3)).sum::<f64>() / 10.0;
            let volts = |t: f64| (mean(t), mean(t - 3e-3));
            assert_eq!(feed(&mut Agreement::default(), 10.0, volts), None, "ramp of {seconds} s");
        }
    }

    #[test]
    fn an_element_that_shorts_is_told_by_the_ratio_within_a_second() {
        // One of ten elements: the main sense reads a ninth more.
        let short = |t: f64| (2_500.0 * if t < 10.0 { 1.0 } else { 10.0 / 9.0 }, 2_500.0);
        let (at, _) = feed(&mut Agreement::default(), 20.0, short).unwrap();
        assert!((10.0..11.0).contains(&at), "{at}");
    }

    #[test]
    fn nothing_is_compared_across_a_doubt() {
        let mut agreement = Agreement::default();
        feed(&mut agreement, 3.0, |_| (2_500.0, 2_500.0));
        agreement.doubt();
        assert_eq!(agreement.latest_mv(), None);
        assert_eq!(agreement.trips(), TripSet::EMPTY);
    }
}
