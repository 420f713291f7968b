//! A fit in plain words.

use super::{Fit, Model};

/// One or two sentences that say what drives growth, for someone who plans by it.
pub(super) fn verdict(fit: &Fit) -> String {
    let share = fit.preferential_share.value;
    let uniform = 100.0 * (1.0 - share);
    let mix = if share <= 0.02 {
        "links fall on all nodes alike, whatever they have already".to_owned()
    } else if share < 0.25 {
        format!("most links fall on all nodes alike; {:.0} % follow degree", 100.0 * share)
    } else if share < 0.75 {
        format!("{:.0} % of links follow degree, the rest fall on all nodes alike", 100.0 * share)
    } else if share < 0.98 {
        format!(
            "links follow degree almost proportionally; a uniform share of {uniform:.0} % gives newcomers their chance"
        )
    } else {
        "links follow degree proportionally; next to none fall on all nodes alike".to_owned()
    };
    let own = match fit.model {
        Model::Power => {
            let exponent = fit.forces.kernel_exponent.value();
            let bent = if exponent < 1.0 { "less" } else { "more" };
            format!(", {bent} than in proportion to it (as its power {exponent:.2})")
        }
        Model::Dormancy => format!("; {:.0} % of nodes no longer draw links", 100.0 * fit.forces.dormant_share.value()),
        Model::GrowthVariance => {
            let spread = 100.0 * fit.forces.growth_variance.value().sqrt();
            format!(
                "; nodes alike in degree differ in how fast they grow (standard deviation {spread:.0} % of the mean)"
            )
        }
        Model::Uniform | Model::Preferential | Model::Mix => String::new(),
    };
    let (departures, losses) = (fit.forces.departures.value(), fit.forces.link_losses.value());
    let yearly = |hazard: f64| 100.0 * -(-hazard * crate::model::DAYS_PER_YEAR).exp_m1();
    let losses = match (departures > 0.0, losses > 0.0) {
        (false, false) => String::new(),
        (true, false) => format!("; {:.1} % of nodes leave a year", yearly(departures)),
        (false, true) => format!("; {:.1} % of links are lost a year", yearly(losses)),
        (true, true) => {
            format!("; {:.1} % of nodes leave and {:.1} % of links are lost a year", yearly(departures), yearly(losses))
        }
    };
    let mut text = format!("{mix}{own}{losses}.");
    if let Some(first) = text.get_mut(0..1) {
        first.make_ascii_uppercase();
    }
    text
}
