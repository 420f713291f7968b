//! The census of a link list, against what a plain recount of the same list says.

use std::collections::{BTreeMap, BTreeSet};

use jiff::{Span, Timestamp};
use proptest::prelude::*;
use tailcast::census::{Census, CensusError, Tally, Verdict};
use tailcast::model::{AttachmentCell, DegreeKind, Move};

const KINDS: [DegreeKind; 2] = [DegreeKind::Received, DegreeKind::Total];

fn second(seconds: i64) -> Timestamp {
    Timestamp::from_second(1_767_225_600 + seconds).unwrap()
}

fn census(kind: DegreeKind, every: Option<Span>, links: &[(i64, u32, u32)]) -> Tally {
    let mut census = Census::new(kind, every);
    for &(time, source, target) in links {
        assert_eq!(census.record(second(time), source, target).unwrap(), Verdict::Counted);
    }
    census.finish().unwrap()
}

fn counts(tally: &Tally, index: usize) -> Vec<(u64, u64)> {
    tally.snapshots[index].counts.iter().collect()
}

#[test]
fn a_small_list_by_hand() {
    // t = 0: nodes 0 and 1 arrive, 1 with one end. t = 5: node 2 arrives linking to 1 (degree 1 before, N = 2, K = 1:
    // r = 2). t = 9: node 3 arrives linking to 0 (degree 0: r = 0) and to 1 (degree 2, N = 3, K = 3: r = 2).
    let links = [(0, 0, 1), (5, 2, 1), (9, 3, 0), (9, 3, 1)];
    let tally = census(DegreeKind::Received, None, &links);
    assert_eq!(tally.links, 4);
    assert_eq!(tally.snapshots.len(), 1);
    assert_eq!(tally.snapshots[0].as_of, second(9));
    assert_eq!(counts(&tally, 0), [(0, 2), (1, 1), (3, 1)]);
    let events = tally.link_events.unwrap();
    let ratios: Vec<_> = events.ratios().iter().map(|class| (class.ratio, class.variance, class.landings)).collect();
    assert_eq!(ratios, [(0.0, 0.0, 1), (2.0, 0.0, 2)]);
    // Every landing lets K grow by more than 3 %, so each is a stretch of its own.
    let cell = |degree, landings, nodes: f64| AttachmentCell {
        lowest: degree,
        highest: degree,
        landings,
        node_exposure: nodes,
        end_exposure: degree as f64 * nodes,
    };
    let windows: Vec<_> = events.windows().iter().map(|window| window.cells.clone()).collect();
    assert_eq!(
        windows,
        [
            vec![cell(0, 0, 1.0), cell(1, 1, 1.0)],
            vec![cell(0, 1, 2.0), cell(2, 0, 1.0)],
            vec![cell(0, 0, 1.0), cell(1, 0, 1.0), cell(2, 1, 1.0)],
        ]
    );
}

#[test]
fn with_total_degree_both_ends_count_and_newcomers_bring_theirs() {
    let tally = census(DegreeKind::Total, None, &[(0, 0, 1), (5, 2, 1), (7, 0, 2)]);
    assert_eq!(counts(&tally, 0), [(2, 3)]);
    let events = tally.link_events.unwrap();
    // Of the second link the end at node 1 is a landing (r = 1), the one at the newcomer 2 is not; of the third both
    // are, one after the other: r = 1·3/4, then 1·3/5 for K has grown by the first.
    let ratios: Vec<_> = events.ratios().iter().map(|class| (class.ratio, class.landings)).collect();
    assert_eq!(ratios, [(0.6, 1), (0.75, 1), (1.0, 1)]);
}

#[test]
fn ends_of_the_instant_of_arrival_are_entry_degree_not_landings() {
    // Node 1 is linked twice at its very arrival; nothing was there before.
    let tally = census(DegreeKind::Received, None, &[(0, 0, 1), (0, 2, 1), (0, 1, 0)]);
    assert_eq!(counts(&tally, 0), [(0, 1), (1, 1), (2, 1)]);
    assert_eq!(tally.link_events, None);
}

#[test]
fn faulty_links_leave_no_trace() {
    let mut census = Census::new(DegreeKind::Received, None);
    let clean = [(0, 0, 1), (5, 2, 1), (5, 2, 0)];
    let judged = [
        (0, 0, 1, Verdict::Counted),
        (9, 1, 1, Verdict::SelfLink),
        (5, 2, 1, Verdict::Counted),
        (4, 0, 1, Verdict::OutOfOrder),
        (5, 2, 1, Verdict::Repeated),
        (5, 2, 0, Verdict::Counted),
        (5, 2, 1, Verdict::Repeated),
    ];
    for (time, source, target, verdict) in judged {
        assert_eq!(census.record(second(time), source, target).unwrap(), verdict, "{time} {source} {target}");
    }
    assert_eq!(census.finish().unwrap(), self::census(DegreeKind::Received, None, &clean));
}

#[test]
fn the_same_pair_at_a_later_time_is_another_link() {
    let tally = census(DegreeKind::Received, None, &[(0, 0, 1), (1, 0, 1), (2, 0, 1)]);
    assert_eq!(counts(&tally, 0), [(0, 1), (3, 1)]);
}

#[test]
fn repeats_among_many_links_of_one_instant_are_found_and_memory_is_bounded() {
    let mut census = Census::new(DegreeKind::Received, None);
    // 1,000 nodes, each pair once: the first 66,536 (nodes and 2^16) and a few single ones are remembered.
    let mut counted = 0u64;
    assert_eq!(census.record(second(0), 0, 1).unwrap(), Verdict::Counted);
    for id in 2..1_000 {
        assert_eq!(census.record(second(0), 0, id).unwrap(), Verdict::Counted);
        assert_eq!(census.record(second(0), 0, id).unwrap(), Verdict::Repeated);
    }
    assert!(!census.repeats_unchecked());
    for source in 1..1_000 {
        for target in (0..1_000).filter(|&target| target != source) {
            counted += u64::from(census.record(second(0), source, target).unwrap() == Verdict::Counted);
        }
    }
    assert_eq!(counted, 999 * 999);
    assert!(census.repeats_unchecked());
    // Those remembered are still told, the others no longer.
    assert_eq!(census.record(second(0), 1, 0).unwrap(), Verdict::Repeated);
    assert_eq!(census.record(second(0), 999, 0).unwrap(), Verdict::Counted);
}

#[test]
fn numbers_out_of_order_and_an_empty_list_are_errors() {
    let mut census = Census::new(DegreeKind::Received, None);
    assert_eq!(census.record(second(0), 1, 0), Err(CensusError::Unnumbered(1)));
    assert_eq!(census.record(second(0), 0, 2), Err(CensusError::Unnumbered(2)));
    assert_eq!(census.nodes(), 0);
    assert_eq!(census.finish(), Err(CensusError::NoLink));
}

fn day(text: &str, hours: i64) -> (i64, Timestamp) {
    let time: Timestamp = format!("{text}T00:00:00Z").parse().unwrap();
    (time.as_second() - second(0).as_second() + 3_600 * hours, time)
}

fn dates(tally: &Tally) -> Vec<String> {
    tally.snapshots.iter().map(|snapshot| snapshot.as_of.to_string()).collect()
}

#[test]
fn snapshots_lie_on_calendar_boundaries_and_hold_the_links_of_their_very_time() {
    let month = "P1M".parse().unwrap();
    let links = [(day("2026-01-31", 9).0, 0, 1), (day("2026-02-28", 0).0, 2, 1), (day("2026-03-31", 0).0 + 1, 2, 0)];
    let tally = census(DegreeKind::Received, Some(month), &links);
    // One month after 31 January is 28 February, two months after it 31 March; one second more is no period of its own.
    assert_eq!(dates(&tally), ["2026-02-28T00:00:00Z", "2026-03-31T00:00:01Z"]);
    assert_eq!(counts(&tally, 0), [(0, 2), (2, 1)]);
    assert_eq!(counts(&tally, 1), [(0, 1), (1, 1), (2, 1)]);
    let rows = tally.transitions[0].moves().to_vec();
    let row = |before, after, nodes| Move { before: Some(before), after: Some(after), nodes };
    assert_eq!(rows, [row(0, 0, 1), row(0, 1, 1), row(2, 2, 1)]);
}

#[test]
fn a_short_last_period_is_one_with_the_one_before() {
    let week = "P7D".parse().unwrap();
    let last = |date: &str| {
        let links = [(day("2026-01-01", 9).0, 0, 1), (day("2026-01-12", 0).0, 2, 1), (day(date, 1).0, 3, 1)];
        dates(&census(DegreeKind::Received, Some(week), &links))
    };
    assert_eq!(last("2026-01-18"), ["2026-01-08T00:00:00Z", "2026-01-18T01:00:00Z"]);
    assert_eq!(last("2026-01-19"), ["2026-01-08T00:00:00Z", "2026-01-15T00:00:00Z", "2026-01-19T01:00:00Z"]);
    // Exactly on the boundary.
    let links = [(day("2026-01-01", 9).0, 0, 1), (day("2026-01-15", 0).0, 2, 1)];
    let tally = census(DegreeKind::Received, Some(week), &links);
    assert_eq!(dates(&tally), ["2026-01-08T00:00:00Z", "2026-01-15T00:00:00Z"]);
    // Not even one full period.
    let tally = census(DegreeKind::Received, Some(week), &links[..1]);
    assert_eq!(dates(&tally), ["2026-01-01T09:00:00Z"]);
}

#[test]
fn boundaries_before_the_first_link_have_no_snapshot() {
    let hour = "PT1H".parse().unwrap();
    let links = [(day("2026-01-01", 0).0 + 9_000, 0, 1), (day("2026-01-01", 5).0, 2, 1)];
    let tally = census(DegreeKind::Received, Some(hour), &links);
    assert_eq!(dates(&tally), ["2026-01-01T03:00:00Z", "2026-01-01T04:00:00Z", "2026-01-01T05:00:00Z"]);
    assert_eq!(tally.transitions.len(), 2);
}

#[test]
fn a_cadence_too_fine_is_refused_in_words() {
    for every in ["PT1S", "PT0.000000001S", "P1D"] {
        let mut census = Census::new(DegreeKind::Received, Some(every.parse().unwrap()));
        let ten_years = 3_653 * 86_400;
        census.record(second(0), 0, 1).unwrap();
        let error = census.record(second(ten_years), 2, 1).unwrap_err();
        let message = error.to_string();
        assert!(message.contains("more than 1000 snapshots") && message.contains("longer"), "{message}");
    }
}

/// A plain network: degrees by node, and nodes present, all recounted at need.
#[derive(Default)]
struct Recount {
    degrees: Vec<u64>,
    present: usize,
}

impl Recount {
    fn nodes_and_ends(&self) -> (u64, u64) {
        (self.present as u64, self.degrees[..self.present].iter().sum())
    }
}

/// Landings, node exposure and end exposure of a degree.
type ByDegree = BTreeMap<u64, (u64, u64, u64)>;

/// Landings and exposures of every degree, window by window, visiting every node at every landing.
fn recount(kind: DegreeKind, links: &[(i64, u32, u32)]) -> (Vec<ByDegree>, Vec<f64>) {
    let mut network = Recount::default();
    let (mut windows, mut ratios) = (Vec::new(), Vec::new());
    let mut window = ByDegree::new();
    let mut start = (0, 0);
    let mut now = i64::MIN;
    let grown = |start: (u64, u64), size: (u64, u64)| {
        size.0 as f64 >= 1.03 * start.0 as f64 && size.0 > start.0
            || size.1 as f64 >= 1.03 * start.1 as f64 && size.1 > start.1
    };
    for &(time, source, target) in links {
        if time != now {
            network.present = network.degrees.len();
            now = time;
            if grown(start, network.nodes_and_ends()) {
                windows.push(std::mem::take(&mut window));
                start = network.nodes_and_ends();
            }
        }
        let last = source.max(target) as usize + 1;
        network.degrees.resize(network.degrees.len().max(last), 0);
        let ends = if kind == DegreeKind::Total { vec![source, target] } else { vec![target] };
        for id in ends.into_iter().map(|id| id as usize) {
            if id < network.present {
                for &degree in &network.degrees[..network.present] {
                    let cell = window.entry(degree).or_default();
                    cell.1 += 1;
                    cell.2 += degree;
                }
                let degree = network.degrees[id];
                window.get_mut(&degree).unwrap().0 += 1;
                let (nodes, ends) = network.nodes_and_ends();
                ratios.push((degree * nodes) as f64 / ends as f64);
            }
            network.degrees[id] += 1;
            if id < network.present && grown(start, network.nodes_and_ends()) {
                windows.push(std::mem::take(&mut window));
                start = network.nodes_and_ends();
            }
        }
    }
    windows.push(window);
    windows.retain(|window| !window.is_empty());
    (windows, ratios)
}

/// Random growth: newcomers and nodes present link to hubs and to others; several links share an instant.
fn list() -> impl Strategy<Value = Vec<(i64, u32, u32)>> {
    let step = (0..3i64, 0..10u32, any::<prop::sample::Index>(), any::<prop::sample::Index>(), any::<bool>());
    prop::collection::vec(step, 1..400).prop_map(|steps| {
        let (mut links, mut nodes, mut time) = (vec![(0, 0, 1)], 2u32, 0);
        let mut seen = BTreeSet::from([(0, 0, 1)]);
        for (pause, kind, one, other, hub) in steps {
            time += pause * 20_000;
            let any = |index: &prop::sample::Index| index.index(nodes as usize) as u32;
            let source = if kind < 4 { nodes } else { any(&one) };
            // One of every few links goes to a hub, so that degrees reach the wide cells.
            let target = if kind == 9 {
                nodes.max(source + 1)
            } else if hub {
                any(&other) % 2
            } else {
                any(&other)
            };
            if source == target || !seen.insert((time, source, target)) {
                continue;
            }
            nodes = nodes.max(source + 1).max(target + 1);
            links.push((time, source, target));
        }
        links
    })
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::with_cases(150) })]

    #[test]
    fn exposures_and_ratios_are_those_of_a_recount(links in list(), kind in prop::sample::select(KINDS.to_vec())) {
        let tally = census(kind, None, &links);
        let (windows, ratios) = recount(kind, &links);
        let Some(events) = tally.link_events else {
            prop_assert!(ratios.is_empty());
            return Ok(());
        };
        prop_assert_eq!(events.landings(), ratios.len() as u64);
        let mean = ratios.iter().sum::<f64>() / ratios.len() as f64;
        let squares = ratios.iter().map(|r| r * r).sum::<f64>() / ratios.len() as f64;
        let of_classes = |value: &dyn Fn(f64, f64) -> f64| {
            events.ratios().iter().map(|c| c.landings as f64 * value(c.ratio, c.variance)).sum::<f64>() / ratios.len() as f64
        };
        prop_assert!((of_classes(&|ratio, _| ratio) - mean).abs() < 1e-12 * (1.0 + mean));
        prop_assert!((of_classes(&|ratio, variance| ratio * ratio + variance) - squares).abs() < 1e-12 * (1.0 + squares));
        prop_assert!(events.ratios().iter().all(|class| class.variance <= 1.6e-5 * class.ratio * class.ratio));
        prop_assert_eq!(events.windows().len(), windows.len());
        for (window, by_degree) in events.windows().iter().zip(&windows) {
            let mut found = 0;
            for cell in &window.cells {
                let inside = by_degree.range(cell.lowest..=cell.highest);
                let sums = inside.fold((0, 0, 0), |sums, (_, c)| {
                    found += 1;
                    (sums.0 + c.0, sums.1 + c.1, sums.2 + c.2)
                });
                prop_assert_eq!((cell.landings, cell.node_exposure, cell.end_exposure), (sums.0, sums.1 as f64, sums.2 as f64));
            }
            prop_assert_eq!(found, by_degree.len());
        }
    }

    #[test]
    fn snapshots_and_moves_make_evidence(links in list(), kind in prop::sample::select(KINDS.to_vec()), hours in 6i64..60) {
        let every = Span::new().hours(hours);
        let tally = census(kind, Some(every), &links);
        let without = census(kind, None, &links);
        prop_assert_eq!(&tally.link_events, &without.link_events);
        prop_assert_eq!(tally.snapshots.last(), without.snapshots.last());
        prop_assert_eq!(tally.transitions.len() + 1, tally.snapshots.len());
        for (table, pair) in tally.transitions.iter().zip(tally.snapshots.windows(2)) {
            prop_assert_eq!((table.from(), table.to()), (pair[0].as_of, pair[1].as_of));
        }
        for snapshot in &tally.snapshots {
            let so_far: Vec<_> = links.iter().copied().filter(|&(time, ..)| second(time) <= snapshot.as_of).collect();
            let alone = census(kind, None, &so_far);
            prop_assert_eq!(&alone.snapshots[0].counts, &snapshot.counts);
        }
        let evidence = tally.clone().into_evidence();
        prop_assert!(evidence.is_ok(), "{:?}", evidence);
    }
}

/// The chance that a landing picks one node or another under the attachment mix (Pennock et al. 2002) sums to one. In a
/// network of fixed size (nobody arrives after the first instant), N is known in every stretch and K grows by one a
/// landing, so exposures weighted by the true hazard, (1 − p)/N + p·k/K, add up to the landings: by the nodes exactly,
/// by the ends as nearly as K is constant over a stretch.
#[test]
fn exposures_weighted_by_the_hazard_add_up_to_the_landings() {
    let nodes = 200u32;
    let mut links: Vec<(i64, u32, u32)> = (1..nodes).map(|id| (0, 0, id)).collect();
    links.extend((1..20_000u32).map(|i| {
        let target = (i.wrapping_mul(2_654_435_761) >> 8) % nodes;
        (i64::from(i), (target + 1 + i % (nodes - 1)) % nodes, if i % 3 == 0 { target % 7 } else { target })
    }));
    links.retain(|&(_, source, target)| source != target);
    let events = census(DegreeKind::Received, None, &links).link_events.unwrap();
    let mut ends = f64::from(nodes - 1);
    for window in events.windows() {
        let landings: u64 = window.cells.iter().map(|cell| cell.landings).sum();
        let node_exposure: f64 = window.cells.iter().map(|cell| cell.node_exposure).sum();
        let node_share = node_exposure / f64::from(nodes);
        assert_eq!(node_share, landings as f64);
        // K runs from `ends` up to `ends + landings − 1` over the stretch.
        let end_exposure: f64 = window.cells.iter().map(|cell| cell.end_exposure).sum();
        let landings = landings as f64;
        assert_eq!(end_exposure, landings * ends + landings * (landings - 1.0) / 2.0);
        for share in [0.0, 0.3, 1.0] {
            let mean_ends = ends + (landings - 1.0) / 2.0;
            let hazard = (1.0 - share) * node_share + share * end_exposure / mean_ends;
            assert!((hazard - landings).abs() < 1e-9 * landings);
        }
        ends += landings;
    }
}
