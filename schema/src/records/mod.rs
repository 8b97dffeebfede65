//! The records: all that is stored of a study.
//!
//! Invariants: rows are only ever added, each under an act on the trail; what is current is derived, so that every
//! question can be asked as of any trail number; one act is one transaction.

pub mod codec;
pub mod error;
pub mod exports;
pub mod intake;
pub mod open;
pub mod raw;
pub mod removal;
pub mod scratch;
pub mod texts;
pub mod trail;
pub mod verify;
pub mod view;
pub mod writer;

pub use error::{RecordsError, Result};
pub use open::Records;
pub use raw::{KeepError, Kept};
pub use scratch::Scratch;
pub use trail::{ActKind, ActNumber, Doer, TrailRow};
pub use verify::{RawWrong, Verified, VerifyFault, VerifyNote};
pub use view::{AsOf, View};
pub use writer::{Act, Cell, Filing, NewHold, NewReading};
