//! A backtest in words.

use super::document::{CoverageRow, ScoreAnswer};

/// What holds for every backtest.
pub const CAUTIONS: [&str; 4] = [
    "A backtest tells how forecasts would have done on this network's past, not how the next will do; a launch, a policy change or \
     a ranking change makes it void.",
    "The table given was told the arrivals and links that came, which nobody knows ahead: it judges the mechanism. What a planner \
     without a plan of arrivals would have got is the table expected.",
    "Outcomes at neighbouring thresholds, and of one date from several origins, move together: intervals of shares are too narrow, \
     for they take outcomes as independent.",
    "Where a capacity failure could harm people, your own engineering practice and its safety margins come before this report.",
];

/// The tables in words: the nearest horizon of each.
pub fn verdict(origins: usize, given: &[ScoreAnswer], expected: &[ScoreAnswer]) -> String {
    let all = |table: &[ScoreAnswer]| table.iter().find(|row| row.threshold.is_none()).cloned();
    let mut said = Vec::new();
    if let Some(row) = all(given) {
        said.push(format!("Given the arrivals and links that came, which judges the mechanism, {}", sentence(&row)));
    }
    if let Some(row) = all(expected) {
        said.push(format!("By the arrivals and links expected then, which judges the whole, {}", sentence(&row)));
    }
    if said.is_empty() {
        return format!(
            "{} and nothing was scored: no threshold had 5 nodes past it when its date came. Ask for lower thresholds.",
            counted(origins, "snapshot was", "snapshots were") + " forecast from"
        );
    }
    if origins == 1 {
        said.push("One origin is an anecdote: more snapshots make it a record.".to_owned());
    }
    said.join(" ")
}

fn sentence(row: &ScoreAnswer) -> String {
    let mut text = format!(
        "the pooled forecast misses by {} {} ahead",
        percent(row.pooled.errors.mean_log_error.0),
        counted(row.periods_ahead as usize, "period", "periods"),
    );
    let best = row.best_trend.as_ref().and_then(|best| row.members.iter().find(|member| member.member == *best));
    if let Some(best) = best {
        let error = best.errors.mean_log_error.0;
        text.push_str(&format!(", where the best plain trend ({}) misses by {}", best.member, percent(error)));
    }
    if let Some(widest) = row.coverage.last() {
        text.push_str(&format!("; {}", inside(widest)));
    }
    text + "."
}

fn inside(coverage: &CoverageRow) -> String {
    format!(
        "{} of {} lay inside the {} interval",
        percent(coverage.share.0),
        counted(coverage.cases as usize, "outcome", "outcomes"),
        percent(coverage.level.0)
    )
}

fn counted(count: usize, one: &str, several: &str) -> String {
    format!("{count} {}", if count == 1 { one } else { several })
}

/// A share as a percentage with two digits or three: 2.8 %, 91 %.
fn percent(share: f64) -> String {
    let percent = 100.0 * share;
    let digits = usize::from(percent < 10.0 && percent > 0.0);
    format!("{percent:.digits$} %")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_scored_says_what_to_do() {
        let verdict = verdict(1, &[], &[]);
        assert_eq!(
            verdict,
            "1 snapshot was forecast from and nothing was scored: no threshold had 5 nodes past it when its date came. Ask for \
             lower thresholds."
        );
    }

    #[test]
    fn percentages_keep_two_digits() {
        assert_eq!([0.0, 0.0281, 0.91, 1.0].map(percent), ["0 %", "2.8 %", "91 %", "100 %"]);
    }
}
