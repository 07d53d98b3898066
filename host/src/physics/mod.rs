//! What an electron of known voltage does: wavelength, diffraction, and where its rings fall on the screen.
//!
//! Pure functions of numbers; no I/O, and no other module of the host.

pub mod constants;
mod diffraction;
mod electron;
mod lattice;
mod prediction;
mod screen;
pub mod viewing;

pub use diffraction::Model;
pub use electron::{relativistic_volts, volts_of_wavelength, wavelength_metres, wavelength_sensitivity};
pub use lattice::{Material, MaterialError, Spacing};
pub use prediction::{Prediction, Ring, predict};
pub use screen::Screen;
