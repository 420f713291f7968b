//! Tests of the numerical core; they need no server feature.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

mod account;
mod arrivals;
mod binomial;
mod cap;
mod census;
mod fit;
mod forces;
mod forecast;
mod hostile;
mod law;
mod networks;
mod orthant;
mod passage;
mod plans;
mod pool;
mod quantiles;
mod questions;
mod reference;
mod scores;
mod simulation;
mod stationary;
mod tails;
mod transitions;
mod work;

#[path = "../../studies/real/mod.rs"]
mod real;
#[path = "../../studies/worlds/mod.rs"]
mod worlds;
