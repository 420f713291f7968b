//! Planned arrivals by the calendar, and what they are from a snapshot on.

use jiff::Timestamp;

use super::{ArrivalFault, ArrivalPlan, ArrivalSegment, ArrivalSpread, Seasons, days_between};

/// Most pieces that seasons cut a plan into: each costs a panel of the growth mesh, which has 600.
const MAX_PIECES: usize = 500;

/// One stretch of planned arrivals, as in [`ArrivalSegment`]; without a start it begins at the newest snapshot.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StandingSegment {
    /// Its start.
    pub from: Option<Timestamp>,
    /// Arrivals a day at its start.
    pub per_day: f64,
    /// Relative growth of the rate a year.
    pub growth_per_year: f64,
}

/// Planned arrivals by the calendar: segments, seasons on top of them, and how uncertain their rates are.
#[derive(Debug, Clone, PartialEq)]
pub struct StandingArrivals {
    segments: Vec<StandingSegment>,
    seasons: Seasons,
    spread: Option<ArrivalSpread>,
}

impl StandingArrivals {
    /// Planned arrivals whose segments are in order.
    ///
    /// # Errors
    /// Every fault of every segment, but for a first one that starts too late: that shows at a snapshot.
    pub fn new(segments: Vec<StandingSegment>) -> Result<Self, Vec<ArrivalFault>> {
        let arrivals = Self { segments, seasons: Seasons::default(), spread: None };
        let first = arrivals.segments.first().and_then(|segment| segment.from);
        arrivals.without_seasons(first.unwrap_or(Timestamp::UNIX_EPOCH)).map(|_| arrivals)
    }

    /// The same with seasons.
    pub fn with_seasons(mut self, seasons: Seasons) -> Self {
        self.seasons = seasons;
        self
    }

    /// The same with uncertain rates.
    ///
    /// # Errors
    /// Those of [`ArrivalSpread::log_deviation`].
    pub fn with_spread(mut self, spread: ArrivalSpread) -> Result<Self, ArrivalFault> {
        spread.log_deviation(self.per_day())?;
        self.spread = Some(spread);
        Ok(self)
    }

    /// The plan from the newest snapshot on. Seasons hold up to `until`, the last date asked; then the last piece goes on. Growth goes
    /// on through them: each piece starts at what the segment has grown to, times the factor.
    ///
    /// # Errors
    /// When the first segment starts later, when seasons cut the plan into more than 500 pieces up to `until`, and when a rate grows
    /// past the largest.
    pub fn at(&self, latest: Timestamp, until: Timestamp) -> Result<ArrivalPlan, Vec<ArrivalFault>> {
        let plan = self.without_seasons(latest)?;
        let plan = match self.seasons.is_none() {
            true => plan,
            false => ArrivalPlan::from_segments(&self.pieces(&plan, latest, until)?)?,
        };
        let deviation = self.spread.map_or(Ok(0.0), |spread| spread.log_deviation(self.per_day()));
        deviation.and_then(|deviation| plan.with_log_deviation(deviation)).map_err(|fault| vec![fault])
    }

    /// The segments.
    pub fn segments(&self) -> &[StandingSegment] {
        &self.segments
    }

    /// Factors on their rates.
    pub fn seasons(&self) -> &Seasons {
        &self.seasons
    }

    /// How uncertain the rates are, as it was given.
    pub fn spread(&self) -> Option<ArrivalSpread> {
        self.spread
    }

    /// The rate of a plan that is one.
    fn per_day(&self) -> Option<f64> {
        match self.segments[..] {
            [only] if only.from.is_none() => Some(only.per_day),
            _ => None,
        }
    }

    fn without_seasons(&self, latest: Timestamp) -> Result<ArrivalPlan, Vec<ArrivalFault>> {
        let segment = |segment: &StandingSegment| ArrivalSegment {
            from_day: segment.from.map_or(0.0, |from| days_between(latest, from)),
            per_day: segment.per_day,
            growth_per_year: segment.growth_per_year,
        };
        ArrivalPlan::from_segments(&self.segments.iter().map(segment).collect::<Vec<_>>())
    }

    /// `plan` cut where a segment begins or the factor changes.
    fn pieces(
        &self,
        plan: &ArrivalPlan,
        latest: Timestamp,
        until: Timestamp,
    ) -> Result<Vec<ArrivalSegment>, Vec<ArrivalFault>> {
        let starts = self.segments.iter().filter_map(|segment| segment.from).filter(|&from| latest < from);
        let mut edges = self.seasons.edges(latest, until);
        edges.extend(starts.chain([latest]));
        edges.sort_unstable();
        edges.dedup();
        let mut pieces: Vec<ArrivalSegment> = Vec::new();
        let mut last = None;
        for edge in edges {
            let begun = self.segments.partition_point(|segment| segment.from.is_none_or(|from| from <= edge));
            // After the last date asked the season stays what it was.
            let factor = match last {
                Some((_, factor)) if edge >= until => factor,
                _ => self.seasons.factor(edge),
            };
            if last == Some((begun, factor)) {
                continue;
            }
            last = Some((begun, factor));
            let Some(segment) = self.segments.get(begun.saturating_sub(1)) else { continue };
            let from_day = days_between(latest, edge);
            let nobody = segment.per_day == 0.0 || factor == 0.0;
            let per_day = if nobody { 0.0 } else { plan.rate(from_day) * factor };
            if !(0.0..=ArrivalPlan::MAX_PER_DAY).contains(&per_day) {
                let most = ArrivalPlan::MAX_PER_DAY;
                let detail = format!("with its growth and factors the rate passes {most:e} a day by {edge}");
                return Err(vec![ArrivalFault::of_segment(Some(begun.saturating_sub(1)), "per_day", detail)]);
            }
            // Two times a few nanoseconds apart may be the same day in floating point; the later one holds.
            pieces.pop_if(|piece| piece.from_day >= from_day);
            pieces.push(ArrivalSegment { from_day, per_day, growth_per_year: segment.growth_per_year });
            if pieces.len() > MAX_PIECES {
                let detail = format!(
                    "months, weeks and campaigns cut the plan into more than {MAX_PIECES} pieces up to {until}; ask for nearer dates, \
                     name fewer weeks, or give months in place of weeks"
                );
                return Err(vec![ArrivalFault::of_plan(self.finest_season(), detail)]);
            }
        }
        Ok(pieces)
    }

    /// The season that most pieces come from.
    fn finest_season(&self) -> &'static str {
        match &self.seasons {
            seasons if !seasons.weeks().is_empty() => "weeks",
            seasons if seasons.months().is_some() => "months",
            _ => "campaigns",
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn at(text: &str) -> Timestamp {
        text.parse().unwrap()
    }

    #[test]
    fn planned_arrivals_keep_their_dates_as_the_newest_snapshot_moves() {
        let segment = |from: &str, per_day| StandingSegment { from: Some(at(from)), per_day, growth_per_year: 0.0 };
        let arrivals =
            StandingArrivals::new(vec![segment("2026-01-01T00:00:00Z", 4.0), segment("2026-02-01T00:00:00Z", 6.0)]);
        let arrivals = arrivals.unwrap();
        let from = |latest: &str| arrivals.at(at(latest), at("2026-12-01T00:00:00Z"));
        assert_eq!(from("2026-01-31T00:00:00Z").unwrap().arrivals_between(0.0, 2.0), 10.0);
        assert_eq!(from("2026-01-21T00:00:00Z").unwrap().rate(10.0), 4.0);
        assert!(from("2025-12-31T00:00:00Z").is_err());
        let backwards = vec![segment("2026-02-01T00:00:00Z", 4.0), segment("2026-01-01T00:00:00Z", 6.0)];
        assert_eq!(StandingArrivals::new(backwards).unwrap_err()[0].index, Some(1));
    }
}
