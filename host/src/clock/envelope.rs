//! The strip between the exchanges: what lines from device time to host time they leave possible.
//!
//! A question cannot be received before it was asked, and an answer cannot be read before it was sent. In the plane of
//! device time (abscissa) and host time (ordinate) every exchange is thus one point the true line passes *above* (asked,
//! received) and one it passes *below* (answered, sent). Delays vary, so only the highest of the former and the lowest
//! of the latter bind: two convex hulls (Moon, Skelly and Towsley, INFOCOM 1999, from memory).

/// A point relative to the window's middle: seconds of device time, seconds of host time less device time.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Point {
    /// Device time, seconds from the middle of the window.
    pub x: f64,
    /// Host time less device time, seconds from an arbitrary origin.
    pub y: f64,
}

/// Lines `y = offset + slope x` that pass above all of one set and below all of another.
#[derive(Clone, Debug)]
pub(super) struct Strip {
    floor: Vec<Point>,
    ceiling: Vec<Point>,
    steepest: f64,
}

/// What a strip says about the line's value at one abscissa.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Passage {
    /// The line in the middle of the strip, seconds.
    pub middle: f64,
    /// Its slope.
    pub slope: f64,
    /// The lowest a possible line passes, seconds.
    pub lowest: f64,
    /// The highest a possible line passes, seconds.
    pub highest: f64,
}

impl Strip {
    /// From the points the line passes above (`asked`) and below (`answered`), in any order, with the largest slope
    /// either way that the crystal can have.
    pub(super) fn new(asked: &mut [Point], answered: &mut [Point], steepest: f64) -> Self {
        Self { floor: hull(asked, 1.0), ceiling: hull(answered, -1.0), steepest }
    }

    /// The highest floor seen along a line of this slope, carried to abscissa `x`.
    fn floor_at(&self, slope: f64, x: f64) -> f64 {
        self.floor.iter().map(|point| point.y - slope * (point.x - x)).fold(f64::NEG_INFINITY, f64::max)
    }

    fn ceiling_at(&self, slope: f64, x: f64) -> f64 {
        self.ceiling.iter().map(|point| point.y - slope * (point.x - x)).fold(f64::INFINITY, f64::min)
    }

    /// Room between floor and ceiling along this slope; concave in the slope, negative where no line fits.
    fn room(&self, slope: f64) -> f64 {
        self.ceiling_at(slope, 0.0) - self.floor_at(slope, 0.0)
    }

    /// What is possible at `x`, with `slack` seconds forgiven either way for a line that is not quite straight.
    /// `None` where no line fits.
    pub(super) fn passage(&self, x: f64, slack: f64) -> Option<Passage> {
        if self.floor.is_empty() || self.ceiling.is_empty() {
            return None;
        }
        let best = highest_of(-self.steepest, self.steepest, |slope| self.room(slope));
        let fits = |slope: f64| self.room(slope) + 2.0 * slack >= 0.0;
        if !fits(best) {
            return None;
        }
        let least = edge(best, -self.steepest, &fits);
        let most = edge(best, self.steepest, &fits);
        // The ceiling is concave in the slope and the floor convex, so each has one extreme over the possible slopes.
        let highest_slope = highest_of(least, most, |slope| self.ceiling_at(slope, x));
        let lowest_slope = highest_of(least, most, |slope| -self.floor_at(slope, x));
        let (floor, ceiling) = (self.floor_at(best, x), self.ceiling_at(best, x));
        Some(Passage {
            middle: 0.5 * (floor + ceiling),
            slope: best,
            lowest: self.floor_at(lowest_slope, x) - slack,
            highest: self.ceiling_at(highest_slope, x) + slack,
        })
    }
}

/// The hull that bounds the points from above (`side` = 1) or from below (-1), from left to right (monotone chain).
fn hull(points: &mut [Point], side: f64) -> Vec<Point> {
    points.sort_by(|a, b| a.x.total_cmp(&b.x).then(a.y.total_cmp(&b.y)));
    let mut hull: Vec<Point> = Vec::new();
    for &point in points.iter() {
        while let [.., before, last] = hull[..] {
            let turn = (last.x - before.x) * (point.y - before.y) - (last.y - before.y) * (point.x - before.x);
            if side * turn < 0.0 {
                break;
            }
            hull.pop();
        }
        hull.push(point);
    }
    hull
}

/// Where a concave function is highest between `from` and `to`.
fn highest_of(mut from: f64, mut to: f64, value: impl Fn(f64) -> f64) -> f64 {
    // 60 steps of ternary search shrink 400 ppm to below 1e-13.
    for _ in 0..60 {
        let third = (to - from) / 3.0;
        if value(from + third) < value(to - third) {
            from += third;
        } else {
            to -= third;
        }
    }
    0.5 * (from + to)
}

/// The last slope between `inside` (which fits) and `limit` that still fits.
fn edge(inside: f64, limit: f64, fits: &impl Fn(f64) -> bool) -> f64 {
    if fits(limit) {
        return limit;
    }
    let (mut good, mut bad) = (inside, limit);
    for _ in 0..40 {
        let middle = 0.5 * (good + bad);
        if fits(middle) {
            good = middle;
        } else {
            bad = middle;
        }
    }
    good
}

#[cfg(test)]
mod tests {
    use super::*;

    fn point(x: f64, y: f64) -> Point {
        Point { x, y }
    }

    #[test]
    fn the_hulls_keep_only_what_binds() {
        let mut points = [point(0.0, 0.0), point(1.0, -5.0), point(2.0, 1.0), point(3.0, 0.9), point(4.0, 0.0)];
        assert_eq!(hull(&mut points, 1.0), [point(0.0, 0.0), point(2.0, 1.0), point(3.0, 0.9), point(4.0, 0.0)]);
        assert_eq!(hull(&mut points, -1.0), [point(0.0, 0.0), point(1.0, -5.0), point(4.0, 0.0)]);
    }

    #[test]
    fn a_straight_line_between_equal_delays_is_found() {
        let line = |x: f64| 0.5 + 20e-6 * x;
        let at = [-30.0, -10.0, 5.0, 29.0];
        let mut asked = at.map(|x| point(x, line(x) - 1e-3));
        let mut answered = at.map(|x| point(x, line(x) + 1e-3));
        let passage = Strip::new(&mut asked, &mut answered, 2e-4).passage(0.0, 0.0).unwrap();
        assert!((passage.middle - line(0.0)).abs() < 1e-9);
        assert!((passage.slope - 20e-6).abs() < 1e-9);
        assert!(passage.lowest <= line(0.0) - 0.9e-3 && passage.highest >= line(0.0) + 0.9e-3);
    }

    #[test]
    fn a_jump_of_either_clock_leaves_no_line() {
        let mut asked = [point(-10.0, 0.0), point(10.0, 0.5)];
        let mut answered = [point(-10.0, 0.001), point(10.0, 0.501)];
        assert_eq!(Strip::new(&mut asked, &mut answered, 2e-4).passage(0.0, 1e-5), None);
    }
}
