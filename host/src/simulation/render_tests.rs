//! Rings in the picture against the physics, below a pixel.

use super::{
    super::camera::{CameraSetup, ShotTruth},
    *,
};

fn quiet(screen: Screen) -> Optics {
    Optics {
        screen,
        material: Material::Graphite,
        model: Model::Powder,
        glass: None,
        camera_distance: 0.0,
        pixels_per_metre: 8_000.0,
        width: 640,
        height: 480,
        axis: (320.0, 240.0),
        field_tesla: (0.0, 0.0),
        spot_metres: 0.28e-3,
        crystal_metres: 12e-9,
        six_fold: None,
        ring_grey: 85.0,
        stray_grey: 0.0,
        noise_grey: 0.0,
        dead_patches: Vec::new(),
        lamp: false,
    }
}

fn shot(light: &[(f64, f64)]) -> Shot {
    Shot {
        name: "frame00001".to_owned(),
        number: 1,
        stated_start_ns: 0,
        stated_exposure_seconds: CameraSetup::default().exposure_seconds,
        light: light.iter().map(|(volts, share)| Light { volts: *volts, share: *share }).collect(),
        lamp: 0.5,
        truth: ShotTruth { start_ns: 0, end_ns: 1, volts: 0.0, disturbed: false },
    }
}

/// Middle of the line nearest to a radius, pixels, from the mean over all directions: the light above the straight line
/// between its feet.
fn ring_pixels(optics: &Optics, picture: &[u8], centre: (f64, f64), near: f64) -> f64 {
    let half = 8.0;
    let at = |radius: f64| {
        let count = 720;
        let sum: f64 = (0..count)
            .map(|index| {
                let angle = std::f64::consts::TAU * f64::from(index) / f64::from(count);
                bilinear(optics, picture, (centre.0 + radius * angle.cos(), centre.1 + radius * angle.sin()))
            })
            .sum();
        sum / f64::from(count)
    };
    let feet = (at(near - half), at(near + half));
    let (mut sum, mut weight) = (0.0, 0.0);
    for step in 0..=160 {
        let off = -half + 0.1 * f64::from(step);
        let light = at(near + off) - feet.0 - (feet.1 - feet.0) * (off + half) / (2.0 * half);
        sum += light * off;
        weight += light;
    }
    near + sum / weight
}

fn bilinear(optics: &Optics, picture: &[u8], at: (f64, f64)) -> f64 {
    let (x, y) = (at.0.floor(), at.1.floor());
    let (u, v) = (at.0 - x, at.1 - y);
    let pixel = |dx: usize, dy: usize| f64::from(picture[(y as usize + dy) * optics.width as usize + x as usize + dx]);
    (1.0 - v) * ((1.0 - u) * pixel(0, 0) + u * pixel(1, 0)) + v * ((1.0 - u) * pixel(0, 1) + u * pixel(1, 1))
}

const FLAT: Screen = Screen::Flat { to_screen: 0.140 };
const BULB: Screen = Screen::Bulb { radius: 0.066, to_screen: 0.130 };

/// Radii in millimetres from an independent computation (a = 0.2461 nm, CODATA 2018 and 2022 agree to these digits):
/// powder rings 10 and 11 on a flat screen at 140 mm, and on a bulb of 66 mm radius with the film 130 mm behind its apex.
const COMPUTED: [(f64, Screen, f64, f64); 6] = [
    (2_500.0, FLAT, 16.1729, 28.2956),
    (3_500.0, FLAT, 13.6424, 23.7989),
    (5_000.0, FLAT, 11.3935, 19.8327),
    (2_500.0, BULB, 14.8229, 25.2589),
    (3_500.0, BULB, 12.5506, 21.4877),
    (5_000.0, BULB, 10.5111, 18.0593),
];

#[test]
fn rings_lie_where_physics_puts_them() {
    for (volts, screen, first, second) in COMPUTED {
        let optics = quiet(screen);
        let picture = render(&optics, &shot(&[(volts, 1.0)]), 1);
        for millimetres in [first, second] {
            let expected = 8.0 * millimetres;
            if expected > 228.0 {
                continue; // beyond the picture's upper edge
            }
            let found = ring_pixels(&optics, &picture, optics.axis, expected);
            // The haze's slope and the grey values' steps move the middle by some hundredths of a pixel.
            assert!((found - expected).abs() < 0.08, "{volts} {screen:?}: {found} against {expected}");
        }
    }
}

#[test]
fn a_ring_of_two_voltages_lies_between_theirs() {
    let optics = quiet(FLAT);
    let one = |volts: f64| {
        let picture = render(&optics, &shot(&[(volts, 1.0)]), 1);
        ring_pixels(&optics, &picture, optics.axis, 8.0 * 13.65)
    };
    let picture = render(&optics, &shot(&[(3_480.0, 0.5), (3_520.0, 0.5)]), 1);
    let both = ring_pixels(&optics, &picture, optics.axis, 8.0 * 13.65);
    assert!((both - 0.5 * (one(3_480.0) + one(3_520.0))).abs() < 0.05);
}

#[test]
fn the_earths_field_moves_the_pattern_and_not_its_radii() {
    let optics = Optics { field_tesla: (50e-6, -20e-6), ..quiet(FLAT) };
    // By hand: p = 2.7047e-23 kg m/s at 2.5 kV bends in 50 uT with a radius of 3.376 m, which is 2.903 mm over 140 mm;
    // 2.050 mm at 5 kV.
    let (x, y) = centre(&optics, 2_500.0);
    assert!((x - 320.0 - 8.0 * 2.903).abs() < 0.01, "{x}");
    assert!((y - 240.0 + 8.0 * 2.903 * 0.4).abs() < 0.01, "{y}");
    assert!((centre(&optics, 5_000.0).0 - 320.0 - 8.0 * 2.050).abs() < 0.01);
    let picture = render(&optics, &shot(&[(2_500.0, 1.0)]), 1);
    let found = ring_pixels(&optics, &picture, (x, y), 8.0 * 16.1729);
    assert!((found - 8.0 * 16.1729).abs() < 0.08, "{found}");
}

#[test]
fn glass_and_distance_are_what_the_corrections_take_out() {
    let glass = Some(Glass { thickness: 1.5e-3, index: 1.5 });
    let near = Optics { glass, camera_distance: 0.4, ..quiet(BULB) };
    for radius in [0.008, 0.0148, 0.0253] {
        let apparent = apparent_radius(&near, radius).unwrap();
        // Back again with the corrections that a person would apply, in the other order.
        let perspective = viewing::perspective(0.066, radius, 0.4).unwrap();
        let back = viewing::bulb_glass(0.066, 1.5e-3, 1.5, apparent * perspective).unwrap();
        assert!((back / radius - 1.0).abs() < 1e-9, "{radius}: {back}");
    }
    // Glass magnifies by 0.77 % at 16 mm; 28 mm on a bulb of 66 mm looks 1.55 % smaller from 0.4 m.
    let far = Optics { glass, ..quiet(BULB) };
    assert!((apparent_radius(&far, 0.016).unwrap() / 0.016 - 1.0077).abs() < 3e-4);
    let bare = Optics { camera_distance: 0.4, ..quiet(BULB) };
    assert!((0.028 / apparent_radius(&bare, 0.028).unwrap() - 1.0155).abs() < 2e-4);
}

#[test]
fn the_same_frame_is_drawn_the_same_and_another_differently() {
    let optics = Optics { noise_grey: 1.3, stray_grey: 12.0, ..quiet(BULB) };
    let lit = shot(&[(3_000.0, 1.0)]);
    assert_eq!(render(&optics, &lit, 5), render(&optics, &lit, 5));
    assert_ne!(render(&optics, &lit, 5), render(&optics, &lit, 6));
    assert_ne!(render(&optics, &lit, 5), render(&optics, &Shot { number: 2, ..lit }, 5));
}

#[test]
fn without_a_beam_the_picture_is_dark() {
    let optics = Optics { noise_grey: 1.3, stray_grey: 12.0, ..quiet(BULB) };
    let picture = render(&optics, &shot(&[]), 1);
    let mean = picture.iter().map(|grey| f64::from(*grey)).sum::<f64>() / picture.len() as f64;
    assert!((mean - 18.0).abs() < 0.5, "{mean}");
    assert!(picture.iter().all(|grey| *grey < 40));
}

#[test]
fn dead_patches_spots_and_lamp_show() {
    let at = |picture: &[u8], x: usize, y: usize| picture[y * 640 + x];
    let lit = shot(&[(2_500.0, 1.0)]);
    let optics = Optics { lamp: true, ..quiet(BULB) };
    let whole = render(&optics, &lit, 1);
    assert!(at(&whole, 36, 36).abs_diff(96) <= 12 && at(&whole, 80, 36).abs_diff(114) <= 12);
    let ring = (320 + 119, 240);
    let dead = DeadPatch { centre: (439.0, 240.0), radius: 6.0, left: 0.1 };
    let damaged = render(&Optics { dead_patches: vec![dead], ..optics.clone() }, &lit, 1);
    assert!(at(&damaged, ring.0, ring.1) * 3 < at(&whole, ring.0, ring.1));
    let spots = render(&Optics { six_fold: Some(0.0), ..optics }, &lit, 1);
    let between = (320.0 + 119.0 * 30f64.to_radians().cos(), 240.0 + 119.0 * 30f64.to_radians().sin());
    assert!(at(&spots, ring.0, ring.1) > 3 * at(&spots, between.0 as usize, between.1 as usize));
}
