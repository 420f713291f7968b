//! Computations, and jobs that outlast their request.

use std::time::Duration;

use serde::Deserialize;

/// Limits of the computing side.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct ComputeConfig {
    /// Computations at the same time; 0: one a core.
    pub workers: usize,
    /// Computations that may wait.
    pub queue: usize,
    /// Longest wait and computation of one request, seconds.
    pub budget_seconds: u64,
}

impl ComputeConfig {
    /// Longest wait and computation of one request.
    pub fn budget(&self) -> Duration {
        Duration::from_secs(self.budget_seconds)
    }
}

/// Work that outlasts its request.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct JobsConfig {
    /// Jobs that callers ask for, at work at the same time.
    pub workers: usize,
    /// Refreshes of tracked networks at work at the same time.
    pub refresh_workers: usize,
    /// Longest time that a refresh computes, seconds.
    pub refresh_seconds: u64,
    /// Jobs that may wait.
    pub queue: usize,
    /// Longest time that a request waits for its job, seconds.
    pub wait_seconds: u64,
    /// Largest link list, bytes as it is sent.
    pub link_list_bytes: u64,
    /// Longest time to send a link list, seconds.
    pub link_list_seconds: u64,
    /// Most nodes of a link list.
    pub link_list_nodes: u64,
}

impl JobsConfig {
    /// Longest time that a request waits for its job.
    pub fn wait(&self) -> Duration {
        Duration::from_secs(self.wait_seconds)
    }

    /// Longest time that a refresh computes.
    pub fn refresh_time(&self) -> Duration {
        Duration::from_secs(self.refresh_seconds)
    }

    /// Longest time to send a link list.
    pub fn link_list_time(&self) -> Duration {
        Duration::from_secs(self.link_list_seconds)
    }
}
