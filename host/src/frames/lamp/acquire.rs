//! Which frame saw which part of the sequence: the most likely path through all possible offsets.

use super::{LampCode, LampFrame, LampRefusal, LampSearch};

/// Steps of the offset per frame period. Seven keeps an edge's place to a seventh of a period, which the fit refines.
const STEPS: usize = 7;
/// Frames that may be missing in one place.
const MOST_MISSING: usize = 3;
/// Log-probability of one slip (a repeated frame, or missing ones), about one in a hundred frames.
const SLIP: f64 = -4.6;
/// A lamp whose range is below this many times its noise decides nothing.
const LEAST_CONTRAST: f64 = 4.0;
/// The best place must beat every other by this much in log-likelihood (odds of e^12 against).
const LEAST_MARGIN: f64 = 12.0;
/// Share of frames whose brightness may be anything: a hand before the lamp, a flash.
const OUTLIER: f64 = 0.01;

/// Brightness of the dark and the lit patch.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Levels {
    pub dark: f64,
    pub lit: f64,
}

/// Finds the two levels. Most frames lie wholly within a chip or a run of equal chips, so the quartiles are near them.
pub(super) fn levels(frames: &[LampFrame]) -> Result<Levels, LampRefusal> {
    let mut sorted: Vec<f64> = frames.iter().map(|frame| frame.brightness).collect();
    sorted.sort_by(f64::total_cmp);
    let at = |share: f64| sorted[((sorted.len() - 1) as f64 * share) as usize];
    let (dark, lit) = (at(0.2), at(0.8));
    // Scatter within the lower and the upper fifth stands for the noise.
    let noise = 0.5 * ((at(0.2) - at(0.04)) + (at(0.96) - at(0.8))) / 1.05;
    let contrast = (lit - dark) / noise.max(1e-9 * (lit.abs() + dark.abs()) + f64::MIN_POSITIVE);
    if !contrast.is_finite() || lit <= dark || contrast < LEAST_CONTRAST {
        return Err(LampRefusal::TooWeak { contrast: if contrast.is_finite() { contrast } else { 0.0 } });
    }
    Ok(Levels { dark, lit })
}

/// The frame period each frame belongs to, relative to its nominal time, and where the clip begins.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Path {
    /// Start of the clip on the controller's clock, seconds.
    pub start: f64,
    /// Frame periods by which each frame lies behind (positive) its nominal time.
    pub slips: Vec<i32>,
    /// By how much the best path beats the next place.
    pub margin: f64,
}

/// The most likely path, and by how much it beats the best one that shares nothing with it.
pub(super) fn acquire(
    code: &LampCode,
    frames: &[LampFrame],
    search: &LampSearch,
    levels: &Levels,
) -> Result<Path, LampRefusal> {
    let step = search.frame_seconds / STEPS as f64;
    let reach = (search.start_within / step).ceil() as usize;
    // Slips may carry the offset beyond where it may begin.
    let slack = if search.times_may_slip { STEPS * (4 + frames.len() / 20) } else { 0 };
    let grid = Grid { origin: search.start_guess - step * (reach + slack) as f64, step, size: 2 * (reach + slack) + 1 };
    let likelihood = |frame: &LampFrame, state: usize| {
        let measured = (frame.brightness - levels.dark) / (levels.lit - levels.dark);
        log_likelihood(measured - code.share(grid.at(state) + frame.clip_seconds, search.exposure_guess))
    };
    let run = |forbidden: Option<&[usize]>| {
        let near = (code.chip_seconds / step) as usize;
        let mut trellis = Trellis::new(&grid, slack, search.times_may_slip);
        for (index, frame) in frames.iter().enumerate() {
            let barred = |state: usize| forbidden.is_some_and(|path| path[index].abs_diff(state) <= near);
            trellis.advance(|state| if barred(state) { f64::NEG_INFINITY } else { likelihood(frame, state) });
        }
        trellis.best()
    };
    let (top, states) = run(None).ok_or(LampRefusal::Ambiguous { margin: 0.0 })?;
    let margin = run(Some(&states)).map_or(f64::INFINITY, |(next, _)| top - next);
    if margin < LEAST_MARGIN {
        return Err(LampRefusal::Ambiguous { margin });
    }
    let periods = |state: usize| (state as f64 - states[0] as f64) / STEPS as f64;
    Ok(Path {
        start: grid.at(states[0]),
        slips: states.iter().map(|state| libm::round(periods(*state)) as i32).collect(),
        margin,
    })
}

/// Of a residual in units of the lamp's range: a normal core wide enough for the step of the grid, and outliers.
fn log_likelihood(residual: f64) -> f64 {
    const SIGMA: f64 = 0.2;
    let core = (1.0 - OUTLIER) / SIGMA * libm::exp(-0.5 * (residual / SIGMA) * (residual / SIGMA));
    libm::log(core + OUTLIER)
}

/// Offsets of the clip's zero on the controller's clock.
struct Grid {
    origin: f64,
    step: f64,
    size: usize,
}

impl Grid {
    fn at(&self, state: usize) -> f64 {
        self.origin + self.step * state as f64
    }
}

/// Best log-likelihood of a path that ends in each state, and how it came there.
struct Trellis {
    score: Vec<f64>,
    moves: Vec<Vec<i8>>,
    slips: bool,
}

impl Trellis {
    fn new(grid: &Grid, slack: usize, slips: bool) -> Self {
        let inside = |state: &usize| *state >= slack && *state < grid.size - slack;
        let score = (0..grid.size).map(|state| if inside(&state) { 0.0 } else { f64::NEG_INFINITY }).collect();
        Self { score, moves: Vec::new(), slips }
    }

    fn advance(&mut self, likelihood: impl Fn(usize) -> f64) {
        let first = self.moves.is_empty();
        let mut next = vec![f64::NEG_INFINITY; self.score.len()];
        let mut moves = vec![0i8; self.score.len()];
        for state in 0..self.score.len() {
            let (score, slip) = if first { (self.score[state], 0) } else { self.arrival(state) };
            if score > f64::NEG_INFINITY {
                next[state] = score + likelihood(state);
                moves[state] = slip;
            }
        }
        self.score = next;
        self.moves.push(moves);
    }

    /// The best way into a state: straight on, from one period ahead (repeated), or from some behind (missing).
    fn arrival(&self, state: usize) -> (f64, i8) {
        let mut best = (self.score[state], 0);
        if !self.slips {
            return best;
        }
        let mut offer = |from: Option<usize>, slip: i8| {
            if let Some(score) = from.and_then(|from| self.score.get(from))
                && score + SLIP > best.0
            {
                best = (score + SLIP, slip);
            }
        };
        offer(state.checked_add(STEPS), -1);
        for missing in 1..=MOST_MISSING {
            offer(state.checked_sub(missing * STEPS), missing as i8);
        }
        best
    }

    /// The best path's log-likelihood and its state at every frame.
    fn best(&self) -> Option<(f64, Vec<usize>)> {
        let finite = self.score.iter().copied().enumerate().filter(|(_, score)| score.is_finite());
        let (mut state, top) = finite.max_by(|a, b| a.1.total_cmp(&b.1))?;
        let mut states = vec![0; self.moves.len()];
        for index in (0..self.moves.len()).rev() {
            states[index] = state;
            let back = i64::from(self.moves[index][state]) * STEPS as i64;
            state = usize::try_from(state as i64 - back).ok()?;
        }
        Some((top, states))
    }
}
