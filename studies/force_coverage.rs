//! How often the 90 % interval of each force covers the truth, on the rungs that claim it: transitions and link events.
//!
//! usage: cargo run --release --example force_coverage -- [runs a setting, default 200] [nodes, default 30000]
//!
//! Transitions: a network grown by a mix to so many nodes goes through one period of 100 days, a fifth of its size arriving,
//! under the forces of the setting; degree before and after is all that the fit sees. Link events: a list grown link by link
//! to so many nodes. The output of a full run is kept in studies/force_coverage.txt.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

use std::sync::atomic::{AtomicUsize, Ordering};

use rand::rngs::SmallRng;
use rand::{RngExt, SeedableRng};

use tailcast::census::Census;
use tailcast::fit::{Fit, FitRequest, Force, Model, ModelChoice, Rung, fit};
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, GrowthParameters, Snapshot,
    Transitions,
};
use tailcast::numerics::sum_tree::SumTree;

const DAYS: f64 = 100.0;

#[derive(Clone, Copy)]
struct Setting {
    name: &'static str,
    model: Model,
    share: f64,
    departures: f64,
    losses: f64,
    own: f64,
    events: bool,
}

const fn moves(name: &'static str, model: Model, share: f64, departures: f64, losses: f64, own: f64) -> Setting {
    Setting { name, model, share, departures, losses, own, events: false }
}

const fn events(name: &'static str, model: Model, share: f64, own: f64) -> Setting {
    Setting { name, model, share, departures: 0.0, losses: 0.0, own, events: true }
}

const SETTINGS: [Setting; 15] = [
    moves("transitions, only growth", Model::Mix, 0.3, 0.0, 0.0, 0.0),
    moves("transitions, only growth", Model::Mix, 0.8, 0.0, 0.0, 0.0),
    moves("transitions, losses", Model::Mix, 0.5, 1e-3, 5e-4, 0.0),
    moves("transitions, losses", Model::Mix, 0.9, 1e-3, 2e-3, 0.0),
    moves("transitions, dormancy", Model::Dormancy, 0.7, 0.0, 0.0, 0.2),
    moves("transitions, dormancy", Model::Dormancy, 0.7, 5e-4, 1e-3, 0.5),
    moves("transitions, growth variance", Model::GrowthVariance, 0.7, 0.0, 0.0, 0.3),
    moves("transitions, growth variance", Model::GrowthVariance, 0.7, 5e-4, 1e-3, 1.0),
    moves("transitions, power", Model::Power, 0.8, 0.0, 0.0, 0.7),
    moves("transitions, power", Model::Power, 0.8, 0.0, 0.0, 1.1),
    moves("transitions, power", Model::Power, 0.8, 5e-4, 1e-3, 0.8),
    events("link events, mix", Model::Mix, 0.4, 1.0),
    events("link events, mix", Model::Mix, 0.85, 1.0),
    events("link events, power", Model::Power, 0.8, 0.75),
    events("link events, power", Model::Power, 0.8, 1.1),
];

fn main() {
    let mut arguments = std::env::args().skip(1).map(|a| a.parse::<u64>().expect("a whole number"));
    let (runs, nodes) = (arguments.next().unwrap_or(200), arguments.next().unwrap_or(30_000));
    println!(
        "{runs} runs of {nodes} nodes a setting; nominal coverage 90 %, its binomial error {:.1}\n",
        30.0 / (runs as f64).sqrt()
    );
    println!(
        "{:<30} {:<18} {:>9} {:>10} {:>10} {:>10} {:>9}",
        "evidence", "force", "truth", "mean", "sd", "mean se", "covered"
    );
    for setting in &SETTINGS {
        let fits = all(setting, runs, nodes);
        type Read = fn(&Fit) -> Force;
        let share: Read = |fit| Force { estimate: fit.preferential_share, excursion: fit.share_excursion };
        report(setting, "p", setting.share, &fits, share);
        if setting.departures > 0.0 {
            report(setting, "departures a day", setting.departures, &fits, |fit| fit.forces.departures);
        }
        if setting.losses > 0.0 {
            report(setting, "link losses a day", setting.losses, &fits, |fit| fit.forces.link_losses);
        }
        match setting.model {
            Model::Dormancy => report(setting, "dormant share", setting.own, &fits, |fit| fit.forces.dormant_share),
            Model::GrowthVariance => {
                report(setting, "growth variance", setting.own, &fits, |fit| fit.forces.growth_variance)
            }
            Model::Power => report(setting, "kernel exponent", setting.own, &fits, |fit| fit.forces.kernel_exponent),
            _ if setting.events => {
                report(setting, "kernel exponent", 1.0, &fits, |fit| fit.attachment.as_ref().unwrap().kernel_exponent);
                let refused = fits.iter().filter(|fit| fit.attachment.as_ref().unwrap().linear_p_value < 0.1).count();
                println!(
                    "{:<30} γ = 1 refused at the 10 % level in {:.1} % of runs",
                    setting.name,
                    100.0 * refused as f64 / fits.len() as f64
                );
            }
            _ => {}
        }
    }
}

fn all(setting: &Setting, runs: u64, nodes: u64) -> Vec<Fit> {
    let next = AtomicUsize::new(0);
    let work = || {
        let mut fits = Vec::new();
        loop {
            let seed = next.fetch_add(1, Ordering::Relaxed) as u64;
            if seed >= runs {
                return fits;
            }
            fits.push(if setting.events { of_events(setting, nodes, seed) } else { of_moves(setting, nodes, seed) });
        }
    };
    std::thread::scope(|scope| {
        let threads: Vec<_> = (0..2).map(|_| scope.spawn(work)).collect();
        threads.into_iter().flat_map(|thread| thread.join().expect("a worker")).collect()
    })
}

fn report(setting: &Setting, force: &str, truth: f64, fits: &[Fit], read: fn(&Fit) -> Force) {
    let count = fits.len() as f64;
    let mean = |f: &dyn Fn(&Force) -> f64| fits.iter().map(|fit| f(&read(fit))).sum::<f64>() / count;
    let average = mean(&|force| force.value());
    let covers = |force: &Force| {
        f64::from(force.estimate.interval.is_some_and(|interval| interval.low <= truth && truth <= interval.high))
    };
    println!(
        "{:<30} {force:<18} {truth:>9} {average:>10.5} {:>10.5} {:>10.5} {:>8.1}%",
        setting.name,
        mean(&|force| (force.value() - average).powi(2)).sqrt(),
        mean(&|force| 0.5 * (force.excursion.1 - force.excursion.0)),
        100.0 * mean(&covers)
    );
}

fn forces(share: f64, arrivals: f64) -> GrowthParameters {
    let mix = AttachmentMix::new(share).unwrap();
    let arrivals = ArrivalPlan::constant(arrivals).unwrap();
    GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap()
}

fn asked(setting: &Setting, rung: Rung) -> FitRequest {
    FitRequest { rung: Some(rung), choice: ModelChoice::Only(setting.model), ..FitRequest::default() }
}

fn of_moves(setting: &Setting, nodes: u64, seed: u64) -> Fit {
    // Two hundred founders: of one, a hub with a sixth of all links would be left, and its departure would be the setting.
    let start = DegreeCounts::from_pairs(&[(3, 200)]).unwrap();
    let mut network = Simulation::new(&start, forces(0.8, 1.0), seed).unwrap();
    network.arrive_many(nodes - 200).unwrap();
    let mut truth =
        forces(setting.share, 0.2 * nodes as f64 / DAYS).with_losses(setting.departures, setting.losses).unwrap();
    truth = match setting.model {
        Model::Dormancy => truth.with_dormant_share(setting.own).unwrap(),
        Model::GrowthVariance => truth.with_growth_variance(setting.own).unwrap(),
        Model::Power => truth.with_kernel_exponent(setting.own).unwrap(),
        _ => truth,
    };
    let mut network = Simulation::new(&network.degree_counts().unwrap(), truth, seed + 1_000_000).unwrap();
    network.run_until(DAYS).unwrap();
    let date = |text: &str| format!("{text}T00:00:00Z").parse().unwrap();
    let table = Transitions::new(date("2026-01-01"), date("2026-04-11"), &network.moves()).unwrap();
    let last = Snapshot { as_of: table.to(), counts: table.counts_after().unwrap() };
    let evidence = Evidence::new(DegreeKind::Received, vec![last], None).unwrap();
    fit(&evidence.with_transitions(vec![table]).unwrap(), &asked(setting, Rung::Transitions), &|| false).unwrap()
}

/// A list of links, each newcomer making three to nodes that were there before.
fn of_events(setting: &Setting, nodes: u64, seed: u64) -> Fit {
    let mut rng = SmallRng::seed_from_u64(seed);
    let mut census = Census::new(DegreeKind::Received, None);
    let start: jiff::Timestamp = "2026-01-01T00:00:00Z".parse().unwrap();
    // The census numbers nodes by arrival, a source before its target: the founder, first seen as a target, comes second.
    let number = |node: usize| if node < 2 { 1 - node as u32 } else { node as u32 };
    let mut degrees = vec![0_u64];
    let mut attraction = SumTree::default();
    for source in 1..nodes as u32 {
        let present = degrees.len();
        for link in 0..3 {
            // A second of its own for each link: at the same one a link to the same node again would be a repeat.
            let time = start + jiff::SignedDuration::from_secs(3 * i64::from(source) + link);
            let preferential = attraction.total() > 0.0 && rng.random::<f64>() < setting.share;
            let target =
                if preferential { attraction.pick(rng.random()).unwrap() } else { rng.random_range(0..present) };
            census.record(time, number(source as usize), number(target)).unwrap();
            degrees[target] += 1;
            attraction.set(target, (degrees[target] as f64).powf(setting.own));
        }
        degrees.push(0);
    }
    let evidence = census.finish().unwrap().into_evidence().unwrap();
    fit(&evidence, &asked(setting, Rung::LinkEvents), &|| false).unwrap()
}
