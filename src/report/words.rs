//! Answers in words, for tables on a terminal and for pages. A caller's names are cut to `most` characters.

use super::csv::percent;
use super::text::figure;
use crate::service::{BandAnswer, BandsAnswer, DateAtAnswer, IntervalAnswer, LimitAnswer, ScenarioAnswer, WatchAnswer};

/// What a limit is.
pub fn limit_title(limit: &LimitAnswer, most: usize) -> String {
    let name = limit.name.as_deref().map(|name| format!(" {}", short(name, most))).unwrap_or_default();
    format!(
        "Limit{name}: at most {} nodes with >= {} links until {}, at a risk of {}",
        figure(limit.max_nodes as f64),
        figure(limit.threshold as f64),
        limit.by,
        chance(limit.risk.0)
    )
}

/// When a limit is crossed.
pub fn crossing_words(limit: &LimitAnswer) -> String {
    let crossing: Vec<String> =
        limit.crossing.iter().map(|at| format!("{} {}", chance(at.probability.0), by_date(at))).collect();
    let left = limit.days_left.map(|days| format!(", in {} days", figure(days.0.round()))).unwrap_or_default();
    format!(
        "{} such nodes today. Crossed with probability {}; the risk is reached {}{left}.",
        figure(limit.now as f64),
        crossing.join(", "),
        by_date(&limit.risk_reached)
    )
}

/// Which rates keep a limit's risk.
pub fn rate_words(limit: &LimitAnswer) -> Vec<String> {
    let told = [("Arrivals", &limit.arrivals), ("Links per arrival", &limit.links_per_arrival)];
    let told = told.iter().filter(|(_, found)| !found.detail.is_empty());
    told.map(|(rate, found)| format!("{rate}: {}.", found.detail.trim_end_matches('.'))).collect()
}

/// What costs there are.
pub fn bands_title(bands: &BandsAnswer, most: usize) -> String {
    let unit = bands.cost_unit.as_deref().map(|unit| format!(" in {}", short(unit, most))).unwrap_or_default();
    let peak = bands.peak.as_deref().map(|date| format!("; highest at {date}")).unwrap_or_default();
    format!("Costs{unit}: now {}{peak}", figure(bands.now.0))
}

/// The degrees of a band.
pub fn band_range(band: &BandAnswer) -> String {
    match band.to {
        Some(to) => format!("{} to {}", figure(band.from as f64), figure(to as f64)),
        None => format!(">= {}", figure(band.from as f64)),
    }
}

/// Who of the watched nodes is likeliest to pass, and what becomes of the classes.
pub fn watch_words(watch: &WatchAnswer, most: usize) -> Vec<String> {
    let mut told = Vec::new();
    if !watch.likeliest.is_empty() {
        let names: Vec<String> = watch.likeliest.iter().take(5).map(|name| short(name, most)).collect();
        told.push(format!("Likeliest to be past the highest threshold: {}.", names.join(", ")));
    }
    for class in &watch.classes {
        let range = format!("{} to {} links", figure(class.from as f64), figure(class.to as f64));
        for passing in &class.passing {
            let Some(last) = passing.dates.last() else { continue };
            let widest = last.passed.intervals.last().map(interval_in_words).unwrap_or_default();
            told.push(format!(
                "Of {} nodes with {range}, {} are expected to pass {} by {}{widest}.",
                figure(class.nodes as f64),
                figure(last.passed.expected.0),
                figure(passing.threshold as f64),
                last.date
            ));
        }
    }
    told
}

/// What a what-if costs at the last date.
pub fn scenario_costs(scenario: &ScenarioAnswer, most: usize) -> Option<String> {
    let bands = scenario.bands.as_ref()?;
    let last = bands.dates.last()?;
    let unit = bands.cost_unit.as_deref().map(|unit| format!(" {}", short(unit, most))).unwrap_or_default();
    Some(format!("Costs at {}: {}{unit}.", last.date, figure(last.total.expected.0)))
}

/// The ends of an interval.
pub fn ends(interval: &IntervalAnswer) -> String {
    format!("{} to {}", figure(interval.low.0), figure(interval.high.0))
}

/// An interval in brackets.
pub fn interval_in_words(interval: &IntervalAnswer) -> String {
    format!(" ({} % interval {})", percent(interval.level.0), ends(interval))
}

/// A difference with its sign.
pub fn signed(value: f64) -> String {
    if value < 0.0 { format!("-{}", figure(-value)) } else { format!("+{}", figure(value)) }
}

/// A probability as a percentage; what rounds to certainty and is not certain says so.
pub fn chance(probability: f64) -> String {
    match 100.0 * probability {
        p if p > 0.0 && p < 0.1 => "<0.1 %".to_owned(),
        p if p > 99.9 && p < 100.0 => ">99.9 %".to_owned(),
        p => format!("{} %", percent((p * 10.0).round() / 1000.0)),
    }
}

/// The day a probability is reached, or a dash.
pub fn reached(at: &DateAtAnswer) -> String {
    at.date.as_deref().map_or("-", day).to_owned()
}

/// The same in a sentence.
pub fn by_date(at: &DateAtAnswer) -> String {
    at.date.as_ref().map_or("at no date looked at".to_owned(), |date| format!("by {}", day(date)))
}

/// The day of a date, whatever its time.
pub fn day(date: &str) -> &str {
    date.split('T').next().unwrap_or(date)
}

/// A caller's text on one short line.
pub fn short(name: &str, most: usize) -> String {
    let plain: String = name.chars().map(|c| if c.is_control() { ' ' } else { c }).collect();
    match plain.char_indices().nth(most) {
        Some((end, _)) => format!("{}…", plain.get(..end).unwrap_or_default()),
        None => plain,
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn chances_are_never_rounded_to_certainty() {
        for (probability, text) in
            [(0.0, "0 %"), (1e-9, "<0.1 %"), (0.05, "5 %"), (0.1234, "12.3 %"), (0.99999, ">99.9 %"), (1.0, "100 %")]
        {
            assert_eq!(chance(probability), text);
        }
    }

    #[test]
    fn a_callers_name_stays_on_its_line() {
        assert_eq!(short("fan-out\nshards", 24), "fan-out shards");
        assert_eq!(short(&"ä".repeat(30), 24).chars().count(), 25);
    }
}
