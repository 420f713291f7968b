//! Planned arrivals as they are stored and answered: in the form in which they are given, a table as segments.

use std::collections::BTreeMap;

use serde::{Deserialize, Serialize};

use super::{date, never_stored};
use crate::model::{ArrivalSpread, Campaign, Seasons, StandingArrivals, StandingSegment};
use crate::service::{Real, ServiceError, date_text};

/// Either a rate or segments. What is left out was not given; plans from before seasons and spreads have none.
#[derive(Serialize, Deserialize)]
pub(super) struct Arrivals {
    #[serde(skip_serializing_if = "Option::is_none")]
    segments: Option<Vec<Segment>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    per_day: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    growth_per_year: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    months: Option<[Real; 12]>,
    #[serde(skip_serializing_if = "Option::is_none")]
    weeks: Option<BTreeMap<u8, Real>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    campaigns: Option<Vec<KeptCampaign>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    standard_deviation: Option<Real>,
    #[serde(skip_serializing_if = "Option::is_none")]
    range: Option<(Real, Real)>,
    #[serde(skip_serializing_if = "Option::is_none")]
    relative_deviation: Option<Real>,
}

#[derive(Serialize, Deserialize)]
struct Segment {
    from: String,
    per_day: Real,
    growth_per_year: Real,
}

#[derive(Serialize, Deserialize)]
struct KeptCampaign {
    from: String,
    until: String,
    factor: Real,
}

/// Arrivals as they are stored.
pub(super) fn stored(arrivals: &StandingArrivals) -> Arrivals {
    let segment = |segment: &StandingSegment| {
        let (per_day, growth_per_year) = (Real(segment.per_day), Real(segment.growth_per_year));
        Some(Segment { from: segment.from?.to_string(), per_day, growth_per_year })
    };
    let rate = match arrivals.segments() {
        [only] if only.from.is_none() => Some(only),
        _ => None,
    };
    let seasons = arrivals.seasons();
    let weeks: BTreeMap<u8, Real> = seasons.weeks().iter().map(|&(week, factor)| (week, Real(factor))).collect();
    let campaign = |campaign: &Campaign| KeptCampaign {
        from: date_text(campaign.from),
        until: date_text(campaign.until),
        factor: Real(campaign.factor),
    };
    let campaigns: Vec<KeptCampaign> = seasons.campaigns().iter().map(campaign).collect();
    let mut kept = Arrivals {
        segments: rate.is_none().then(|| arrivals.segments().iter().filter_map(segment).collect()),
        per_day: rate.map(|rate| Real(rate.per_day)),
        growth_per_year: rate.map(|rate| Real(rate.growth_per_year)),
        months: seasons.months().map(|months| months.map(Real)),
        weeks: (!weeks.is_empty()).then_some(weeks),
        campaigns: (!campaigns.is_empty()).then_some(campaigns),
        standard_deviation: None,
        range: None,
        relative_deviation: None,
    };
    match arrivals.spread() {
        None => {}
        Some(ArrivalSpread::StandardDeviation(deviation)) => kept.standard_deviation = Some(Real(deviation)),
        Some(ArrivalSpread::Range(low, high)) => kept.range = Some((Real(low), Real(high))),
        Some(ArrivalSpread::Relative(deviation)) => kept.relative_deviation = Some(Real(deviation)),
    }
    kept
}

/// Arrivals as they were stored.
pub(super) fn read(kept: Arrivals) -> Result<StandingArrivals, ServiceError> {
    let refused = || never_stored(&"arrivals");
    let segments = match (kept.segments, kept.per_day) {
        (Some(segments), _) => segments.into_iter().map(read_segment).collect::<Result<_, _>>()?,
        (None, Some(per_day)) => {
            let growth_per_year = kept.growth_per_year.map_or(0.0, |growth| growth.0);
            vec![StandingSegment { from: None, per_day: per_day.0, growth_per_year }]
        }
        (None, None) => return Err(refused()),
    };
    let campaign = |kept: KeptCampaign| {
        let (from, until) = (date(&kept.from)?, date(&kept.until)?);
        Ok::<_, ServiceError>(Campaign { from, until, factor: kept.factor.0 })
    };
    let seasons = Seasons::new(
        kept.months.map(|months| months.map(|factor| factor.0)),
        kept.weeks.into_iter().flatten().map(|(week, factor)| (week, factor.0)).collect(),
        kept.campaigns.into_iter().flatten().map(campaign).collect::<Result<_, _>>()?,
    );
    let arrivals = StandingArrivals::new(segments).map_err(|_| refused())?;
    let arrivals = arrivals.with_seasons(seasons.map_err(|_| refused())?);
    let spread = match (kept.standard_deviation, kept.range, kept.relative_deviation) {
        (Some(deviation), ..) => ArrivalSpread::StandardDeviation(deviation.0),
        (None, Some((low, high)), _) => ArrivalSpread::Range(low.0, high.0),
        (None, None, Some(deviation)) => ArrivalSpread::Relative(deviation.0),
        (None, None, None) => return Ok(arrivals),
    };
    arrivals.with_spread(spread).map_err(|_| refused())
}

fn read_segment(kept: Segment) -> Result<StandingSegment, ServiceError> {
    let from = Some(date(&kept.from)?);
    Ok(StandingSegment { from, per_day: kept.per_day.0, growth_per_year: kept.growth_per_year.0 })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(text: &str) -> jiff::Timestamp {
        text.parse().unwrap()
    }

    fn round_trip(arrivals: &StandingArrivals) -> (String, StandingArrivals) {
        let text = serde_json::to_string(&stored(arrivals)).unwrap();
        let back = read(serde_json::from_str(&text).unwrap()).unwrap();
        (text, back)
    }

    #[test]
    fn arrivals_come_back_as_they_were_stored() {
        let rate = || StandingArrivals::new(vec![StandingSegment { from: None, per_day: 40.0, growth_per_year: 0.1 }]);
        let segment = |from, per_day| StandingSegment { from: Some(at(from)), per_day, growth_per_year: 0.0 };
        let segments = vec![segment("2026-01-01T00:00:00Z", 4.0), segment("2026-02-01T06:30:00Z", 6.0)];
        let mut months = [1.0; 12];
        months[11] = 2.2;
        let (from, until) = (at("2026-11-20T00:00:00Z"), at("2026-12-01T12:00:00Z"));
        let seasons = Seasons::new(Some(months), vec![(47, 3.0)], vec![Campaign { from, until, factor: 2.5 }]).unwrap();
        for arrivals in [
            rate().unwrap(),
            StandingArrivals::new(segments.clone()).unwrap(),
            rate().unwrap().with_seasons(seasons.clone()).with_spread(ArrivalSpread::Range(35.0, 50.0)).unwrap(),
            rate().unwrap().with_spread(ArrivalSpread::StandardDeviation(3.0)).unwrap(),
            StandingArrivals::new(segments)
                .unwrap()
                .with_seasons(seasons)
                .with_spread(ArrivalSpread::Relative(0.1))
                .unwrap(),
        ] {
            assert_eq!(round_trip(&arrivals).1, arrivals);
        }
        // What was stored before there were seasons reads and writes as it did.
        for text in [
            r#"{"per_day":40.0,"growth_per_year":0.1}"#,
            r#"{"segments":[{"from":"2026-01-01T00:00:00Z","per_day":4.0,"growth_per_year":0.0}]}"#,
        ] {
            assert_eq!(round_trip(&read(serde_json::from_str(text).unwrap()).unwrap()).0, text);
        }
    }
}
