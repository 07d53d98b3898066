//! Lattice spacings of the films that tubes hold.

use thiserror::Error;

/// One family of rows or planes and its spacing.
#[derive(Clone, Debug, PartialEq)]
pub struct Spacing {
    /// Its ring's name: Miller indices without commas.
    pub ring: &'static str,
    /// Spacing, metres.
    pub metres: f64,
    /// Standard uncertainty, metres.
    pub u_metres: f64,
}

/// What a film is made of.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Material {
    /// Graphite: a = 0.2461 nm, a common handbook value; 0.2464(2) nm by Trucano and Chen, Nature 258, 136 (1975), from
    /// memory. The spread of the two is carried as standard uncertainty, 0.0002 nm.
    Graphite,
    /// Gold, face-centred cubic, a = 0.40786 nm (powder-diffraction reference cards, from memory).
    Gold,
    /// Aluminium, face-centred cubic, a = 0.40494 nm (powder-diffraction reference cards, from memory).
    Aluminium,
}

/// A name that is no known material.
#[derive(Clone, Debug, PartialEq, Eq, Error)]
#[error("`{0}` is no material known here: use graphite, gold or aluminium")]
pub struct MaterialError(pub String);

const NM: f64 = 1e-9;

impl Material {
    /// All of them.
    pub const ALL: [Self; 3] = [Self::Graphite, Self::Gold, Self::Aluminium];

    /// By its name in a profile.
    ///
    /// # Errors
    /// [`MaterialError`] with the name.
    pub fn from_name(name: &str) -> Result<Self, MaterialError> {
        Self::ALL.into_iter().find(|material| material.name() == name).ok_or_else(|| MaterialError(name.to_owned()))
    }

    /// Its name in a profile.
    pub const fn name(self) -> &'static str {
        match self {
            Self::Graphite => "graphite",
            Self::Gold => "gold",
            Self::Aluminium => "aluminium",
        }
    }

    /// Lattice parameter a and its standard uncertainty, metres.
    pub const fn lattice_parameter(self) -> (f64, f64) {
        match self {
            Self::Graphite => (0.2461 * NM, 0.0002 * NM),
            Self::Gold => (0.40786 * NM, 0.00002 * NM),
            Self::Aluminium => (0.40494 * NM, 0.00002 * NM),
        }
    }

    /// The rings a film shows, widest spacing first.
    ///
    /// Graphite films are layers seen along c: the rows of the layer, a sqrt(3)/2, a/2 and so on. Cubic metals show the
    /// planes with all-even or all-odd indices.
    pub fn spacings(self) -> Vec<Spacing> {
        let (a, u) = self.lattice_parameter();
        let of = |(ring, factor): (&'static str, f64)| Spacing { ring, metres: a * factor, u_metres: u * factor };
        let root = libm::sqrt;
        match self {
            Self::Graphite => [("10", root(3.0) / 2.0), ("11", 0.5), ("20", root(3.0) / 4.0), ("21", root(3.0 / 28.0))]
                .map(of)
                .to_vec(),
            Self::Gold | Self::Aluminium => [("111", 3.0), ("200", 4.0), ("220", 8.0), ("311", 11.0)]
                .map(|(ring, sum)| of((ring, 1.0 / root(sum))))
                .to_vec(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn graphite_rows_follow_from_the_hexagonal_layer() {
        // 1/d^2 = 4/3 (h^2 + hk + k^2) / a^2 for the rows of a hexagonal layer.
        let a = 0.2461e-9;
        for (spacing, (h, k)) in
            Material::Graphite.spacings().iter().zip([(1.0, 0.0), (1.0, 1.0), (2.0, 0.0), (2.0, 1.0)])
        {
            let expected = a / f64::sqrt(4.0 / 3.0 * (h * h + h * k + k * k));
            assert!((spacing.metres / expected - 1.0).abs() < 1e-12, "{}", spacing.ring);
        }
        assert!((Material::Graphite.spacings()[0].metres - 0.213129e-9).abs() < 1e-15);
        assert!((Material::Graphite.spacings()[1].metres - 0.123050e-9).abs() < 1e-15);
    }

    /// Interplanar spacings of gold and aluminium, nm (powder-diffraction reference cards, from memory).
    #[test]
    fn cubic_planes_agree_with_the_cards() {
        for (material, card) in [
            (Material::Gold, [0.2355, 0.2039, 0.1442, 0.1230]),
            (Material::Aluminium, [0.2338, 0.2024, 0.1431, 0.1221]),
        ] {
            for (spacing, nm) in material.spacings().iter().zip(card) {
                assert!((spacing.metres * 1e9 - nm).abs() < 0.0001, "{} {}", material.name(), spacing.ring);
            }
        }
    }

    #[test]
    fn a_name_that_is_no_material_is_named() {
        assert!(Material::from_name("cheese").unwrap_err().to_string().contains("cheese"));
        for material in Material::ALL {
            assert_eq!(Material::from_name(material.name()), Ok(material));
        }
    }
}
