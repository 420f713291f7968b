//! A fit in plain words.

use super::{Candidate, Fit, Model};

/// What a candidate says drives growth, for someone who plans by it: a clause, without its full stop.
pub(super) fn candidate_in_words(model: Model, share: f64, parameter: Option<f64>) -> String {
    let mix = if share <= 0.02 {
        "links fall on all nodes alike, whatever they have already".to_owned()
    } else if share < 0.25 {
        format!("most links fall on all nodes alike; {:.0} % follow degree", 100.0 * share)
    } else if share < 0.75 {
        format!("{:.0} % of links follow degree, the rest fall on all nodes alike", 100.0 * share)
    } else if share < 0.98 {
        let uniform = 100.0 * (1.0 - share);
        format!(
            "links follow degree almost proportionally; a uniform share of {uniform:.0} % gives newcomers their chance"
        )
    } else {
        "links follow degree proportionally; next to none fall on all nodes alike".to_owned()
    };
    let own = match (model, parameter) {
        (Model::Power, Some(exponent)) => {
            let bent = if exponent < 1.0 { "less" } else { "more" };
            format!(", {bent} than in proportion to it (as its power {exponent:.2})")
        }
        (Model::Dormancy, Some(share)) => format!("; {:.0} % of nodes no longer draw links", 100.0 * share),
        (Model::GrowthVariance, Some(variance)) => {
            let spread = 100.0 * variance.sqrt();
            format!(
                "; nodes alike in degree differ in how fast they grow (standard deviation {spread:.0} % of the mean)"
            )
        }
        _ => String::new(),
    };
    mix + &own
}

impl Candidate {
    /// The candidate in plain words.
    pub fn verdict(&self) -> String {
        let words = candidate_in_words(self.model, self.preferential_share, self.parameter);
        sentence(format!("{words}; {:.0} % of the AIC weight", 100.0 * self.weight))
    }
}

/// One or two sentences that say what drives growth.
pub(super) fn verdict(fit: &Fit) -> String {
    let parameter = match fit.model {
        Model::Power => Some(fit.forces.kernel_exponent.value()),
        Model::Dormancy => Some(fit.forces.dormant_share.value()),
        Model::GrowthVariance => Some(fit.forces.growth_variance.value()),
        Model::Uniform | Model::Preferential | Model::Mix => None,
    };
    let words = candidate_in_words(fit.model, fit.preferential_share.value, parameter);
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
    sentence(words + &losses)
}

/// A clause with its capital and full stop.
fn sentence(mut clause: String) -> String {
    if let Some(first) = clause.get_mut(0..1) {
        first.make_ascii_uppercase();
    }
    clause + "."
}
