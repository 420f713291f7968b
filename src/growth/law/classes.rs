//! Tails of one law from one starting degree after the other, by contours that neighbours share.

use super::{GrowthError, NodeLaw};
use crate::numerics::inversion::SharedContour;
use crate::numerics::tolerances::Accuracy;

/// P(at least `threshold` links) by one node law, from any degrees: quickest in steps that stay the same.
pub(crate) struct ClassTails<'a> {
    law: &'a NodeLaw,
    threshold: u64,
    accuracy: Accuracy,
    contour: Option<SharedContour>,
}

impl<'a> ClassTails<'a> {
    pub fn new(law: &'a NodeLaw, threshold: u64, accuracy: Accuracy) -> Self {
        Self { law, threshold, accuracy, contour: None }
    }

    /// The tail from `degree`: by the contour at hand, else by one through its own saddle point, else by one that nobody shares.
    ///
    /// # Errors
    /// Those of [`NodeLaw::tail`].
    pub fn of(&mut self, degree: u64) -> Result<f64, GrowthError> {
        if !self.is_inverted(degree) {
            return self.law.tail_within(degree, self.threshold, self.accuracy);
        }
        if let Some(tail) = self.contour.as_mut().and_then(|contour| contour.tail(degree)) {
            return Ok(tail);
        }
        match SharedContour::through(self.law, degree, self.threshold, self.accuracy) {
            Some((contour, tail)) => {
                self.contour = Some(contour);
                Ok(tail)
            }
            None => {
                self.contour = None;
                self.law.tail_within(degree, self.threshold, self.accuracy)
            }
        }
    }

    /// Whether the tail takes a contour that others may share.
    fn is_inverted(&self, degree: u64) -> bool {
        let (law, threshold) = (self.law, self.threshold);
        threshold > 0
            && law.steady.is_none()
            && !law.is_still()
            && (law.losses || degree < threshold)
            && !law.gains_seldom(degree)
    }
}
