//! How degrees grow: the mean field, the law of one node, tail sizes, and exact simulation.

mod attraction;
mod holdings;
mod law;
mod mean_field;
mod moments;
mod passage;
mod refusals;
mod simulation;
mod tail_path;
mod tails;

pub(crate) use attraction::{GrowthFactor, growth_factors};
pub use holdings::{Holding, Holdings, Piece};
pub(crate) use law::MixedLaw;
pub use law::NodeLaw;
pub use mean_field::{Course, GrowthError};
pub use moments::MomentLaw;
pub(crate) use moments::power_kernel;
pub use passage::Passage;
pub use simulation::{Simulation, SimulationError};
pub use tail_path::tail_correlations;
pub use tails::{NetworkLaw, TailClass, TailParts, TailSum};
