//! Quantiles of forecast counts against scipy's `nbinom` and `poisson` (tests/reference/law.py).

use tailcast::forecast::CountLaw;

use crate::reference::{number, relative_error, rows};

#[test]
fn quantiles_match_scipy() {
    for row in rows("quantiles.csv") {
        let v: Vec<f64> = row.iter().map(|c| number(c)).collect();
        let [mean, variance, probability, quantile] = v[..] else { panic!("{row:?}") };
        let ours = CountLaw::new(0.0, mean, variance).quantile(probability);
        if mean <= 1e5 {
            assert_eq!(ours, quantile, "{row:?}");
        } else if variance.sqrt() < mean / 3.0 {
            assert!(relative_error(ours, quantile) < 1e-3, "{row:?} {ours}");
        }
    }
}

#[test]
fn a_binomial_count_stays_within_its_trials() {
    // 100 trials at 0.9: mean 90, variance 9. Values from scipy.stats.binom.ppf at 0.05, 0.5, 0.95, from memory.
    let law = CountLaw::new(0.0, 90.0, 9.0);
    assert_eq!([0.05, 0.5, 0.95].map(|p| law.quantile(p)), [85.0, 90.0, 95.0]);
    assert!(law.quantile(0.999_999) <= 100.0);
    let certain = CountLaw::new(7.0, 0.0, 0.0);
    assert_eq!(certain.quantile(0.01), 7.0);
}
