//! The simulated bench: an invented supply, tube, divider, converters, interlock and camera around the real controller.
//!
//! Everything that comes from here is marked SIMULATED. The world runs in virtual time ([`World::advance_to`]) and is
//! fixed by its seed; `port` puts a real pseudo-terminal and `realtime` the clock of the machine around it. What was
//! really true leaves only through [`Truth`]; nothing else may read it.

mod bench;
mod camera;
mod contacts;
mod converter;
mod draw;
mod picture;
mod port;
mod realtime;
mod render;
mod scenario;
mod supply;
mod truth;
mod world;

pub use bench::{SetupError, optics, setup};
pub use camera::{Shot, ShotTruth};
pub use picture::{PictureFault, write_picture};
pub use port::{Port, PortError};
pub use realtime::{Bench, SimulationError, run};
pub use render::{Optics, render};
pub use scenario::{Happening, Scenario, ScenarioError, What};
pub use truth::Truth;
pub use world::{Setup, World};
