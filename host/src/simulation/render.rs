//! What the tube shows the camera: powder rings on a flat or bulb screen, behind glass and from a distance, shifted by
//! the earth's field, with central spot, background, afterglow and sensor noise.

use rand_chacha::ChaCha8Rng;

use super::{
    camera::{Light, Shot},
    draws::{Part, normal, substream},
};
use crate::physics::{
    Material, Model, Screen,
    constants::{ELEMENTARY_CHARGE, PLANCK},
    viewing, wavelength_metres,
};

/// The glass in front of the screen.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Glass {
    /// Thickness, metres.
    pub thickness: f64,
    /// Refractive index.
    pub index: f64,
}

/// A patch of the screen that has lost its light.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct DeadPatch {
    /// Its centre, pixels from the left upper corner.
    pub centre: (f64, f64),
    /// Its radius, pixels.
    pub radius: f64,
    /// What is left of the light, 0 to 1.
    pub left: f64,
}

/// The tube and the view of it, as they truly are.
#[derive(Clone, Debug, PartialEq)]
pub struct Optics {
    /// The screen.
    pub screen: Screen,
    /// The film.
    pub material: Material,
    /// How it diffracts.
    pub model: Model,
    /// The glass, where it shows.
    pub glass: Option<Glass>,
    /// From the lens to the screen's apex, metres; 0 for a camera without perspective.
    pub camera_distance: f64,
    /// Pixels per metre of a ruler at the screen's apex, with no glass in between.
    pub pixels_per_metre: f64,
    /// Picture width, pixels.
    pub width: u32,
    /// Picture height, pixels.
    pub height: u32,
    /// The tube's axis, pixels from the centre of the left upper pixel.
    pub axis: (f64, f64),
    /// Magnetic field across the beam, tesla: it moves the whole pattern, the more the slower the electrons.
    pub field_tesla: (f64, f64),
    /// Standard deviation of the beam's spot on the screen, metres.
    pub spot_metres: f64,
    /// Size of the film's crystals, metres: rings of small crystals are wide.
    pub crystal_metres: f64,
    /// For a single crystal: the first spot's angle, radians; `None` for a powder.
    pub six_fold: Option<f64>,
    /// Height of the first ring above the background at 2.5 kV, grey values.
    pub ring_grey: f64,
    /// Light from the room, grey values.
    pub stray_grey: f64,
    /// Read noise of one pixel, grey values; shot noise comes on top.
    pub noise_grey: f64,
    /// Patches without light.
    pub dead_patches: Vec<DeadPatch>,
    /// Whether the sync lamp, and beside it a lamp that always shines, are in the field of view.
    pub lamp: bool,
}

/// Step of the radial profile, metres.
const STEP: f64 = 20e-6;
/// Noise from the light itself: variance per grey value.
const SHOT_GREY: f64 = 0.08;
/// The sensor's own offset, grey values.
const OFFSET_GREY: f64 = 6.0;
/// The luminescent screen ends here, metres from its apex as the camera sees it.
const SCREEN_EDGE: f64 = 0.038;
/// How strong the rings are against the first.
const STRENGTHS: [f64; 4] = [1.0, 0.62, 0.09, 0.13];
/// Brightness of the sync lamp's patch, grey values, and its radius, pixels.
const LAMP_GREY: f64 = 180.0;
const LAMP_PIXELS: f64 = 13.0;
/// Where the sync lamp and the lamp that always shines are, pixels.
const LAMPS: [(f64, f64); 2] = [(36.0, 36.0), (80.0, 36.0)];

/// Draws a frame: 8-bit grey values, row by row. Its noise comes from `seed` and the frame's number.
pub fn render(optics: &Optics, shot: &Shot, seed: u64) -> Vec<u8> {
    let mut rng = substream(seed, Part::Frames, shot.number);
    let pattern = Pattern::new(optics, &shot.light);
    let mut grey = Vec::with_capacity((optics.width * optics.height) as usize);
    for y in 0..optics.height {
        for x in 0..optics.width {
            let at = (f64::from(x), f64::from(y));
            let mut light = pattern.light(at) + stray(optics, at);
            for patch in &optics.dead_patches {
                if libm::hypot(at.0 - patch.centre.0, at.1 - patch.centre.1) < patch.radius {
                    light *= patch.left;
                }
            }
            if optics.lamp {
                light += lamps(at, shot.lamp);
            }
            grey.push(sensor(light, optics.noise_grey, &mut rng));
        }
    }
    grey
}

/// Where the undeflected beam meets the screen, pixels, at this voltage.
pub fn centre(optics: &Optics, volts: f64) -> (f64, f64) {
    let shift = |tesla: f64| optics.pixels_per_metre * field_shift(optics.screen.to_screen(), tesla, volts);
    (optics.axis.0 + shift(optics.field_tesla.0), optics.axis.1 + shift(optics.field_tesla.1))
}

/// The beam is bent to a circle of radius p / (e B): it lands L^2 / (2 rho) beside.
fn field_shift(to_screen: f64, tesla: f64, volts: f64) -> f64 {
    let Some(wavelength) = wavelength_metres(volts) else { return 0.0 };
    let curvature = ELEMENTARY_CHARGE * tesla * wavelength / PLANCK;
    0.5 * to_screen * to_screen * curvature
}

/// The radius at which the camera sees something that lies at a true radius on the screen, both metres, as a ruler at the
/// apex would measure it. `None` where no ray gets through.
pub fn apparent_radius(optics: &Optics, radius: f64) -> Option<f64> {
    let behind_glass = match (optics.screen, optics.glass) {
        (_, None) => radius,
        (Screen::Bulb { radius: bulb, .. }, Some(glass)) => through_bulb(bulb, glass, radius)?,
        (Screen::Flat { .. }, Some(_)) if optics.camera_distance <= 0.0 => radius,
        (Screen::Flat { .. }, Some(glass)) => {
            radius / viewing::flat_glass(glass.thickness, glass.index, optics.camera_distance)
        }
    };
    match optics.screen {
        Screen::Bulb { radius: bulb, .. } if optics.camera_distance > 0.0 => {
            Some(behind_glass / viewing::perspective(bulb, radius, optics.camera_distance)?)
        }
        _ => Some(behind_glass),
    }
}

/// Inverts `viewing::bulb_glass`: a few per cent that change slowly, so that substitution converges at once.
fn through_bulb(bulb: f64, glass: Glass, radius: f64) -> Option<f64> {
    let mut apparent = radius;
    for _ in 0..12 {
        let seen = viewing::bulb_glass(bulb, glass.thickness, glass.index, apparent)?;
        apparent *= radius / seen.max(1e-12);
    }
    Some(apparent)
}

/// The pattern of one frame: radial profiles about each voltage's own centre.
struct Pattern<'a> {
    optics: &'a Optics,
    parts: Vec<Centred>,
}

/// Light about one centre, of voltages too close to tell it apart.
struct Centred {
    centre: (f64, f64),
    /// Light that is the same all around.
    round: Vec<f64>,
    /// For a single crystal: each ring's own profile, and whether its spots stand between the first ring's.
    spots: Vec<(Vec<f64>, bool)>,
}

impl<'a> Pattern<'a> {
    fn new(optics: &'a Optics, light: &[Light]) -> Self {
        // The centre moves by about a pixel in a hundred volts; twenty volts are drawn about one centre.
        let mut parts = Vec::new();
        for group in light.chunk_by(|a, b| (a.volts / 20.0).floor() == (b.volts / 20.0).floor()) {
            let share: f64 = group.iter().map(|light| light.share).sum();
            let volts = group.iter().map(|light| light.share * light.volts).sum::<f64>() / share;
            parts.push(part(optics, group, centre(optics, volts)));
        }
        Self { optics, parts }
    }

    fn light(&self, at: (f64, f64)) -> f64 {
        let axis = self.optics.axis;
        let from_axis = libm::hypot(at.0 - axis.0, at.1 - axis.1) / self.optics.pixels_per_metre;
        if from_axis > SCREEN_EDGE {
            return 0.0;
        }
        self.parts.iter().map(|part| part.light(at, self.optics)).sum()
    }
}

impl Centred {
    fn light(&self, at: (f64, f64), optics: &Optics) -> f64 {
        let (dx, dy) = (at.0 - self.centre.0, at.1 - self.centre.1);
        let radius = libm::sqrt(dx * dx + dy * dy) / optics.pixels_per_metre;
        let mut light = lookup(&self.round, radius);
        if let Some(first) = optics.six_fold {
            let angle = libm::atan2(dy, dx) - first;
            for (profile, between) in &self.spots {
                light += lookup(profile, radius) * spot_shape(angle, *between, radius, optics.spot_metres);
            }
        }
        light
    }
}

/// Around a ring of a single crystal: six spots of the beam's own size.
fn spot_shape(angle: f64, between: bool, radius: f64, spot: f64) -> f64 {
    let sixth = std::f64::consts::FRAC_PI_3;
    let turned = if between { angle - 0.5 * sixth } else { angle };
    let off = turned - sixth * libm::round(turned / sixth);
    let along = off * radius / spot;
    // As much light as a whole ring has is gathered in six spots; drawn fainter, so that they do not burn.
    5.0 * libm::exp(-0.5 * along * along)
}

fn part(optics: &Optics, light: &[Light], centre: (f64, f64)) -> Centred {
    let reach = f64::from(optics.width.max(optics.height)) / optics.pixels_per_metre;
    let empty = || vec![0.0; (reach / STEP) as usize + 2];
    let mut round = empty();
    let mut spots: Vec<(Vec<f64>, bool)> = Vec::new();
    for Light { volts, share } in light {
        // A tube is brighter at higher voltage: more energy in each electron, and more electrons.
        let strength = share * volts / 2_500.0 * optics.ring_grey;
        add_line(&mut round, 0.0, 1.6 * optics.spot_metres, 6.0 * strength);
        add_haze(&mut round, 0.0045, 0.9 * strength);
        add_haze(&mut round, 0.018, 0.22 * strength);
        for (index, line) in lines(optics, *volts).into_iter().enumerate() {
            let Some((radius, width)) = line else { continue };
            // The same light on a wider line is fainter.
            let height = strength * STRENGTHS.get(index).copied().unwrap_or(0.08) * 0.4e-3 / width;
            if optics.six_fold.is_none() {
                add_line(&mut round, radius, width, height);
                continue;
            }
            if spots.len() <= index {
                spots.resize_with(index + 1, || (empty(), index % 2 == 1));
            }
            add_line(&mut spots[index].0, radius, optics.spot_metres, height);
        }
    }
    Centred { centre, round, spots }
}

/// Apparent radius and width of each ring, metres; `None` for one that misses the screen.
fn lines(optics: &Optics, volts: f64) -> Vec<Option<(f64, f64)>> {
    let Some(wavelength) = wavelength_metres(volts) else { return Vec::new() };
    let line = |spacing: f64| {
        let deflection = optics.model.deflection(wavelength, spacing)?;
        let radius = apparent_radius(optics, optics.screen.radius(deflection)?)?;
        // Small crystals: full width 0.9 lambda / D in the deflection (Scherrer), 2.355 standard deviations.
        let small = 0.9 * wavelength / optics.crystal_metres / 2.355 * optics.screen.to_screen();
        Some((radius, libm::hypot(optics.spot_metres, small)))
    };
    optics.material.spacings().iter().map(|spacing| line(spacing.metres)).collect()
}

fn add_line(profile: &mut [f64], at: f64, width: f64, height: f64) {
    let from = (((at - 6.0 * width) / STEP).max(0.0)) as usize;
    let until = ((((at + 6.0 * width) / STEP).max(0.0)) as usize + 1).min(profile.len());
    for (index, value) in profile.iter_mut().enumerate().take(until).skip(from) {
        let off = (index as f64 * STEP - at) / width;
        *value += height * libm::exp(-0.5 * off * off);
    }
}

/// Electrons scattered without order.
fn add_haze(profile: &mut [f64], length: f64, height: f64) {
    let fade = libm::exp(-STEP / length);
    let mut light = height;
    for value in profile {
        *value += light;
        light *= fade;
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
fn stray(optics: &Optics, at: (f64, f64)) -> f64 {
    let (u, v) = (at.0 / f64::from(optics.width) - 0.5, at.1 / f64::from(optics.height) - 0.5);
    optics.stray_grey * (1.0 + 0.25 * u - 0.15 * v + 0.2 * u * v)
}

fn lamps(at: (f64, f64), lit: f64) -> f64 {
    let patch = |place: (f64, f64), grey: f64| {
        if libm::hypot(at.0 - place.0, at.1 - place.1) < LAMP_PIXELS { grey } else { 0.0 }
    };
    patch(LAMPS[0], LAMP_GREY * lit) + patch(LAMPS[1], 0.6 * LAMP_GREY)
}

fn sensor(light: f64, read_noise: f64, rng: &mut ChaCha8Rng) -> u8 {
    let scatter = libm::sqrt(read_noise * read_noise + SHOT_GREY * light.max(0.0));
    libm::rint(OFFSET_GREY + light + scatter * normal(rng)).clamp(0.0, 255.0) as u8
}

#[cfg(test)]
#[path = "render_tests.rs"]
mod tests;
