//! Watched nodes and the next hubs against simulated networks.

use super::scene::{ask, assert_share, forces, grown, share_inside, simulate};
use tailcast::growth::Simulation;
use tailcast::model::{
    ArrivalPlan, AttachmentMix, DegreeCounts, GrowthParameters, Questions, Thresholds, Watch, WatchedClass, WatchedNode,
};

const RUNS: u64 = 2_000;
const DAYS: [f64; 2] = [100.0, 200.0];

/// A node that stands out among others of known degrees: the one of degree 40.
fn counts() -> DegreeCounts {
    let grown = grown(&forces(0.7));
    let mut pairs: Vec<(u64, u64)> = grown.iter().filter(|&(k, _)| k < 30).collect();
    pairs.extend([(40, 1), (70, 1), (71, 1)]);
    DegreeCounts::from_pairs(&pairs).unwrap()
}

fn watch(name: &str, degree: u64, threshold: u64) -> Watch {
    let node = WatchedNode { name: name.into(), degree };
    let class = WatchedClass { from: 20, to: 29 };
    Watch::new(vec![node], vec![class], Some(Thresholds::new(&[threshold]).unwrap())).unwrap()
}

/// Looks at what became of the nodes of degrees `from` to `to`: for each run and day, how many are past the threshold then and
/// how many have been, by where they went and how far they had been.
fn follow(counts: &DegreeCounts, forces: &GrowthParameters, from: u64, to: u64, threshold: u64) -> [[Vec<u64>; 2]; 2] {
    let mut seen: [[Vec<u64>; 2]; 2] = Default::default();
    for run in 0..RUNS {
        let mut network = Simulation::new(counts, forces.clone(), 5_000 + run).unwrap();
        network.watch_peaks();
        for (i, &day) in DAYS.iter().enumerate() {
            network.run_until(day).unwrap();
            let started = |before: Option<u64>| before.is_some_and(|k| (from..=to).contains(&k));
            let moves = network.moves();
            let past = moves.iter().filter(|m| started(m.before) && m.after.is_some_and(|k| k >= threshold));
            seen[i][0].push(past.map(|m| m.nodes).sum());
            let peaks = network.peaks();
            let been = peaks.iter().filter(|&&(start, peak)| (from..=to).contains(&start) && peak >= threshold);
            seen[i][1].push(been.count() as u64);
        }
    }
    seen
}

fn check(forces: &GrowthParameters) {
    let counts = counts();
    let questions = Questions { watch: Some(watch("ana", 40, 60)), ..Questions::default() };
    let answer = ask(&counts, forces, &[60], &DAYS, questions).watch.unwrap();
    let passing = &answer.nodes[0].passing[0];
    let seen = follow(&counts, forces, 40, 40, 60);
    for (i, at) in passing.dates.iter().enumerate() {
        let [now, ever] = &seen[i];
        let (now, ever): (u64, u64) = (now.iter().sum(), ever.iter().sum());
        eprintln!(
            "at least {:.4} seen {:.4}; passed {:.4} seen {:.4}",
            at.at_least,
            now as f64 / RUNS as f64,
            at.passed,
            ever as f64 / RUNS as f64
        );
        assert_share(now, RUNS, at.at_least, "at least");
        assert_share(ever, RUNS, at.passed, "passed");
    }
    eprintln!("{:?}", passing.crossing);
    // The class: 20 to 29 links today, how many pass 40.
    let questions = Questions { watch: Some(watch("ana", 40, 45)), ..Questions::default() };
    let answer = ask(&counts, forces, &[45], &DAYS, questions).watch.unwrap();
    let class = &answer.classes[0];
    let seen = follow(&counts, forces, 20, 29, 45);
    for (i, at) in class.passing[0].dates.iter().enumerate() {
        for (forecast, seen) in [(&at.at_least, &seen[i][0]), (&at.passed, &seen[i][1])] {
            let mean = seen.iter().sum::<u64>() as f64 / RUNS as f64;
            let variance = seen.iter().map(|&n| (n as f64 - mean).powi(2)).sum::<f64>() / RUNS as f64;
            eprintln!("class of {}: {:.3} seen {mean:.3}", class.nodes, forecast.expected);
            assert!((forecast.expected - mean).abs() < 4.0 * (variance / RUNS as f64).sqrt() + 2e-3 * mean);
        }
    }
}

#[test]
fn a_watched_node_of_a_network_that_only_grows() {
    check(&forces(0.7));
}

#[test]
fn a_watched_node_that_may_lose_links_or_depart() {
    check(&forces(0.7).with_losses(0.001, 0.003).unwrap());
}

#[test]
fn the_degree_of_a_watched_node() {
    let (counts, forces) = (counts(), forces(0.7));
    let questions = Questions { watch: Some(watch("ana", 40, 60)), ..Questions::default() };
    let answer = ask(&counts, &forces, &[60], &DAYS, questions).watch.unwrap();
    let at = &answer.nodes[0].dates[1];
    let mut degrees = Vec::new();
    simulate(&counts, &forces, RUNS, &[200.0], |_, _, network| {
        let own = network.moves().into_iter().find(|m| m.before == Some(40)).unwrap();
        degrees.push(own.after.unwrap() as f64);
    });
    let mean = degrees.iter().sum::<f64>() / RUNS as f64;
    let deviation = (degrees.iter().map(|d| (d - mean).powi(2)).sum::<f64>() / RUNS as f64).sqrt();
    assert!((at.expected - mean).abs() < 4.0 * deviation / (RUNS as f64).sqrt(), "{} seen {mean}", at.expected);
    for interval in &at.intervals {
        let inside = share_inside(&degrees, interval.low, interval.high);
        assert!((inside - interval.level).abs() < 0.06, "{inside} inside at {}", interval.level);
    }
}

/// For p = 1 a node's expected degree follows the power β of t/i (Barabási & Albert 1999, with ℓ = m links landing per arrival and as
/// many of its own: β = 1/2), for p = 0 the logarithm (uniform growth; common practice, no source).
#[test]
fn expected_degrees_follow_the_power_and_the_logarithm() {
    let m = 2;
    let counts = DegreeCounts::from_pairs(&[(m, 800), (8, 200)]).unwrap();
    let plan = ArrivalPlan::constant(10.0).unwrap();
    let forces = |share: f64| {
        GrowthParameters::new(
            tailcast::model::DegreeKind::Total,
            AttachmentMix::new(share).unwrap(),
            plan.clone(),
            tailcast::model::EntryDegrees::single(m),
            m as f64,
        )
        .unwrap()
    };
    let expected = |share: f64| {
        let questions = Questions { watch: Some(watch("ana", 8, 60)), ..Questions::default() };
        ask(&counts, &forces(share), &[60], &[300.0], questions).watch.unwrap().nodes[0].dates[0].expected
    };
    // N goes from 1,000 to 4,000. The power law needs K = 2mN from the start on, which these counts have nearly.
    let link_ends = |day: f64| 3_200.0 + 4.0 * 10.0 * day;
    let growth = link_ends(300.0) / link_ends(0.0);
    assert!((expected(1.0) / (8.0 * growth.sqrt()) - 1.0).abs() < 1e-9, "{}", expected(1.0));
    assert!((expected(0.0) - (8.0 + 2.0 * 4f64.ln())).abs() < 1e-9, "{}", expected(0.0));
}

#[test]
fn the_next_hubs() {
    let (counts, forces) = (counts(), forces(0.7));
    let questions = Questions { next_hubs: 5, ..Questions::default() };
    let answer = ask(&counts, &forces, &[60], &DAYS, questions);
    let ranks = &answer.next_hubs[1].ranks;
    let mut degrees = vec![Vec::new(); 5];
    simulate(&counts, &forces, RUNS, &[200.0], |_, _, network| {
        let then = network.degree_counts().unwrap();
        for (r, own) in degrees.iter_mut().enumerate() {
            own.push(then.degree_of_rank(r as u64 + 1).unwrap() as f64);
        }
    });
    for (rank, seen) in ranks.iter().zip(&degrees) {
        let mean = seen.iter().sum::<f64>() / RUNS as f64;
        let deviation = (seen.iter().map(|d| (d - mean).powi(2)).sum::<f64>() / RUNS as f64).sqrt();
        eprintln!(
            "rank {}: now {:?} expected {:.2} seen {mean:.2} ± {:.2}; median {} {:?}",
            rank.rank,
            rank.now,
            rank.expected,
            deviation / (RUNS as f64).sqrt(),
            rank.median,
            rank.intervals
        );
        assert!((rank.expected - mean).abs() < 4.0 * deviation / (RUNS as f64).sqrt() + 0.002 * mean);
        for interval in &rank.intervals {
            let inside = share_inside(seen, interval.low, interval.high);
            assert!(
                (inside - interval.level).abs() < 0.07,
                "rank {}: {inside} inside at {}",
                rank.rank,
                interval.level
            );
        }
    }
}

/// Ranks beyond the nodes there are belong to nobody, also where every node is nearly certain to be past a degree.
#[test]
fn there_are_no_more_hubs_than_nodes() {
    let counts = DegreeCounts::from_pairs(&[(1_000, 60)]).unwrap();
    let still = forces(0.7).with_losses(0.0, 1e-6).unwrap().with_arrivals(ArrivalPlan::none());
    let questions = Questions { next_hubs: 80, ..Questions::default() };
    let ranks = ask(&counts, &still, &[60], &[1.0], questions).next_hubs.remove(0).ranks;
    assert!(ranks[59].expected > 990.0 && ranks[60].expected == 0.0, "{:?} {:?}", ranks[59], ranks[60]);
}
