//! tailcast forecasts the growth of networks: how many hubs a growing network will have, how sure that is, and what
//! it means for capacity.
//!
//! The core (`numerics`, `model`, `census`, `growth`, `fit`, `forecast`, `evaluate`) is plain, synchronous and
//! deterministic. The boundary (`credential`, `ingest`, `webhook`, `sources`, `store`, `service`, `api`, `report`, `app`) needs the feature `server`.
//! DEVELOPERS.md has the map.

pub mod census;
pub mod evaluate;
pub mod fit;
pub mod forecast;
pub mod growth;
pub mod model;
pub mod numerics;

#[cfg(feature = "server")]
pub mod api;
#[cfg(feature = "server")]
pub mod app;
#[cfg(feature = "server")]
pub mod config;
#[cfg(feature = "server")]
pub mod credential;
#[cfg(feature = "server")]
pub mod ingest;
#[cfg(feature = "server")]
pub mod report;
#[cfg(feature = "server")]
pub mod service;
#[cfg(feature = "server")]
pub mod sources;
#[cfg(feature = "server")]
pub mod store;
#[cfg(feature = "server")]
pub mod telemetry;
#[cfg(feature = "server")]
pub mod webhook;
