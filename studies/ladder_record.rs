//! What each rung of the evidence ladder says of the two real networks of `examples/data`, and how forecasts from each did
//! beside plain trends.
//!
//! usage: cargo run --release --example ladder_record
//!
//! The answers network only grows; its forecasts are given the arrivals and landed links that came. Debian's loses packages
//! and links; its forecasts are given nothing but what came before. From every period one to three periods ahead. Errors are
//! |ln(forecast/observed)| over thresholds with at least 5 nodes. The output is kept in studies/ladder_record.txt. Sources of
//! the data: the README beside each table.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::print_stdout)]

use std::collections::BTreeMap;
use std::path::PathBuf;

use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::{Fit, FitRequest, Model, ModelChoice, Rung, fit};
use tailcast::model::{
    ArrivalPlan, DegreeKind, Estimate, Evidence, ForecastPlan, Levels, Move, Snapshot, Thresholds, Transitions,
    days_between,
};

/// A way to forecast: a name, whether transitions are given, the rung and candidate asked for.
struct Way {
    name: &'static str,
    transitions: bool,
    rung: Option<Rung>,
    choice: ModelChoice,
}

const fn way(name: &'static str, transitions: bool, rung: Rung, choice: ModelChoice) -> Way {
    Way { name, transitions, rung: Some(rung), choice }
}

const MIX: ModelChoice = ModelChoice::Only(Model::Mix);
const WAYS: [Way; 7] = [
    way("counts, mix", false, Rung::SuccessiveSnapshots, MIX),
    way("both, mix", true, Rung::SuccessiveSnapshots, MIX),
    way("transitions, mix", true, Rung::Transitions, MIX),
    way("transitions, dormancy", true, Rung::Transitions, ModelChoice::Only(Model::Dormancy)),
    way("transitions, growth variance", true, Rung::Transitions, ModelChoice::Only(Model::GrowthVariance)),
    way("transitions, power", true, Rung::Transitions, ModelChoice::Only(Model::Power)),
    Way { name: "all defaults", transitions: true, rung: None, choice: ModelChoice::Auto },
];

fn main() {
    for (network, thresholds) in
        [("answers", vec![5, 10, 20, 50, 100, 200]), ("debian", vec![5, 10, 20, 50, 100, 200, 500, 1_000, 2_000])]
    {
        let tables = transitions(network);
        println!("== {network}\n");
        estimates(&tables);
        for ahead in 1..=3 {
            forecasts(&tables, ahead, &thresholds, network == "answers");
        }
    }
    debian_table(&transitions("debian"));
}

fn evidence(tables: &[Transitions], with_transitions: bool) -> Evidence {
    let mut snapshots: Vec<Snapshot> =
        tables.iter().map(|t| Snapshot { as_of: t.from(), counts: t.counts_before().unwrap() }).collect();
    let last = tables.last().unwrap();
    snapshots.push(Snapshot { as_of: last.to(), counts: last.counts_after().unwrap() });
    let evidence = Evidence::new(DegreeKind::Received, snapshots, None).unwrap();
    if with_transitions { evidence.with_transitions(tables.to_vec()).unwrap() } else { evidence }
}

fn estimates(tables: &[Transitions]) {
    println!(
        "estimates period by period (90 % intervals): preferential share by crossing flows and by transitions; by transitions"
    );
    println!("departures and link losses a year, uniform gain a node and period, weights of the candidates");
    for table in tables {
        let evidence = evidence(std::slice::from_ref(table), true);
        let by = |rung| {
            let request = FitRequest { rung: Some(rung), choice: MIX, ..FitRequest::default() };
            fit(&evidence, &request, &|| false).unwrap()
        };
        let (flows, moves) = (by(Rung::SuccessiveSnapshots), by(Rung::Transitions));
        let yearly = |estimate: Estimate| 100.0 * (1.0 - (-estimate.value * 365.2425).exp());
        let request = FitRequest { rung: Some(Rung::Transitions), ..FitRequest::default() };
        let all = fit(&evidence, &request, &|| false).unwrap();
        let rates = all.transitions.as_ref().unwrap().periods[0];
        println!(
            "{}  flows {}  transitions {}  departed {:.4}  {:.1} % a year  links lost {:.1} % a year  uniform gain {:.4}",
            &table.to().to_string()[..10],
            share(&flows.preferential_share),
            share(&moves.preferential_share),
            rates.departure_share,
            yearly(all.forces.departures.estimate),
            yearly(all.forces.link_losses.estimate),
            rates.uniform_gain,
        );
        for c in &all.candidates {
            let own = c.parameter.map_or(String::new(), |own| format!(" ({own:.3})"));
            println!("    {:<16} p {:.3}{own} AIC weight {:.3}", c.model.name(), c.preferential_share, c.weight);
        }
        outliers(&all);
        println!("    {}", all.verdict);
    }
    println!();
}

fn outliers(fit: &Fit) {
    let found = &fit.transitions.as_ref().unwrap().outliers;
    let classes: Vec<String> =
        found.classes.iter().map(|c| format!("{} from {}..{}", c.nodes, c.lowest, c.highest)).collect();
    let jumps: Vec<String> = found.jumps.iter().take(6).map(|(a, b, _)| format!("{a}→{b}")).collect();
    let renamed: Vec<String> = found.renamed.iter().take(8).map(|(a, b)| format!("{a}→{b}")).collect();
    println!("    outliers {} ({}); farthest {}", found.nodes, classes.join(", "), jumps.join(", "));
    println!("    under a new name {}: {}", found.renamed.len(), renamed.join(", "));
}

fn share(estimate: &Estimate) -> String {
    let interval = estimate.interval.map_or(String::new(), |i| format!(" [{:.3}, {:.3}]", i.low, i.high));
    format!("{:.3}{interval}", estimate.value)
}

fn forecasts(tables: &[Transitions], ahead: usize, thresholds: &[u64], given: bool) {
    if tables.len() <= ahead {
        return;
    }
    println!("{ahead} ahead: mean |ln(forecast/observed)|, inside the 50 and 90 % intervals");
    let mut trends: BTreeMap<&str, (f64, f64)> = BTreeMap::new();
    for (i, way) in WAYS.iter().enumerate() {
        let (mut error, mut inside, mut cases) = (0.0, [0.0; 2], 0.0);
        for origin in 1..=tables.len() - ahead {
            let past = &tables[..origin];
            let (now, then) =
                (past[origin - 1].counts_after().unwrap(), tables[origin + ahead - 1].counts_after().unwrap());
            let before = past[origin - 1].counts_before().unwrap();
            let (start, end) = (past[origin - 1].to(), tables[origin + ahead - 1].to());
            let days = days_between(start, end);
            let arrived = then.nodes() as f64 - now.nodes() as f64;
            let landed = then.link_ends() as f64 - now.link_ends() as f64;
            let request = OriginRequest {
                questions: Default::default(),
                evidence: evidence(past, way.transitions),
                fit: FitRequest {
                    rung: way.rung,
                    choice: way.choice,
                    links_per_arrival: given.then(|| match way.transitions {
                        // Counts alone take newcomers to bring none.
                        false => landed / arrived,
                        true => landed_per_arrival(tables, origin, ahead, landed, arrived),
                    }),
                    ..FitRequest::default()
                },
                arrivals: given.then(|| ArrivalPlan::constant(arrived / days).unwrap()),
                plan: ForecastPlan::new(start, Thresholds::new(thresholds).unwrap(), &[end], Levels::default())
                    .unwrap(),
            };
            for tail in &answer(&request, &|| false).unwrap().forecast[0].tail {
                let observed = then.tail_size(tail.threshold) as f64;
                if observed < 5.0 {
                    continue;
                }
                let miss = |forecast: f64| (forecast.max(1.0) / observed).ln().abs();
                error += miss(tail.size.expected);
                cases += 1.0;
                for (inside, interval) in inside.iter_mut().zip(&tail.size.intervals) {
                    *inside += f64::from(interval.low <= observed && observed <= interval.high);
                }
                if i == 0 {
                    let (s0, s1) = (before.tail_size(tail.threshold) as f64, now.tail_size(tail.threshold) as f64);
                    let past_days = past[origin - 1].days();
                    let carried = |factor: f64| s1 + (s1 - s0) * factor;
                    let by_arrivals = arrived / (now.nodes() as f64 - before.nodes() as f64);
                    let by_links = landed / (now.link_ends() as f64 - before.link_ends() as f64);
                    let rows = if given {
                        vec![("trend per arrival", carried(by_arrivals)), ("trend per link", carried(by_links))]
                    } else {
                        vec![
                            ("ratio trend", s1 * (s1 / s0).powf(days / past_days)),
                            ("ratio trend, time left out", s1 * (s1 / s0).powi(ahead as i32)),
                            ("trend per day", carried(days / past_days)),
                            ("no change", s1),
                        ]
                    };
                    for (name, forecast) in rows {
                        let sum = trends.entry(name).or_default();
                        *sum = (sum.0 + miss(forecast), sum.1 + 1.0);
                    }
                }
            }
        }
        let share = |x: f64| 100.0 * x / cases;
        println!(
            "  {:<30} {:>6.2} %   {:>3.0} {:>3.0} %  ({cases} cases)",
            way.name,
            share(error),
            share(inside[0]),
            share(inside[1])
        );
    }
    for (name, (error, cases)) in trends {
        println!("  {name:<30} {:>6.2} %", 100.0 * error / cases);
    }
    println!();
}

/// Link ends that landed on nodes present, per arrival: what the total grew by, less what newcomers are read to have brought.
fn landed_per_arrival(tables: &[Transitions], origin: usize, ahead: usize, landed: f64, arrived: f64) -> f64 {
    let request = FitRequest { rung: Some(Rung::SuccessiveSnapshots), choice: MIX, ..FitRequest::default() };
    let brought: f64 = tables[origin..origin + ahead]
        .iter()
        .map(|table| {
            let known = evidence(std::slice::from_ref(table), true);
            fit(&known, &request, &|| false).unwrap().entry.mean() * table.arrived() as f64
        })
        .sum();
    (landed - brought) / arrived
}

/// Debian's forecasts as the README shows them.
fn debian_table(tables: &[Transitions]) {
    let thresholds = [5, 10, 20, 50, 100, 200, 500, 1_000, 2_000];
    for origin in 1..tables.len() {
        let past = &tables[..origin];
        let (now, before) = (past[origin - 1].counts_after().unwrap(), past[origin - 1].counts_before().unwrap());
        let (start, end) = (past[origin - 1].to(), tables[origin].to());
        let then = tables[origin].counts_after().unwrap();
        let request = OriginRequest {
            questions: Default::default(),
            evidence: evidence(past, true),
            fit: FitRequest::default(),
            arrivals: None,
            plan: ForecastPlan::new(start, Thresholds::new(&thresholds).unwrap(), &[end], Levels::default()).unwrap(),
        };
        println!("debian, {} to {}, all defaults", &start.to_string()[..10], &end.to_string()[..10]);
        println!("  threshold     now   forecast   90 % interval        came   ratio trend");
        for tail in &answer(&request, &|| false).unwrap().forecast[0].tail {
            let (s0, s1) = (before.tail_size(tail.threshold) as f64, now.tail_size(tail.threshold) as f64);
            let ratio = s1 * (s1 / s0).powf(days_between(start, end) / past[origin - 1].days());
            let i = tail.size.intervals[1];
            println!(
                "  {:>9} {s1:>7} {:>10.0} {:>8.0} to {:<8.0} {:>8} {ratio:>13.0}",
                tail.threshold,
                tail.size.expected,
                i.low,
                i.high,
                then.tail_size(tail.threshold)
            );
        }
    }
}

/// Transitions of a network, oldest first.
fn transitions(network: &str) -> Vec<Transitions> {
    let path: PathBuf = [env!("CARGO_MANIFEST_DIR"), "examples/data", network, "transitions.csv"].iter().collect();
    let text = std::fs::read_to_string(path).expect("the table");
    let mut periods: BTreeMap<(String, String), Vec<Move>> = BTreeMap::new();
    for row in text.lines().skip(1).map(|line| line.split(',').collect::<Vec<_>>()) {
        let degree = |text: &str| (!text.is_empty()).then(|| text.parse().expect("a degree"));
        let step = Move { before: degree(row[2]), after: degree(row[3]), nodes: row[4].parse().expect("a count") };
        periods.entry((row[0].to_owned(), row[1].to_owned())).or_default().push(step);
    }
    let date = |text: &str| {
        let text = if text.contains('T') { text.to_owned() } else { format!("{text}T00:00:00Z") };
        text.parse().expect("a date")
    };
    periods.iter().map(|((from, to), moves)| Transitions::new(date(from), date(to), moves).expect("sound")).collect()
}
