//! The service from outside: one binary, a file a subject.

#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod access;
mod any_json;
mod any_links;
mod architecture;
mod arrival_plans;
mod audit;
mod backtests;
mod bad_input;
mod command_line;
mod coverage;
mod documents;
mod durability;
mod faces;
mod fits;
mod forecasts;
mod gauges;
mod harness;
mod jobs;
mod keys;
mod limits;
mod limits_kept;
mod link_lists;
mod lists;
mod network_events;
mod network_runs;
mod networks;
mod notice_receiver;
mod notices;
mod notices_kills;
mod openapi;
mod operation;
mod polled;
mod process;
mod questions;
mod scenarios;
mod schemas;
mod stored_evidence;
mod tracking;
mod tracking_kills;
mod upgrade;
