#![no_main]
//! The body of a forecast: read, or refused with a problem of the reader's own.

use std::sync::LazyLock;

use libfuzzer_sys::fuzz_target;
use tailcast::api::{read_fit, read_forecast, read_json};
use tailcast::config::{Config, LimitsConfig};

static LIMITS: LazyLock<LimitsConfig> =
    LazyLock::new(|| Config::from_sources(None, std::iter::empty()).expect("the defaults").limits);

fuzz_target!(|data: &[u8]| {
    let forecast = read_json(data, |raw, faults| read_forecast(raw, &LIMITS, faults)).map(drop);
    let fit = read_json(data, |raw, faults| read_fit(raw, &LIMITS, faults)).map(drop);
    for refused in [forecast, fit].into_iter().filter_map(Result::err) {
        let problem = refused.into_problem();
        assert!(["malformed_json", "invalid_request"].contains(&problem.code()), "{problem:?}");
    }
});
