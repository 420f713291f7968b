//! numerics
