//! The ledger: everything heard and everything decided, kept in one SQLite
//! file, each fact chained to the one before it and to what was heard in
//! between.
//!
//! * [`Ledger`] is the one writer. It holds a lock for as long as it lives.
//! * [`Reader`] looks from beside it and never stands in its way.
//! * [`verify`] goes through the whole chain and names the first fact that is
//!   not as it was written.
//!
//! Facts come in and go out as the JSON bytes that were stored: nothing here
//! serialises them again.

mod backup;
mod chain;
mod error;
mod heads;
mod lock;
mod reader;
mod room;
mod rows;
mod schema;
mod verify;
mod writer;

pub use backup::{Proven, Restored, copy, prove, restore};
pub use chain::{Digest, LedgerId};
pub use error::LedgerError;
pub use heads::SignedHead;
pub use reader::{Asked, Head, Reader, Which};
pub use room::Room;
pub use rows::{AnswerRow, DocumentRow, DocumentStored, FactRow, FactStored, Group, InputKind, InputRow, InputStored};
pub use verify::{Fault, KnownHead, Progress, VerifyReport, verify};
pub use writer::{Committed, Ledger, OpenOptions, Tail};

/// Name of the ledger's file inside a state directory.
pub const FILE_NAME: &str = "ledger.sqlite";

/// The newest layout of the file that this program knows.
pub const SCHEMA_VERSION: i32 = schema::NEWEST;
