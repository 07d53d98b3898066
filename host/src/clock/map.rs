//! Device microseconds to UTC, for one epoch, from its clock exchanges.
//!
//! At knots a few seconds apart the strip of the exchanges around gives offset, slope and bound; between knots the
//! offset is interpolated. The window follows a crystal that drifts with temperature; what a straight line cannot follow
//! within the window is allowed for. The middle of the strip is right only as far as the shortest delays of both ways
//! are equal, which cannot be observed: the bound is therefore never below half the shortest round trip.

use super::envelope::{Point, Strip};

/// One clock exchange of the epoch.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Exchange {
    /// When the question was handed to the link, host's monotonic nanoseconds.
    pub asked_mono_ns: i64,
    /// When the answer had been read.
    pub answered_mono_ns: i64,
    /// When the controller took the question, its microseconds.
    pub received_us: u64,
    /// When the controller made the answer.
    pub sent_us: u64,
    /// UTC less monotonic time at that moment, nanoseconds.
    pub utc_less_mono_ns: i64,
}

/// What the map may assume of the crystals.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct MapLimits {
    /// Largest rate difference of the two crystals either way, as a fraction. RP2040 boards and computers stay within
    /// 50 ppm each (common practice, no source); twice that by default.
    pub rate: f64,
    /// Fastest change of that rate, per second: 1 ppm/K at 0.02 K/s by default.
    pub rate_change_per_second: f64,
    /// Half the length of the window that one knot looks at, seconds.
    pub half_window_seconds: f64,
    /// Distance of the knots, seconds.
    pub knot_seconds: f64,
}

impl Default for MapLimits {
    fn default() -> Self {
        Self { rate: 200e-6, rate_change_per_second: 0.02e-6, half_window_seconds: 30.0, knot_seconds: 5.0 }
    }
}

/// UTC of one device time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Instant {
    /// UTC, nanoseconds since 1970.
    pub utc_ns: i64,
    /// No further from the truth than this, nanoseconds, as long as the host's UTC is right.
    pub bound_ns: i64,
    /// Standard uncertainty, nanoseconds: the bound is taken as the half-width of a rectangular distribution.
    pub u_ns: i64,
}

#[derive(Clone, Copy, Debug)]
struct Knot {
    device_us: f64,
    /// Host's monotonic time less device time, seconds from `ClockMap::origin_ns`.
    offset: f64,
    slope: f64,
    bound: f64,
    utc_less_mono_ns: i64,
}

/// The mapping of one epoch.
#[derive(Clone, Debug)]
pub struct ClockMap {
    knots: Vec<Knot>,
    origin_ns: i64,
    limits: MapLimits,
    first_us: u64,
    last_us: u64,
}

/// A step of the host's UTC is anything beyond what a slewing clock does between two knots.
const UTC_STEP_NS: i64 = 5_000_000;

impl ClockMap {
    /// The mapping that these exchanges of one epoch support; `None` where there are none that agree.
    pub fn new(exchanges: &[Exchange], limits: MapLimits) -> Option<Self> {
        let mut exchanges: Vec<Exchange> = exchanges.iter().copied().filter(is_possible).collect();
        exchanges.sort_by_key(|exchange| exchange.received_us);
        let (first, last) = (exchanges.first()?, exchanges.last()?);
        let origin_ns = first.asked_mono_ns - i64::try_from(first.received_us).ok()?.checked_mul(1_000)?;
        let mut map = Self { knots: Vec::new(), origin_ns, limits, first_us: first.received_us, last_us: last.sent_us };
        let span = seconds_between(map.first_us as f64, map.last_us as f64);
        let count = (span / limits.knot_seconds).ceil().clamp(1.0, 1e6) as usize;
        let mut window = 0..0;
        for index in 0..=count {
            let device_us = map.first_us as f64 + span * 1e6 * index as f64 / count as f64;
            slide(&mut window, &exchanges, device_us, limits.half_window_seconds);
            map.knots.extend(map.knot(device_us, &exchanges[window.clone()]));
        }
        (!map.knots.is_empty()).then_some(map)
    }

    fn knot(&self, device_us: f64, exchanges: &[Exchange]) -> Option<Knot> {
        let point = |time_us: u64, mono_ns: i64| Point {
            x: seconds_between(device_us, time_us as f64),
            y: (mono_ns - self.origin_ns - time_us as i64 * 1_000) as f64 * 1e-9,
        };
        let mut asked: Vec<Point> = exchanges.iter().map(|e| point(e.received_us, e.asked_mono_ns)).collect();
        let mut answered: Vec<Point> = exchanges.iter().map(|e| point(e.sent_us, e.answered_mono_ns)).collect();
        let reach = asked.iter().chain(&answered).fold(0.0, |far: f64, point| far.max(point.x.abs()));
        // A rate that changes evenly leaves its tangent by half the change times the time squared.
        let slack = 0.5 * self.limits.rate_change_per_second * reach * reach;
        let passage = Strip::new(&mut asked, &mut answered, self.limits.rate).passage(0.0, slack)?;
        let nearest = exchanges.iter().min_by(|a, b| {
            let far = |e: &Exchange| (e.received_us as f64 - device_us).abs();
            far(a).total_cmp(&far(b))
        })?;
        Some(Knot {
            device_us,
            offset: passage.middle,
            slope: passage.slope,
            bound: (passage.highest - passage.middle).max(passage.middle - passage.lowest),
            utc_less_mono_ns: nearest.utc_less_mono_ns,
        })
    }

    /// UTC of this device time; `None` too far from any exchange for a bound below 50 ms.
    pub fn utc(&self, time_us: u64) -> Option<Instant> {
        let at = time_us as f64;
        let after = self.knots.partition_point(|knot| knot.device_us < at);
        let right = self.knots.get(after);
        let left = after.checked_sub(1).and_then(|before| self.knots.get(before));
        let (offset, bound, utc_less_mono_ns) = match (left, right) {
            (Some(left), Some(right)) => self.between(left, right, at),
            (Some(knot), None) | (None, Some(knot)) => self.beyond(knot, at),
            (None, None) => return None,
        };
        // The controller's microsecond is the resolution of its stamps.
        let bound_ns = (bound * 1e9) as i64 + 1_000;
        if bound_ns > 50_000_000 {
            return None;
        }
        let device_ns = i64::try_from(time_us).ok()?.checked_mul(1_000)?;
        let mono_ns = device_ns + self.origin_ns + (offset * 1e9).round() as i64;
        Some(Instant {
            utc_ns: mono_ns + utc_less_mono_ns,
            bound_ns,
            u_ns: (bound_ns as f64 / libm::sqrt(3.0)).round() as i64,
        })
    }

    fn between(&self, left: &Knot, right: &Knot, at: f64) -> (f64, f64, i64) {
        let span = right.device_us - left.device_us;
        let share = if span > 0.0 { (at - left.device_us) / span } else { 0.0 };
        let mix = |a: f64, b: f64| a + (b - a) * share;
        let gap = span * 1e-6;
        // Knots that failed leave a long stretch between their neighbours, over which the rate may have moved.
        let curve = 0.125 * self.limits.rate_change_per_second * gap * gap;
        let step = right.utc_less_mono_ns - left.utc_less_mono_ns;
        let utc = if step.abs() < UTC_STEP_NS {
            left.utc_less_mono_ns + (step as f64 * share).round() as i64
        } else if share < 0.5 {
            left.utc_less_mono_ns
        } else {
            right.utc_less_mono_ns
        };
        let bound = mix(left.bound, right.bound).max(left.bound.min(right.bound)) + curve;
        (mix(left.offset, right.offset), bound, utc)
    }

    fn beyond(&self, knot: &Knot, at: f64) -> (f64, f64, i64) {
        let away = seconds_between(knot.device_us, at);
        // Outside the exchanges only the crystal's specification holds.
        (knot.offset + knot.slope * away, knot.bound + self.limits.rate * away.abs(), knot.utc_less_mono_ns)
    }

    /// Device time of this UTC, microseconds; `None` where the epoch has no mapping there.
    pub fn device_us(&self, utc_ns: i64) -> Option<u64> {
        // The offset moves by parts per million, so two steps reach it.
        let mut guess = utc_ns - self.knots.first()?.utc_less_mono_ns - self.origin_ns;
        for _ in 0..4 {
            let time_us = u64::try_from(guess.div_euclid(1_000)).ok()?;
            let off = utc_ns - self.utc(time_us)?.utc_ns;
            if off.abs() < 1_000 {
                break;
            }
            guess += off;
        }
        u64::try_from(guess.div_euclid(1_000)).ok()
    }

    /// First and last device time with an exchange, microseconds.
    pub const fn span_us(&self) -> (u64, u64) {
        (self.first_us, self.last_us)
    }

    /// The rate of the controller's crystal against the host's, parts per million, at the last knot; positive is fast.
    pub fn rate_ppm(&self) -> f64 {
        self.knots.last().map_or(0.0, |knot| -knot.slope * 1e6)
    }
}

fn is_possible(exchange: &Exchange) -> bool {
    exchange.answered_mono_ns >= exchange.asked_mono_ns
        && exchange.sent_us >= exchange.received_us
        && i64::try_from(exchange.sent_us).is_ok_and(|us| us < i64::MAX / 2_000)
}

fn seconds_between(from_us: f64, to_us: f64) -> f64 {
    (to_us - from_us) * 1e-6
}

/// Moves `window` to the exchanges within `half` seconds of `device_us`, at least the nearest eight.
fn slide(window: &mut std::ops::Range<usize>, exchanges: &[Exchange], device_us: f64, half: f64) {
    const LEAST: usize = 8;
    let start = exchanges.partition_point(|e| seconds_between(device_us, e.received_us as f64) < -half);
    let end = exchanges.partition_point(|e| seconds_between(device_us, e.received_us as f64) <= half);
    let middle = exchanges.partition_point(|e| (e.received_us as f64) < device_us);
    *window = if end - start >= LEAST {
        start..end
    } else {
        middle.saturating_sub(LEAST / 2)..(middle + LEAST / 2).min(exchanges.len())
    };
}

#[cfg(test)]
mod tests;
