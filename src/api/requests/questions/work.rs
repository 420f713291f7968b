//! How much work questions are, held against the configured limit.

use crate::api::decode::{At, Faults};
use crate::config::LimitsConfig;
use crate::model::{ForecastPlan, Questions};

/// Whether the questions make no more answers than one forecast gives; each that makes too many is a fault.
pub fn within(questions: &Questions, plan: &ForecastPlan, config: &LimitsConfig, faults: &mut Faults) -> bool {
    let (thresholds, dates) = (plan.thresholds().len(), plan.dates().len());
    let (limits, scenarios) = (questions.limits.len(), questions.scenarios.len());
    let bands = questions.bands.as_ref().map_or(0, |bands| bands.bands().len());
    let watch = questions.watch.as_ref();
    let watched = watch.map_or(0, |watch| watch.nodes.len() + watch.classes.len());
    let passed = watch.and_then(|watch| watch.thresholds.as_ref()).map_or(thresholds, |own| own.values().len());
    let mut sound = true;
    for (field, cells, what) in [
        ("limits", limits * dates, format!("{limits} limits at {dates} dates")),
        ("bands", bands * dates, format!("{bands} bands at {dates} dates")),
        (
            "watch",
            watched * passed * dates,
            format!("{watched} watched nodes and classes, {passed} thresholds at {dates} dates"),
        ),
        ("next_hubs", questions.next_hubs * dates, format!("{} ranks at {dates} dates", questions.next_hubs)),
        (
            "scenarios",
            scenarios * (thresholds + limits + bands) * dates,
            format!(
                "{scenarios} scenarios of {thresholds} thresholds, {limits} limits and {bands} bands at {dates} dates"
            ),
        ),
    ] {
        if cells > config.cells {
            let most = config.cells;
            let detail = format!("{what} make {cells} answers; one forecast gives at most {most}: split the request");
            faults.add(&At::ROOT.field(field), detail);
            sound = false;
        }
    }
    sound
}
