//! How things stand after a refresh, for notices to be held against.

use std::collections::BTreeSet;

use serde::Deserialize;
use uuid::Uuid;

use super::event::{DriftNotice, LimitNotice, ToldLimit};
use crate::evaluate::{DRIFT_TEST_LEVEL, DriftTest, drift_test};
use crate::service::accounts::{Accounts, KeptAccount, MOST_FORECASTS};
use crate::service::accuracy::{drift_in_words, issued_account, newest_fit};
use crate::service::answers::LimitAnswer;
use crate::service::evidence::off_runtime;
use crate::service::{DriftCauseName, NetworkName, Real, Service, ServiceError};
use crate::store::{NewRun, NoticeKind, Signal, StoredAccount};

/// What must be known before acting on a notice.
const CAUTIONS: [&str; 2] = [
    "A forecast assumes that growth goes on as the fitted mix and the given rates say; a launch, a policy change or a ranking change \
     breaks it.",
    "Where a capacity failure could harm people, your own engineering practice and its safety margins come before this notice, and \
     before its absence.",
];
/// Probability that the crossing date told has.
const MIDDLE: f64 = 0.5;

impl Service {
    /// How a network stands with these accounts and this forecast; also where nobody is to be told, for a notice may be stored before
    /// the refresh ends.
    pub(in crate::service) async fn signals(
        &self,
        network: &str,
        accounts: &Accounts,
        run: Option<&NewRun>,
    ) -> Result<Vec<Signal>, ServiceError> {
        // As many more as withdrawn accounts may take away.
        let withdrawn: BTreeSet<Uuid> = accounts.withdrawn.iter().map(|(run, _)| *run).collect();
        let most = MOST_FORECASTS.saturating_add(withdrawn.len());
        let stored = self.store.list_accounts(network, u32::try_from(most).unwrap_or(u32::MAX)).await?;
        let kept = after(stored, accounts);
        let newest = match run {
            Some(run) => Some(run.document.clone()),
            None => self.store.find_latest(network).await?.map(|latest| latest.run.document),
        };
        let (network, made) = (network.to_owned(), run.map(|run| run.id));
        off_runtime(move || {
            let mut signals = vec![drift_signal(&network, &kept, newest.as_deref())?];
            if let Some((id, document)) = made.zip(newest.as_deref()) {
                signals.extend(limit_signals(&network, id, document)?);
            }
            Ok(signals)
        })
        .await?
    }

    /// Tells the sender that there may be something to send.
    pub(in crate::service) fn wake_sender(&self) {
        self.notices.wake.notify_one();
    }
}

/// An account with the forecast that it is of.
type Kept = (Uuid, jiff::Timestamp, String);

/// The accounts of the newest forecasts that have any, newest first, as they will be stored.
fn after(stored: Vec<StoredAccount>, accounts: &Accounts) -> Vec<Kept> {
    let gone = |run: Uuid, as_of| {
        let replaced = accounts.made.iter().any(|made| (made.key.run, made.key.as_of) == (run, as_of));
        replaced || accounts.withdrawn.contains(&(run, as_of))
    };
    let stand = stored.into_iter().filter(|account| !gone(account.run, account.as_of));
    let mut kept: Vec<Kept> = stand.map(|account| (account.run, account.as_of, account.account)).collect();
    kept.extend(accounts.made.iter().map(|made| (made.key.run, made.key.as_of, made.account.clone())));
    kept.sort_by(|a, b| b.0.cmp(&a.0).then(a.1.cmp(&b.1)));
    let mut runs: Vec<Uuid> = kept.iter().map(|account| account.0).collect();
    runs.dedup();
    if let Some(&beyond) = runs.get(MOST_FORECASTS) {
        kept.retain(|account| account.0 > beyond);
    }
    kept
}

fn drift_signal(network: &str, kept: &[Kept], newest: Option<&str>) -> Result<Signal, ServiceError> {
    let issued = |(_, as_of, text): &Kept| {
        let account: KeptAccount = serde_json::from_str(text).map_err(never_kept)?;
        issued_account(*as_of, &account)
    };
    let accounts = kept.iter().map(issued).collect::<Result<Vec<_>, _>>()?;
    let newest = newest.map(newest_fit).transpose()?;
    let test = drift_test(&accounts, newest.as_ref());
    let warns = test.as_ref().is_some_and(DriftTest::warns);
    let p_value = test.as_ref().map_or(1.0, |test| test.p_value);
    let verdict = test
        .as_ref()
        .map_or_else(|| "No forecast has met a later snapshot that still stands.".to_owned(), drift_in_words);
    let news = DriftNotice {
        network: network.to_owned(),
        dates: test.as_ref().map_or(0, |test| test.dates),
        missed: test.as_ref().map_or(0, |test| test.missed),
        p_value: Real(p_value),
        p_value_before: None,
        test_level: Real(DRIFT_TEST_LEVEL),
        causes: test.map(|test| test.causes.into_iter().map(DriftCauseName::from).collect()).unwrap_or_default(),
        accuracy_address: format!("{}/accuracy", address(network)?),
        verdict,
        cautions: CAUTIONS.map(str::to_owned).to_vec(),
    };
    Ok(Signal {
        kind: NoticeKind::Drift,
        about: String::new(),
        raised: warns,
        figure: p_value,
        terms: String::new(),
        details: serde_json::to_string(&news).map_err(never_kept)?,
    })
}

/// The kept limits that a forecast answers: all of its limits, for a refresh asks no others.
fn limit_signals(network: &str, run: Uuid, document: &str) -> Result<Vec<Signal>, ServiceError> {
    #[derive(Deserialize)]
    struct Run {
        limits: Vec<LimitAnswer>,
    }
    let found: Run = serde_json::from_str(document).map_err(never_kept)?;
    found
        .limits
        .into_iter()
        .filter(|limit| limit.name.is_some())
        .map(|limit| limit_signal(network, run, limit))
        .collect()
}

fn limit_signal(network: &str, run: Uuid, answer: LimitAnswer) -> Result<Signal, ServiceError> {
    let name = answer.name.unwrap_or_default();
    let probability = answer.at_by.crossed;
    let limit = ToldLimit {
        name: name.clone(),
        threshold: answer.threshold,
        max_nodes: answer.max_nodes,
        by: answer.by,
        risk: answer.risk,
    };
    let terms = serde_json::to_string(&limit).map_err(never_kept)?;
    let middle = answer.crossing.into_iter().find(|crossing| crossing.probability.0 == MIDDLE);
    let news = LimitNotice {
        network: network.to_owned(),
        limit,
        probability,
        probability_before: None,
        crossing_median: middle.and_then(|crossing| crossing.date),
        forecast: run,
        forecast_address: format!("/v1/forecasts/{run}"),
        verdict: answer.verdict,
        cautions: CAUTIONS.map(str::to_owned).to_vec(),
    };
    Ok(Signal {
        kind: NoticeKind::LimitRisk,
        about: name,
        raised: probability.0 > answer.risk.0,
        figure: probability.0,
        terms,
        details: serde_json::to_string(&news).map_err(never_kept)?,
    })
}

fn address(network: &str) -> Result<String, ServiceError> {
    let name = NetworkName::new(network).map_err(|fault| ServiceError::Broken(fault.to_string()))?;
    Ok(format!("/v1/networks/{}", name.as_str()))
}

fn never_kept(error: serde_json::Error) -> ServiceError {
    ServiceError::Broken(format!("a forecast or account cannot be read or written: {error}"))
}
