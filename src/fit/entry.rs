//! Reads the newcomers' entry degrees from the counts when the caller does not give them.

use super::FitError;
use crate::model::{DegreeKind, EntryDegrees, Evidence, Warning};

/// A mean entry degree within this share of the smallest degree is taken to be that degree.
const SAME_DEGREE: f64 = 0.02;
/// An assumed distribution ends where less than this share is left.
const SHARE_LEFT: f64 = 1e-6;
/// No newcomer brings more links than this; its cells then stay below the largest degree, 2^53 − 1.
const MOST_LINKS_BROUGHT: f64 = 1e12;
/// Entry degrees of an assumed distribution are single up to this many, then cells growing by a quarter.
const SINGLE_ENTRIES: u64 = 8;

/// Entry degrees given, or read from the counts, with what the reader should know of the reading.
///
/// Links received: newcomers arrive with the smallest degree present, usually 0. Total degree: a newcomer brings as many
/// ends of its own as land on others, so ē is half of the mean degree (of the growth, given two snapshots); all at the
/// smallest degree where that agrees, else a geometric distribution from the smallest degree with that mean.
pub(super) fn entry_degrees(evidence: &Evidence, lossy: bool) -> Result<(EntryDegrees, Vec<Warning>), FitError> {
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
    if lossy {
        let detail =
            "with departures or link losses the counts do not show how many links newcomers bring; give entry_degrees";
        return Err(FitError::NotIdentified { detail: detail.into() });
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
    if mean > MOST_LINKS_BROUGHT {
        let detail =
            format!("newcomers would bring {mean:.3e} links each by these counts; check them, or give entry_degrees");
        return Err(FitError::NotIdentified { detail });
    }
    let shares = geometric_cells(smallest, mean - smallest as f64);
    let entry = EntryDegrees::from_shares(&shares).map_err(|faults| FitError::NotIdentified {
        detail: format!("no entry degrees could be read from the counts: {}; give entry_degrees", faults[0].detail),
    })?;
    let detail = format!(
        "newcomers are taken to arrive with {mean:.2} links on average (half of the mean degree), geometrically distributed \
         from {smallest} up; give entry_degrees if you know how they arrive"
    );
    Ok((entry, vec![Warning::new("entry_degrees_assumed", detail)]))
}

/// Mean degree that growth adds per node: ΔK/ΔN between the last two snapshots if both grew, else K/N.
fn marginal_mean_degree(evidence: &Evidence) -> f64 {
    let latest = &evidence.latest().counts;
    let grown = evidence.periods().next_back().and_then(|(before, after, _)| {
        let nodes = after.counts.nodes().checked_sub(before.counts.nodes()).filter(|&n| n > 0)?;
        let ends = after.counts.link_ends().checked_sub(before.counts.link_ends())?;
        Some(ends as f64 / nodes as f64)
    });
    grown.unwrap_or_else(|| latest.mean_degree())
}

/// A geometric distribution from `smallest` up with mean `smallest + excess`, its far part gathered into cells at their
/// means: about forty entry degrees whatever the mean.
fn geometric_cells(smallest: u64, excess: f64) -> Vec<(u64, f64)> {
    // Share at least i above the smallest: (excess/(1 + excess))^i.
    let beyond = |i: u64| (-(i as f64) * excess.recip().ln_1p()).exp();
    let (mut shares, mut from) = (Vec::new(), 0);
    while beyond(from) > SHARE_LEFT {
        let to = if from < SINGLE_ENTRIES { from + 1 } else { from + from.div_ceil(4) };
        let last = beyond(to) <= SHARE_LEFT;
        let share = beyond(from) - if last { 0.0 } else { beyond(to) };
        // Mean of i given from ≤ i < to; given only from ≤ i it is from + excess.
        let width = (to - from) as f64;
        let inside = if last { excess } else { excess - width * beyond(to) / (beyond(from) - beyond(to)) };
        shares.push((smallest + from + inside.round() as u64, share));
        from = to;
    }
    shares
}

#[cfg(test)]
mod tests {
    use super::geometric_cells;

    #[test]
    fn cells_keep_the_mean_and_add_up() {
        for excess in [0.3, 2.0, 17.5, 1_400.0, 48_000.0] {
            let cells = geometric_cells(3, excess);
            assert!(cells.len() < 80);
            assert!(cells.windows(2).all(|pair| pair[0].0 < pair[1].0));
            let total: f64 = cells.iter().map(|&(_, share)| share).sum();
            let mean: f64 = cells.iter().map(|&(k, share)| k as f64 * share).sum();
            assert!((total - 1.0).abs() < 1e-9);
            assert!((mean - 3.0 - excess).abs() < 0.02 * (1.0 + excess), "{mean} for {excess}");
        }
    }
}
