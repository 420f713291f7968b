//! Reads the newcomers' entry degrees from the counts when the caller does not give them.

use super::FitError;
use crate::model::{DegreeKind, EntryDegrees, Evidence, Warning};

/// A mean entry degree within this share of the smallest degree is taken to be that degree.
const SAME_DEGREE: f64 = 0.02;
/// Entry shares below this are left out of an assumed distribution.
const SMALLEST_SHARE: f64 = 1e-9;
/// Most entry degrees of an assumed distribution.
const MOST_ENTRIES: usize = 2_000;

/// Entry degrees given, or read from the counts, with what the reader should know of the reading.
///
/// Links received: newcomers arrive with the smallest degree present, usually 0. Total degree: a newcomer brings as many
/// ends of its own as land on others, so ē is half of the mean degree (of the growth, given two snapshots); all at the
/// smallest degree where that agrees, else a geometric distribution from the smallest degree with that mean.
pub(super) fn entry_degrees(evidence: &Evidence) -> Result<(EntryDegrees, Vec<Warning>), FitError> {
    let smallest = evidence.snapshots().iter().map(|s| s.counts.smallest()).min().unwrap_or(0);
    if let Some(given) = evidence.entry() {
        return Ok((given.clone(), Vec::new()));
    }
    if evidence.kind() == DegreeKind::Received {
        let entry = EntryDegrees::single(smallest);
        let detail = format!(
            "no node has fewer than {smallest} links, so newcomers are taken to arrive with {smallest}; if nodes without \
             links are missing from the counts, add them as [0, nodes]"
        );
        let warnings = if smallest > 0 { vec![Warning::new("no_degree_zero", detail)] } else { Vec::new() };
        return Ok((entry, warnings));
    }
    let mean = 0.5 * marginal_mean_degree(evidence);
    if mean <= smallest as f64 * (1.0 + SAME_DEGREE) {
        let mut warnings = Vec::new();
        if mean < smallest as f64 * (1.0 - SAME_DEGREE) {
            let detail = format!(
                "every node has at least {smallest} links, more than half of the mean degree ({mean:.3}); newcomers are \
                 taken to arrive with {smallest}; give entry_degrees if they arrive otherwise"
            );
            warnings.push(Warning::new("entry_degrees_assumed", detail));
        }
        return Ok((EntryDegrees::single(smallest), warnings));
    }
    let excess = mean - smallest as f64;
    let ratio = excess / (1.0 + excess);
    let shares: Vec<(u64, f64)> = (0..MOST_ENTRIES)
        .map(|i| (smallest + i as u64, (1.0 - ratio) * ratio.powi(i as i32)))
        .take_while(|&(_, share)| share > SMALLEST_SHARE)
        .collect();
    let total: f64 = shares.iter().map(|&(_, share)| share).sum();
    let scaled: Vec<(u64, f64)> = shares.into_iter().map(|(k, share)| (k, share / total)).collect();
    let entry = EntryDegrees::from_shares(&scaled).map_err(|faults| FitError::NotIdentified {
        detail: format!("no entry degrees could be read from the counts: {}; give entry_degrees", faults[0].detail),
    })?;
    let detail = format!(
        "newcomers are taken to arrive with {mean:.2} links on average (half of the mean degree), geometrically distributed \
         from {smallest} up; give entry_degrees if you know how they arrive"
    );
    Ok((entry, vec![Warning::new("entry_degrees_assumed", detail)]))
}

/// Mean degree that growth adds per node: ΔK/ΔN between the last two snapshots where both grew, else K/N.
fn marginal_mean_degree(evidence: &Evidence) -> f64 {
    let latest = &evidence.latest().counts;
    let grown = evidence.periods().next_back().and_then(|(before, after, _)| {
        let nodes = after.counts.nodes().checked_sub(before.counts.nodes()).filter(|&n| n > 0)?;
        let ends = after.counts.link_ends().checked_sub(before.counts.link_ends())?;
        Some(ends as f64 / nodes as f64)
    });
    grown.unwrap_or_else(|| latest.mean_degree())
}
