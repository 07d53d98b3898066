//! Certificates, the procedure that makes them, and the chart that watches over them.

mod apply;
mod assess;
mod certificate;
pub mod chart;
mod check;
mod example;
mod fit;
mod guide;
mod html;
mod issue;
mod plan;
pub mod plot;
mod points;
mod reference;
mod seal;
mod session;
mod settling;
mod source;
mod suspect;
#[cfg(test)]
mod tests;

pub use apply::{Channel, Outside, RecordError, UncertaintyPart, Validity, combined_volts, day_of_utc_ns};
pub use assess::{Assessment, Finding, Hysteresis, Severity, assess};
pub use certificate::{Certificate, ChannelFit, Conditions, Point, Reference, Stability};
pub use example::example;
pub use fit::{FTest, FitError, FitReport, Residual, TemperatureTerm, fit};
pub use guide::{Dialogue, End, Guide, GuideError};
pub use html::certificate_page;
pub use issue::{IssueDetails, IssueError, issue};
pub use plan::{Direction, PlanError, Step, plan};
pub use points::{PointsError, read_points};
pub(crate) use reference::plausible;
pub use reference::{Answer, Metered, ReferenceSource, Typed, parse_typed_volts};
pub use seal::{CertificateError, MAX_CERTIFICATE_BYTES};
pub use session::{Header, Outcome, Session, SessionError};
pub use settling::{Settling, SettlingRules, SettlingWatch};
pub use source::{CodeEvent, CodeSource, Codes, CsvSource, SourceError};
pub(crate) use suspect::{ended, guess};
