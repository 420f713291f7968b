//! Tests of the numerical core; they need no server feature.

mod fit;
mod law;
mod reference;
mod scratch;
mod stationary;
