//! Tests of the numerical core; they need no server feature.

mod fit;
mod forecast;
mod law;
mod networks;
mod quantiles;
mod reference;
mod simulation;
mod stationary;
mod tails;
