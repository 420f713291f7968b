//! How degrees grow: the mean field, the law of one node, tail sizes, and exact simulation.

mod attraction;
mod law;
mod mean_field;
mod moments;
mod passage;
mod simulation;
mod tails;

pub(crate) use attraction::{GrowthFactor, growth_factors};
pub use law::NodeLaw;
pub use mean_field::{Course, GrowthError};
pub use moments::MomentLaw;
pub(crate) use moments::power_kernel;
pub use passage::Passage;
pub use simulation::{Simulation, SimulationError};
pub use tails::{NetworkLaw, TailSum};
