//! The planner's questions against the exact simulator, closed cases and each other.

mod limits;
mod scene;
