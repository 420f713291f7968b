//! Answers to what is asked besides the tails as CSV (RFC 4180), long form: one table each.

use super::csv::{percent, text, writer};
use crate::service::{
    AmountAnswer, BandsAnswer, DateAtAnswer, ForecastAnswer, IntervalAnswer, LimitAnswer, NextHubsAnswer, Real,
    ScenarioAnswer, WatchAnswer,
};

/// A table with its header; the levels of its intervals are those of the first one.
struct Table<'a> {
    answer: &'a ForecastAnswer,
    levels: Vec<f64>,
    rows: Vec<Vec<String>>,
}

impl<'a> Table<'a> {
    fn new(answer: &'a ForecastAnswer) -> Self {
        let intervals = answer.forecast.first().map(|at| at.nodes.intervals.as_slice()).unwrap_or_default();
        Self { answer, levels: intervals.iter().map(|interval| interval.level.0).collect(), rows: Vec::new() }
    }

    /// The table's text: before the columns `named` after come the intervals, then warnings and cautions.
    fn text(self, named: &[&str], after: &[&str]) -> Result<String, csv::Error> {
        let mut writer = writer();
        let bounds =
            self.levels.iter().flat_map(|&level| ["low", "high"].map(|end| format!("{end}_{}", percent(level))));
        let bounds: Vec<String> = if named.contains(&"expected") { bounds.collect() } else { Vec::new() };
        let owned = |names: &[&str]| names.iter().map(|&name| name.to_owned()).collect::<Vec<_>>();
        writer.write_record([owned(named), bounds, owned(after), owned(&["warnings", "cautions"])].concat())?;
        let warnings = self.answer.warnings.iter().map(|warning| warning.code.as_str()).collect::<Vec<_>>().join(" ");
        for (i, mut row) in self.rows.into_iter().enumerate() {
            let cautions = if i == 0 { self.answer.cautions.join(" ") } else { String::new() };
            row.extend([warnings.clone(), cautions]);
            writer.write_record(&row)?;
        }
        text(writer)
    }

    /// The ends of the intervals, blank where there are none.
    fn bounds(&self, intervals: &[IntervalAnswer]) -> Vec<String> {
        let ends =
            |i: usize| intervals.get(i).map(|at| [at.low.0.to_string(), at.high.0.to_string()]).unwrap_or_default();
        (0..self.levels.len()).flat_map(ends).collect()
    }

    fn amount(&self, amount: &AmountAnswer) -> Vec<String> {
        [vec![amount.expected.0.to_string()], self.bounds(&amount.intervals)].concat()
    }
}

/// One row a limit and date, the verdict on the first of each limit.
pub fn limits_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
    let mut table = Table::new(answer);
    answer.limits.iter().for_each(|limit| table.rows.extend(limit_rows(limit)));
    table.text(
        &[
            "limit",
            "threshold",
            "max_nodes",
            "by",
            "risk",
            "now",
            "headroom",
            "date",
            "exceeding",
            "crossed",
            "crossing_5",
            "crossing_50",
            "crossing_95",
            "risk_reached",
            "days_left",
            "largest_arrivals_per_day",
            "largest_links_per_arrival",
            "verdict",
        ],
        &[],
    )
}

fn limit_rows(limit: &LimitAnswer) -> Vec<Vec<String>> {
    let crossing = |probability: f64| {
        let found = limit.crossing.iter().find(|at| at.probability.0 == probability);
        found.map(reached).unwrap_or_default()
    };
    let own = [
        limit.name.clone().unwrap_or_default(),
        limit.threshold.to_string(),
        limit.max_nodes.to_string(),
        limit.by.clone(),
        limit.risk.0.to_string(),
        limit.now.to_string(),
        limit.headroom.0.to_string(),
    ];
    let found = [
        crossing(0.05),
        crossing(0.5),
        crossing(0.95),
        reached(&limit.risk_reached),
        number(limit.days_left),
        number(limit.arrivals.rate),
        number(limit.links_per_arrival.rate),
    ];
    let row = |(i, at): (usize, &crate::service::LimitAtDateAnswer)| {
        let dated = [at.date.clone(), at.exceeding.0.to_string(), at.crossed.0.to_string()];
        let verdict = if i == 0 { limit.verdict.clone() } else { String::new() };
        [own.to_vec(), dated.to_vec(), found.to_vec(), vec![verdict]].concat()
    };
    limit.dates.iter().enumerate().map(row).collect()
}

/// One row a date and band, and one a date for all of them together.
pub fn bands_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
    let mut table = Table::new(answer);
    if let Some(bands) = &answer.bands {
        add_bands(&mut table, bands);
    }
    table.text(&["date", "band", "from", "to", "nodes", "links", "expected"], &["cost_unit"])
}

fn add_bands(table: &mut Table<'_>, bands: &BandsAnswer) {
    let unit = bands.cost_unit.clone().unwrap_or_default();
    for at in &bands.dates {
        for band in &at.bands {
            let to = band.to.map(|to| to.to_string()).unwrap_or_default();
            let own = [at.date.clone(), "band".to_owned(), band.from.to_string(), to];
            let held = [band.nodes.0.to_string(), band.links.0.to_string()];
            table.rows.push([own.to_vec(), held.to_vec(), table.amount(&band.cost), vec![unit.clone()]].concat());
        }
        let own = [at.date.clone(), "total".to_owned()].into_iter().chain(std::iter::repeat_n(String::new(), 4));
        table.rows.push([own.collect(), table.amount(&at.total), vec![unit.clone()]].concat());
    }
}

/// One row a node or class, date, threshold and quantity: a node's degree, probabilities that it passes a threshold, nodes of a class
/// that do.
pub fn watch_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
    let mut table = Table::new(answer);
    if let Some(watch) = &answer.watch {
        add_nodes(&mut table, watch);
        add_classes(&mut table, watch);
    }
    table.text(&["watched", "from", "to", "nodes", "date", "threshold", "quantity", "expected"], &["median"])
}

fn add_nodes(table: &mut Table<'_>, watch: &WatchAnswer) {
    let none = table.bounds(&[]);
    for node in &watch.nodes {
        let degree = node.degree.to_string();
        let own = [node.name.clone(), degree.clone(), degree, "1".to_owned()].to_vec();
        for at in &node.dates {
            let law = [at.date.clone(), String::new(), "degree".to_owned(), at.expected.0.to_string()];
            let bounds = table.bounds(&at.intervals);
            table.rows.push([own.clone(), law.to_vec(), bounds, vec![at.median.0.to_string()]].concat());
            let present = [at.date.clone(), String::new(), "probability_present".to_owned(), at.present.0.to_string()];
            table.rows.push([own.clone(), present.to_vec(), none.clone(), vec![String::new()]].concat());
        }
        for passing in &node.passing {
            for at in &passing.dates {
                for (quantity, value) in [("probability_at_least", at.at_least), ("probability_passed", at.passed)] {
                    let threshold = passing.threshold.to_string();
                    let found = [at.date.clone(), threshold, quantity.to_owned(), value.0.to_string()];
                    table.rows.push([own.clone(), found.to_vec(), none.clone(), vec![String::new()]].concat());
                }
            }
        }
    }
}

fn add_classes(table: &mut Table<'_>, watch: &WatchAnswer) {
    for class in &watch.classes {
        let own = [String::new(), class.from.to_string(), class.to.to_string(), class.nodes.to_string()];
        for passing in &class.passing {
            for at in &passing.dates {
                for (quantity, amount) in [("nodes_at_least", &at.at_least), ("nodes_passed", &at.passed)] {
                    let found = [at.date.clone(), passing.threshold.to_string(), quantity.to_owned()];
                    let amount = table.amount(amount);
                    table.rows.push([own.to_vec(), found.to_vec(), amount, vec![String::new()]].concat());
                }
            }
        }
    }
}

/// One row a date and rank.
pub fn next_hubs_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
    let mut table = Table::new(answer);
    for NextHubsAnswer { date, ranks } in &answer.next_hubs {
        for hub in ranks {
            let now = hub.now.map(|degree| degree.to_string()).unwrap_or_default();
            let own = [date.clone(), hub.rank.to_string(), now, hub.expected.0.to_string()];
            let bounds = table.bounds(&hub.intervals);
            table.rows.push([own.to_vec(), bounds, vec![hub.median.0.to_string()]].concat());
        }
    }
    table.text(&["date", "rank", "now", "expected"], &["median"])
}

/// One row a what-if, date and threshold: what-if less standing as `expected`, with its paired intervals.
pub fn scenarios_csv(answer: &ForecastAnswer) -> Result<String, csv::Error> {
    let mut table = Table::new(answer);
    for ScenarioAnswer { name, dates, .. } in &answer.scenarios {
        for at in dates {
            for tail in &at.tail {
                let own = [name.clone(), at.date.clone(), tail.threshold.to_string()];
                let sizes = [tail.standing.0.to_string(), tail.scenario.0.to_string()];
                let variances = [tail.paired_variance.0.to_string(), tail.independent_variance.0.to_string()];
                let difference = table.amount(&tail.difference);
                table.rows.push([own.to_vec(), sizes.to_vec(), difference, variances.to_vec()].concat());
            }
        }
    }
    let named = ["scenario", "date", "threshold", "standing_size", "scenario_size", "expected"];
    table.text(&named, &["paired_variance", "independent_variance"])
}

fn reached(at: &DateAtAnswer) -> String {
    at.date.clone().unwrap_or_default()
}

fn number(value: Option<Real>) -> String {
    value.map(|value| value.0.to_string()).unwrap_or_default()
}
