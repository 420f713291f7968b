//! Rows of an answer, read as whole numbers.

use super::SourceFault;
use crate::model::DegreeCounts;

/// A row as it came: both columns as text, null where there is no value.
pub type Row = (Option<String>, Option<String>);

/// The counts that rows tell, the first fault of each column told with its row.
pub fn counts(rows: &[Row]) -> Result<DegreeCounts, SourceFault> {
    let mut pairs = Vec::with_capacity(rows.len());
    for (index, (degree, nodes)) in rows.iter().enumerate() {
        let read = |column: &str, value: &Option<String>| {
            whole(value.as_deref()).map_err(|why| SourceFault::NoCounts(format!("row {}: {column} {why}", index + 1)))
        };
        pairs.push((read("degree", degree)?, read("nodes", nodes)?));
    }
    if rows.is_empty() {
        return Err(SourceFault::NoCounts("it has no rows".to_owned()));
    }
    DegreeCounts::from_pairs(&pairs).map_err(|faults| SourceFault::rows(&faults))
}

/// A whole number: digits, and zeros after a point, as NUMERIC may have them.
fn whole(value: Option<&str>) -> Result<u64, String> {
    let Some(text) = value else {
        return Err("is null; count with coalesce(…, 0), or leave such rows out".to_owned());
    };
    let (digits, fraction) = text.split_once('.').unwrap_or((text, ""));
    let shown: String = text.chars().take(40).collect();
    if let Some(positive) = text.strip_prefix('-')
        && positive.starts_with(|first: char| first.is_ascii_digit())
    {
        return Err(format!("{shown} is negative"));
    }
    if digits.is_empty() || !digits.bytes().all(|byte| byte.is_ascii_digit()) {
        return Err(format!("{shown:?} is no whole number; cast it to BIGINT"));
    }
    if !fraction.bytes().all(|byte| byte == b'0') {
        return Err(format!("{shown} is no whole number"));
    }
    digits.parse().map_err(|_| format!("{shown} is above 2^64 - 1"))
}

#[cfg(test)]
mod tests {
    use super::*;

    fn row(degree: &str, nodes: &str) -> Row {
        (Some(degree.to_owned()), Some(nodes.to_owned()))
    }

    #[test]
    fn integers_and_numerics_are_counts() {
        let read = counts(&[row("2", "7"), row("0", "48.000"), row("9007199254740991", "1")]).unwrap();
        assert_eq!((read.nodes(), read.largest()), (56, 9_007_199_254_740_991));
    }

    #[test]
    fn every_fault_is_told_with_its_row() {
        for (second, words) in [
            ((None, Some("1".to_owned())), "row 2: degree is null"),
            ((Some("1".to_owned()), None), "row 2: nodes is null"),
            (row("1.5", "1"), "row 2: degree 1.5 is no whole number"),
            (row("-1", "1"), "row 2: degree -1 is negative"),
            (row("1", "-0.5"), "row 2: nodes -0.5 is negative"),
            (row("ana", "1"), "row 2: degree \"ana\" is no whole number; cast"),
            (row("", "1"), "row 2: degree \"\" is no whole number"),
            (row("1e3", "1"), "cast it to BIGINT"),
            (row("1", "18446744073709551616"), "row 2: nodes 18446744073709551616 is above"),
            (row("9007199254740992", "1"), "row 2: degree 9007199254740992 is above the largest"),
            (row("0", "1"), "row 2: degree 0 stands in row 1 too; GROUP BY degree"),
        ] {
            let fault = counts(&[row("0", "5"), second.clone()]).unwrap_err().to_string();
            assert!(fault.contains(words), "{second:?}: {fault}");
        }
        assert!(counts(&[]).unwrap_err().to_string().contains("no rows"));
        assert!(counts(&[row("3", "0")]).unwrap_err().to_string().contains("no degree has a node"));
    }
}
