//! Reads the committed reference tables.

/// Rows of a CSV file in `tests/reference`, without its header.
pub fn rows(file: &str) -> Vec<Vec<String>> {
    let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/reference").join(file);
    let text = std::fs::read_to_string(&path).unwrap_or_else(|e| panic!("{}: {e}", path.display()));
    text.lines().skip(1).map(|line| line.split(',').map(str::to_owned).collect()).collect()
}

/// A cell as a number.
pub fn number(cell: &str) -> f64 {
    cell.parse().unwrap_or_else(|_| panic!("not a number: {cell:?}"))
}

/// |a/b − 1|.
pub fn relative_error(a: f64, b: f64) -> f64 {
    if a == b { 0.0 } else { (a / b - 1.0).abs() }
}
