//! What the tube shows the camera: powder rings on a flat or bulb screen, with blur, background and noise.

use rand_chacha::ChaCha8Rng;

use super::draw::{normal, stream};
use crate::physics::{Material, Model, Screen, wavelength_metres};

/// The tube and the view of it.
#[derive(Clone, Debug, PartialEq)]
pub struct Optics {
    /// The screen.
    pub screen: Screen,
    /// The film.
    pub material: Material,
    /// How it diffracts.
    pub model: Model,
    /// Pixels per metre on the screen.
    pub pixels_per_metre: f64,
    /// Picture width, pixels.
    pub width: u32,
    /// Picture height, pixels.
    pub height: u32,
    /// Centre of the pattern, pixels from the left upper corner, at 2.5 kV. The earth's field moves it as 1 / sqrt(V).
    pub centre: (f64, f64),
    /// How far the pattern lies from the axis at 2.5 kV, pixels.
    pub shift: (f64, f64),
    /// Standard deviation of a ring's profile, metres.
    pub blur: f64,
    /// Height of the first ring above the background, grey values.
    pub height_grey: f64,
    /// Background, grey values.
    pub background_grey: f64,
    /// Noise of one pixel, grey values.
    pub noise_grey: f64,
}

/// Step of the radial profile, metres.
const STEP: f64 = 20e-6;

/// Draws the picture of an exposure over which the voltage took these values: 8-bit grey values, row by row.
pub fn render(optics: &Optics, voltages: &[f64], seed: u64, number: u64) -> Vec<u8> {
    let mut rng = stream(seed, 1_000 + number);
    let mean = voltages.iter().sum::<f64>() / voltages.len().max(1) as f64;
    let profile = profile(optics, voltages);
    let (x0, y0) = centre(optics, mean);
    let mut grey = Vec::with_capacity((optics.width * optics.height) as usize);
    for y in 0..optics.height {
        for x in 0..optics.width {
            let (dx, dy) = (f64::from(x) - x0, f64::from(y) - y0);
            let radius = libm::sqrt(dx * dx + dy * dy) / optics.pixels_per_metre;
            let light = background(optics, x, y) + lookup(&profile, radius);
            grey.push(sensor(light, optics.noise_grey, &mut rng));
        }
    }
    grey
}

/// Where the pattern's centre lies, pixels.
pub(super) fn centre(optics: &Optics, volts: f64) -> (f64, f64) {
    let bend = if volts > 100.0 { libm::sqrt(2_500.0 / volts) } else { 0.0 };
    (optics.centre.0 + optics.shift.0 * bend, optics.centre.1 + optics.shift.1 * bend)
}

/// Light over the distance from the centre: the undiffracted spot and the rings, as the mean over the voltages.
fn profile(optics: &Optics, voltages: &[f64]) -> Vec<f64> {
    let reach = f64::from(optics.width.max(optics.height)) / optics.pixels_per_metre;
    let mut profile = vec![0.0; (reach / STEP) as usize + 2];
    let lit: Vec<f64> = voltages.iter().copied().filter(|volts| *volts > 300.0).collect();
    for volts in &lit {
        // A tube is brighter at higher voltage: more energy in each electron.
        let strength = optics.height_grey * libm::sqrt(volts / 2_500.0) / voltages.len() as f64;
        add_line(&mut profile, 0.0, 4.0 * optics.blur, 3.0 * strength);
        let Some(wavelength) = wavelength_metres(*volts) else { continue };
        for (index, spacing) in optics.material.spacings().iter().enumerate() {
            let place =
                optics.model.deflection(wavelength, spacing.metres).and_then(|angle| optics.screen.radius(angle));
            if let Some(radius) = place {
                let weight = [1.0, 0.7, 0.12, 0.18].get(index).copied().unwrap_or(0.1);
                add_line(&mut profile, radius, optics.blur, strength * weight);
            }
        }
    }
    profile
}

fn add_line(profile: &mut [f64], at: f64, width: f64, height: f64) {
    let from = (((at - 6.0 * width) / STEP).max(0.0)) as usize;
    let until = ((((at + 6.0 * width) / STEP).max(0.0)) as usize + 1).min(profile.len());
    for (index, value) in profile.iter_mut().enumerate().take(until).skip(from) {
        let off = (index as f64 * STEP - at) / width;
        *value += height * libm::exp(-0.5 * off * off);
    }
}

fn lookup(profile: &[f64], radius: f64) -> f64 {
    let place = radius / STEP;
    let index = place as usize;
    match (profile.get(index), profile.get(index + 1)) {
        (Some(low), Some(high)) => low + (high - low) * (place - index as f64),
        _ => 0.0,
    }
}

/// Uneven light from the room.
fn background(optics: &Optics, x: u32, y: u32) -> f64 {
    let (u, v) = (f64::from(x) / f64::from(optics.width) - 0.5, f64::from(y) / f64::from(optics.height) - 0.5);
    optics.background_grey * (1.0 + 0.25 * u - 0.15 * v + 0.2 * u * v)
}

fn sensor(light: f64, noise: f64, rng: &mut ChaCha8Rng) -> u8 {
    // Part of a sensor's noise grows with the light.
    let scatter = noise * libm::sqrt(0.5 + 0.5 * light.max(0.0) / 30.0);
    libm::round(light + normal(rng, scatter)).clamp(0.0, 255.0) as u8
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rings_lie_where_physics_puts_them() {
        let optics = Optics {
            screen: Screen::Bulb { radius: 0.066, to_screen: 0.130 },
            material: Material::Graphite,
            model: Model::Powder,
            pixels_per_metre: 8_000.0,
            width: 640,
            height: 480,
            centre: (320.0, 240.0),
            shift: (0.0, 0.0),
            blur: 0.35e-3,
            height_grey: 60.0,
            background_grey: 0.0,
            noise_grey: 0.0,
        };
        let picture = render(&optics, &[2_500.0], 1, 1);
        // Centroid of the first ring along the row through the centre: 14.8229 mm are 118.583 pixels.
        let (mut sum, mut weight) = (0.0, 0.0);
        for x in 320 + 108..=320 + 129 {
            let grey = f64::from(picture[240 * 640 + x]);
            sum += grey * (x as f64 - 320.0);
            weight += grey;
        }
        assert!((sum / weight - 118.583).abs() < 0.05, "{}", sum / weight);
    }
}
