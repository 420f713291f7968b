//! The pooled forecast: its parts, its record on a real network, and networks that no attachment law fits.

use tailcast::evaluate::{
    Growth, Judged, LawSizes, Member, OriginRecord, Outlook, RecordPlan, Step, Target, Totals, Trend, pooled_size,
    record, replay, score_table,
};
use tailcast::fit::{FitRequest, Model};
use tailcast::forecast::CountLaw;
use tailcast::model::{DegreeKind, Evidence, Snapshot};

use crate::real;
use crate::worlds::{HARD, Kind, MIXED, history};

const THRESHOLDS: [u64; 6] = [5, 10, 20, 50, 100, 200];

fn records(snapshots: &[Snapshot]) -> Vec<OriginRecord> {
    let evidence = Evidence::new(DegreeKind::Received, snapshots.to_vec(), None).unwrap();
    let plan = RecordPlan { thresholds: THRESHOLDS.to_vec(), ahead: 3, expected: false, fit: FitRequest::default() };
    (1..snapshots.len() - 1).map(|origin| record(&evidence, origin, &plan, &|| false).unwrap()).collect()
}

fn size_at(snapshots: &[Snapshot], date: jiff::Timestamp, threshold: u64) -> Option<f64> {
    let found = snapshots.iter().find(|snapshot| snapshot.as_of == date)?;
    Some(found.counts.tail_size(threshold) as f64)
}

#[test]
fn trends_carry_the_last_step_forward() {
    let totals = |day, nodes, link_ends| Totals { day, nodes, link_ends };
    let step =
        Step { before: totals(-10.0, 100.0, 300.0), now: totals(0.0, 200.0, 700.0), size_before: 20.0, size: 50.0 };
    let ahead = totals(5.0, 250.0, 1_100.0);
    assert_eq!(Trend::PerArrival.size(&step, &ahead), 65.0);
    assert_eq!(Trend::PerLink.size(&step, &ahead), 80.0);
    assert_eq!(Trend::PerDay.size(&step, &ahead), 65.0);
    let power = (2.5f64).ln() / 2f64.ln();
    assert!((Trend::LogNodes.size(&step, &ahead) - 50.0 * 1.25f64.powf(power)).abs() < 1e-9);
    // A network that stood still has no trend; a tail never falls below nothing.
    let still = Step { before: step.now, ..step };
    assert_eq!(Trend::PerArrival.size(&still, &ahead), 50.0);
    let shrinking = Step { size_before: 200.0, ..step };
    assert_eq!(Trend::PerLink.size(&shrinking, &ahead), 0.0);
}

/// A record by hand: one threshold, the uniform law says `uniform` and the mix says `mix` of the next date.
fn by_hand(day: i64, uniform: f64, mix: f64) -> OriginRecord {
    let date = |day: i64| jiff::Timestamp::from_second(86_400 * day).unwrap();
    let law = |mean| Some(LawSizes { mean: vec![mean], kept: vec![100.0], variance: vec![10.0] });
    let target =
        Target { date: date(day + 1), ahead: 1.0, growth: Growth::Known, totals: (2_000.0, 6_000.0), rates: None };
    OriginRecord {
        as_of: date(day),
        thresholds: vec![5],
        totals: (
            Totals { day: -1.0, nodes: 1_000.0, link_ends: 3_000.0 },
            Totals { day: 0.0, nodes: 1_500.0, link_ends: 4_500.0 },
        ),
        sizes: vec![(100.0, 150.0)],
        lossless: true,
        models: vec![Model::Uniform, Model::Mix],
        hindsight: vec![law(150.0), law(150.0)],
        outlooks: vec![Outlook { target, laws: vec![law(uniform), law(mix)] }],
    }
}

#[test]
fn the_member_that_was_right_gets_the_weight() {
    let observed = |_: jiff::Timestamp, _: u64| Some(200.0);
    let past: Vec<OriginRecord> = (0..6).map(|day| by_hand(day, 300.0, 201.0)).collect();
    let weights = replay(&past, &observed).pool(&by_hand(6, 300.0, 201.0), 1.0);
    let weight = |member| weights.shares.iter().find(|share| share.member == member).map_or(0.0, |share| share.weight);
    assert_eq!(weights.scored, 6);
    assert!(weight(Member::Mechanism(Model::Mix)) > 10.0 * weight(Member::Mechanism(Model::Uniform)));
    let total: f64 = weights.shares.iter().map(|share| share.weight).sum();
    assert!((total - 1.0).abs() < 1e-12);
    // Geometric: between the members, and scaled as they are.
    let sizes = [(Member::Mechanism(Model::Mix), 100.0), (Member::Trend(Trend::PerArrival), 400.0)];
    let middle = pooled_size(&weights, &sizes).unwrap();
    assert!(middle > 100.0 && middle < 400.0);
    let doubled = sizes.map(|(member, size)| (member, 2.0 * size));
    assert!((pooled_size(&weights, &doubled).unwrap() / middle - 2.0).abs() < 1e-12);
}

#[test]
fn a_replay_knows_nothing_of_what_came_later() {
    let snapshots = history(Kind::DriftingMix, 6, 3);
    let all = records(&snapshots);
    let observed = |date, threshold| size_at(&snapshots, date, threshold);
    let whole = replay(&all, &observed).cases;
    for known in 1..all.len() {
        let part = replay(&all[..known], &observed).cases;
        assert_eq!(part, whole[..part.len()]);
    }
}

/// Data: the answers-to-questions network of a question-and-answer site (examples/data/answers; Paranjape, Benson & Leskovec 2017).
#[test]
fn on_the_answers_network_the_pool_misses_by_three_quarters_of_the_best_trend_at_most() {
    let snapshots = real::snapshots("answers");
    let cases = replay(&records(&snapshots), &|date, threshold| size_at(&snapshots, date, threshold)).cases;
    let table = score_table(&cases, Judged::Mechanism, &[0.5, 0.9]);
    let all: Vec<_> = table.iter().filter(|row| row.threshold.is_none()).collect();
    assert_eq!(all.len(), 3);
    for row in all {
        assert!(row.scores.skill.unwrap() >= 0.25, "{} ahead: {:?}", row.ahead, row.scores.skill);
        assert!(row.scores.crps_skill.unwrap() > 0.0);
        let wide = row.scores.coverage[1].1.share().unwrap();
        assert!((0.85..=0.95).contains(&wide), "{} ahead: {wide}", row.ahead);
    }
}

#[test]
fn where_no_law_of_attachment_fits_the_pool_is_about_as_good_as_the_best_trend() {
    for kind in HARD {
        let snapshots = history(kind, 7, 11);
        let cases = replay(&records(&snapshots), &|date, threshold| size_at(&snapshots, date, threshold)).cases;
        for row in score_table(&cases, Judged::Mechanism, &[0.9]).iter().filter(|row| row.threshold.is_none()) {
            let ratio = 1.0 - row.scores.skill.unwrap();
            assert!(ratio <= 1.1, "{kind:?}, {} ahead: {ratio}", row.ahead);
        }
    }
}

#[test]
fn intervals_of_few_nodes_cover_about_their_level() {
    // Mean coverage over Poisson laws of 2 to 40 nodes, by their exact probabilities.
    for (level, low, high) in [(0.5, 0.47, 0.58), (0.9, 0.88, 0.93)] {
        let mut sum = 0.0;
        let means: Vec<f64> = (0..77).map(|i| 2.0 + 0.5 * f64::from(i)).collect();
        for &mean in &means {
            let law = CountLaw::new(0.0, mean, mean);
            let interval = law.intervals(&[level])[0];
            let median = law.quantile(0.5);
            assert!(interval.low <= median && median <= interval.high);
            let mut probability = (-mean).exp();
            for count in 0..200 {
                let inside = interval.low <= f64::from(count) && f64::from(count) <= interval.high;
                sum += if inside { probability } else { 0.0 };
                probability *= mean / f64::from(count + 1);
            }
        }
        let mean = sum / means.len() as f64;
        assert!(mean > low && mean < high, "{level}: {mean}");
    }
    // What is known of the variance from few misses widens the higher levels more.
    let known = CountLaw::new(0.0, 1_000.0, 4_000.0);
    let vague = known.with_degrees_of_freedom(4.0);
    let width = |law: CountLaw, level| law.intervals(&[level])[0].high - law.intervals(&[level])[0].low;
    let (half, most) = (width(vague, 0.5) / width(known, 0.5), width(vague, 0.9) / width(known, 0.9));
    // Student's t with 4 degrees of freedom over the normal law, handbook tables: 0.741/0.674 and 2.132/1.645.
    assert!((half - 1.099).abs() < 0.03 && (most - 1.296).abs() < 0.03, "{half} {most}");
}

/// The small version of `studies/pool_record.rs`, which has 400 networks.
#[test]
fn on_networks_of_mixed_kinds_intervals_cover_about_their_level() {
    let mut cases = Vec::new();
    for (seed, kind) in MIXED.into_iter().enumerate() {
        let snapshots = history(kind, 6, seed as u64);
        cases.extend(replay(&records(&snapshots), &|date, threshold| size_at(&snapshots, date, threshold)).cases);
    }
    for row in score_table(&cases, Judged::Mechanism, &[0.5, 0.9]).iter().filter(|row| row.threshold.is_none()) {
        let inside = |i: usize| row.scores.coverage[i].1.share().unwrap();
        assert!((0.40..=0.72).contains(&inside(0)), "{} ahead: {}", row.ahead, inside(0));
        assert!((0.83..=0.99).contains(&inside(1)), "{} ahead: {}", row.ahead, inside(1));
        assert!(row.scores.skill.unwrap() > 0.0);
    }
}
