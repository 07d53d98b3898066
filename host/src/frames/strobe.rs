//! Strobe or exposure-active edges, recorded by the controller, matched to frames by order, count and coarse time.
//!
//! A camera's own time may be wrong by minutes, but it is wrong by the same for all frames of a session: one offset must
//! bring every frame onto a pulse of its own. Where none does, or several do, nothing is guessed.

use thiserror::Error;

/// One pulse of the strobe line, UTC nanoseconds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Pulse {
    /// Rising edge: exposure begins.
    pub start_ns: i64,
    /// Falling edge; `None` where the line only tells the beginning.
    pub end_ns: Option<i64>,
}

/// Why frames and pulses could not be matched.
#[derive(Clone, Debug, PartialEq, Error)]
pub enum StrobeRefusal {
    /// There is nothing to match.
    #[error("the strobe line gave {pulses} pulses for {frames} frames: check its wiring, or use another source")]
    TooFew {
        /// Pulses.
        pulses: usize,
        /// Frames.
        frames: usize,
    },
    /// No offset brings every frame onto a pulse.
    #[error(
        "no shift of the camera's clock brings all {frames} frames onto {pulses} pulses (at best {matched}): some frames or pulses are missing, so nothing is matched"
    )]
    NoMatch {
        /// Frames.
        frames: usize,
        /// Pulses.
        pulses: usize,
        /// Most frames that any offset matched.
        matched: usize,
    },
    /// Several offsets do.
    #[error(
        "frames fit the pulses at {ways} shifts of the camera's clock: state its time more closely, or make one pause between frames"
    )]
    Ambiguous {
        /// How many offsets fit.
        ways: usize,
    },
}

/// Pulses from edges in the order of time. A falling edge without a rising one before it is passed over; a rising edge
/// that follows another without a falling one between begins a new pulse.
pub fn pulses(edges: impl IntoIterator<Item = (i64, bool)>) -> Vec<Pulse> {
    let mut pulses: Vec<Pulse> = Vec::new();
    let mut falls = false;
    for (time_ns, rising) in edges {
        if rising {
            pulses.push(Pulse { start_ns: time_ns, end_ns: None });
            falls = true;
        } else if let Some(pulse) = pulses.last_mut().filter(|_| falls) {
            pulse.end_ns = Some(time_ns);
            falls = false;
        }
    }
    pulses
}

/// Finds the pulse of every frame. `coarse_ns` are the frames' own times in order, and `within_ns` how far the camera's
/// clock may be off.
///
/// # Errors
/// [`StrobeRefusal`].
pub fn match_frames(coarse_ns: &[i64], pulses: &[Pulse], within_ns: i64) -> Result<Vec<usize>, StrobeRefusal> {
    let (frames, count) = (coarse_ns.len(), pulses.len());
    if frames == 0 || count < frames {
        return Err(StrobeRefusal::TooFew { pulses: count, frames });
    }
    let tolerance_ns = tolerance(pulses);
    let mut fits: Vec<(f64, Vec<usize>)> = Vec::new();
    let mut matched = 0;
    for first in 0..count {
        let offset_ns = pulses[first].start_ns - coarse_ns[0];
        if offset_ns.abs() > within_ns {
            continue;
        }
        match along(coarse_ns, pulses, offset_ns, tolerance_ns) {
            Ok((scatter, way)) if fits.iter().all(|(_, known)| *known != way) => fits.push((scatter, way)),
            Ok(_) => {}
            Err(so_many) => matched = matched.max(so_many),
        }
    }
    fits.sort_by(|a, b| a.0.total_cmp(&b.0));
    // The best must fit far better than the next: evenly spaced frames fit at every shift.
    let rivals = fits.iter().filter(|(scatter, _)| *scatter < 3.0 * fits[0].0 + 1e6).count();
    match rivals {
        0 => Err(StrobeRefusal::NoMatch { frames, pulses: count, matched }),
        1 => Ok(fits.swap_remove(0).1),
        ways => Err(StrobeRefusal::Ambiguous { ways }),
    }
}

/// Two fifths of the shortest distance of pulses: a frame so far from its pulse could as well belong to the next.
fn tolerance(pulses: &[Pulse]) -> i64 {
    let shortest = pulses.windows(2).map(|pair| pair[1].start_ns - pair[0].start_ns).min();
    shortest.map_or(1_000_000_000, |shortest| 2 * shortest / 5)
}

/// The pulses of all frames under one offset and their scatter (nanoseconds), or how many frames found one.
fn along(coarse_ns: &[i64], pulses: &[Pulse], offset_ns: i64, tolerance_ns: i64) -> Result<(f64, Vec<usize>), usize> {
    let mut way = Vec::with_capacity(coarse_ns.len());
    let mut off = Vec::with_capacity(coarse_ns.len());
    let mut from = 0;
    for coarse in coarse_ns {
        let wanted = coarse + offset_ns;
        let after = from + pulses[from..].partition_point(|pulse| pulse.start_ns < wanted);
        let nearest =
            [after.checked_sub(1).filter(|before| *before >= from), Some(after).filter(|at| *at < pulses.len())]
                .into_iter()
                .flatten()
                .min_by_key(|at| (pulses[*at].start_ns - wanted).abs());
        let Some(at) = nearest.filter(|at| (pulses[*at].start_ns - wanted).abs() <= tolerance_ns) else {
            return Err(way.len());
        };
        off.push((pulses[at].start_ns - wanted) as f64);
        way.push(at);
        from = at + 1;
        if from >= pulses.len() && way.len() < coarse_ns.len() {
            return Err(way.len());
        }
    }
    let mean = off.iter().sum::<f64>() / off.len() as f64;
    let scatter = libm::sqrt(off.iter().map(|off| (off - mean) * (off - mean)).sum::<f64>() / off.len() as f64);
    Ok((scatter, way))
}

#[cfg(test)]
mod tests {
    use rand::{RngExt, SeedableRng};
    use rand_chacha::ChaCha8Rng;

    use super::*;

    const S: i64 = 1_000_000_000;

    fn pulse(start_ns: i64) -> Pulse {
        Pulse { start_ns, end_ns: Some(start_ns + S / 5) }
    }

    /// Pulses at uneven distances, as a person triggers them.
    fn uneven(count: usize, rng: &mut ChaCha8Rng) -> Vec<Pulse> {
        let mut at = 100 * S;
        (0..count)
            .map(|_| {
                at += rng.random_range(S..4 * S);
                pulse(at)
            })
            .collect()
    }

    #[test]
    fn edges_make_pulses() {
        let found = pulses([(1, false), (2, true), (5, false), (7, true), (9, true), (11, false)]);
        let expected = [(2, Some(5)), (7, None), (9, Some(11))].map(|(start_ns, end_ns)| Pulse { start_ns, end_ns });
        assert_eq!(found, expected);
    }

    #[test]
    fn frames_find_their_pulses_through_a_wrong_clock_and_lost_frames() {
        let mut rng = ChaCha8Rng::seed_from_u64(1);
        for _ in 0..300 {
            let pulses = uneven(40, &mut rng);
            let kept: Vec<usize> = (0..40).filter(|index| *index == 0 || rng.random_bool(0.9)).collect();
            let wrong = rng.random_range(-90 * S..90 * S);
            let coarse: Vec<i64> =
                kept.iter().map(|at| pulses[*at].start_ns + wrong + rng.random_range(-S / 20..S / 20)).collect();
            assert_eq!(match_frames(&coarse, &pulses, 100 * S).unwrap(), kept);
        }
    }

    #[test]
    fn even_frames_without_a_close_time_are_refused() {
        let pulses: Vec<Pulse> = (0..30).map(|index| pulse(index * S)).collect();
        let coarse: Vec<i64> = (5..25).map(|index| index * S + 7 * S).collect();
        assert!(matches!(match_frames(&coarse, &pulses, 60 * S), Err(StrobeRefusal::Ambiguous { .. })));
        // A clock known to a fraction of the distance decides.
        let coarse: Vec<i64> = (5..25).map(|index| index * S + S / 10).collect();
        assert_eq!(match_frames(&coarse, &pulses, S / 3).unwrap(), (5..25).collect::<Vec<_>>());
    }

    #[test]
    fn counts_that_cannot_be_reconciled_are_refused() {
        let mut rng = ChaCha8Rng::seed_from_u64(2);
        let mut pulses = uneven(20, &mut rng);
        let coarse: Vec<i64> = pulses.iter().map(|pulse| pulse.start_ns).collect();
        assert!(matches!(match_frames(&coarse, &pulses[..19], 60 * S), Err(StrobeRefusal::TooFew { .. })));
        // As many pulses as frames, but one of them is another's.
        pulses.remove(7);
        pulses.push(pulse(pulses.last().unwrap().start_ns + 50 * S));
        assert!(matches!(match_frames(&coarse, &pulses, 60 * S), Err(StrobeRefusal::NoMatch { .. })));
        assert!(matches!(match_frames(&[], &pulses, S), Err(StrobeRefusal::TooFew { .. })));
    }
}
