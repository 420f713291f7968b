//! Evidence as CSV (RFC 4180), in the form in which it is taken.

use std::fmt::Write as _;

/// Degree counts: `degree,nodes`.
///
/// ```
/// let csv = tailcast::report::degree_counts_csv(&[(0, 5400), (40, 3)]);
/// assert_eq!(csv, "degree,nodes\r\n0,5400\r\n40,3\r\n");
/// ```
pub fn degree_counts_csv(pairs: &[(u64, u64)]) -> String {
    let mut text = "degree,nodes\r\n".to_owned();
    for (degree, nodes) in pairs {
        // Writing to a String cannot fail.
        let _ = write!(text, "{degree},{nodes}\r\n");
    }
    text
}

/// Transitions: `degree_before,degree_after,nodes`, blank where the node was not there.
///
/// ```
/// let csv = tailcast::report::transitions_csv(&[(None, Some(0), 20), (Some(3), None, 2)]);
/// assert_eq!(csv, "degree_before,degree_after,nodes\r\n,0,20\r\n3,,2\r\n");
/// ```
pub fn transitions_csv(rows: &[(Option<u64>, Option<u64>, u64)]) -> String {
    let mut text = "degree_before,degree_after,nodes\r\n".to_owned();
    let cell = |degree: &Option<u64>| degree.map(|degree| degree.to_string()).unwrap_or_default();
    for (before, after, nodes) in rows {
        let _ = write!(text, "{},{},{nodes}\r\n", cell(before), cell(after));
    }
    text
}
