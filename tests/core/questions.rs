//! The planner's questions against the exact simulator, closed cases and each other.

mod costs;
mod limits;
mod nodes;
mod scenarios;
pub mod scene;
