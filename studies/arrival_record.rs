//! How forecasts of arrivals and of links per arrival did, beside the last rate held and the mean rate.
//!
//! usage: cargo run --no-default-features --example arrival_record
//!
//! From every period on, the mean rate over the next one, two and three periods is forecast from the periods before. Errors are
//! |ln(forecast/came)|, where fewer than one event counts as one on either side. Intervals are log-normal with the Poisson variance of
//! what is expected added. Simulated histories are of 14 periods, 200 a kind. The output is kept in studies/arrival_record.txt.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

mod real;

use rand::{RngExt, SeedableRng, rngs::StdRng};
use rand_distr::{Distribution, Normal, Poisson};
use tailcast::evaluate::{RateHistory, RatePeriod, arrival_periods, link_periods};
use tailcast::model::{ArrivalPlan, AttachmentMix, DegreeKind, EntryDegrees, Evidence, GrowthParameters};

const PERIODS: usize = 14;
const HISTORIES: usize = 200;
/// Normal quantiles at the ends of the 50 and 90 % intervals.
const ENDS: [f64; 2] = [0.674_489_750, 1.644_853_627];
/// Departures a node and day of the Debian network: 18,933 in its transitions, of some 66,000 nodes over 1,903 days.
const DEBIAN_DEPARTURES: f64 = 1.5e-4;

#[derive(Default)]
struct Record {
    /// Of the forecast, the last rate and the mean rate.
    errors: [f64; 3],
    inside: [f64; 2],
    cases: f64,
}

fn main() {
    println!("mean |ln(forecast/came)| of the mean rate, and share of outcomes inside the 50 % and 90 % intervals\n");
    println!(
        "{:<22} {:>7} {:>6} {:>9} {:>10} {:>10} {:>8} {:>8} {:>8}",
        "history", "periods", "cases", "forecast", "last rate", "mean rate", "in 50 %", "in 90 %", "to best"
    );
    for (name, histories) in networks().into_iter().chain(simulated()) {
        for ahead in 1..=3 {
            let mut r = Record::default();
            histories.iter().for_each(|history| score(history, ahead, &mut r));
            if r.cases == 0.0 {
                continue;
            }
            let [forecast, last, mean] = r.errors.map(|sum| sum / r.cases);
            println!(
                "{name:<22} {ahead:>7} {:>6} {forecast:>9.3} {last:>10.3} {mean:>10.3} {:>7.0}% {:>7.0}% {:>8.2}",
                r.cases,
                100.0 * r.inside[0] / r.cases,
                100.0 * r.inside[1] / r.cases,
                forecast / last.min(mean)
            );
        }
    }
}

fn score(history: &[RatePeriod], ahead: usize, record: &mut Record) {
    for origin in 1..=history.len().saturating_sub(ahead) {
        let (past, future) = (&history[..origin], &history[origin..origin + ahead]);
        let Some(rates) = RateHistory::new(past) else { continue };
        let sum = |periods: &[RatePeriod], of: fn(&RatePeriod) -> f64| periods.iter().map(of).sum::<f64>();
        let rate = |periods: &[RatePeriod]| sum(periods, |p| p.events) / sum(periods, |p| p.exposure);
        let (exposure, came) = (sum(future, |p| p.exposure), sum(future, |p| p.events));
        let outlook = rates.mean_over(sum(future, |p| p.days));
        let miss = |rate: f64| ((rate * exposure).max(1.0) / came.max(1.0)).ln();
        for (error, rate) in record.errors.iter_mut().zip([outlook.rate, rates.newest_rate(), rate(past)]) {
            *error += miss(rate).abs();
        }
        let deviation = (outlook.log_deviation.powi(2) + 1.0 / (outlook.rate * exposure).max(1.0)).sqrt();
        for (inside, end) in record.inside.iter_mut().zip(ENDS) {
            *inside += f64::from(miss(outlook.rate).abs() <= end * deviation);
        }
        record.cases += 1.0;
    }
}

/// Arrivals and links per arrival of the two real networks.
fn networks() -> Vec<(String, Vec<Vec<RatePeriod>>)> {
    let mut all = Vec::new();
    for (network, departures) in [("answers", 0.0), ("debian", DEBIAN_DEPARTURES)] {
        let evidence = Evidence::new(DegreeKind::Received, real::snapshots(network), None).expect("in order");
        let (mix, plan) = (AttachmentMix::UNIFORM, ArrivalPlan::none());
        let forces = GrowthParameters::new(DegreeKind::Received, mix, plan, EntryDegrees::single(0), 1.0)
            .and_then(|forces| forces.with_losses(departures, 0.0))
            .expect("rates in range");
        all.push((format!("{network}, arrivals"), vec![arrival_periods(&evidence, departures)]));
        all.push((format!("{network}, links each"), vec![link_periods(&evidence, &forces)]));
    }
    all
}

/// Rates drawn by kind, events Poisson.
fn simulated() -> Vec<(String, Vec<Vec<RatePeriod>>)> {
    type Rate = fn(&mut StdRng) -> Vec<f64>;
    let kinds: [(&str, Rate); 7] = [
        ("constant and noise", |rng| {
            let spread = pick(rng, [0.05, 0.15, 0.3]);
            (0..PERIODS).map(|_| normal(rng, spread)).collect()
        }),
        ("random walk", |rng| {
            let spread = pick(rng, [0.05, 0.15, 0.3]);
            let steps = (0..PERIODS).map(|_| normal(rng, spread));
            steps.scan(0.0, |level, step| Some(std::mem::replace(level, *level + step))).collect()
        }),
        ("exponential growth", |rng| {
            let growth = rng.random_range(0.05..0.4);
            (0..PERIODS).map(|t| growth * t as f64 + normal(rng, 0.07)).collect()
        }),
        ("logistic saturation", |rng| {
            let (middle, width) = (rng.random_range(2.0..9.0), rng.random_range(1.0..3.0));
            // Arrivals of a logistic N(t), on a hundredth that keeps coming.
            let rate = |t: usize| ((t as f64 - middle) / (2.0 * width)).cosh().powi(-2) + 0.01;
            (0..PERIODS).map(|t| rate(t).ln() + normal(rng, 0.07)).collect()
        }),
        ("one step", |rng| {
            let (at, size) = (rng.random_range(2..11), normal(rng, 1.0));
            (0..PERIODS).map(|t| if t < at { 0.0 } else { size } + normal(rng, 0.08)).collect()
        }),
        ("sixfold within three", |rng| {
            let at = rng.random_range(1..9);
            let risen = |t: usize| ((t as f64 - f64::from(at)) / 3.0).clamp(0.0, 1.0) * 6f64.ln();
            (0..PERIODS).map(|t| risen(t) + normal(rng, 0.08)).collect()
        }),
        ("collapse", |rng| {
            let (at, left) = (rng.random_range(2..11), pick(rng, [0.0005f64, 0.02, 0.05]).ln());
            (0..PERIODS).map(|t| if t < at { 0.0 } else { left } + normal(rng, 0.1)).collect()
        }),
    ];
    let draw = |(kind, rate): (&str, Rate)| {
        let mut rng = StdRng::seed_from_u64(11);
        let histories = (0..HISTORIES).map(|_| {
            let base = rng.random_range(3.0..8.0);
            let period = |log_rate: f64, rng: &mut StdRng| {
                let events = Poisson::new((base + log_rate).exp()).expect("a rate").sample(rng);
                RatePeriod { days: 30.0, events, exposure: 30.0 }
            };
            rate(&mut rng).into_iter().map(|log_rate| period(log_rate, &mut rng)).collect()
        });
        (kind.to_owned(), histories.collect())
    };
    kinds.into_iter().map(draw).collect()
}

fn normal(rng: &mut StdRng, deviation: f64) -> f64 {
    Normal::new(0.0, deviation).expect("a deviation").sample(rng)
}

fn pick(rng: &mut StdRng, values: [f64; 3]) -> f64 {
    values[rng.random_range(0..3)]
}
