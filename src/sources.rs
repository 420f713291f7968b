//! Databases of the operator's that sources count in: which there are, and how a query is run in one of them, read-only and in bounds.

mod answer;
mod database;
mod fault;
mod run;

pub use answer::{Row, counts};
pub use database::{Database, DatabaseFault};
pub use fault::SourceFault;
pub use run::{Counting, count};
