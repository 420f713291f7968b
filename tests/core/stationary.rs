//! The stationary law against mpmath and scipy (tests/reference/law.py).

use tailcast::fit::StationaryLaw;
use tailcast::model::{AttachmentMix, EntryDegrees};

use crate::reference::{number, relative_error, rows};

#[test]
fn stationary_law_matches_the_recurrence() {
    for row in rows("stationary.csv") {
        let v: Vec<f64> = row[1..].iter().map(|c| number(c)).collect();
        let [share, landings, entry, degree, pmf, tail] = v[..] else { panic!("{row:?}") };
        let law = StationaryLaw::new(AttachmentMix::new(share).unwrap(), landings, EntryDegrees::single(entry as u64));
        let ours = law.log_pmf(&[degree as u64])[0].exp();
        assert!(relative_error(ours, pmf) < 1e-10, "pmf {ours:e} for {row:?}");
        let ours = law.tail(&[degree as u64])[0];
        assert!(relative_error(ours, tail) < 1e-10, "tail {ours:e} for {row:?}");
    }
}
