//! Where a deflected beam meets the screen.

/// The luminescent screen. Lengths are metres; `to_screen` is from the film along the axis, to the inner apex of a bulb.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Screen {
    /// Flat and perpendicular to the axis.
    Flat {
        /// Film to screen, metres.
        to_screen: f64,
    },
    /// The inside of a spherical bulb of this radius.
    Bulb {
        /// Inner radius, metres.
        radius: f64,
        /// Film to inner apex, metres.
        to_screen: f64,
    },
}

impl Screen {
    /// Film to screen along the axis, metres.
    pub const fn to_screen(self) -> f64 {
        match self {
            Self::Flat { to_screen } | Self::Bulb { to_screen, .. } => to_screen,
        }
    }

    /// The angle at the bulb's centre under which a deflected beam lands, radians: by the law of sines,
    /// phi = theta + asin(k sin theta) with k = (L - R) / R. `None` for a film outside the bulb, whose beam misses it.
    fn central_angle(radius: f64, to_screen: f64, deflection: f64) -> Option<f64> {
        let sine = (to_screen - radius) / radius * libm::sin(deflection);
        (sine.abs() <= 1.0).then(|| deflection + libm::asin(sine))
    }

    /// Distance from the axis, metres, perpendicular to it. `None` for a beam that misses the screen.
    pub fn radius(self, deflection: f64) -> Option<f64> {
        if !(0.0..std::f64::consts::FRAC_PI_2).contains(&deflection) {
            return None;
        }
        match self {
            Self::Flat { to_screen } => Some(to_screen * libm::tan(deflection)),
            Self::Bulb { radius, to_screen } => {
                Self::central_angle(radius, to_screen, deflection).map(|phi| radius * libm::sin(phi))
            }
        }
    }

    /// Distance from the apex along the screen, metres.
    pub fn arc(self, deflection: f64) -> Option<f64> {
        match self {
            Self::Flat { .. } => self.radius(deflection),
            Self::Bulb { radius, to_screen } => {
                self.radius(deflection)?;
                Self::central_angle(radius, to_screen, deflection).map(|phi| radius * phi)
            }
        }
    }

    /// Deflection, radians, of a beam that lands at this distance from the axis (metres, perpendicular to it), on the
    /// half of a bulb that faces the camera. `None` outside it.
    pub fn deflection_of_radius(self, distance: f64) -> Option<f64> {
        if !(distance >= 0.0 && distance.is_finite()) {
            return None;
        }
        match self {
            Self::Flat { to_screen } => Some(libm::atan2(distance, to_screen)),
            Self::Bulb { radius, to_screen } => (distance <= radius)
                .then(|| libm::atan2(distance, to_screen - radius + libm::sqrt(radius * radius - distance * distance))),
        }
    }

    /// Deflection, radians, of a beam that lands at this distance from the apex along the screen, metres.
    pub fn deflection_of_arc(self, arc: f64) -> Option<f64> {
        match self {
            Self::Flat { .. } => self.deflection_of_radius(arc),
            Self::Bulb { radius, to_screen } => {
                let phi = arc / radius;
                let inside = (0.0..std::f64::consts::PI).contains(&phi);
                inside.then(|| libm::atan2(libm::sin(phi), libm::cos(phi) + (to_screen - radius) / radius))
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    const BULB: Screen = Screen::Bulb { radius: 0.066, to_screen: 0.130 };
    const FLAT: Screen = Screen::Flat { to_screen: 0.140 };

    /// Brute force: a ray from the film is followed in small steps until it leaves the sphere, then halved to the wall.
    fn traced_radius(radius: f64, to_screen: f64, deflection: f64) -> f64 {
        let outside = |along: f64| {
            let (x, y) = (along * deflection.cos() - (to_screen - radius), along * deflection.sin());
            x * x + y * y > radius * radius
        };
        // The film lies inside the sphere or behind it; the last crossing is the screen.
        let (mut inside, mut beyond) = (0.5 * to_screen, 2.0 * to_screen + radius);
        assert!(!outside(inside) && outside(beyond));
        for _ in 0..200 {
            let middle = 0.5 * (inside + beyond);
            if outside(middle) { beyond = middle } else { inside = middle }
        }
        inside * deflection.sin()
    }

    #[test]
    fn the_bulb_agrees_with_a_traced_ray() {
        for (radius, to_screen) in [(0.066, 0.130), (0.050, 0.095), (0.070, 0.135)] {
            for deflection in [0.01, 0.05, 0.115011, 0.2, 0.35] {
                let formula = Screen::Bulb { radius, to_screen }.radius(deflection).unwrap();
                let traced = traced_radius(radius, to_screen, deflection);
                assert!((formula / traced - 1.0).abs() < 1e-12, "{radius} {to_screen} {deflection}");
            }
        }
    }

    #[test]
    fn a_large_bulb_is_flat_and_a_full_one_has_the_inscribed_angle() {
        let nearly_flat = Screen::Bulb { radius: 1e6, to_screen: 0.140 };
        assert!((nearly_flat.radius(0.2).unwrap() / FLAT.radius(0.2).unwrap() - 1.0).abs() < 1e-6);
        let full = Screen::Bulb { radius: 0.065, to_screen: 0.130 };
        assert!((full.arc(0.2).unwrap() - 0.130 * 0.2).abs() < 1e-12);
    }

    proptest! {
        #[test]
        fn places_and_deflections_are_each_others_inverse(deflection in 1e-3f64..0.45) {
            for screen in [BULB, FLAT] {
                let radius = screen.radius(deflection).unwrap();
                let arc = screen.arc(deflection).unwrap();
                prop_assert!((screen.deflection_of_radius(radius).unwrap() / deflection - 1.0).abs() < 1e-10);
                prop_assert!((screen.deflection_of_arc(arc).unwrap() / deflection - 1.0).abs() < 1e-10);
            }
        }
    }
}
