//! Tests of the numerical core; they need no server feature.

mod law;
mod reference;
mod stationary;
