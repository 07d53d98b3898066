//! The simulated bench: an invented supply, tube, divider, converters, interlock and camera around the real controller.
//!
//! Everything that comes from here is marked SIMULATED. The world runs in virtual time ([`World::advance_to`]) and is
//! fixed by its seed: neither the wall clock nor what a host says changes what it draws. `port` puts a real
//! pseudo-terminal and `realtime` the clock of the machine around it. What was really true leaves only through
//! [`Truth`] and [`ShotTruth`]; nothing but judges may read it.
//!
//! | file | subject |
//! | --- | --- |
//! | `world` | owns the parts, passes time |
//! | `supply`, `high_voltage` | the voltage, and its exact integrals |
//! | `divider`, `converter`, `certificate` | from the voltage to codes; true coefficients within the certificate's uncertainty |
//! | `contacts`, `contactors` | bounce; permit relay and contactors |
//! | `enclosure`, `oscillator` | temperature and slow inputs; the controller's crystal |
//! | `device` | the real firmware, its flash and its link |
//! | `camera`, `exposure`, `render`, `picture` | exposures, what shone in them, the picture, the file |
//! | `scenario`, `script` | what happens, and how a person writes it |
//! | `bench`, `port`, `realtime`, `truth` | a bench from a profile, in real time, with the table of what was true |

mod bench;
mod camera;
mod certificate;
mod contactors;
mod contacts;
mod converter;
mod device;
mod divider;
mod draws;
mod enclosure;
mod exposure;
mod high_voltage;
mod oscillator;
mod picture;
mod port;
mod realtime;
mod render;
mod scenario;
mod script;
mod supply;
mod truth;
mod world;

#[cfg(test)]
pub(crate) use bench::example_setup;
pub use bench::{SetupError, optics, setup};
pub use camera::{CameraSetup, Light, Shot, ShotTruth};
pub use picture::{PictureFault, write_picture};
pub use port::{Port, PortError};
pub use realtime::{Bench, SimulationError, run};
pub use render::{DeadPatch, Glass, Optics, apparent_radius, centre, render};
pub use scenario::{Happening, Scenario, What, Which};
pub use script::{ACTIONS, ActionWord, ScenarioError, explain};
pub use supply::SupplySetup;
pub use truth::Truth;
pub use world::{Setup, World};
