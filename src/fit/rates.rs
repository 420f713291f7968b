//! Arrivals and links per arrival, read off the totals or given.

use super::profile::{ESTIMATE_LEVEL, NORMAL_95};
use super::successive::Period;
use super::{FitError, FitRequest, RateExcursion};
use crate::model::{EntryDegrees, Estimate, Evidence, Interval, Warning};

/// Relative standard deviation of a rate that only one period shows, beyond counting noise. A stated default: common
/// practice, no source; ten snapshots of a real network moved by 5 to 20 % a period.
const ONE_PERIOD_RATE_SPREAD: f64 = 0.1;
/// A given ℓ this many times the past one, or less than its inverse, is worth a warning.
const LINKS_MOVED: f64 = 1.5;

/// Rates read off the totals, or given.
pub(super) struct Rates {
    pub links_per_arrival: Estimate,
    pub arrivals_per_day: Option<Estimate>,
    pub excursion: RateExcursion,
    /// ℓ that the tail exponent goes with: the fitted law's own.
    pub exponent_links: f64,
    pub warnings: Vec<Warning>,
}

impl Rates {
    pub fn read(
        evidence: &Evidence,
        entry: &EntryDegrees,
        periods: &[Period],
        request: &FitRequest,
        has_losses: bool,
    ) -> Result<Self, FitError> {
        let counts = &evidence.latest().counts;
        let past = counts.mean_degree() - entry.mean();
        let only_grows = !has_losses && request.links_per_node_day == 0.0;
        let mut warnings = Vec::new();
        let (mut links_per_arrival, mut excursion) = (Estimate::given(past), RateExcursion::default());
        let mut arrivals_per_day = evidence.periods().next_back().map(|(before, after, days)| {
            let grown = after.counts.nodes() as f64 - before.counts.nodes() as f64;
            Estimate::given(grown.max(0.0) / days)
        });
        let newest_is_usable = |period: &&Period| std::ptr::eq(period.after(), counts);
        if arrivals_per_day.is_some() && periods.last().filter(newest_is_usable).is_none() {
            let detail = "the newest period did not grow, so links per arrival are those of an older one and arrivals are what \
                          the newest shows";
            warnings.push(Warning::new("growth_stopped", detail));
        }
        if let Some(newest) = periods.last() {
            let arrived = newest.arrivals_per_day * newest.days;
            let spread = |rate: fn(&Period) -> f64, counted: f64| {
                (period_spread(periods, rate).powi(2) + 1.0 / counted.max(1.0)).sqrt()
            };
            excursion.arrivals = spread(|p| p.arrivals_per_day, arrived);
            excursion.links_per_arrival = spread(|p| p.links_per_arrival, arrived * newest.links_per_arrival);
            links_per_arrival = log_normal(newest.links_per_arrival, excursion.links_per_arrival);
            if newest_is_usable(&newest) {
                arrivals_per_day = Some(log_normal(newest.arrivals_per_day, excursion.arrivals));
            }
            if periods.len() == 1 {
                let detail = format!(
                    "arrivals and links per arrival come from a single period, which cannot show how they vary; {:.0} % is \
                     assumed",
                    100.0 * ONE_PERIOD_RATE_SPREAD
                );
                warnings.push(Warning::new("rates_from_one_period", detail));
            }
        }
        let fitted = links_per_arrival.value;
        if let Some(given) = request.links_per_arrival {
            links_per_arrival = Estimate::given(given);
            excursion.links_per_arrival = 0.0;
            if given > 0.0 && fitted > 0.0 && (given / fitted).ln().abs() > LINKS_MOVED.ln() {
                let detail = format!(
                    "links_per_arrival is given as {given}, but the counts grew with {fitted:.3}; the forecast uses the given \
                     value from the last snapshot on"
                );
                warnings.push(Warning::new("links_per_arrival_differs", detail));
            }
        } else if links_per_arrival.value <= 0.0 || (periods.is_empty() && !only_grows) {
            let detail = "the counts do not show how many links land per arrival (one snapshot shows it only where links come \
                          with arrivals and nothing leaves); give links_per_arrival, or snapshots between which the network grew";
            return Err(FitError::NotIdentified { detail: detail.into() });
        }
        let exponent_links =
            if periods.is_empty() && request.fixed.mix.is_none() { past } else { links_per_arrival.value };
        Ok(Self { links_per_arrival, arrivals_per_day, excursion, exponent_links, warnings })
    }
}

/// Root mean square step of ln(rate) between successive periods; the stated default when there is only one.
fn period_spread(periods: &[Period], rate: fn(&Period) -> f64) -> f64 {
    let steps: Vec<f64> = periods.windows(2).map(|pair| (rate(&pair[1]) / rate(&pair[0])).ln().powi(2)).collect();
    if steps.is_empty() { ONE_PERIOD_RATE_SPREAD } else { (steps.iter().sum::<f64>() / steps.len() as f64).sqrt() }
}

/// A positive rate with relative standard deviation `spread`, its interval log-normal.
fn log_normal(value: f64, spread: f64) -> Estimate {
    let factor = (NORMAL_95 * spread).exp();
    let interval = Interval { level: ESTIMATE_LEVEL, low: value / factor, high: value * factor };
    Estimate { value, interval: Some(interval) }
}
