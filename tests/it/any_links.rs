//! Whatever bytes come as a link list, reading them ends in a sound tally or in an error.
//!
//! The fuzz targets drive the same functions without bounds; here the bytes are seeded and few.

use std::collections::BTreeSet;
use std::io::Write;

use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use tailcast::ingest::{FaultPolicy, IngestError, LinkListPlan, count_links};
use tailcast::model::{DegreeCounts, DegreeKind};

use crate::link_lists::{Dribble, count};

/// One piece of a list: sound lines, faults, and bytes that mean something to one reader or another.
fn piece() -> impl Strategy<Value = Vec<u8>> {
    let sound = (0u32..40, 0u8..20, 0u8..20).prop_map(|(time, source, target)| format!("{time},{source},{target}\n"));
    let json = (0u32..40, 0u8..20, 0u8..20).prop_map(|(time, source, target)| {
        format!("{{\"time\":{time},\"source\":{source},\"target\":\"{target}\"}}\n")
    });
    let sharp = prop::sample::select(vec![
        "time,source,target\n",
        "\"",
        "\n",
        "\r\n",
        ",",
        "{",
        "}",
        "\"\"",
        "\u{feff}",
        "2026-01-01T00:00:00Z",
        "2026-01-01T00:00:60.5Z",
        "-9999-01-01",
        "99999999999999999999999",
        "-0.5,\"a\"\"b\",\"c\nd\"\n",
        "{\"time\":1e308,\"source\":-1,\"target\":null}\n",
        "{\"time\":-1.5,\"source\":-1,\"target\":\"\\ud800\"}\n",
        "\u{1f}\u{8b}",
    ]);
    prop_oneof![
        6 => sound.prop_map(String::into_bytes),
        3 => json.prop_map(String::into_bytes),
        3 => sharp.prop_map(|text| text.as_bytes().to_vec()),
        1 => prop::collection::vec(any::<u8>(), 0..12),
    ]
}

fn bytes() -> impl Strategy<Value = Vec<u8>> {
    let start = prop::sample::select(vec![
        "",
        "time,source,target\n",
        "target,time,x,source\n",
        "{\"time\":0,\"source\":1,\"target\":2}\n",
    ]);
    (start, prop::collection::vec(piece(), 0..60))
        .prop_map(|(start, pieces)| [start.as_bytes().to_vec(), pieces.concat()].concat())
}

fn check(bytes: &[u8]) -> Result<(), TestCaseError> {
    for kind in [DegreeKind::Received, DegreeKind::Total] {
        let counted = |faults, every| {
            let plan = LinkListPlan { kind, every, faults, link_events: true };
            count_links(bytes, &plan, &mut |_| std::ops::ControlFlow::Continue(()))
        };
        let skipped = counted(FaultPolicy::Skip, None);
        let strict = counted(FaultPolicy::Refuse, None);
        match (skipped, strict) {
            (Ok((tally, report)), strict) => {
                prop_assert_eq!(report.lines, report.links + report.faults());
                prop_assert_eq!(report.links, tally.links);
                let counts = &tally.snapshots[0].counts;
                let ends = if kind == DegreeKind::Total { 2 } else { 1 };
                prop_assert_eq!(counts.link_ends(), u128::from(ends * report.links));
                prop_assert!(counts.nodes() <= 2 * report.links);
                match strict {
                    Ok((strict_tally, _)) => {
                        prop_assert_eq!(report.faults(), 0);
                        prop_assert_eq!(&strict_tally, &tally);
                    }
                    Err(IngestError::Faulty { line, .. }) => {
                        let listed = [&report.malformed, &report.out_of_order, &report.repeated, &report.self_links];
                        let first = listed.iter().filter_map(|lines| lines.first.first()).map(|(line, _)| *line).min();
                        prop_assert_eq!(first, Some(line));
                    }
                    Err(error) => prop_assert!(false, "{}", error),
                }
                let evidence = tally.into_evidence();
                prop_assert!(evidence.is_ok(), "{:?}", evidence);
            }
            (Err(error), strict) => {
                prop_assert!(!error.to_string().is_empty());
                prop_assert!(strict.is_err(), "what cannot be counted with skipping cannot be counted without");
            }
        }
        if let Ok((tally, _)) = counted(FaultPolicy::Skip, "PT7S".parse().ok()) {
            let evidence = tally.into_evidence();
            prop_assert!(evidence.is_ok(), "{:?}", evidence);
        }
    }
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig {
        rng_seed: RngSeed::Fixed(20_260_601),
        failure_persistence: None,
        ..ProptestConfig::with_cases(3_000)
    })]

    #[test]
    fn any_bytes_are_counted_or_refused(bytes in bytes()) {
        check(&bytes)?;
    }

    #[test]
    fn any_bytes_read_the_same_in_any_portions(bytes in bytes(), portion in 1usize..9) {
        let whole = count(bytes.as_slice(), FaultPolicy::Skip).map_err(|error| error.to_string());
        let pieces = count(Dribble(&bytes, portion), FaultPolicy::Skip).map_err(|error| error.to_string());
        prop_assert_eq!(whole, pieces);
    }

    #[test]
    fn damaged_gzip_is_counted_or_refused(
        bytes in bytes(), damage in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 0..4), cut in any::<prop::sample::Index>(),
    ) {
        let mut encoder = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
        encoder.write_all(&bytes).unwrap();
        let mut packed = encoder.finish().unwrap();
        let sound = count(packed.as_slice(), FaultPolicy::Skip).map_err(|error| error.to_string());
        prop_assert_eq!(sound, count(bytes.as_slice(), FaultPolicy::Skip).map_err(|error| error.to_string()));
        for (place, value) in &damage {
            let place = place.index(packed.len());
            packed[place] = *value;
        }
        check(&packed)?;
        packed.truncate(cut.index(packed.len()));
        check(&packed)?;
    }

    /// Fields as the csv crate writes them are the fields read.
    #[test]
    fn any_identifier_survives_quoting(names in prop::collection::btree_set(prop::collection::vec(any::<u8>(), 1..6), 2..12)) {
        // A carriage return at the end of a line is part of the end of the line.
        let names: Vec<Vec<u8>> = names.into_iter().filter(|name| !name.contains(&b'\r')).collect();
        prop_assume!(names.len() >= 2);
        let mut writer = csv::Writer::from_writer(Vec::new());
        writer.write_record(["time", "source", "target"]).unwrap();
        for (i, pair) in names.windows(2).enumerate() {
            writer.write_record([i.to_string().as_bytes(), pair[1].as_slice(), pair[0].as_slice()]).unwrap();
        }
        let list = writer.into_inner().unwrap();
        let (tally, _) = count(list.as_slice(), FaultPolicy::Refuse).map_err(|error| TestCaseError::fail(error.to_string()))?;
        let distinct = names.iter().collect::<BTreeSet<_>>().len() as u64;
        prop_assert_eq!(tally.snapshots[0].counts.iter().collect::<Vec<_>>(), [(0, 1), (1, distinct - 1)]);
    }

    #[test]
    fn any_pairs_make_degree_counts_or_faults(pairs in prop::collection::vec((any::<u64>(), any::<u64>()), 0..20), small in any::<bool>()) {
        let pairs: Vec<(u64, u64)> = if small { pairs.iter().map(|&(k, n)| (k % 30, n % 30)).collect() } else { pairs };
        match DegreeCounts::from_pairs(&pairs) {
            Ok(counts) => {
                prop_assert_eq!(counts.nodes(), pairs.iter().map(|pair| pair.1).sum::<u64>());
                prop_assert_eq!(counts.tail_size(0), counts.nodes());
                prop_assert_eq!(counts.tail_size(counts.largest() + 1), 0);
            }
            Err(faults) => prop_assert!(faults.iter().all(|fault| !fault.to_string().is_empty()) && !faults.is_empty()),
        }
    }
}
