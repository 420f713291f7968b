//! The distribution of a newcomer's degree on arrival.

use std::fmt;

use super::MAX_DEGREE;

/// Shares must add up to one within this much; they are then rescaled to add up exactly.
const SHARE_SUM_TOLERANCE: f64 = 1e-6;

/// Entry degrees e_k: the distribution of a newcomer's degree on arrival, ascending, shares adding up to one.
///
/// ```
/// use tailcast::model::EntryDegrees;
/// let entry = EntryDegrees::from_shares(&[(0, 0.75), (2, 0.25)]).unwrap();
/// assert_eq!(entry.mean(), 0.5);
/// ```
#[derive(Debug, Clone, PartialEq)]
pub struct EntryDegrees {
    shares: Vec<(u64, f64)>,
    mean: f64,
}

/// What is wrong with a list of entry degrees, and where.
#[derive(Debug, Clone, PartialEq)]
pub struct EntryFault {
    /// Index of the offending pair; `None` for the whole list.
    pub index: Option<usize>,
    /// What is wrong and how to mend it.
    pub detail: String,
}

impl fmt::Display for EntryFault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.detail)
    }
}

impl EntryDegrees {
    /// Every newcomer arrives with exactly `degree` links.
    pub fn single(degree: u64) -> Self {
        let degree = degree.min(MAX_DEGREE);
        Self { shares: vec![(degree, 1.0)], mean: degree as f64 }
    }

    /// Builds the distribution from `(degree, share)` pairs in any order.
    ///
    /// # Errors
    /// Every fault: an empty list, a repeated or too large degree, a share that is negative or not finite, shares that
    /// do not add up to one.
    pub fn from_shares(pairs: &[(u64, f64)]) -> Result<Self, Vec<EntryFault>> {
        let mut faults = Vec::new();
        let mut shares: Vec<(u64, f64)> = Vec::with_capacity(pairs.len());
        for (index, &(degree, share)) in pairs.iter().enumerate() {
            let mut fault = |detail| faults.push(EntryFault { index: Some(index), detail });
            if degree > MAX_DEGREE {
                fault(format!("entry degree {degree} is above the largest allowed, {MAX_DEGREE}"));
            }
            if !(share.is_finite() && (0.0..=1.0).contains(&share)) {
                fault(format!("share {share} is not between 0 and 1"));
            }
            if shares.iter().any(|&(k, _)| k == degree) {
                fault(format!("entry degree {degree} is given twice; add the two shares into one pair"));
            }
            shares.push((degree, share));
        }
        let sum: f64 = shares.iter().map(|&(_, share)| share).sum();
        if faults.is_empty() && (sum - 1.0).abs() > SHARE_SUM_TOLERANCE {
            faults.push(EntryFault { index: None, detail: format!("the shares add up to {sum}, not to 1") });
        }
        if !faults.is_empty() {
            return Err(faults);
        }
        shares.retain(|&(_, share)| share > 0.0);
        shares.sort_by_key(|&(degree, _)| degree);
        for pair in &mut shares {
            pair.1 /= sum;
        }
        let mean = shares.iter().map(|&(degree, share)| degree as f64 * share).sum();
        Ok(Self { shares, mean })
    }

    /// `(degree, share)` pairs in ascending degree.
    pub fn shares(&self) -> &[(u64, f64)] {
        &self.shares
    }

    /// Mean entry degree ē.
    pub fn mean(&self) -> f64 {
        self.mean
    }

    /// Smallest entry degree with a positive share.
    pub fn smallest(&self) -> u64 {
        self.shares.first().map_or(0, |&(degree, _)| degree)
    }

    /// Share of newcomers that arrive with degree `degree`.
    pub fn share_of(&self, degree: u64) -> f64 {
        self.shares.binary_search_by_key(&degree, |&(k, _)| k).map_or(0.0, |i| self.shares[i].1)
    }
}
