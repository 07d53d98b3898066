//! Which frame period each frame belongs to, with the probability of every other assignment.

use super::{LampCode, LampFrame, LampSearch, fit::Fitted};

/// Frame periods to either side of the fitted assignment that are weighed.
const REACH: i32 = 4;
const STATES: usize = 2 * REACH as usize + 1;
/// Probability that one frame is repeated, or that one, two or three are missing before it.
const SLIPS: [(i32, f64); 4] = [(-1, 0.015), (1, 0.025), (2, 0.004), (3, 0.001)];
/// Probability that a frame's brightness tells nothing, and its density then, over the lamp's range.
const OUTLIER: f64 = 0.005;

/// The assignment of all frames.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Slots {
    /// Frame periods by which each frame lies behind its nominal time: the most likely way as a whole.
    pub slips: Vec<i32>,
    /// Standard deviation of that number from the other ways, periods.
    pub spread: Vec<f64>,
}

/// Weighs the assignments in a band around `slips`, the last ones (forward-backward algorithm; the most likely way by
/// the Viterbi algorithm).
pub(super) fn slots(
    code: &LampCode,
    frames: &[LampFrame],
    search: &LampSearch,
    fitted: &Fitted,
    slips: &[i32],
) -> Slots {
    if !search.times_may_slip {
        return Slots { slips: vec![0; frames.len()], spread: vec![0.0; frames.len()] };
    }
    let band = Band::new(code, frames, fitted, slips);
    let states = band.most_likely();
    let chosen = states.iter().enumerate().map(|(index, state)| band.slip(index, *state)).collect();
    let spread = band.spreads(&states);
    Slots { slips: chosen, spread }
}

/// Probability densities of every frame's brightness for a few periods to either side of a centre.
struct Band<'a> {
    centre: &'a [i32],
    density: Vec<[f64; STATES]>,
}

impl<'a> Band<'a> {
    fn new(code: &LampCode, frames: &[LampFrame], fitted: &Fitted, centre: &'a [i32]) -> Self {
        let range = fitted.model.lit - fitted.model.dark;
        let density = |index: usize, state: usize| {
            let time = fitted.time_of(index, centre[index] + state as i32 - REACH);
            let sigma = fitted.scatter(code, time);
            let off = (frames[index].brightness - fitted.model.brightness(code, time)) / sigma;
            (1.0 - OUTLIER) * libm::exp(-0.5 * off * off) / sigma + OUTLIER / range
        };
        let of_frame = |index: usize| std::array::from_fn(|state| density(index, state));
        Self { centre, density: (0..frames.len()).map(of_frame).collect() }
    }

    fn slip(&self, index: usize, state: usize) -> i32 {
        self.centre[index] + state as i32 - REACH
    }

    /// Probability that frame `index` is in `to` when the one before was in `from`.
    fn chance(&self, index: usize, from: usize, to: usize) -> f64 {
        match self.slip(index, to) - self.slip(index - 1, from) {
            0 => 1.0 - SLIPS.iter().map(|(_, p)| p).sum::<f64>(),
            slip => SLIPS.iter().find(|(known, _)| *known == slip).map_or(0.0, |(_, p)| *p),
        }
    }

    fn most_likely(&self) -> Vec<usize> {
        let mut score = self.density[0].map(libm::log);
        let mut from = vec![[0usize; STATES]; self.density.len()];
        for (index, from) in from.iter_mut().enumerate().skip(1) {
            let best = |to: usize| {
                let ways =
                    (0..STATES).map(|before| (before, score[before] + libm::log(self.chance(index, before, to))));
                ways.max_by(|a, b| a.1.total_cmp(&b.1)).unwrap_or((to, f64::NEG_INFINITY))
            };
            let next: [(usize, f64); STATES] = std::array::from_fn(best);
            *from = next.map(|(before, _)| before);
            score = std::array::from_fn(|to| next[to].1 + libm::log(self.density[index][to]));
        }
        let mut state = (0..STATES).max_by(|a, b| score[*a].total_cmp(&score[*b])).unwrap_or(0);
        let mut states = vec![0; self.density.len()];
        for index in (0..states.len()).rev() {
            states[index] = state;
            state = from[index][state];
        }
        states
    }

    /// Root mean square distance from the chosen states, by the probability of the others.
    fn spreads(&self, chosen: &[usize]) -> Vec<f64> {
        let count = self.density.len();
        let mut forward = self.density.clone();
        let mut backward = vec![[1.0f64; STATES]; count];
        normalise(&mut forward[0]);
        for index in 1..count {
            let before = forward[index - 1];
            let into = |to: usize| (0..STATES).map(|from| before[from] * self.chance(index, from, to)).sum::<f64>();
            forward[index] = std::array::from_fn(|to| into(to) * self.density[index][to]);
            normalise(&mut forward[index]);
        }
        for index in (0..count - 1).rev() {
            let after: [f64; STATES] = std::array::from_fn(|to| self.density[index + 1][to] * backward[index + 1][to]);
            let out = |from: usize| (0..STATES).map(|to| self.chance(index + 1, from, to) * after[to]).sum::<f64>();
            backward[index] = std::array::from_fn(out);
            normalise(&mut backward[index]);
        }
        let spread = |index: usize| {
            let weight = |state: usize| forward[index][state] * backward[index][state];
            let square = |state: usize| (state as f64 - chosen[index] as f64) * (state as f64 - chosen[index] as f64);
            let total: f64 = (0..STATES).map(weight).sum();
            libm::sqrt(
                (0..STATES).map(|state| weight(state) * square(state)).sum::<f64>() / total.max(f64::MIN_POSITIVE),
            )
        };
        (0..count).map(spread).collect()
    }
}

fn normalise(values: &mut [f64; STATES]) {
    let total: f64 = values.iter().sum();
    if total > 0.0 {
        values.iter_mut().for_each(|value| *value /= total);
    }
}
