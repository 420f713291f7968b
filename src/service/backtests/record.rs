//! The record of an origin as it is kept until its backtest ends: every number comes back as it was.

use jiff::Timestamp;
use serde::{Deserialize, Serialize};

use crate::evaluate::{Growth, LawSizes, OriginRecord, Outlook, Rate, Rates, Target, Totals};
use crate::fit::Model;
use crate::model::{ArrivalPlan, ArrivalSegment};
use crate::service::numbers::{date_of, date_text};
use crate::service::{Real, ServiceError};

#[derive(Serialize, Deserialize)]
struct Record {
    as_of: String,
    thresholds: Vec<u64>,
    totals: (KeptTotals, KeptTotals),
    sizes: Vec<(Real, Real)>,
    lossless: bool,
    models: Vec<String>,
    hindsight: Vec<Option<KeptSizes>>,
    outlooks: Vec<KeptOutlook>,
}

/// Day, N and K.
type KeptTotals = (Real, Real, Real);

#[derive(Serialize, Deserialize)]
struct KeptSizes {
    mean: Vec<Real>,
    kept: Vec<Real>,
    variance: Vec<Real>,
}

#[derive(Serialize, Deserialize)]
struct KeptOutlook {
    date: String,
    ahead: Real,
    growth: KeptGrowth,
    totals: (Real, Real),
    rates: Option<KeptRates>,
    laws: Vec<Option<KeptSizes>>,
}

#[derive(Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
enum KeptGrowth {
    Known,
    Expected,
    LowArrivals,
    HighArrivals,
    LowLinks,
    HighLinks,
}

#[derive(Serialize, Deserialize)]
struct KeptRates {
    /// Start day, rate and growth a year of each segment.
    arrivals: Vec<(Real, Real, Real)>,
    links_per_arrival: Real,
    links_per_node_day: Real,
}

/// A record as it is kept.
pub fn to_json(record: &OriginRecord) -> Result<String, ServiceError> {
    let totals = |totals: &Totals| (Real(totals.day), Real(totals.nodes), Real(totals.link_ends));
    let kept = Record {
        as_of: date_text(record.as_of),
        thresholds: record.thresholds.clone(),
        totals: (totals(&record.totals.0), totals(&record.totals.1)),
        sizes: record.sizes.iter().map(|&(before, now)| (Real(before), Real(now))).collect(),
        lossless: record.lossless,
        models: record.models.iter().map(|model| model.name().to_owned()).collect(),
        hindsight: laws(&record.hindsight),
        outlooks: record.outlooks.iter().map(outlook).collect(),
    };
    serde_json::to_string(&kept).map_err(|error| ServiceError::Broken(format!("a backtest's record: {error}")))
}

fn outlook(outlook: &Outlook) -> KeptOutlook {
    let target = &outlook.target;
    let rates = |rates: &Rates| KeptRates {
        arrivals: (rates.arrivals.segments().iter())
            .map(|s| (Real(s.from_day), Real(s.per_day), Real(s.growth_per_year)))
            .collect(),
        links_per_arrival: Real(rates.links_per_arrival),
        links_per_node_day: Real(rates.links_per_node_day),
    };
    KeptOutlook {
        date: date_text(target.date),
        ahead: Real(target.ahead),
        growth: match target.growth {
            Growth::Known => KeptGrowth::Known,
            Growth::Expected => KeptGrowth::Expected,
            Growth::Low(Rate::Arrivals) => KeptGrowth::LowArrivals,
            Growth::High(Rate::Arrivals) => KeptGrowth::HighArrivals,
            Growth::Low(Rate::Links) => KeptGrowth::LowLinks,
            Growth::High(Rate::Links) => KeptGrowth::HighLinks,
        },
        totals: (Real(target.totals.0), Real(target.totals.1)),
        rates: target.rates.as_ref().map(rates),
        laws: laws(&outlook.laws),
    }
}

/// A law with a number that is not finite counts as one that cannot be computed.
fn laws(laws: &[Option<LawSizes>]) -> Vec<Option<KeptSizes>> {
    let reals = |values: &[f64]| values.iter().copied().map(Real).collect();
    let finite = |sizes: &&LawSizes| {
        [&sizes.mean, &sizes.kept, &sizes.variance].into_iter().flatten().all(|value| value.is_finite())
    };
    let kept = |sizes: &LawSizes| KeptSizes {
        mean: reals(&sizes.mean),
        kept: reals(&sizes.kept),
        variance: reals(&sizes.variance),
    };
    laws.iter().map(|sizes| sizes.as_ref().filter(finite).map(kept)).collect()
}

/// A record as it was kept.
pub fn from_json(text: &str) -> Result<OriginRecord, ServiceError> {
    let kept: Record = serde_json::from_str(text).map_err(|error| never_kept(&error))?;
    let totals = |(day, nodes, link_ends): KeptTotals| Totals { day: day.0, nodes: nodes.0, link_ends: link_ends.0 };
    Ok(OriginRecord {
        as_of: date(&kept.as_of)?,
        thresholds: kept.thresholds,
        totals: (totals(kept.totals.0), totals(kept.totals.1)),
        sizes: kept.sizes.iter().map(|(before, now)| (before.0, now.0)).collect(),
        lossless: kept.lossless,
        models: kept.models.iter().map(|name| model(name)).collect::<Result<_, _>>()?,
        hindsight: kept.hindsight.into_iter().map(|sizes| sizes.map(law_sizes)).collect(),
        outlooks: kept.outlooks.into_iter().map(read_outlook).collect::<Result<_, _>>()?,
    })
}

fn read_outlook(kept: KeptOutlook) -> Result<Outlook, ServiceError> {
    let target = Target {
        date: date(&kept.date)?,
        ahead: kept.ahead.0,
        growth: match kept.growth {
            KeptGrowth::Known => Growth::Known,
            KeptGrowth::Expected => Growth::Expected,
            KeptGrowth::LowArrivals => Growth::Low(Rate::Arrivals),
            KeptGrowth::HighArrivals => Growth::High(Rate::Arrivals),
            KeptGrowth::LowLinks => Growth::Low(Rate::Links),
            KeptGrowth::HighLinks => Growth::High(Rate::Links),
        },
        totals: (kept.totals.0.0, kept.totals.1.0),
        rates: kept.rates.map(read_rates).transpose()?,
    };
    Ok(Outlook { target, laws: kept.laws.into_iter().map(|sizes| sizes.map(law_sizes)).collect() })
}

fn read_rates(kept: KeptRates) -> Result<Rates, ServiceError> {
    let segment = |&(from, rate, growth): &(Real, Real, Real)| ArrivalSegment {
        from_day: from.0,
        per_day: rate.0,
        growth_per_year: growth.0,
    };
    let segments: Vec<ArrivalSegment> = kept.arrivals.iter().map(segment).collect();
    Ok(Rates {
        arrivals: ArrivalPlan::from_segments(&segments).map_err(|_| never_kept(&"arrivals"))?,
        links_per_arrival: kept.links_per_arrival.0,
        links_per_node_day: kept.links_per_node_day.0,
    })
}

fn law_sizes(kept: KeptSizes) -> LawSizes {
    let values = |reals: Vec<Real>| reals.into_iter().map(|real| real.0).collect();
    LawSizes { mean: values(kept.mean), kept: values(kept.kept), variance: values(kept.variance) }
}

fn date(text: &str) -> Result<Timestamp, ServiceError> {
    date_of(text).ok_or_else(|| never_kept(&text))
}

fn model(name: &str) -> Result<Model, ServiceError> {
    Model::ALL.into_iter().find(|model| model.name() == name).ok_or_else(|| never_kept(&name))
}

fn never_kept(why: &dyn std::fmt::Display) -> ServiceError {
    ServiceError::Broken(format!("a backtest's record that was never written: {why}"))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::evaluate::{RecordPlan, record};
    use crate::fit::FitRequest;
    use crate::growth::Simulation;
    use crate::model::{AttachmentMix, DegreeCounts, DegreeKind, EntryDegrees, Evidence, GrowthParameters, Snapshot};

    #[test]
    fn a_record_comes_back_as_it_was() {
        let mix = AttachmentMix::new(0.7).unwrap();
        let arrivals = ArrivalPlan::constant(20.0).unwrap();
        let forces = GrowthParameters::new(DegreeKind::Received, mix, arrivals, EntryDegrees::single(0), 3.0).unwrap();
        let founders = DegreeCounts::from_pairs(&[(0, 10), (2, 10)]).unwrap();
        let mut network = Simulation::new(&founders, forces, 11).unwrap();
        let dates = ["2026-01-01", "2026-02-01", "2026-03-01", "2026-04-01"];
        let snapshots = dates.into_iter().zip([30.0, 61.0, 89.0, 120.0]).map(|(date, day)| {
            network.run_until(day).unwrap();
            let as_of = format!("{date}T00:00:00.123456789Z").parse().unwrap();
            Snapshot { as_of, counts: network.degree_counts().unwrap() }
        });
        let evidence = Evidence::new(DegreeKind::Received, snapshots.collect(), None).unwrap();
        let plan = RecordPlan { thresholds: vec![3, 10], ahead: 2, expected: true, fit: FitRequest::default() };
        let mut made = record(&evidence, 1, &plan, &|| false).unwrap();
        let segment = |from_day, per_day| ArrivalSegment { from_day, per_day, growth_per_year: 0.1 };
        let arrivals = ArrivalPlan::from_segments(&[segment(0.0, 20.5), segment(30.25, 1.0 / 3.0)]).unwrap();
        made.outlooks[0].target.rates = Some(Rates { arrivals, links_per_arrival: 3.1, links_per_node_day: 1e-7 });
        assert_eq!(from_json(&to_json(&made).unwrap()).unwrap(), made);
    }
}
