//! What a scrape tells of every network's latest forecast, within bounds.

use std::collections::HashMap;
use std::sync::{Arc, Mutex, PoisonError};

use jiff::Timestamp;
use serde::Deserialize;
use uuid::Uuid;

use super::evidence::off_runtime;
use super::numbers::date_of;
use super::{DateAnswer, LimitAnswer, RefreshState, Service, ServiceError, TailAnswer};
use crate::store::LatestForecast;

/// How much is told.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct GaugeCaps {
    /// Networks, in the order of their names.
    pub networks: u32,
    /// Thresholds of each, the lowest first.
    pub thresholds: usize,
    /// Limits of each, in the order of their names.
    pub limits: usize,
}

/// What is told of the latest forecasts.
#[derive(Debug, Clone, PartialEq)]
pub struct ForecastGauges {
    /// Network by network, in the order of their names.
    pub networks: Vec<NetworkGauges>,
    /// What the bounds left out.
    pub left_out: LeftOut,
}

/// How much the bounds left out.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct LeftOut {
    /// Networks with a forecast.
    pub networks: u64,
    /// Thresholds of the networks that are told.
    pub thresholds: u64,
    /// Limits of the networks that are told.
    pub limits: u64,
}

/// What is told of one network.
#[derive(Debug, Clone, PartialEq)]
pub struct NetworkGauges {
    /// Its name.
    pub network: String,
    /// How its latest forecast stands.
    pub state: RefreshState,
    /// When that was made.
    pub made_at: Timestamp,
    /// The first date of the forecast that has not passed; none when all have.
    pub next: Option<Timestamp>,
    /// The last date of the forecast.
    pub last: Option<Timestamp>,
    /// Thresholds, lowest first.
    pub tails: Vec<TailGauges>,
    /// Limits in the order of their names.
    pub limits: Vec<LimitGauges>,
}

/// What is told of one threshold: its tail at the two dates, with the widest interval.
#[derive(Debug, Clone, PartialEq)]
pub struct TailGauges {
    /// The threshold.
    pub threshold: u64,
    /// Hubs in the newest snapshot.
    pub now: f64,
    /// At the next date.
    pub next: Option<TailAnswer>,
    /// At the last date.
    pub last: TailAnswer,
}

/// What is told of one limit.
#[derive(Debug, Clone, PartialEq)]
pub struct LimitGauges {
    /// Its name.
    pub name: String,
    /// Probability that it is passed by its date.
    pub risk: f64,
    /// The probability that is put up with.
    pub allowed: f64,
    /// Nodes that may come; negative when it is passed already.
    pub headroom: f64,
}

/// What the gauges need of forecasts, by the run: a run never changes.
#[derive(Debug, Clone, Default)]
pub struct Briefs(Arc<Mutex<HashMap<Uuid, Arc<Brief>>>>);

/// What the gauges need of one forecast.
#[derive(Debug, Clone, PartialEq)]
struct Brief {
    dates: Vec<(Timestamp, Vec<TailAnswer>)>,
    limits: Vec<LimitGauges>,
    left_out: LeftOut,
}

impl Service {
    /// What a scrape tells of the latest forecasts at `now`. Forecasts are read from the database once; a deleted network is told no
    /// more.
    ///
    /// # Errors
    /// When the database fails.
    pub async fn forecast_gauges(&self, caps: GaugeCaps, now: Timestamp) -> Result<ForecastGauges, ServiceError> {
        let (lines, all) = self.store.list_latest(caps.networks).await?;
        let mut left_out = LeftOut { networks: all.saturating_sub(lines.len() as u64), ..LeftOut::default() };
        let known = self.briefs.all();
        let mut kept = HashMap::with_capacity(lines.len());
        let mut networks = Vec::with_capacity(lines.len());
        for line in lines {
            let brief = match known.get(&line.run) {
                Some(brief) => brief.clone(),
                None => match self.store.find_latest(&line.network).await? {
                    Some(latest) if latest.run.id == line.run => {
                        let brief = Arc::new(off_runtime(move || Brief::read(&latest, caps)).await??);
                        // At once: a scraper that has no more patience finds it the next time.
                        self.briefs.add(line.run, brief.clone());
                        brief
                    }
                    // Another forecast came meanwhile, or the network went: the next scrape tells.
                    _ => continue,
                },
            };
            left_out.thresholds += brief.left_out.thresholds;
            left_out.limits += brief.left_out.limits;
            networks.push(brief.gauges(line.network, line.state, line.created_at, now));
            kept.insert(line.run, brief);
        }
        self.briefs.put(kept);
        Ok(ForecastGauges { networks, left_out })
    }
}

impl Briefs {
    fn all(&self) -> HashMap<Uuid, Arc<Brief>> {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).clone()
    }

    fn add(&self, run: Uuid, brief: Arc<Brief>) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).insert(run, brief);
    }

    fn put(&self, kept: HashMap<Uuid, Arc<Brief>>) {
        *self.0.lock().unwrap_or_else(PoisonError::into_inner) = kept;
    }
}

impl Brief {
    fn read(latest: &LatestForecast, caps: GaugeCaps) -> Result<Self, ServiceError> {
        #[derive(Deserialize)]
        struct Told {
            forecast: Vec<DateAnswer>,
            limits: Vec<LimitAnswer>,
        }
        let never =
            |why: &dyn std::fmt::Display| ServiceError::Broken(format!("a forecast that was never kept: {why}"));
        let told: Told = serde_json::from_str(&latest.run.document).map_err(|error| never(&error))?;
        let mut left_out = LeftOut::default();
        let mut dates = Vec::with_capacity(told.forecast.len());
        for mut at in told.forecast {
            left_out.thresholds = at.tail.len().saturating_sub(caps.thresholds) as u64;
            at.tail.truncate(caps.thresholds);
            dates.push((date_of(&at.date).ok_or_else(|| never(&at.date))?, at.tail));
        }
        let named = told.limits.into_iter().filter_map(|limit| {
            let (risk, allowed, headroom) = (limit.at_by.crossed.0, limit.risk.0, limit.headroom.0);
            Some(LimitGauges { name: limit.name?, risk, allowed, headroom })
        });
        let mut limits: Vec<LimitGauges> = named.collect();
        left_out.limits = limits.len().saturating_sub(caps.limits) as u64;
        limits.truncate(caps.limits);
        Ok(Self { dates, limits, left_out })
    }

    fn gauges(&self, network: String, state: RefreshState, made_at: Timestamp, now: Timestamp) -> NetworkGauges {
        let next = self.dates.iter().find(|(date, _)| *date >= now);
        let last = self.dates.last();
        let at_next = |threshold| Some(next?.1.iter().find(|tail| tail.threshold == threshold)?.clone());
        let tails = last.into_iter().flat_map(|(_, tails)| tails).map(|tail| TailGauges {
            threshold: tail.threshold,
            now: tail.now.0,
            next: at_next(tail.threshold),
            last: tail.clone(),
        });
        let (next, last) = (next.map(|(date, _)| *date), last.map(|(date, _)| *date));
        NetworkGauges { network, state, made_at, next, last, tails: tails.collect(), limits: self.limits.clone() }
    }
}
