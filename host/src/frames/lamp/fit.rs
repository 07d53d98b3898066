//! Offset, rate, exposure and brightness by least squares, once it is known which frame saw which chips.

use super::{LampCode, LampFrame, LampRefusal, LampSearch};

/// Residuals beyond this part of the lamp's range mean that the sequence does not fit.
const MOST_RESIDUAL: f64 = 0.15;
/// Parameters: centre of the middle frame, rate, exposure, dark level, lit level.
const PARAMETERS: usize = 5;

/// What the brightness of a frame follows from.
#[derive(Clone, Copy, Debug)]
pub(super) struct Model {
    /// Centre of the exposure of a frame in the middle of the clip, seconds of the controller's clock. The centre and not
    /// the start: edges fall anywhere in the exposure, so the start would inherit the uncertainty of its length.
    pub centre: f64,
    /// Seconds of the controller per second of the clip, less one.
    pub rate: f64,
    /// Exposure, seconds.
    pub exposure: f64,
    /// Brightness of the dark patch.
    pub dark: f64,
    /// Brightness of the lit patch.
    pub lit: f64,
}

/// A model fitted to the frames, with what its residuals tell.
#[derive(Clone, Debug)]
pub(super) struct Fitted {
    pub model: Model,
    /// Nominal times of the frames, without slips, seconds from the middle of the clip.
    nominal: Vec<f64>,
    frame_seconds: f64,
    covariance: [[f64; PARAMETERS]; PARAMETERS],
    pub exposure_u_seconds: f64,
    /// Scatter of single frames about the frame clock, seconds.
    pub jitter_seconds: f64,
    /// Scatter of brightness of frames without an edge.
    pub noise: f64,
    /// Root mean square residual over the lamp's range.
    pub residual: f64,
}

impl Fitted {
    /// Time of a frame from the middle of the clip if it lies `slip` periods behind its nominal time, seconds.
    pub(super) fn time_of(&self, index: usize, slip: i32) -> f64 {
        self.nominal[index] + f64::from(slip) * self.frame_seconds
    }

    /// Centre of its exposure on the controller's clock, seconds.
    pub(super) fn centre_of(&self, index: usize, slip: i32) -> f64 {
        self.model.centre_of(self.time_of(index, slip))
    }

    /// Standard uncertainty of the frame clock at a frame, seconds.
    pub(super) fn clock_u(&self, index: usize) -> f64 {
        let (time, c) = (self.nominal[index], &self.covariance);
        libm::sqrt((c[0][0] + 2.0 * time * c[0][1] + time * time * c[1][1]).max(0.0))
    }

    /// Expected scatter of the brightness of a frame at this time: noise, and jitter where an edge cuts it.
    pub(super) fn scatter(&self, code: &LampCode, from_middle: f64) -> f64 {
        libm::hypot(self.noise, self.model.gradient(code, from_middle)[0] * self.jitter_seconds)
    }
}

impl Model {
    fn centre_of(&self, from_middle: f64) -> f64 {
        self.centre + (1.0 + self.rate) * from_middle
    }

    fn share(&self, code: &LampCode, from_middle: f64) -> f64 {
        code.share(self.centre_of(from_middle) - 0.5 * self.exposure, self.exposure)
    }

    /// Brightness of a frame at this time from the middle of the clip.
    pub(super) fn brightness(&self, code: &LampCode, from_middle: f64) -> f64 {
        self.dark + (self.lit - self.dark) * self.share(code, from_middle)
    }

    /// Derivatives by the parameters.
    fn gradient(&self, code: &LampCode, from_middle: f64) -> [f64; PARAMETERS] {
        let range = self.lit - self.dark;
        let centre = self.centre_of(from_middle);
        let share = self.share(code, from_middle);
        let lit = |time: f64| code.share(time - 1e-6, 2e-6);
        let (at_start, at_end) = (lit(centre - 0.5 * self.exposure), lit(centre + 0.5 * self.exposure));
        let by_centre = range * (at_end - at_start) / self.exposure;
        let by_exposure = range * (0.5 * (at_end + at_start) - share) / self.exposure;
        [by_centre, by_centre * from_middle, by_exposure, 1.0 - share, share]
    }

    fn moved(&self, step: &[f64; PARAMETERS], share: f64) -> Self {
        Self {
            centre: self.centre + share * step[0],
            rate: self.rate + share * step[1],
            exposure: (self.exposure + share * step[2]).max(1e-4),
            dark: self.dark + share * step[3],
            lit: self.lit + share * step[4],
        }
    }
}

/// Fits the frames, given by how many periods each lies behind its nominal time and where the clip begins.
pub(super) fn fit(
    code: &LampCode,
    frames: &[LampFrame],
    search: &LampSearch,
    slips: &[i32],
    start: f64,
) -> Result<Fitted, LampRefusal> {
    let slipped = |(frame, slip): (&LampFrame, &i32)| frame.clip_seconds + f64::from(*slip) * search.frame_seconds;
    let times: Vec<f64> = frames.iter().zip(slips).map(slipped).collect();
    let middle = times.iter().sum::<f64>() / times.len() as f64;
    let from_middle: Vec<f64> = times.iter().map(|time| time - middle).collect();
    let mut model = Model {
        centre: start + middle + 0.5 * search.exposure_guess,
        rate: 0.0,
        exposure: search.exposure_guess,
        dark: percentile(frames, 0.15),
        lit: percentile(frames, 0.85),
    };
    for _ in 0..30 {
        let better = improve(&model, code, frames, &from_middle);
        if (better.centre - model.centre).abs() < 1e-9 && (better.exposure - model.exposure).abs() < 1e-9 {
            break;
        }
        model = better;
    }
    let nominal = frames.iter().map(|frame| frame.clip_seconds - middle).collect();
    judge(model, code, frames, &from_middle, nominal, search.frame_seconds)
}

fn percentile(frames: &[LampFrame], share: f64) -> f64 {
    let mut sorted: Vec<f64> = frames.iter().map(|frame| frame.brightness).collect();
    sorted.sort_by(f64::total_cmp);
    sorted[((sorted.len() - 1) as f64 * share) as usize]
}

fn residuals(model: &Model, code: &LampCode, frames: &[LampFrame], from_middle: &[f64]) -> Vec<f64> {
    frames.iter().zip(from_middle).map(|(frame, time)| frame.brightness - model.brightness(code, *time)).collect()
}

/// Weight of a residual (Huber): frames with a hand before the lamp must not pull.
fn weight(residual: f64, scale: f64) -> f64 {
    let limit = 3.0 * scale;
    if residual.abs() <= limit { 1.0 } else { limit / residual.abs() }
}

fn scale_of(residuals: &[f64]) -> f64 {
    let mut sizes: Vec<f64> = residuals.iter().map(|residual| residual.abs()).collect();
    sizes.sort_by(f64::total_cmp);
    // Most frames see no edge; the mean square keeps the ones that do.
    (1.4826 * sizes[sizes.len() / 2]).max(1e-12)
}

fn cost(model: &Model, code: &LampCode, frames: &[LampFrame], from_middle: &[f64], scale: f64) -> f64 {
    residuals(model, code, frames, from_middle).iter().map(|r| weight(*r, 2.0 * scale) * r * r).sum()
}

/// One damped Gauss-Newton step.
fn improve(model: &Model, code: &LampCode, frames: &[LampFrame], from_middle: &[f64]) -> Model {
    let residuals = residuals(model, code, frames, from_middle);
    let scale = scale_of(&residuals);
    let mut normal = [[0.0; PARAMETERS]; PARAMETERS];
    let mut right = [0.0; PARAMETERS];
    for (residual, time) in residuals.iter().zip(from_middle) {
        let gradient = model.gradient(code, *time);
        let weight = weight(*residual, 2.0 * scale);
        for (row, a) in gradient.iter().enumerate() {
            right[row] += weight * a * residual;
            for (column, b) in gradient.iter().enumerate() {
                normal[row][column] += weight * a * b;
            }
        }
    }
    let Some(inverse) = inverse(normal) else { return *model };
    let step = std::array::from_fn(|row| inverse[row].iter().zip(right).map(|(a, b)| a * b).sum());
    let before = cost(model, code, frames, from_middle, scale);
    let tried = [1.0, 0.5, 0.25, 0.1, 0.02].map(|share| model.moved(&step, share));
    tried.into_iter().find(|tried| cost(tried, code, frames, from_middle, scale) < before).unwrap_or(*model)
}

fn judge(
    model: Model,
    code: &LampCode,
    frames: &[LampFrame],
    from_middle: &[f64],
    nominal: Vec<f64>,
    frame_seconds: f64,
) -> Result<Fitted, LampRefusal> {
    let residuals = residuals(&model, code, frames, from_middle);
    let range = model.lit - model.dark;
    let rms = libm::sqrt(residuals.iter().map(|r| r * r).sum::<f64>() / residuals.len() as f64);
    let residual = rms / range.abs().max(f64::MIN_POSITIVE);
    if range <= 0.0 || !residual.is_finite() || residual > MOST_RESIDUAL {
        return Err(LampRefusal::NoFit { residual: if residual.is_finite() { residual } else { 1.0 } });
    }
    let mut covariance = covariance(&model, code, from_middle, &residuals).ok_or(LampRefusal::NoFit { residual })?;
    let (noise, jitter_seconds) = scatter(&model, code, from_middle, &residuals);
    widen(&mut covariance, &model, code, from_middle, jitter_seconds);
    Ok(Fitted {
        model,
        nominal,
        frame_seconds,
        covariance,
        exposure_u_seconds: libm::sqrt(covariance[2][2].max(0.0)),
        jitter_seconds,
        noise,
        residual,
    })
}

/// Covariance of the parameters that allows for residuals of unequal size (sandwich estimator): only frames that an
/// edge cuts carry the timing, and jitter makes exactly their residuals large.
fn covariance(
    model: &Model,
    code: &LampCode,
    from_middle: &[f64],
    residuals: &[f64],
) -> Option<[[f64; PARAMETERS]; PARAMETERS]> {
    let mut normal = [[0.0; PARAMETERS]; PARAMETERS];
    let gradients: Vec<_> = from_middle.iter().map(|time| model.gradient(code, *time)).collect();
    for gradient in &gradients {
        add_outer(&mut normal, gradient, 1.0);
    }
    let inverse = inverse(normal)?;
    let mut meat = [[0.0; PARAMETERS]; PARAMETERS];
    for (gradient, residual) in gradients.iter().zip(residuals) {
        let row: [f64; PARAMETERS] =
            std::array::from_fn(|i| inverse[i].iter().zip(gradient).map(|(a, b)| a * b).sum::<f64>());
        let leverage: f64 = row.iter().zip(gradient).map(|(a, b)| a * b).sum();
        // A fit passes closer to a point of high leverage than the truth does: undo that in full (HC3), since the few
        // frames with an edge are just those.
        let freed = residual / (1.0 - leverage).max(0.05);
        add_outer(&mut meat, &row, freed * freed);
    }
    Some(meat)
}

/// Widens the covariance for two things the sandwich does not see.
///
/// Only frames with an edge carry the timing, and the estimator behaves as if it had about half as many degrees of freedom
/// as it has such frames: 1.96 standard uncertainties shall hold as much as Student's t would, 1.96 + (1.96^3 + 1.96) / 4 nu
/// to first order. And a frame whose jitter moves an edge across an end of its exposure counts as having none: the mean
/// size of a normal jitter, 0.8 of its standard deviation, is lost of the exposure. Both were found and are checked in
/// simulation.
fn widen(
    covariance: &mut [[f64; PARAMETERS]; PARAMETERS],
    model: &Model,
    code: &LampCode,
    from_middle: &[f64],
    jitter_seconds: f64,
) {
    let edges = from_middle.iter().filter(|time| model.gradient(code, **time)[0] != 0.0).count() as f64;
    let wider = (1.0 + 1.21 / (0.5 * edges).max(1.0)) * (1.0 + 0.8 * jitter_seconds / model.exposure);
    covariance.iter_mut().flatten().for_each(|value| *value *= wider * wider);
}

fn add_outer(sum: &mut [[f64; PARAMETERS]; PARAMETERS], vector: &[f64; PARAMETERS], weight: f64) {
    for (row, a) in vector.iter().enumerate() {
        for (column, b) in vector.iter().enumerate() {
            sum[row][column] += weight * a * b;
        }
    }
}

/// Scatter of brightness of frames without an edge, and of single frames about the frame clock: what the residuals of
/// frames with an edge have beyond the others, as a time.
fn scatter(model: &Model, code: &LampCode, from_middle: &[f64], residuals: &[f64]) -> (f64, f64) {
    let (mut plain, mut plain_count, mut edge, mut edge_weight, mut edge_count) = (0.0, 0.0f64, 0.0, 0.0, 0.0f64);
    for (time, residual) in from_middle.iter().zip(residuals) {
        let by_centre = model.gradient(code, *time)[0];
        if by_centre == 0.0 {
            plain += residual * residual;
            plain_count += 1.0;
        } else {
            edge += residual * residual;
            edge_weight += by_centre * by_centre;
            edge_count += 1.0;
        }
    }
    let noise = libm::sqrt(plain / plain_count.max(1.0)).max(1e-4 * (model.lit - model.dark));
    if edge_count < 4.0 {
        return (noise, 0.0);
    }
    let freed = edge * edge_count / (edge_count - 3.0);
    (noise, libm::sqrt(((freed - edge_count * noise * noise) / edge_weight).max(0.0)))
}

/// Inverse of a symmetric positive matrix by Gauss-Jordan elimination on a scaled copy; `None` where it has none.
fn inverse(matrix: [[f64; PARAMETERS]; PARAMETERS]) -> Option<[[f64; PARAMETERS]; PARAMETERS]> {
    let scale: [f64; PARAMETERS] = std::array::from_fn(|i| libm::sqrt(matrix[i][i]));
    if scale.iter().any(|s| !s.is_finite() || *s == 0.0) {
        return None;
    }
    let mut left: [[f64; PARAMETERS]; PARAMETERS] =
        std::array::from_fn(|i| std::array::from_fn(|j| matrix[i][j] / (scale[i] * scale[j])));
    let mut right: [[f64; PARAMETERS]; PARAMETERS] =
        std::array::from_fn(|i| std::array::from_fn(|j| f64::from(u8::from(i == j))));
    for pivot in 0..PARAMETERS {
        let row = (pivot..PARAMETERS).max_by(|a, b| left[*a][pivot].abs().total_cmp(&left[*b][pivot].abs()))?;
        left.swap(pivot, row);
        right.swap(pivot, row);
        let divisor = left[pivot][pivot];
        if divisor.abs() < 1e-12 {
            return None;
        }
        left[pivot].iter_mut().chain(&mut right[pivot]).for_each(|value| *value /= divisor);
        for other in (0..PARAMETERS).filter(|other| *other != pivot) {
            let factor = left[other][pivot];
            for column in 0..PARAMETERS {
                left[other][column] -= factor * left[pivot][column];
                right[other][column] -= factor * right[pivot][column];
            }
        }
    }
    Some(std::array::from_fn(|i| std::array::from_fn(|j| right[i][j] / (scale[i] * scale[j]))))
}
