#![no_main]
//! The growth of any small network under any forces: finite, monotone, conserved.

use std::time::Instant;

use arbitrary::Arbitrary;
use libfuzzer_sys::fuzz_target;
use tailcast::growth::{Course, GrowthError, NetworkLaw};
use tailcast::model::{
    ArrivalPlan, ArrivalSegment, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, GrowthParameters,
};
use tailcast::numerics::tolerances::Accuracy;

/// Thresholds up to here are all asked for; where a tail has died out by then, tails add up to links.
const THRESHOLDS: u64 = 48;
/// No single input may take longer than this: what is asked of a service is bounded anyway.
const SECONDS: u64 = 5;

#[derive(Arbitrary, Debug)]
struct Network {
    counts: Vec<(u8, u16)>,
    large: Option<(u64, u32)>,
    total: bool,
    share: u16,
    rate: u16,
    growth: i8,
    links: u8,
    per_node: u8,
    departures: u8,
    losses: u8,
    dormant: u8,
    variance: u8,
    entry: (u8, u8, u8),
    days: u16,
}

/// Zero, or from 10⁻⁶ up by a fifth of a decade a step.
fn scale(step: u8) -> f64 {
    if step == 0 { 0.0 } else { 1e-6 * 10f64.powf(f64::from(step % 40) / 5.0) }
}

fn forces(given: &Network) -> Option<GrowthParameters> {
    let growth_per_year = f64::from(given.growth) / 128.0;
    let rate = f64::from(given.rate) / 64.0;
    let segment = ArrivalSegment { from_day: 0.0, per_day: rate, growth_per_year };
    let (low, high, share) = given.entry;
    let share = f64::from(share) / 255.0;
    let entry =
        EntryDegrees::from_shares(&[(u64::from(low % 8), share), (8 + u64::from(high % 8), 1.0 - share)]).ok()?;
    let mix = AttachmentMix::new(f64::from(given.share) / f64::from(u16::MAX))?;
    let kind = if given.total { DegreeKind::Total } else { DegreeKind::Received };
    GrowthParameters::new(kind, mix, ArrivalPlan::from_segments(&[segment]).ok()?, entry, f64::from(given.links) / 16.0)
        .ok()?
        .with_links_per_node_day(scale(given.per_node))
        .ok()?
        .with_losses(scale(given.departures), scale(given.losses))
        .ok()?
        .with_dormant_share(f64::from(given.dormant.saturating_sub(200)) / 60.0)
        .ok()?
        .with_growth_variance(f64::from(given.variance.saturating_sub(200)) / 10.0)
        .ok()
}

fuzz_target!(|given: Network| {
    let mut pairs: Vec<(u64, u64)> = given.counts.iter().take(12).map(|&(k, n)| (u64::from(k), u64::from(n))).collect();
    pairs.extend(given.large.map(|(degree, nodes)| (degree >> 12, u64::from(nodes))));
    pairs.sort_unstable();
    pairs.dedup_by_key(|pair| pair.0);
    let (Ok(counts), Some(forces)) = (DegreeCounts::from_pairs(&pairs), forces(&given)) else { return };
    let alike = forces.grow_alike();
    let horizon = f64::from(given.days) / 16.0 + 0.01;
    let course = match Course::new(&counts, forces, horizon) {
        Ok(course) => course,
        Err(error) => return assert!(!error.to_string().is_empty()),
    };
    let clock = Instant::now();
    let late = || clock.elapsed().as_secs() >= SECONDS;
    let (mut nodes_before, mut tails_before) = (counts.nodes() as f64, None::<Vec<f64>>);
    for day in [horizon / 2.0, horizon] {
        let (nodes, ends) = (course.nodes(day), course.link_ends(day));
        assert!(nodes.is_finite() && nodes >= 0.0 && ends.is_finite() && ends >= 0.0, "{nodes} {ends}");
        let grows = !course.parameters().has_losses();
        if grows {
            assert!(nodes >= nodes_before * (1.0 - 1e-12), "nodes {nodes_before} {nodes}");
        }
        let network = NetworkLaw::at(&course, &counts, day).expect("a linear kernel").until(&late);
        let mut tails = Vec::new();
        for threshold in 0..=THRESHOLDS {
            let sum = match network.tail(threshold, Accuracy::Full) {
                Ok(sum) => sum,
                Err(GrowthError::Cancelled) => return,
                Err(error) => return assert!(!error.to_string().is_empty()),
            };
            for (what, value) in [("kept", sum.kept), ("mean", sum.mean), ("variance", sum.variance)] {
                assert!(value.is_finite() && value >= 0.0, "{what} {value} at {threshold}");
            }
            assert!(sum.third_cumulant.is_finite() && !sum.log_none.is_nan() && sum.log_none <= 0.0, "{sum:?}");
            assert!(sum.kept <= sum.mean * (1.0 + 1e-9), "{sum:?}");
            tails.push(sum.mean);
        }
        // Monotone: fewer nodes have more links; without losses no tail shrinks.
        let slack = 1e-7 * nodes;
        assert!(tails.windows(2).all(|pair| pair[1] <= pair[0] + slack), "{tails:?}");
        if let Some(before) = tails_before.filter(|_| grows) {
            assert!(before.iter().zip(&tails).all(|(before, now)| *now >= before - slack), "{before:?} {tails:?}");
        }
        // Conserved: everybody has at least no link, and tails add up to links.
        assert!((tails[0] - nodes).abs() <= 1e-7 * nodes, "{} of {nodes} nodes", tails[0]);
        let added: f64 = tails[1..].iter().sum();
        assert!(added <= ends * (1.0 + 1e-6) + slack, "tails add up to {added} of {ends} link ends");
        if alike && tails[THRESHOLDS as usize] < 1e-9 * nodes {
            assert!((added - ends).abs() <= 1e-5 * ends + slack, "tails add up to {added}, not {ends} link ends");
        }
        (nodes_before, tails_before) = (nodes, Some(tails));
    }
});
