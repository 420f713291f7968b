//! Generic numerical methods; knows nothing of networks.
//!
//! Every tolerance and every iteration cap of the core stands in [`tolerances`].

pub mod binomial;
pub mod elementary;
pub mod gamma;
pub mod intervals;
pub mod inversion;
pub mod optimise;
pub mod orthant;
pub mod quadrature;
pub mod ranked_score;
pub mod roots;
pub mod scoring;
pub mod sum_tree;
pub mod tolerances;
pub mod two_moments;
pub mod work;
