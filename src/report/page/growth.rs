//! What drives a network's growth.

use super::grid::crossed;
use super::{Fact, Section, fact};
use crate::report::csv::percent;
use crate::report::table::mix_in_words;
use crate::report::text::figure;
use crate::service::{EstimateAnswer, FitReport, PoolAnswer};

/// Most members of a pool that are shown, the heaviest first.
const MOST_MEMBERS: usize = 6;

/// The mix in words, the rates, and how the members of the pool were weighed.
pub fn growth(fit: &FitReport, pools: &[PoolAnswer]) -> Section {
    let mut section = Section::new("What drives growth");
    let mix = mix_in_words(fit);
    section.paragraphs.push(mix.clone());
    section
        .paragraphs
        .extend(Some(fit.verdict.clone()).filter(|words| !words.is_empty() && !mix.contains(words.as_str())));
    section.paragraphs.extend(pools.first().map(|pool| pool.detail.clone()));
    section.facts = rates(fit);
    section.grids = members(pools);
    section
}

fn rates(fit: &FitReport) -> Vec<Fact> {
    let told = [
        ("Arrivals a day", fit.arrivals_per_day),
        ("Links per arrival", Some(fit.links_per_arrival)),
        ("Departures per node and day", fit.departures_per_node_day),
        ("Losses per link and day", fit.link_losses_per_link_day),
        ("Kernel exponent", fit.kernel_exponent),
        ("Dormant share", fit.dormant_share),
        ("Growth variance", fit.growth_variance),
        ("Tail exponent", fit.tail_exponent),
    ];
    told.into_iter().filter_map(|(name, estimate)| Some(fact(name, in_words(&estimate?)))).collect()
}

/// An estimate with its interval.
pub fn in_words(estimate: &EstimateAnswer) -> String {
    let middle = precise(estimate.estimate.0);
    match (estimate.low, estimate.high, estimate.level) {
        (Some(low), Some(high), Some(level)) => {
            format!("{middle} ({} % interval {} to {})", percent(level.0), precise(low.0), precise(high.0))
        }
        _ => middle,
    }
}

/// A rate with three digits that matter.
fn precise(value: f64) -> String {
    match value.abs() {
        size if size >= 100.0 => figure(value.max(0.0)),
        size if size >= 1.0 => format!("{value:.2}"),
        size if size >= 0.001 => format!("{value:.4}"),
        0.0 => "0".to_owned(),
        _ => format!("{value:.2e}"),
    }
}

/// The heaviest members down, periods ahead across.
fn members(pools: &[PoolAnswer]) -> Vec<super::Grid> {
    let Some(first) = pools.first() else { return Vec::new() };
    let names: Vec<String> = first.members.iter().take(MOST_MEMBERS).map(|member| member.member.clone()).collect();
    let shown: Vec<String> = names.iter().map(|name| name.replace('_', " ")).collect();
    let ahead: Vec<String> = pools.iter().map(|pool| pool.periods_ahead.to_string()).collect();
    let cell = |row: usize, column: usize| {
        let found = pools.get(column).zip(names.get(row));
        let member = found.and_then(|(pool, name)| pool.members.iter().find(|member| member.member == *name));
        member.map(|member| format!("{:.0} %", 100.0 * member.weight.0)).unwrap_or_default().into()
    };
    let caption = "Weights in the pooled forecast, by periods ahead";
    crossed(caption, ("member", &shown), ("periods ahead", &ahead), &cell)
}
