#![no_main]
//! A fit and a forecast from any valid evidence and plan: finite, ordered, monotone in the threshold, or an error in words.

use std::time::Instant;

use arbitrary::Arbitrary;
use jiff::{SignedDuration, Timestamp};
use libfuzzer_sys::fuzz_target;
use tailcast::evaluate::{OriginRequest, answer};
use tailcast::fit::{FitRequest, Fixed, Rung};
use tailcast::forecast::CountForecast;
use tailcast::model::{
    ArrivalPlan, ArrivalSegment, AttachmentMix, DegreeCounts, DegreeKind, Evidence, ForecastPlan, Levels, MAX_DEGREE,
    Move, Snapshot, Thresholds, Transitions,
};

/// What the caller allows, and what an answer or a stop may take at most; the second is far above what stopping takes,
/// for a build with checks and counters is many times slower than the service.
const BUDGET_SECONDS: u64 = 2;
const LONGEST_SECONDS: u64 = 60;

#[derive(Arbitrary, Debug)]
struct Asked {
    snapshots: Vec<Vec<(u64, u64)>>,
    gaps: Vec<u16>,
    moves: Vec<(Option<u16>, Option<u16>, u16)>,
    rung: Option<u8>,
    total: bool,
    fixed: Option<u16>,
    own: Option<(u8, u16)>,
    segments: Vec<(u16, u32, i8)>,
    links: Option<u16>,
    per_node: u16,
    losses: Option<(u16, u16)>,
    thresholds: Vec<u64>,
    dates: Vec<u16>,
}

fn request(asked: &Asked) -> Option<OriginRequest> {
    let start: Timestamp = "2026-01-01T00:00:00Z".parse().ok()?;
    let after = |from: Timestamp, hours: u16| from + SignedDuration::from_hours(1 + i64::from(hours));
    let kind = if asked.total { DegreeKind::Total } else { DegreeKind::Received };
    let mut as_of = start;
    let mut snapshots = Vec::new();
    for (index, pairs) in asked.snapshots.iter().take(4).enumerate() {
        // Small degrees and counts mostly; a few of any size.
        let near = |value: u64| if value % 7 == 0 { value >> 11 } else { value % 60 };
        let mut pairs: Vec<(u64, u64)> = pairs.iter().take(16).map(|&(k, n)| (near(k), near(n))).collect();
        pairs.sort_unstable();
        pairs.dedup_by_key(|pair| pair.0);
        snapshots.push(Snapshot { as_of, counts: DegreeCounts::from_pairs(&pairs).ok()? });
        as_of = after(as_of, asked.gaps.get(index).copied().unwrap_or(700));
    }
    let mut transitions = Vec::new();
    if !asked.moves.is_empty() {
        let mut moves: Vec<Move> = Vec::new();
        for &(before, after, nodes) in asked.moves.iter().take(24) {
            let near = |degree: Option<u16>| degree.map(|k| u64::from(if k % 5 == 0 { k } else { k % 12 }));
            let row = Move { before: near(before), after: near(after), nodes: u64::from(nodes) };
            if moves.iter().all(|other| (other.before, other.after) != (row.before, row.after)) {
                moves.push(row);
            }
        }
        let table = Transitions::new(start, after(start, asked.gaps.first().copied().unwrap_or(700)), &moves).ok()?;
        snapshots = vec![Snapshot { as_of: table.to(), counts: table.counts_after()? }];
        transitions.push(table);
    }
    let evidence = Evidence::new(kind, snapshots, None).ok()?.with_transitions(transitions).ok()?;
    let as_of = evidence.latest().as_of;
    let segments: Vec<ArrivalSegment> = asked
        .segments
        .iter()
        .take(4)
        .enumerate()
        .map(|(index, &(days, per_day, growth))| ArrivalSegment {
            from_day: if index == 0 { 0.0 } else { index as f64 * 1e4 + f64::from(days) },
            per_day: f64::from(per_day) / 1_000.0,
            growth_per_year: f64::from(growth) / 129.0,
        })
        .collect();
    let part = |value: u16| f64::from(value) / f64::from(u16::MAX);
    let mut fixed = Fixed { mix: asked.fixed.and_then(|p| AttachmentMix::new(part(p))), ..Fixed::default() };
    match asked.own.map(|(which, value)| (which % 3, part(value))) {
        Some((0, value)) => fixed.kernel_exponent = Some(2.0 * value),
        Some((1, value)) => fixed.dormant_share = Some(0.99 * value),
        Some((_, value)) => fixed.growth_variance = Some(6.0 * value),
        None => {}
    }
    let dates: Vec<Timestamp> = asked.dates.iter().take(6).map(|&hours| after(as_of, hours)).collect();
    let thresholds: Vec<u64> =
        asked.thresholds.iter().take(8).map(|&j| if j % 5 == 0 { j % MAX_DEGREE + 1 } else { j % 200 + 1 }).collect();
    Some(OriginRequest {
        questions: Default::default(),
        evidence,
        fit: FitRequest {
            rung: asked.rung.and_then(|rung| Rung::READ.get(usize::from(rung)).copied()),
            fixed,
            links_per_arrival: asked.links.map(|links| f64::from(links) / 256.0),
            links_per_node_day: part(asked.per_node) * part(asked.per_node),
            departures_per_node_day: asked.losses.map(|losses| part(losses.0) * part(losses.0)),
            link_losses_per_link_day: asked.losses.map(|losses| part(losses.1) * part(losses.1)),
            ..FitRequest::default()
        },
        arrivals: if segments.is_empty() { None } else { Some(ArrivalPlan::from_segments(&segments).ok()?) },
        plan: ForecastPlan::new(as_of, Thresholds::new(&thresholds).ok()?, &dates, Levels::default()).ok()?,
    })
}

fn check(count: &CountForecast) {
    assert!(count.expected.is_finite() && count.expected >= 0.0, "{count:?}");
    assert!(count.median.is_finite() && count.median >= 0.0, "{count:?}");
    assert!(count.intervals.iter().all(|i| i.low.is_finite() && i.high.is_finite() && i.low <= i.high), "{count:?}");
    // A wider level holds the narrower, and each the median.
    assert!(
        count.intervals.windows(2).all(|pair| pair[1].low <= pair[0].low && pair[0].high <= pair[1].high),
        "{count:?}"
    );
    assert!(count.intervals.iter().all(|i| i.low <= count.median && count.median <= i.high), "{count:?}");
}

fuzz_target!(|asked: Asked| {
    let Some(request) = request(&asked) else { return };
    let clock = Instant::now();
    let result = answer(&request, &|| clock.elapsed().as_secs() >= BUDGET_SECONDS);
    assert!(clock.elapsed().as_secs() < LONGEST_SECONDS, "took {:?}", clock.elapsed());
    let answer = match result {
        Ok(answer) => answer,
        Err(error) => return assert!(!error.to_string().is_empty()),
    };
    let share = &answer.fit.preferential_share;
    assert!((0.0..=1.0).contains(&share.value), "{share:?}");
    assert!(share.interval.is_none_or(|i| 0.0 <= i.low && i.low <= i.high && i.high <= 1.0), "{share:?}");
    assert!(answer.fit.candidates.iter().all(|c| c.aic.is_finite() && (0.0..=1.0).contains(&c.weight)));
    for at in &answer.forecast {
        check(&at.nodes);
        check(&at.links);
        assert!(at.largest_degree.median.is_finite() && at.largest_degree.median >= 0.0, "{:?}", at.largest_degree);
        let mut larger = &at.nodes;
        for tail in &at.tail {
            check(&tail.size);
            assert!(tail.size.expected <= larger.expected * (1.0 + 1e-6), "{larger:?} {tail:?}");
            assert!(tail.size.median <= larger.median, "{larger:?} {tail:?}");
            assert!(
                tail.size.intervals.iter().zip(&larger.intervals).all(|(i, o)| i.high <= o.high),
                "{larger:?} {tail:?}"
            );
            larger = &tail.size;
        }
    }
});
