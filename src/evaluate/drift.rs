//! Whether recent outcomes fell outside their intervals more often than they should, and why.

use jiff::Timestamp;

use super::account::{Account, Outcome};
use crate::model::{Estimate, Interval};
use crate::numerics::intervals::binomial_tail;

/// Newest dates that are looked at.
const RECENT_DATES: usize = 12;
/// Level of the test: so often it warns although nothing has changed.
pub const DRIFT_TEST_LEVEL: f64 = 0.05;
/// Level of the intervals that are looked at, where the forecasts have it; their widest otherwise.
const WANTED_LEVEL: f64 = 0.9;
/// Share of the thresholds that must miss for a date to count as missed.
const MISSED_SHARE: f64 = 0.5;

/// What a fit said that a later one may contradict.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FitRecord {
    /// Preferential share.
    pub preferential_share: Estimate,
    /// Link ends that land on present nodes with each arrival.
    pub links_per_arrival: Estimate,
}

/// An account with what its forecast stood on.
#[derive(Debug, Clone, PartialEq)]
pub struct IssuedAccount {
    /// Date of the newest counts that the forecast stood on.
    pub origin: Timestamp,
    /// Its fit.
    pub fit: FitRecord,
    /// What came.
    pub account: Account,
}

/// Why outcomes may have missed.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum DriftCause {
    /// The preferential share moved.
    PreferentialShare,
    /// The links per arrival moved.
    LinksPerArrival,
    /// Arrivals did not go by plan.
    Arrivals,
    /// None of these: growth itself has another shape.
    Shape,
}

/// The test of recent outcomes.
#[derive(Debug, Clone, PartialEq)]
pub struct DriftTest {
    /// Level of the intervals.
    pub level: f64,
    /// Dates looked at.
    pub dates: u64,
    /// Those that missed.
    pub missed: u64,
    /// Probability of at least so many, had the intervals been right.
    pub p_value: f64,
    /// Likely causes, when the probability is below [`DRIFT_TEST_LEVEL`].
    pub causes: Vec<DriftCause>,
}

impl DriftTest {
    /// Whether outcomes missed more often than they should.
    pub fn warns(&self) -> bool {
        self.p_value < DRIFT_TEST_LEVEL
    }
}

/// Tests the newest outcomes; `accounts` come newest forecast first, `newest` is the newest fit. `None` without accounts.
///
/// Formula: of each of the newest 12 snapshots' dates the account of the forecast issued last before it, so that no two
/// forecasts tested share any time; a date is missed when at least half of its thresholds lie outside their interval.
/// The p-value is P(X ≥ missed) for X binomial with the dates and 1 − level.
///
/// Numerical notes: neighbouring thresholds move together, and so do forecasts of one date from different origins; each
/// counted by itself, one surprise would count a hundred times. Were all thresholds of a date to move as one, a date would be
/// missed with probability 1 − level exactly, and less often where they do not.
pub fn drift_test(accounts: &[IssuedAccount], newest: Option<&FitRecord>) -> Option<DriftTest> {
    let trials = trials(accounts);
    let level = trials.first().and_then(|trial| tested_level(&trial.account))?;
    let missed: Vec<&&IssuedAccount> = trials.iter().filter(|trial| is_missed(&trial.account, level)).collect();
    let p_value = binomial_tail(missed.len() as u64, trials.len() as u64, 1.0 - level);
    let mut test =
        DriftTest { level, dates: trials.len() as u64, missed: missed.len() as u64, p_value, causes: Vec::new() };
    if test.warns() {
        test.causes = causes(&missed, newest, level);
    }
    Some(test)
}

/// The account of the last forecast before each date, newest date first.
fn trials(accounts: &[IssuedAccount]) -> Vec<&IssuedAccount> {
    let mut trials: Vec<&IssuedAccount> = Vec::new();
    for candidate in accounts {
        match trials.iter_mut().find(|trial| trial.account.as_of == candidate.account.as_of) {
            // Of forecasts with the same origin the one issued last came first.
            Some(trial) if trial.origin < candidate.origin => *trial = candidate,
            Some(_) => {}
            None => trials.push(candidate),
        }
    }
    trials.sort_by_key(|trial| std::cmp::Reverse(trial.account.as_of));
    trials.truncate(RECENT_DATES);
    trials
}

fn tested_level(account: &Account) -> Option<f64> {
    let mut levels = account.nodes.intervals.iter().map(|interval| interval.level);
    let wanted = levels.clone().find(|&level| level == WANTED_LEVEL);
    wanted.or(levels.next_back())
}

fn is_missed(account: &Account, level: f64) -> bool {
    let outside = account.tail.iter().filter(|(_, outcome)| is_outside(outcome, level)).count();
    outside > 0 && outside as f64 >= MISSED_SHARE * account.tail.len() as f64
}

/// Whether an outcome lies outside its interval of this level, or of its widest where it has none of it.
fn is_outside(outcome: &Outcome, level: f64) -> bool {
    let found = outcome.intervals.iter().find(|interval| interval.level == level).or(outcome.intervals.last());
    found.is_some_and(|interval| !outcome.is_inside(interval))
}

fn causes(missed: &[&&IssuedAccount], newest: Option<&FitRecord>, level: f64) -> Vec<DriftCause> {
    let most = |fits: &dyn Fn(&IssuedAccount) -> bool| 2 * missed.iter().filter(|at| fits(at)).count() > missed.len();
    let moved = |read: fn(&FitRecord) -> Estimate| {
        newest.is_some_and(|newest| most(&|at| apart(&read(&at.fit), &read(newest))))
    };
    let off_plan = |at: &IssuedAccount| is_outside(&at.account.nodes, level);
    let more_links = |at: &IssuedAccount| is_outside(&at.account.links, level) && !off_plan(at);
    let mut causes = Vec::new();
    if moved(|fit| fit.preferential_share) {
        causes.push(DriftCause::PreferentialShare);
    }
    if moved(|fit| fit.links_per_arrival) || most(&more_links) {
        causes.push(DriftCause::LinksPerArrival);
    }
    if most(&off_plan) {
        causes.push(DriftCause::Arrivals);
    }
    if causes.is_empty() {
        causes.push(DriftCause::Shape);
    }
    causes
}

/// Whether two estimates' intervals share nothing; not where one has none.
fn apart(a: &Estimate, b: &Estimate) -> bool {
    let disjoint = |a: Interval, b: Interval| a.high < b.low || b.high < a.low;
    a.interval.zip(b.interval).is_some_and(|(a, b)| disjoint(a, b))
}

impl DriftCause {
    /// The cause in words.
    pub fn in_words(self) -> &'static str {
        match self {
            Self::PreferentialShare => {
                "the share of links that go by degree has moved: the newest fit's interval lies apart from those the \
                 forecasts were issued with"
            }
            Self::LinksPerArrival => "links per arrival have moved: link ends went another way than nodes did",
            Self::Arrivals => "arrivals went off their plan: the number of nodes left its own interval",
            Self::Shape => {
                "neither the preferential share, nor links per arrival, nor arrivals explain it: growth has another shape \
                 than the model's"
            }
        }
    }
}
