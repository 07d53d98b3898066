//! What glass and distance do to a ring on its way to the camera. Each correction stands alone and can be left out.
//! Lengths are metres.

/// Flat glass of thickness `glass` and refractive index `index`, scale on its outer face, seen from distance
/// `camera`: the true radius over the apparent one, 1 + t / (n D).
pub fn flat_glass(glass: f64, index: f64, camera: f64) -> f64 {
    1.0 + glass / (index * camera)
}

/// A bulb of *inner* radius `inner` with glass of thickness `glass`, seen from far away: the true inner radius of a ring
/// that appears at height `apparent`. `None` where no ray reaches the camera.
pub fn bulb_glass(inner: f64, glass: f64, index: f64, apparent: f64) -> Option<f64> {
    let outer = inner + glass;
    let sines = [apparent / outer, apparent / (index * inner), apparent / (index * outer)];
    if !sines.iter().all(|sine| sine.abs() <= 1.0) {
        return None;
    }
    let [entry, inside, refracted] = sines.map(libm::asin);
    Some(inner * libm::sin(entry + inside - refracted))
}

/// A ring on a bulb lies behind the apex by its sag and looks smaller from a near camera: the true radius over the
/// apparent one, 1 + sag / D.
pub fn perspective(bulb: f64, ring: f64, camera: f64) -> Option<f64> {
    (ring.abs() <= bulb).then(|| 1.0 + (bulb - libm::sqrt(bulb * bulb - ring * ring)) / camera)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn flat_glass_of_three_millimetres_adds_half_a_per_cent() {
        assert!((flat_glass(3e-3, 1.5, 0.4) - 1.005).abs() < 1e-9);
    }

    /// The ray is traced backwards from the camera through both faces with Snell's law.
    #[test]
    fn bulb_glass_agrees_with_a_traced_ray() {
        let (inner, glass, index) = (0.066f64, 1.5e-3, 1.5);
        let outer = inner + glass;
        for apparent in [0.005f64, 0.016, 0.028] {
            // Comes in parallel to the axis at this height, meets the outer sphere, is refracted, meets the inner one.
            let (x, y) = (f64::sqrt(outer * outer - apparent * apparent), apparent);
            let incidence = f64::asin(apparent / outer);
            let turned = incidence - f64::asin(incidence.sin() / index);
            let (dx, dy) = (-turned.cos(), -turned.sin());
            let along = -(x * dx + y * dy) - ((x * dx + y * dy).powi(2) - (outer * outer - inner * inner)).sqrt();
            let traced = y + along * dy;
            let formula = bulb_glass(inner, glass, index, apparent).unwrap();
            assert!((formula / traced - 1.0).abs() < 1e-9, "{apparent}: {formula} {traced}");
        }
    }

    #[test]
    fn a_ring_behind_the_apex_looks_smaller() {
        let factor = perspective(0.066, 0.028, 0.4).unwrap();
        assert!((factor - 1.0155).abs() < 2e-4, "{factor}");
        assert_eq!(perspective(0.066, 0.070, 0.4), None);
    }
}
