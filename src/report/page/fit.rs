//! A fit's report.

use super::figures::figures;
use super::grid::{Cell, Grid, Row, crossed};
use super::growth::{growth, in_words};
use super::{Report, ReportError, Section, fact, makers, reading, subject};
use crate::report::charts::{FitChart, Theme, fit_chart};
use crate::report::table::mix_in_words;
use crate::report::text::figure;
use crate::service::{AttachmentAnswer, CandidateAnswer, FitAnswer, FitRun, PeriodRatesAnswer, TailPointAnswer};

/// About how many degrees of the tail are told, evenly by their logarithm.
const TAIL_ROWS: usize = 12;

/// A kept fit as a page; `address` is where it is kept.
///
/// # Errors
/// When a chart or the page cannot be made, which is a fault of ours.
pub fn fit_page(run: &FitRun, address: &str, theme: Theme) -> Result<String, ReportError> {
    let answer = &run.answer;
    let mut facts = vec![fact("Made", run.created_at.as_str()), fact("Run", run.id.to_string())];
    facts.extend(makers(&answer.engine, answer.seed, &answer.inputs_digest));
    let charts = [FitChart::Tail, FitChart::Attachment].map(|chart| fit_chart(answer, chart, theme));
    let mut tail = Section::new("Observed and fitted");
    tail.figures = figures(charts.into())?;
    tail.paragraphs.extend(goodness(answer));
    tail.grids = vec![tail_grid(&answer.tail)];
    tail.grids.retain(|grid| !grid.rows.is_empty());
    let mut drivers = growth(&answer.fit, &[]);
    // The heading says it.
    let finding = mix_in_words(&answer.fit);
    drivers.paragraphs.retain(|words| *words != finding);
    drivers.grids = candidates("How each candidate fits", &answer.fit.candidates);
    let mut sections = vec![drivers, tail];
    sections.extend(answer.attachment.as_ref().map(attachment));
    if let Some(transitions) = &answer.transitions {
        let mut section = Section::new("From period to period");
        section.grids = periods(&transitions.periods);
        section.grids.extend(candidates("How each candidate fits the transitions", &transitions.candidates));
        sections.push(section);
    }
    sections.retain(|section| !section.is_empty());
    let subject = subject("Fit", run.network.as_deref(), answer.label.as_deref());
    let (warnings, cautions, again) = (answer.warnings.clone(), answer.cautions.clone(), reading(address, ""));
    Report { theme, subject, finding, lead: Vec::new(), facts, sections, warnings, cautions, again }.html()
}

fn goodness(answer: &FitAnswer) -> Option<String> {
    let goodness = answer.fit.goodness?;
    let mut told = format!(
        "Observed and fitted shares of nodes with at least so many links differ by {:.2} points at most",
        100.0 * goodness.distance.0
    );
    if let Some(p_value) = goodness.p_value {
        told.push_str(&format!(
            "; of {} samples drawn from the fitted law {:.0} % lie at least as far from it",
            goodness.replicates,
            100.0 * p_value.0
        ));
    }
    if let Some(error) = goodness.flow_error {
        told.push_str(&format!("; fitted flows past a degree miss by {:.1} %, chance included", 100.0 * error.0));
    }
    Some(told + ".")
}

fn tail_grid(tail: &[TailPointAnswer]) -> Grid {
    let row = |point: &TailPointAnswer| {
        let cells = [point.observed as f64, point.fitted.0].map(|count| Cell::from(figure(count)));
        Row::new(figure(point.degree as f64), cells.into())
    };
    Grid {
        caption: "Nodes with at least so many links in the newest snapshot".to_owned(),
        corner: "links".to_owned(),
        columns: ["observed", "fitted"].map(str::to_owned).into(),
        rows: spread(tail).map(row).collect(),
    }
}

/// Some points of a tail, evenly by the logarithm of their degree, the first and the last among them.
fn spread(tail: &[TailPointAnswer]) -> impl Iterator<Item = &TailPointAnswer> {
    let place = |point: &TailPointAnswer| (1.0 + point.degree as f64).ln();
    let (first, last) = (tail.first().map_or(0.0, place), tail.last().map_or(1.0, place));
    let step = ((last - first) / TAIL_ROWS as f64).max(f64::MIN_POSITIVE);
    let mut next = first;
    let final_degree = tail.last().map(|point| point.degree);
    tail.iter().filter(move |point| {
        let due = place(point) >= next - 1e-9 || Some(point.degree) == final_degree;
        while due && next <= place(point) {
            next += step;
        }
        due
    })
}

fn candidates(caption: &str, candidates: &[CandidateAnswer]) -> Vec<Grid> {
    let row = |candidate: &CandidateAnswer| {
        let cells = vec![
            format!("{:.0} %", 100.0 * candidate.weight.0).into(),
            format!("{:.1}", candidate.aic.0).into(),
            format!("{:.1} %", 100.0 * candidate.preferential_share.0).into(),
        ];
        Row::new(Cell::new(model(candidate), candidate.verdict.as_str()), cells)
    };
    if candidates.is_empty() {
        return Vec::new();
    }
    vec![Grid {
        caption: caption.to_owned(),
        corner: "candidate".to_owned(),
        columns: ["weight", "AIC", "preferential share"].map(str::to_owned).into(),
        rows: candidates.iter().map(row).collect(),
    }]
}

fn model(candidate: &CandidateAnswer) -> &'static str {
    use crate::service::AttachmentModel as M;
    match candidate.model {
        M::Uniform => "uniform",
        M::Preferential => "preferential",
        M::Mix => "mix",
        M::Power => "power",
        M::Dormancy => "dormancy",
        M::GrowthVariance => "growth variance",
    }
}

fn attachment(found: &AttachmentAnswer) -> Section {
    let mut section = Section::new("What links land on");
    section.paragraphs.push(format!(
        "Of {} link ends that landed on nodes present before, {} followed degree; the kernel exponent is {}. Were they in \
         proportion to degree, so much better a fit with a power of its own would have a probability of {:.3}.",
        figure(found.landings as f64),
        in_words(&found.preferential_share),
        in_words(&found.kernel_exponent),
        found.linear_p_value.0
    ));
    let rows = found.curve.iter().map(|point| {
        let range = match point.lowest == point.highest {
            true => figure(point.lowest as f64),
            false => format!("{} to {}", figure(point.lowest as f64), figure(point.highest as f64)),
        };
        let ends = point.attraction.low.zip(point.attraction.high);
        let ends = ends.map(|(low, high)| format!("{} to {}", figure(low.0), figure(high.0))).unwrap_or_default();
        let drawn = Cell::new(figure(point.attraction.estimate.0), ends);
        Row::new(range, vec![figure(point.landings as f64).into(), drawn, figure(point.fitted.0).into()])
    });
    section.grids.push(Grid {
        caption: "How often a node of each degree draws a link, the average node being 1".to_owned(),
        corner: "links".to_owned(),
        columns: ["landings", "as counted", "by the fitted mix"].map(str::to_owned).into(),
        rows: rows.collect(),
    });
    section.grids.extend(candidates("How each candidate fits the landings", &found.candidates));
    section
}

fn periods(periods: &[PeriodRatesAnswer]) -> Vec<Grid> {
    let names: Vec<String> = periods.iter().map(|period| format!("{} to {}", period.from, period.to)).collect();
    let columns =
        ["departed", "gained per node", "gained per link", "lost per link", "landed a day"].map(str::to_owned);
    let cell = |row: usize, column: usize| {
        let Some(period) = periods.get(row) else { return Cell::default() };
        let share = |value: f64| format!("{:.2} %", 100.0 * value);
        let text = match column {
            0 => share(period.departure_share.0),
            1 => figure(period.uniform_gain.0.max(0.0)),
            2 => share(period.gain_per_link.0),
            3 => share(period.loss_per_link.0),
            _ => figure(period.landed_per_day.0.max(0.0)),
        };
        text.into()
    };
    crossed("What each period's transitions tell", ("period", &names), ("rate", &columns), &cell)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::service::Real;

    #[test]
    fn a_long_tail_is_told_at_a_dozen_degrees_with_its_ends() {
        let point = |degree| TailPointAnswer { degree, observed: 1, fitted: Real(1.0) };
        for most in [0, 1, 5, 12, 40, 3000] {
            let tail: Vec<_> = (0..=most).map(point).collect();
            let told: Vec<u64> = spread(&tail).map(|point| point.degree).collect();
            assert_eq!((told.first(), told.last()), (Some(&0), Some(&most)));
            assert!(told.len() <= TAIL_ROWS + 2 && told.is_sorted(), "{told:?}");
        }
        assert_eq!(spread(&[]).count(), 0);
    }
}
