//! From validated inputs to an answer: the core's results in the answers' words. No I/O.

mod history;
mod questions;

use std::time::{Duration, Instant};

use serde::Serialize;
use serde::de::DeserializeOwned;
use tracing::info_span;

use super::answers::{
    AttachmentAnswer, AttachmentModel, BandsAnswer, CandidateAnswer, CountAnswer, CurvePointAnswer, DateAnswer,
    DegreeAnswer, EstimateAnswer, EvidenceKind, FitAnswer, FitReport, ForecastAnswer, GoodnessAnswer, IntervalAnswer,
    OutlierClassAnswer, PeriodRatesAnswer, PoolAnswer, PoolMemberAnswer, TailAnswer, TailPointAnswer,
    TransitionsAnswer, WarningAnswer, WatchAnswer,
};
use super::inputs::{FitInputs, ForecastInputs, Label, sha256_hex};
use super::numbers::{Count, Real, date_text};
use super::{ENGINE, ServiceError, TRACES};
use crate::evaluate::{self, OriginError, PoolShare, PoolUse};
use crate::fit::{
    Attachment, Candidate, CurvePoint, Fit, Force, Goodness, Model, OutlierClass, PeriodRates, Rung, TailPoint,
    TransitionSummary, fit,
};
use crate::forecast::{CountForecast, DateForecast, DegreeForecast, TailForecast};
use crate::model::{Estimate, Interval, Warning};
use crate::store::RunKind;
use questions::each;

/// What holds for every fit, said with each.
const FIT_CAUTIONS: [&str; 2] = [
    "A fit describes how links were attracted up to the newest snapshot; nothing obliges the network to go on that way.",
    "Where a capacity failure could harm people, your own engineering practice and its safety margins come first; a fit \
     is no substitute for them.",
];

/// Something that can be asked: validated inputs that lead to an answer of one kind.
pub trait Question: Send + 'static {
    /// Its answer.
    type Answer: Serialize + DeserializeOwned + std::fmt::Debug + Send + 'static;
    /// What its runs are kept as.
    const KIND: RunKind;

    /// The caller's name for the run.
    fn label(&self) -> Option<&Label>;

    /// Seed of everything random.
    fn seed(&self) -> u64;

    /// The inputs in canonical form.
    ///
    /// # Errors
    /// When a number is not finite, which no validated input holds.
    fn canonical(&self) -> Result<String, serde_json::Error>;

    /// Why there can be no answer, as far as that is plain without computing.
    fn refusal(&self) -> Option<OriginError> {
        None
    }

    /// Computes the answer; `cancelled` is asked between steps.
    ///
    /// # Errors
    /// When the inputs have no answer.
    fn answer(&self, inputs_digest: String, cancelled: &dyn Fn() -> bool) -> Result<Self::Answer, OriginError>;
}

/// Answers a question here and now, within `budget`, keeping nothing.
///
/// # Errors
/// When the inputs have no answer, or the budget ran out.
pub fn answer_at_once<Q: Question>(question: &Q, budget: Duration) -> Result<Q::Answer, ServiceError> {
    let begun = Instant::now();
    let canonical = question.canonical().map_err(|error| ServiceError::Broken(error.to_string()))?;
    let answer = question.answer(inputs_digest(&canonical), &|| begun.elapsed() >= budget);
    answer.map_err(|failure| ServiceError::from_core(failure, budget))
}

/// Digest of canonical inputs as answers write it.
pub fn inputs_digest(canonical: &str) -> String {
    format!("sha-256:{}", sha256_hex(canonical.as_bytes()))
}

impl Question for ForecastInputs {
    type Answer = ForecastAnswer;
    const KIND: RunKind = RunKind::Forecast;

    fn label(&self) -> Option<&Label> {
        self.label.as_ref()
    }

    fn seed(&self) -> u64 {
        self.request.fit.seed
    }

    fn canonical(&self) -> Result<String, serde_json::Error> {
        Self::canonical(self)
    }

    fn refusal(&self) -> Option<OriginError> {
        let unknowable = self.request.arrivals.is_none() && self.request.evidence.snapshots().len() == 1;
        unknowable.then_some(OriginError::ArrivalsRequired)
    }

    fn answer(&self, inputs_digest: String, cancelled: &dyn Fn() -> bool) -> Result<ForecastAnswer, OriginError> {
        let found = self.found(cancelled)?;
        Ok(ForecastAnswer {
            label: self.label.as_ref().map(|label| label.as_str().to_owned()),
            engine: ENGINE.to_owned(),
            seed: self.seed(),
            inputs_digest,
            fit: FitReport::from(&found.fit),
            history: history::history(&self.request),
            curve: history::curve(&found.fit.tail),
            forecast: found.forecast.iter().map(DateAnswer::from).collect(),
            pools: found.pools.iter().map(PoolAnswer::from).collect(),
            limits: each(&found.answers.limits),
            bands: found.answers.bands.as_ref().map(BandsAnswer::from),
            watch: found.answers.watch.as_ref().map(WatchAnswer::from),
            next_hubs: each(&found.answers.next_hubs),
            scenarios: each(&found.answers.scenarios),
            warnings: found.warnings.into_iter().map(WarningAnswer::from).collect(),
            cautions: found.cautions.iter().map(ToString::to_string).collect(),
        })
    }
}

impl ForecastInputs {
    /// The forecast, each of its stages in a span of its own.
    fn found(&self, cancelled: &dyn Fn() -> bool) -> Result<evaluate::OriginAnswer, OriginError> {
        let request = &self.request;
        let snapshots = request.evidence.snapshots().len() as u64;
        let (dates, thresholds) = (request.plan.dates().len() as u64, request.plan.thresholds().len() as u64);
        let past = info_span!(target: TRACES, "past records", snapshots);
        let past = past.in_scope(|| evaluate::past_records_of(request, cancelled))?;
        let fitted =
            info_span!(target: TRACES, "fit", snapshots).in_scope(|| evaluate::fit_origin(request, cancelled))?;
        let forecast = info_span!(target: TRACES, "forecast", dates, thresholds);
        forecast.in_scope(|| evaluate::forecast_by(request, fitted, &past, cancelled))
    }
}

impl Question for FitInputs {
    type Answer = FitAnswer;
    const KIND: RunKind = RunKind::Fit;

    fn label(&self) -> Option<&Label> {
        self.label.as_ref()
    }

    fn seed(&self) -> u64 {
        self.fit.seed
    }

    fn canonical(&self) -> Result<String, serde_json::Error> {
        Self::canonical(self)
    }

    fn answer(&self, inputs_digest: String, cancelled: &dyn Fn() -> bool) -> Result<FitAnswer, OriginError> {
        let span = info_span!(target: TRACES, "fit", snapshots = self.evidence.snapshots().len() as u64);
        let fit = span.in_scope(|| fit(&self.evidence, &self.fit, cancelled))?;
        Ok(FitAnswer {
            label: self.label.as_ref().map(|label| label.as_str().to_owned()),
            engine: ENGINE.to_owned(),
            seed: self.seed(),
            inputs_digest,
            fit: FitReport::from(&fit),
            tail: fit.tail.iter().map(TailPointAnswer::from).collect(),
            transitions: fit.transitions.as_ref().map(TransitionsAnswer::from),
            attachment: fit.attachment.as_ref().map(AttachmentAnswer::from),
            warnings: fit.warnings.into_iter().map(WarningAnswer::from).collect(),
            cautions: FIT_CAUTIONS.map(str::to_owned).to_vec(),
        })
    }
}

impl From<&Fit> for FitReport {
    fn from(fit: &Fit) -> Self {
        // A loss of exactly 0 without an interval was neither given nor looked for.
        let known = |force: &Force| {
            (force.value() > 0.0 || force.estimate.interval.is_some()).then(|| EstimateAnswer::from(&force.estimate))
        };
        let own = |model: Model, force: &Force| (fit.model == model).then(|| EstimateAnswer::from(&force.estimate));
        Self {
            model: fit.model.into(),
            evidence: match fit.rung {
                Rung::Given => EvidenceKind::Given,
                Rung::OneSnapshot => EvidenceKind::OneSnapshot,
                Rung::SuccessiveSnapshots => EvidenceKind::SuccessiveSnapshots,
                Rung::Transitions => EvidenceKind::Transitions,
                Rung::LinkEvents => EvidenceKind::LinkEvents,
            },
            preferential_share: (&fit.preferential_share).into(),
            links_per_arrival: (&fit.links_per_arrival).into(),
            arrivals_per_day: fit.arrivals_per_day.as_ref().map(EstimateAnswer::from),
            departures_per_node_day: known(&fit.forces.departures),
            link_losses_per_link_day: known(&fit.forces.link_losses),
            kernel_exponent: own(Model::Power, &fit.forces.kernel_exponent),
            dormant_share: own(Model::Dormancy, &fit.forces.dormant_share),
            growth_variance: own(Model::GrowthVariance, &fit.forces.growth_variance),
            tail_exponent: fit.tail_exponent.as_ref().map(EstimateAnswer::from),
            entry_degrees: fit.entry.shares().iter().map(|&(degree, share)| (degree, Real(share))).collect(),
            candidates: fit.candidates.iter().map(CandidateAnswer::from).collect(),
            goodness: fit.goodness.as_ref().map(GoodnessAnswer::from),
            verdict: fit.verdict.clone(),
        }
    }
}

impl From<Model> for AttachmentModel {
    fn from(model: Model) -> Self {
        match model {
            Model::Uniform => Self::Uniform,
            Model::Preferential => Self::Preferential,
            Model::Mix => Self::Mix,
            Model::Power => Self::Power,
            Model::Dormancy => Self::Dormancy,
            Model::GrowthVariance => Self::GrowthVariance,
        }
    }
}

impl From<&Estimate> for EstimateAnswer {
    fn from(estimate: &Estimate) -> Self {
        Self {
            estimate: Real(estimate.value),
            low: estimate.interval.map(|interval| Real(interval.low)),
            high: estimate.interval.map(|interval| Real(interval.high)),
            level: estimate.interval.map(|interval| Real(interval.level)),
        }
    }
}

impl From<&Candidate> for CandidateAnswer {
    fn from(candidate: &Candidate) -> Self {
        Self {
            model: candidate.model.into(),
            preferential_share: Real(candidate.preferential_share),
            parameter: candidate.parameter.map(Real),
            log_likelihood: Real(candidate.log_likelihood),
            aic: Real(candidate.aic),
            weight: Real(candidate.weight),
            verdict: candidate.verdict(),
        }
    }
}

impl From<&PoolUse> for PoolAnswer {
    fn from(used: &PoolUse) -> Self {
        let member = |share: &PoolShare| PoolMemberAnswer {
            member: share.member.name().to_owned(),
            score: Real(share.score),
            weight: Real(share.weight),
        };
        Self {
            periods_ahead: used.ahead as u32,
            scored_dates: used.pool.scored as u64,
            flow_error: Real(used.spread.flow_error),
            interval_scale: Real(used.spread.scale.sqrt()),
            members: used.pool.shares.iter().map(member).collect(),
            detail: used.in_words(),
        }
    }
}

impl From<&Goodness> for GoodnessAnswer {
    fn from(goodness: &Goodness) -> Self {
        Self {
            distance: Real(goodness.distance),
            p_value: goodness.p_value.map(Real),
            replicates: goodness.replicates,
            worst_log_ratio: Real(goodness.worst_log_ratio),
            dispersion: goodness.dispersion.map(Real),
            flow_error: goodness.flow_error.map(Real),
        }
    }
}

impl From<&TailPoint> for TailPointAnswer {
    fn from(point: &TailPoint) -> Self {
        Self { degree: point.degree, observed: point.observed, fitted: Real(point.fitted) }
    }
}

impl From<&TransitionSummary> for TransitionsAnswer {
    fn from(found: &TransitionSummary) -> Self {
        /// Jumps and renamed nodes told one by one.
        const MOST_TOLD: usize = 100;
        let period = |rates: &PeriodRates| PeriodRatesAnswer {
            from: date_text(rates.from),
            to: date_text(rates.to),
            departure_share: Real(rates.departure_share),
            uniform_gain: Real(rates.uniform_gain),
            first_gain: rates.first_gain.map(Real),
            gain_per_link: Real(rates.gain_per_link),
            loss_per_link: Real(rates.loss_per_link),
            landed_per_day: Real(rates.landed_per_day),
        };
        let class = |c: &OutlierClass| OutlierClassAnswer { lowest: c.lowest, highest: c.highest, nodes: c.nodes };
        Self {
            periods: found.periods.iter().map(period).collect(),
            outliers: found.outliers.nodes,
            outlier_classes: found.outliers.classes.iter().map(class).collect(),
            jumps: found.outliers.jumps.iter().take(MOST_TOLD).copied().collect(),
            renamed: found.outliers.renamed.iter().take(MOST_TOLD).copied().collect(),
            candidates: found.candidates.iter().map(CandidateAnswer::from).collect(),
        }
    }
}

impl From<&Attachment> for AttachmentAnswer {
    fn from(found: &Attachment) -> Self {
        let point = |point: &CurvePoint| CurvePointAnswer {
            lowest: point.lowest,
            highest: point.highest,
            landings: point.landings,
            attraction: (&point.attraction).into(),
            fitted: Real(point.fitted),
        };
        Self {
            landings: found.landings,
            preferential_share: (&found.preferential_share.estimate).into(),
            kernel_exponent: (&found.kernel_exponent.estimate).into(),
            linear_p_value: Real(found.linear_p_value),
            curve: found.curve.iter().map(point).collect(),
            candidates: found.candidates.iter().map(CandidateAnswer::from).collect(),
        }
    }
}

impl From<&DateForecast> for DateAnswer {
    fn from(at: &DateForecast) -> Self {
        Self {
            date: date_text(at.date),
            nodes: (&at.nodes).into(),
            links: (&at.links).into(),
            largest_degree: (&at.largest_degree).into(),
            tail: at.tail.iter().map(TailAnswer::from).collect(),
        }
    }
}

impl From<&CountForecast> for CountAnswer {
    fn from(count: &CountForecast) -> Self {
        Self {
            now: Count(count.now),
            expected: Real(count.expected),
            median: Real(count.median),
            intervals: intervals(&count.intervals),
        }
    }
}

impl From<&DegreeForecast> for DegreeAnswer {
    fn from(degree: &DegreeForecast) -> Self {
        Self { now: Count(degree.now), median: Real(degree.median), intervals: intervals(&degree.intervals) }
    }
}

impl From<&TailForecast> for TailAnswer {
    fn from(tail: &TailForecast) -> Self {
        let CountAnswer { now, expected, median, intervals } = (&tail.size).into();
        Self { threshold: tail.threshold, now, expected, median, intervals }
    }
}

impl From<Warning> for WarningAnswer {
    fn from(warning: Warning) -> Self {
        Self { code: warning.code.to_owned(), detail: warning.detail }
    }
}

fn intervals(intervals: &[Interval]) -> Vec<IntervalAnswer> {
    intervals.iter().map(|i| IntervalAnswer { level: Real(i.level), low: Real(i.low), high: Real(i.high) }).collect()
}
