//! Seasons of a plan: by how much each stretch of the calendar departs from the plan's own rate.

use jiff::civil::{Date, ISOWeekDate, Weekday};
use jiff::tz::TimeZone;
use jiff::{Span, Timestamp};

use super::ArrivalFault;

/// The largest factor accepted.
const MAX_FACTOR: f64 = 1_000.0;
/// Most campaigns of one plan.
const MAX_CAMPAIGNS: usize = 200;
/// ISO weeks of the longest year.
const MAX_WEEK: u8 = 53;

/// A campaign or a pause: a factor on the arrival rate for a while.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Campaign {
    /// Its start.
    pub from: Timestamp,
    /// Its end; the factor does not hold any more then.
    pub until: Timestamp,
    /// On the arrival rate, 0 to 1,000.
    pub factor: f64,
}

/// Factors on the arrival rate by the calendar, in UTC; where several hold, their product does.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Seasons {
    months: Option<[f64; 12]>,
    weeks: Vec<(u8, f64)>,
    campaigns: Vec<Campaign>,
}

impl Seasons {
    /// Factors for the twelve calendar months, for named ISO weeks (the others 1; week 53 holds in the years that have one), and
    /// campaigns.
    ///
    /// # Errors
    /// Every factor outside 0 to 1,000, every week that no year has or that is given twice, every campaign that ends before it
    /// starts; too many campaigns.
    pub fn new(
        months: Option<[f64; 12]>,
        mut weeks: Vec<(u8, f64)>,
        campaigns: Vec<Campaign>,
    ) -> Result<Self, Vec<ArrivalFault>> {
        let mut faults = Vec::new();
        let mut check = |list, index, field, factor: f64| {
            if !(0.0..=MAX_FACTOR).contains(&factor) {
                let detail = format!(
                    "a factor lies between 0 and {MAX_FACTOR}, not at {factor}; 1 leaves the rate as it is, 2 doubles it"
                );
                faults.push(ArrivalFault { list, index: Some(index), field, detail });
            }
        };
        months.iter().flatten().enumerate().for_each(|(i, &factor)| check("months", i, "", factor));
        weeks.iter().for_each(|&(week, factor)| check("weeks", usize::from(week), "", factor));
        campaigns.iter().enumerate().for_each(|(i, campaign)| check("campaigns", i, "factor", campaign.factor));
        weeks.sort_by_key(|&(week, _)| week);
        for &(week, _) in weeks.iter().filter(|&&(week, _)| !(1..=MAX_WEEK).contains(&week)) {
            let detail = format!("ISO weeks go from 1 to {MAX_WEEK}; there is no week {week}");
            faults.push(ArrivalFault { list: "weeks", index: Some(usize::from(week)), field: "", detail });
        }
        for pair in weeks.windows(2) {
            if let [(week, _), (next, _)] = pair
                && week == next
            {
                let detail = format!("week {week} is given twice");
                faults.push(ArrivalFault { list: "weeks", index: Some(usize::from(*week)), field: "", detail });
            }
        }
        for (i, campaign) in campaigns.iter().enumerate().filter(|(_, campaign)| campaign.until <= campaign.from) {
            let detail = format!(
                "the campaign ends at {}, not after its start ({}); until is the first day after it",
                campaign.until, campaign.from
            );
            faults.push(ArrivalFault { list: "campaigns", index: Some(i), field: "until", detail });
        }
        if campaigns.len() > MAX_CAMPAIGNS {
            let detail = format!("{} campaigns are more than the {MAX_CAMPAIGNS} that one plan takes", campaigns.len());
            faults.push(ArrivalFault::of_plan("campaigns", detail));
        }
        if faults.is_empty() { Ok(Self { months, weeks, campaigns }) } else { Err(faults) }
    }

    /// Whether no factor is given.
    pub fn is_none(&self) -> bool {
        *self == Self::default()
    }

    /// Factors of the calendar months, January first.
    pub fn months(&self) -> Option<&[f64; 12]> {
        self.months.as_ref()
    }

    /// Named ISO weeks, ascending, and their factors.
    pub fn weeks(&self) -> &[(u8, f64)] {
        &self.weeks
    }

    /// Campaigns, as they were given.
    pub fn campaigns(&self) -> &[Campaign] {
        &self.campaigns
    }

    /// The factor on the arrival rate at `time`.
    pub fn factor(&self, time: Timestamp) -> f64 {
        let date = date_of(time);
        let month = usize::try_from(date.month()).ok().and_then(|month| self.months.as_ref()?.get(month - 1));
        let week = date.iso_week_date().week();
        let week = self.weeks.iter().find(|&&(named, _)| i16::from(named) == i16::from(week));
        let held = self.campaigns.iter().filter(|campaign| campaign.from <= time && time < campaign.until);
        let campaigns: f64 = held.map(|campaign| campaign.factor).product();
        month.copied().unwrap_or(1.0) * week.map_or(1.0, |&(_, factor)| factor) * campaigns
    }

    /// Times after `from` and before `until` at which the factor may change, in no order.
    pub(super) fn edges(&self, from: Timestamp, until: Timestamp) -> Vec<Timestamp> {
        let (first, last) = (date_of(from), date_of(until));
        let mut dates = Vec::new();
        if self.months.is_some() {
            let month = |count: i64| first.first_of_month().checked_add(Span::new().try_months(count).ok()?).ok();
            dates.extend((1..).map_while(month).take_while(|&date| date <= last));
        }
        let years = first.iso_week_date().year()..=last.iso_week_date().year();
        for (year, &(week, _)) in years.flat_map(|year| self.weeks.iter().map(move |named| (year, named))) {
            let monday = i8::try_from(week).ok().and_then(|week| ISOWeekDate::new(year, week, Weekday::Monday).ok());
            let Some(monday) = monday.map(ISOWeekDate::date) else { continue };
            dates.push(monday);
            dates.extend(monday.checked_add(Span::new().days(7)).ok());
        }
        let midnight = |date: Date| date.to_zoned(TimeZone::UTC).ok().map(|zoned| zoned.timestamp());
        let mut times: Vec<Timestamp> = dates.into_iter().filter_map(midnight).collect();
        times.extend(self.campaigns.iter().flat_map(|campaign| [campaign.from, campaign.until]));
        times.retain(|&time| from < time && time < until);
        times
    }
}

fn date_of(time: Timestamp) -> Date {
    time.to_zoned(TimeZone::UTC).date()
}
