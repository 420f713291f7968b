//! Latest forecasts as gauges, in the text form that Prometheus scrapes (exposition format 0.0.4).

use std::fmt::{Display, Write};

use crate::service::{
    ForecastGauges, IntervalAnswer, LimitGauges, NetworkGauges, RefreshState, TailAnswer, TailGauges,
};

const STATES: [RefreshState; 3] = [RefreshState::Refreshing, RefreshState::Current, RefreshState::Outdated];

/// The gauges; of none, only that they could not be read.
pub fn gauges_text(gauges: Option<&ForecastGauges>) -> String {
    let mut text = Families(String::new());
    text.family("tailcast_forecast_gauges_up", "1 when the gauges of forecasts could be read, 0 when they are missing");
    text.sample("tailcast_forecast_gauges_up", &[], u8::from(gauges.is_some()));
    let Some(ForecastGauges { networks, left_out }) = gauges else { return text.0 };
    let name = "tailcast_forecast_left_out";
    text.family(name, "Networks, thresholds and limits that the settings under metrics leave out");
    for (kind, count) in
        [("networks", left_out.networks), ("thresholds", left_out.thresholds), ("limits", left_out.limits)]
    {
        text.sample(name, &[("kind", &kind)], count);
    }
    forecasts(&mut text, networks);
    tails(&mut text, networks);
    limits(&mut text, networks);
    text.0
}

fn forecasts(text: &mut Families, networks: &[NetworkGauges]) {
    let name = "tailcast_forecast_state";
    text.family(name, "1 for the state of a network's latest forecast, 0 for the others");
    for network in networks {
        for state in STATES {
            let labels: Labels = &[("network", &network.network), ("state", &state.as_str())];
            text.sample(name, labels, u8::from(state == network.state));
        }
    }
    let name = "tailcast_forecast_made_timestamp_seconds";
    text.family(name, "When a network's latest forecast was made, seconds since 1970");
    for network in networks {
        text.sample(name, &[("network", &network.network)], network.made_at.as_millisecond() as f64 / 1000.0);
    }
    let name = "tailcast_forecast_date_timestamp_seconds";
    text.family(
        name,
        "The next date of a network's latest forecast that has not passed, and its last, seconds since 1970",
    );
    for network in networks {
        for (label, date) in [("next", network.next), ("last", network.last)] {
            if let Some(date) = date {
                text.sample(name, &[("network", &network.network), ("date", &label)], date.as_second());
            }
        }
    }
}

fn tails(text: &mut Families, networks: &[NetworkGauges]) {
    let all = || networks.iter().flat_map(|network| network.tails.iter().map(move |tail| (&network.network, tail)));
    text.family("tailcast_hubs", "Nodes with at least threshold links in a network's newest snapshot");
    for (network, tail) in all() {
        text.sample("tailcast_hubs", &[("network", network), ("threshold", &tail.threshold)], tail.now);
    }
    let name = "tailcast_forecast_hubs";
    text.family(
        name,
        "Nodes with at least threshold links that are expected at the next and the last date of the forecast",
    );
    for (network, tail) in all() {
        for (date, at) in dates(tail) {
            let labels: Labels = &[("network", network), ("threshold", &tail.threshold), ("date", &date)];
            text.sample(name, labels, at.expected.0);
        }
    }
    let ends: [Family<IntervalAnswer>; 2] = [
        ("tailcast_forecast_hubs_low", "Lower end of the interval with the greatest level", |interval| interval.low.0),
        ("tailcast_forecast_hubs_high", "Upper end of the interval with the greatest level", |interval| {
            interval.high.0
        }),
    ];
    for (name, help, end) in ends {
        text.family(name, help);
        for (network, tail) in all() {
            for (date, at) in dates(tail) {
                let Some(widest) = at.intervals.last() else { continue };
                let (threshold, level) = (&tail.threshold, &widest.level.0);
                let labels: Labels =
                    &[("network", network), ("threshold", threshold), ("date", &date), ("level", level)];
                text.sample(name, labels, end(widest));
            }
        }
    }
}

fn dates(tail: &TailGauges) -> impl Iterator<Item = (&'static str, &TailAnswer)> {
    tail.next.iter().map(|at| ("next", at)).chain([("last", &tail.last)])
}

fn limits(text: &mut Families, networks: &[NetworkGauges]) {
    let families: [Family<LimitGauges>; 3] = [
        ("tailcast_limit_risk", "Probability that a limit is passed by its date, 0 to 1", |limit| limit.risk),
        ("tailcast_limit_risk_allowed", "Probability of passing a limit that is put up with, 0 to 1", |limit| {
            limit.allowed
        }),
        ("tailcast_limit_headroom_nodes", "Nodes that a limit still has room for; negative when passed", |limit| {
            limit.headroom
        }),
    ];
    for (name, help, value) in families {
        text.family(name, help);
        for network in networks {
            for limit in &network.limits {
                text.sample(name, &[("network", &network.network), ("limit", &limit.name)], value(limit));
            }
        }
    }
}

/// Name and help of a family, and what its samples tell of a thing.
type Family<T> = (&'static str, &'static str, fn(&T) -> f64);

type Labels<'a> = &'a [(&'static str, &'a dyn Display)];

/// Families of samples, one after the other: all samples of a family stand together.
struct Families(String);

impl Families {
    fn family(&mut self, name: &str, help: &str) {
        // Writing to a String does not fail.
        let _ = writeln!(self.0, "# HELP {name} {help}\n# TYPE {name} gauge");
    }

    fn sample(&mut self, name: &str, labels: Labels, value: impl Display) {
        self.0.push_str(name);
        for (i, (label, told)) in labels.iter().enumerate() {
            let _ = write!(self.0, "{}{label}=\"{}\"", if i == 0 { '{' } else { ',' }, escaped(&told.to_string()));
        }
        let _ = writeln!(self.0, "{} {value}", if labels.is_empty() { "" } else { "}" });
    }
}

/// A label's value between quotes.
fn escaped(text: &str) -> String {
    text.replace('\\', "\\\\").replace('"', "\\\"").replace('\n', "\\n")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn labels_are_escaped_as_the_format_asks() {
        let mut text = Families(String::new());
        text.sample("a", &[("b", &"x\\y\"z\nw"), ("c", &2)], 0.5);
        text.sample("a", &[], 1e21);
        assert_eq!(text.0, "a{b=\"x\\\\y\\\"z\\nw\",c=\"2\"} 0.5\na 1000000000000000000000\n");
    }
}
