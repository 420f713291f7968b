//! What becomes of a network's refreshes, for those who follow it.

use std::collections::HashMap;
use std::str::FromStr;
use std::sync::{Arc, Mutex, PoisonError};

use jiff::Timestamp;
use serde::{Deserialize, Serialize};
use tokio::sync::OnceCell;
use uuid::Uuid;

use super::{Count, LimitAnswer, NetworkName, Real, RefreshState, Service, ServiceError, Thing, converted};
use crate::store::{IssuedForecast, RefreshNews, RunKind};

/// Something that became of a network's refreshes.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct NetworkNews {
    /// What it is.
    #[serde(skip)]
    pub kind: NewsKind,
    /// Where somebody who has read it goes on.
    #[serde(skip)]
    pub place: NewsPlace,
    /// The network.
    pub network: String,
    /// Its revision: how often what is stored of it had changed.
    pub revision: u64,
    /// The refresh, at `/v1/jobs/{id}`; of a forecast, that is in the record of the refresh.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub job: Option<Uuid>,
    /// The forecast, at `/v1/forecasts/{id}`.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub forecast: Option<Uuid>,
    /// How limits fare by the forecast.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub limits: Option<Arc<Vec<LimitNews>>>,
    /// Why there is no forecast, in words.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub reason: Option<String>,
    /// When evidence was corrected, RFC 3339.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub corrected_at: Option<String>,
}

/// What became of a network's refreshes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum NewsKind {
    /// Something that is stored changed; another forecast is being made.
    Refreshing,
    /// A forecast is stored.
    Forecast,
    /// The forecast that there was stands on all that is stored.
    Current,
    /// No newer forecast could be made.
    Failed,
    /// Counts that forecasts stand on were replaced or deleted.
    Corrected,
}

/// How a limit fares, in brief.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct LimitNews {
    /// Its name.
    pub name: Option<String>,
    /// Links from which on a node counts.
    pub threshold: u64,
    /// The most nodes that are provided for.
    pub max_nodes: u64,
    /// The date up to which it must hold.
    pub by: String,
    /// Probability of a crossing that is put up with.
    pub risk: Real,
    /// Probability of a crossing by the date.
    pub crossed: Real,
    /// How many more nodes are allowed today.
    pub headroom: Count,
    /// In words.
    pub verdict: String,
}

/// How far somebody has read: the newest issued forecast, the newest correction, and how things stood.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct NewsPlace {
    run: Option<Uuid>,
    corrected: i64,
    stands: Option<(RefreshState, Uuid, u64)>,
}

impl NewsKind {
    /// Its name.
    pub fn as_str(self) -> &'static str {
        match self {
            Self::Refreshing => "refreshing",
            Self::Forecast => "forecast",
            Self::Current => "current",
            Self::Failed => "failed",
            Self::Corrected => "corrected",
        }
    }
}

impl Service {
    /// What became of a network's refreshes since `place`, in order, and whether more follows at once; how things stand, where
    /// nobody looked before. Only the last of several states that came and went in between is told, but every forecast is.
    ///
    /// # Errors
    /// When there is no such network, or the database fails.
    pub async fn network_news(
        &self,
        name: &NetworkName,
        place: Option<NewsPlace>,
    ) -> Result<(Vec<NetworkNews>, NewsPlace, bool), ServiceError> {
        let found = self.store.refresh_news(name.as_str(), place.map(|place| place.run)).await?;
        let news = found.ok_or(ServiceError::NotFound(Thing::Network))?;
        let mut told = Told { network: name.as_str(), news: Vec::new(), place: place.unwrap_or_default() };
        told.corrections(&news, place.is_some());
        let mut forecasts = 0;
        for issued in &news.issued {
            // One that was deleted meanwhile is told no more.
            if self.store.find_tag(RunKind::Forecast, issued.run).await?.is_some()
                && let Some(limits) = self.limits_told(issued.run).await?
            {
                told.forecast(issued, limits);
                forecasts += 1;
            }
            told.place.run = Some(issued.run);
        }
        if !news.more {
            told.state(&news, forecasts > 0);
        }
        Ok((told.news, told.place, news.more))
    }
}

impl Service {
    /// How limits fare by a forecast; none when it was deleted. Whoever asks while it is read waits for that reading.
    async fn limits_told(&self, run: Uuid) -> Result<Option<Arc<Vec<LimitNews>>>, ServiceError> {
        let cell = self.told.of(run);
        let read = cell.get_or_try_init(|| async {
            let found = self.store.find_run(RunKind::Forecast, run).await?;
            let read = converted(move || found.map(|found| limits_in(&found.document)).transpose()).await;
            let read = read.map_err(|error| ServiceError::Broken(format!("reading a forecast: {error}")))?;
            Ok::<_, ServiceError>(read?.map(Arc::new))
        });
        read.await.cloned()
    }
}

/// Limits of the forecasts that were told last.
#[derive(Debug, Clone, Default)]
pub(super) struct TellingCache(Arc<Mutex<Tellings>>);

/// What is told of a forecast, and since when by the count of forecasts told.
type Telling = (u64, Arc<OnceCell<Option<Arc<Vec<LimitNews>>>>>);

#[derive(Debug, Default)]
struct Tellings {
    kept: HashMap<Uuid, Telling>,
    count: u64,
}

impl TellingCache {
    /// Forecasts kept: those that many networks' followers are told of at the same time.
    const MOST: usize = 256;

    fn of(&self, run: Uuid) -> Arc<OnceCell<Option<Arc<Vec<LimitNews>>>>> {
        let mut tellings = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        if let Some((_, cell)) = tellings.kept.get(&run) {
            return cell.clone();
        }
        if tellings.kept.len() >= Self::MOST
            && let Some(oldest) = tellings.kept.iter().min_by_key(|(_, (since, _))| *since).map(|(&run, _)| run)
        {
            tellings.kept.remove(&oldest);
        }
        tellings.count += 1;
        let cell = Arc::new(OnceCell::new());
        let since = tellings.count;
        tellings.kept.insert(run, (since, cell.clone()));
        cell
    }
}

/// What is told at one look.
struct Told<'a> {
    network: &'a str,
    news: Vec<NetworkNews>,
    place: NewsPlace,
}

impl Told<'_> {
    fn corrections(&mut self, news: &RefreshNews, looked_before: bool) {
        let corrected_at = news.corrected_at.filter(|at| at.as_microsecond() > self.place.corrected);
        self.place.corrected = news.corrected_at.map_or(self.place.corrected, Timestamp::as_microsecond);
        if let Some(at) = corrected_at.filter(|_| looked_before) {
            let news = NetworkNews {
                corrected_at: Some(at.to_string()),
                ..self.item(NewsKind::Corrected, news.network.revision)
            };
            self.news.push(news);
        }
    }

    fn forecast(&mut self, issued: &IssuedForecast, limits: Arc<Vec<LimitNews>>) {
        self.place.run = Some(issued.run);
        let item = self.item(NewsKind::Forecast, issued.revision);
        self.news.push(NetworkNews { forecast: Some(issued.run), limits: Some(limits), ..item });
    }

    fn state(&mut self, news: &RefreshNews, with_forecast: bool) {
        let revision = news.network.revision;
        let Some(refresh) = &news.network.refresh else { return };
        let stands = Some((refresh.state, refresh.job, revision));
        if stands == self.place.stands {
            return;
        }
        self.place.stands = stands;
        let kind = match refresh.state {
            RefreshState::Refreshing => NewsKind::Refreshing,
            RefreshState::Outdated => NewsKind::Failed,
            RefreshState::Current if with_forecast => {
                // The forecast says it; whoever has read it knows how things stand.
                if let Some(last) = self.news.last_mut() {
                    last.place = self.place;
                }
                return;
            }
            RefreshState::Current => NewsKind::Current,
        };
        let item = self.item(kind, revision);
        self.news.push(NetworkNews { job: Some(refresh.job), reason: refresh.reason.clone(), ..item });
    }

    fn item(&self, kind: NewsKind, revision: u64) -> NetworkNews {
        let (network, place) = (self.network.to_owned(), self.place);
        let (job, forecast, limits, reason, corrected_at) = (None, None, None, None, None);
        NetworkNews { kind, place, network, revision, job, forecast, limits, reason, corrected_at }
    }
}

fn limits_in(document: &str) -> Result<Vec<LimitNews>, ServiceError> {
    #[derive(Deserialize)]
    struct Answers {
        limits: Vec<LimitAnswer>,
    }
    let answers: Answers = serde_json::from_str(document)
        .map_err(|error| ServiceError::Broken(format!("a forecast that was never kept: {error}")))?;
    let brief = |limit: LimitAnswer| LimitNews {
        name: limit.name,
        threshold: limit.threshold,
        max_nodes: limit.max_nodes,
        by: limit.by,
        risk: limit.risk,
        crossed: limit.at_by.crossed,
        headroom: limit.headroom,
        verdict: limit.verdict,
    };
    Ok(answers.limits.into_iter().map(brief).collect())
}

impl std::fmt::Display for NewsPlace {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let dash = || "-".to_owned();
        let run = self.run.map_or_else(dash, |run| run.simple().to_string());
        let stands = self
            .stands
            .map_or_else(dash, |(state, job, revision)| format!("{}.{}.{revision}", state.as_str(), job.simple()));
        write!(f, "{run}.{}.{stands}", self.corrected)
    }
}

impl FromStr for NewsPlace {
    type Err = ();

    fn from_str(text: &str) -> Result<Self, ()> {
        let mut parts = text.split('.');
        let mut next = || parts.next().ok_or(());
        let run = match next()? {
            "-" => None,
            id => Some(Uuid::try_parse(id).map_err(drop)?),
        };
        let corrected = next()?.parse().map_err(drop)?;
        let stands = match next()? {
            "-" => None,
            state => {
                let states = [RefreshState::Refreshing, RefreshState::Current, RefreshState::Outdated];
                let state = states.into_iter().find(|known| known.as_str() == state).ok_or(())?;
                let job = Uuid::try_parse(next()?).map_err(drop)?;
                Some((state, job, next()?.parse().map_err(drop)?))
            }
        };
        if parts.next().is_some() { Err(()) } else { Ok(Self { run, corrected, stands }) }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn followers_share_what_is_told_of_a_forecast() {
        let (cache, run) = (TellingCache::default(), Uuid::now_v7());
        let first = cache.of(run);
        assert!(Arc::ptr_eq(&first, &cache.of(run)));
        (0..TellingCache::MOST).for_each(|_| drop(cache.of(Uuid::now_v7())));
        assert!(!Arc::ptr_eq(&first, &cache.of(run)), "the oldest makes room");
        assert_eq!(cache.0.lock().unwrap().kept.len(), TellingCache::MOST);
    }

    #[test]
    fn a_place_is_read_as_it_is_written_and_nothing_else_is() {
        let job = Uuid::now_v7();
        let stands = Some((RefreshState::Outdated, job, 7));
        for place in [NewsPlace::default(), NewsPlace { run: Some(job), corrected: 12, stands }] {
            assert_eq!(place.to_string().parse(), Ok(place));
        }
        for text in ["", "-", "-.0", "-.0.current", "-.0.-.1", "x.0.-", "-.a.-", "-.0.idle.-.1", "end"] {
            assert!(text.parse::<NewsPlace>().is_err(), "{text}");
        }
    }
}
