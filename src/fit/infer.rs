//! Puts a fit together: which rung the evidence reaches, the rates its totals give, and what to warn of.

use super::diagnostics::{flow_goodness, goodness, stationary_tail, warnings as diagnose};
use super::entry::entry_degrees;
use super::one_snapshot::fit_one_snapshot;
use super::profile::{ESTIMATE_LEVEL, Profile};
use super::stationary::StationaryLaw;
use super::successive::{Period, fit_successive, periods};
use super::{Fit, FitError, FitRequest, Model, RateExcursion, Rung, TailPoint};
use crate::model::{AttachmentMix, EntryDegrees, Estimate, Evidence, Interval, Warning};

/// Relative standard deviation of a rate that only one period shows, beyond counting noise. A stated default: common
/// practice, no source; ten snapshots of a real network moved by 5 to 20 % a period.
const ONE_PERIOD_RATE_SPREAD: f64 = 0.1;
/// A given ℓ this many times the past one, or less than its inverse, is worth a warning.
const LINKS_MOVED: f64 = 1.5;

/// Infers the attachment mix from the evidence.
///
/// One snapshot is fitted as a stationary degree law; two or more by their crossing flows; a fixed mix is taken as given.
///
/// `cancelled` is asked before each evaluation of a flow likelihood.
///
/// # Errors
/// [`FitError::NotIdentified`] when the counts cannot tell the mix, with what would.
pub fn fit(evidence: &Evidence, request: &FitRequest, cancelled: &dyn Fn() -> bool) -> Result<Fit, FitError> {
    let (entry, mut warnings) = entry_degrees(evidence, request.has_losses())?;
    let several = evidence.snapshots().len() > 1;
    let periods = match periods(evidence, &entry, request) {
        Ok((periods, skipped)) => {
            warnings.extend(skipped);
            periods
        }
        // A given mix needs no flows; a single snapshot has none.
        Err(_) if !several || request.fixed_mix.is_some() => Vec::new(),
        Err(error) => return Err(error),
    };
    let rates = Rates::read(evidence, &entry, &periods, request)?;
    warnings.extend(rates.warnings.iter().cloned());
    let counts = &evidence.latest().counts;
    let (rung, profile, tail, goodness) = match request.fixed_mix {
        Some(mix) => (Rung::Given, given(mix), Vec::new(), None),
        None if several => {
            let fit = fit_successive(&periods, request, cancelled)?;
            let tail = newest_tail(&periods, fit.profile.share.value)?;
            let goodness = flow_goodness(&tail, counts.nodes(), fit.dispersion, fit.flow_error);
            (Rung::SuccessiveSnapshots, fit.profile, tail, Some(goodness))
        }
        None => {
            let past = past_links_per_arrival(evidence, &entry, request)?;
            let profile = fit_one_snapshot(counts, &entry, past, request)?;
            let mix = AttachmentMix::new(profile.share.value).unwrap_or(AttachmentMix::UNIFORM);
            let tail = stationary_tail(counts, &StationaryLaw::new(mix, past, entry.clone()));
            let goodness = goodness(&tail, counts.nodes(), request.seed);
            (Rung::OneSnapshot, profile, tail, Some(goodness))
        }
    };
    if let Some(goodness) = &goodness {
        warnings.extend(diagnose(counts, &tail, goodness, request.choice));
    }
    warnings.extend(periods.last().and_then(|newest| shrinkage(newest, request)));
    if profile.share.value == 1.0 && entry.smallest() == 0 {
        let detail =
            "every landing end picks in proportion to links, so a newcomer that arrives without any never gains one";
        warnings.push(Warning::new("newcomers_never_gain", detail));
    }
    let tail_exponent = tail_exponent(&profile, rates.exponent_links, entry.mean(), request);
    Ok(Fit {
        model: profile.model,
        rung,
        preferential_share: profile.share,
        share_excursion: profile.excursion,
        links_per_arrival: rates.links_per_arrival,
        arrivals_per_day: rates.arrivals_per_day,
        rate_excursion: rates.excursion,
        entry,
        tail_exponent,
        candidates: profile.candidates,
        goodness,
        tail,
        warnings,
    })
}

fn given(mix: AttachmentMix) -> Profile {
    let share = mix.preferential_share();
    let model = match share {
        0.0 => Model::Uniform,
        1.0 => Model::Preferential,
        _ => Model::Mix,
    };
    Profile { model, share: Estimate::given(share), excursion: (share, share), candidates: Vec::new() }
}

/// ℓ of a network that always grew in proportion: K/N − ē.
///
/// # Errors
/// When that is not positive, or nodes stand below the smallest entry degree, or losses make the law another one.
fn past_links_per_arrival(evidence: &Evidence, entry: &EntryDegrees, request: &FitRequest) -> Result<f64, FitError> {
    let counts = &evidence.latest().counts;
    let refuse = |detail: String| Err(FitError::NotIdentified { detail });
    let remedy = "give fixed.preferential_share, or a second snapshot";
    if request.has_losses() {
        return refuse(format!("one snapshot cannot tell the mix of a network that loses nodes or links; {remedy}"));
    }
    if counts.link_ends() == 0 {
        return refuse(format!("no node has a link, so the counts say nothing of how links attach; {remedy}"));
    }
    if counts.smallest() < entry.smallest() {
        return refuse(format!(
            "{} nodes have fewer links than any newcomer arrives with ({}); mend entry_degrees or the counts",
            counts.nodes() - counts.tail_size(entry.smallest()),
            entry.smallest()
        ));
    }
    let past = counts.mean_degree() - entry.mean();
    if past <= 0.0 {
        return refuse(format!(
            "the mean degree ({:.3}) is not above the mean entry degree ({:.3}), so no node has gained a link since it \
             arrived; mend entry_degrees, or {remedy}",
            counts.mean_degree(),
            entry.mean()
        ));
    }
    Ok(past)
}

fn newest_tail(periods: &[Period], share: f64) -> Result<Vec<TailPoint>, FitError> {
    let Some(newest) = periods.last() else { return Ok(Vec::new()) };
    let point = |(degree, observed, fitted)| TailPoint { degree, observed, fitted };
    Ok(newest.fitted_tail(share)?.into_iter().map(point).collect())
}

/// A warning when tails shrank although nothing is said to leave or to be lost.
fn shrinkage(newest: &Period, request: &FitRequest) -> Option<Warning> {
    let shrunken = newest.shrunken();
    let &(threshold, before, after) = shrunken.first()?;
    if request.has_losses() {
        return None;
    }
    let detail = format!(
        "nodes with {threshold} links or more fell from {before} to {after} in the newest period ({} of the thresholds looked \
         at fell), so nodes leave or lose links; the forecast takes both as lasting, and its large hubs come out too many and \
         too certain; give departures_per_node_day or link_losses_per_link_day if you know them",
        shrunken.len()
    );
    Some(Warning::new("tails_shrank", detail))
}

/// Exponent 1 + (ℓ + ē)/(p·ℓ) that steady growth at these rates leads to; none for p = 0 or with losses.
fn tail_exponent(profile: &Profile, links: f64, entry_mean: f64, request: &FitRequest) -> Option<Estimate> {
    let exponent = |share: f64| 1.0 + (links + entry_mean) / (share * links);
    if request.has_losses() || profile.share.value <= 0.0 || links <= 0.0 {
        return None;
    }
    let interval = profile.share.interval.filter(|i| i.low > 0.0);
    let interval = interval.map(|i| Interval { level: i.level, low: exponent(i.high), high: exponent(i.low) });
    Some(Estimate { value: exponent(profile.share.value), interval })
}

/// Rates read off the totals, or given.
struct Rates {
    links_per_arrival: Estimate,
    arrivals_per_day: Option<Estimate>,
    excursion: RateExcursion,
    /// ℓ that the tail exponent goes with: the fitted law's own.
    exponent_links: f64,
    warnings: Vec<Warning>,
}

impl Rates {
    fn read(
        evidence: &Evidence,
        entry: &EntryDegrees,
        periods: &[Period],
        request: &FitRequest,
    ) -> Result<Self, FitError> {
        let counts = &evidence.latest().counts;
        let past = counts.mean_degree() - entry.mean();
        let only_grows = !request.has_losses() && request.links_per_node_day == 0.0;
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
            if periods.is_empty() && request.fixed_mix.is_none() { past } else { links_per_arrival.value };
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
    const NORMAL_95: f64 = 1.644_853_626_951_472_2; // standard normal quantile at 0.95, for a 90 % interval
    let factor = (NORMAL_95 * spread).exp();
    let interval = Interval { level: ESTIMATE_LEVEL, low: value / factor, high: value * factor };
    Estimate { value, interval: Some(interval) }
}
