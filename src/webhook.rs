//! Signed calls to other machines: where they may go, how they are signed, how one is made.

mod address;
mod call;
mod destination;
mod secret;

pub use address::is_public;
pub use call::{Call, Undelivered, deliver};
pub use destination::{AddressFault, Destination, Target};
pub use secret::{Secret, SecretFault};
