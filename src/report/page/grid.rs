//! Tables of a report.

/// Most columns that fit on a page beside the rows' names.
const MOST_COLUMNS: usize = 7;

/// A table: what is told of each row and column.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Grid {
    pub caption: String,
    /// What the rows' names are.
    pub corner: String,
    pub columns: Vec<String>,
    pub rows: Vec<Row>,
}

/// A row of a table.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Row {
    pub name: Cell,
    pub cells: Vec<Cell>,
}

/// What stands in a place: a figure and, smaller, what goes with it.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Cell {
    pub main: String,
    pub under: String,
}

impl Cell {
    /// A figure with what goes with it.
    pub fn new(main: impl Into<String>, under: impl Into<String>) -> Self {
        Self { main: main.into(), under: under.into() }
    }
}

impl From<String> for Cell {
    fn from(main: String) -> Self {
        Self { main, under: String::new() }
    }
}

impl From<&str> for Cell {
    fn from(main: &str) -> Self {
        main.to_owned().into()
    }
}

impl Row {
    /// A row by its name.
    pub fn new(name: impl Into<Cell>, cells: Vec<Cell>) -> Self {
        Self { name: name.into(), cells }
    }
}

/// Two things that a figure goes by, with their kinds: the longer down the page, the shorter across it, in as many tables as it takes.
pub fn crossed(
    caption: &str,
    (down_kind, down): (&str, &[String]),
    (across_kind, across): (&str, &[String]),
    cell: &dyn Fn(usize, usize) -> Cell,
) -> Vec<Grid> {
    if across.len() > MOST_COLUMNS && down.len() < across.len() {
        return crossed(caption, (across_kind, across), (down_kind, down), &|i, j| cell(j, i));
    }
    let starts = (0..across.len()).step_by(MOST_COLUMNS);
    let part = |start: usize| {
        let names = across.iter().enumerate().skip(start).take(MOST_COLUMNS);
        let columns: Vec<String> = names.clone().map(|(_, name)| name.clone()).collect();
        let rows = down.iter().enumerate();
        let rows = rows.map(|(i, name)| Row::new(name.clone(), names.clone().map(|(j, _)| cell(i, j)).collect()));
        let caption = if start == 0 { caption.to_owned() } else { format!("{caption} (continued)") };
        Grid { caption, corner: down_kind.to_owned(), columns, rows: rows.collect() }
    };
    starts.map(part).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn names(prefix: &str, count: usize) -> Vec<String> {
        (0..count).map(|i| format!("{prefix}{i}")).collect()
    }

    #[test]
    fn every_figure_stands_under_its_names_whatever_the_size() {
        for (days, thresholds) in [(1, 1), (12, 5), (2, 40), (40, 9), (9, 40), (7, 7), (8, 8)] {
            let (rows, columns) = (names("d", days), names("t", thresholds));
            let grids = crossed("c", ("date", &rows), ("links", &columns), &|i, j| format!("d{i} t{j}").into());
            let mut seen = 0;
            for grid in &grids {
                assert!(grid.columns.len() <= MOST_COLUMNS, "{days} {thresholds}");
                for row in &grid.rows {
                    assert_eq!(row.cells.len(), grid.columns.len());
                    for (column, cell) in grid.columns.iter().zip(&row.cells) {
                        let turned = format!("{column} {}", row.name.main);
                        assert!(cell.main == format!("{} {column}", row.name.main) || cell.main == turned);
                        seen += 1;
                    }
                }
            }
            assert_eq!(seen, days * thresholds);
        }
        assert_eq!(crossed("c", ("a", &[]), ("b", &[]), &|_, _| Cell::default()), []);
    }
}
