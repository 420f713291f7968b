#![no_main]
//! The bodies of everything that is kept with a network: read, or refused with a problem of the reader's own.

use std::sync::LazyLock;

use libfuzzer_sys::fuzz_target;
use tailcast::api::{
    read_backtest, read_json, read_kept_change, read_kept_limit, read_link_events, read_network, read_network_fit,
    read_network_forecast, read_notice, read_snapshot, read_source, read_transitions,
};
use tailcast::config::{Config, LimitsConfig};
use tailcast::model::{DegreeCounts, DegreeKind, Evidence, Snapshot};

static LIMITS: LazyLock<LimitsConfig> =
    LazyLock::new(|| Config::from_sources(None, std::iter::empty()).expect("the defaults").limits);

fuzz_target!(|data: &[u8]| {
    let Some((&which, body)) = data.split_first() else { return };
    let limits = &*LIMITS;
    let day = |text: &str| text.parse::<jiff::Timestamp>().expect("a date");
    let (from, to) = (day("2026-05-01T00:00:00Z"), day("2026-06-01T00:00:00Z"));
    let counts = DegreeCounts::from_pairs(&[(0, 70), (3, 20), (12, 4)]).expect("sound counts");
    let evidence = || {
        let snapshot = Snapshot { as_of: to, counts: counts.clone() };
        Evidence::new(DegreeKind::Received, vec![snapshot], None).expect("a snapshot")
    };
    let read = match which % 11 {
        0 => read_json(body, |raw, faults| read_network(raw, limits, faults)).map(drop),
        1 => read_json(body, |raw, faults| read_snapshot(raw, to, limits, faults)).map(drop),
        2 => read_json(body, |raw, faults| read_transitions(raw, (from, to), limits, faults)).map(drop),
        3 => read_json(body, |raw, faults| read_link_events(raw, limits, faults)).map(drop),
        4 => read_json(body, |raw, faults| read_network_fit(raw, evidence(), faults)).map(drop),
        5 => read_json(body, |raw, faults| read_network_forecast(raw, evidence(), (None, Vec::new()), limits, faults))
            .map(drop),
        6 => read_json(body, |raw, faults| read_backtest(raw, None, 9, limits, faults)).map(drop),
        7 => read_json(body, |raw, faults| read_kept_limit(raw, "hubs".to_owned(), faults)).map(drop),
        8 => read_json(body, |raw, faults| read_kept_change(raw, faults)).map(drop),
        9 => read_json(body, |raw, faults| read_notice(raw, faults)).map(drop),
        _ => read_json(body, |raw, faults| read_source(raw, faults)).map(drop),
    };
    if let Err(refused) = read {
        let problem = refused.into_problem();
        assert!(["malformed_json", "invalid_request"].contains(&problem.code()), "{problem:?}");
    }
});
