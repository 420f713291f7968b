//! How degrees grow: the mean field, the law of one node, tail sizes, and exact simulation.

mod law;
mod mean_field;
mod simulation;
mod tails;

pub use law::NodeLaw;
pub use mean_field::{Course, GrowthError};
pub use simulation::{Simulation, SimulationError};
pub use tails::{TailSum, tail_sum};
