//! The way to a controller: endpoints that move bytes, and the conversation that makes messages of them.
//!
//! [`Endpoint`] is one small trait with a serial port and a TCP stream behind it; [`Conversation`] is pure: bytes and
//! time in, messages and bytes out. It knows nothing of run files: whoever records tells it what is on the disk.

mod conversation;
mod endpoint;
mod serial;
mod tcp;

pub use conversation::{Conversation, Echo, Heard, Phase};
pub use endpoint::{Address, Endpoint, LinkError, open};
