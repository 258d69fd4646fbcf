//! What rows and columns are called in messages. Numbers count from 1, as in the user's files;
//! a user's own words are shown with control characters escaped.

use super::{BlockSpan, ColumnTable, RowTable, System};
use crate::base::Grid;
use crate::base::complaint::quote;

impl System {
    /// E.g. `row 17 (id "S3-R9", group "S3", block "upper")`; the block only where there are
    /// several, with the row's number in it where that differs.
    ///
    /// Panics if `i` is not a row.
    pub fn row_name(&self, i: usize) -> String {
        assert!(i < self.matrix.rows(), "row {i} of {}", self.matrix.rows());
        row_name(i, &self.rows, &self.blocks)
    }

    /// E.g. `column 5 (cell (x 3, z 17) at (2.5, 16.5) m)` or `column 2 ("B-07", station)`.
    ///
    /// Panics if `j` is not a column.
    pub fn column_name(&self, j: usize) -> String {
        assert!(j < self.matrix.columns(), "column {j} of {}", self.matrix.columns());
        let cell = self.grid.as_ref().zip(self.cell_of_column(j));
        column_name(j, &self.columns, cell)
    }

    /// Place among the grid's unknowns of column `j`; `None` without a grid or for an unknown of
    /// another kind than `cell`. Costs O(j) where kinds are stated.
    fn cell_of_column(&self, j: usize) -> Option<usize> {
        self.grid.as_ref()?;
        self.columns.is_cell(j).then(|| match &self.columns.kinds {
            None => j,
            Some(_) => (0..j).filter(|&before| self.columns.is_cell(before)).count(),
        })
    }
}

impl ColumnTable {
    /// Tells of an unknown whether the one constant that stands for the model is its value: of the
    /// cells where there are any, else of all.
    pub fn taking_constant(&self) -> impl Fn(usize) -> bool + Sync + '_ {
        let cells = |kinds: &Vec<String>| kinds.iter().any(|k| k.is_empty() || k == "cell");
        let all = !self.kinds.as_ref().is_some_and(cells);
        move |j| all || self.is_cell(j)
    }

    /// Whether unknown `j` is one of the grid's cells: of kind `cell`, or of no kind.
    pub fn is_cell(&self, j: usize) -> bool {
        self.kinds.as_ref().is_none_or(|kinds| kinds[j].is_empty() || kinds[j] == "cell")
    }
}

pub(super) fn row_name(i: usize, rows: &RowTable, blocks: &[BlockSpan]) -> String {
    let mut parts = Vec::new();
    if let Some(id) = rows.ids.as_ref().map(|ids| &ids[i]).filter(|id| !id.is_empty()) {
        parts.push(format!("id {}", quoted(id)));
    }
    if let Some(group) = rows.group_name(i).filter(|group| !group.is_empty()) {
        parts.push(format!("group {}", quoted(group)));
    }
    if blocks.len() > 1
        && let Some(block) = blocks.iter().rev().find(|block| block.first_row <= i)
    {
        let within = if block.first_row == 0 {
            String::new()
        } else {
            format!(" row {}", i - block.first_row + 1)
        };
        parts.push(format!("block {}{within}", quoted(&block.name)));
    }
    with_parts(format!("row {}", i + 1), &parts)
}

impl RowTable {
    /// The group of row `i`, where groups are stated.
    pub fn group_name(&self, i: usize) -> Option<&str> {
        let group = self.groups.as_ref()?[i];
        self.group_names.get(group as usize).map(String::as_str)
    }
}

pub(super) fn column_name(j: usize, columns: &ColumnTable, cell: Option<(&Grid, usize)>) -> String {
    let mut parts = Vec::new();
    if let Some(name) = columns.names.as_ref().map(|names| &names[j]).filter(|n| !n.is_empty()) {
        parts.push(quoted(name));
    }
    if let Some((grid, unknown)) = cell {
        parts.push(quote(grid.describe(grid.cell(unknown)).as_bytes()));
    } else if let Some(kind) = columns.kinds.as_ref().map(|k| &k[j]).filter(|k| !k.is_empty()) {
        parts.push(quote(kind.as_bytes()));
    }
    with_parts(format!("column {}", j + 1), &parts)
}

fn with_parts(name: String, parts: &[String]) -> String {
    if parts.is_empty() { name } else { format!("{name} ({})", parts.join(", ")) }
}

pub(super) fn quoted(text: &str) -> String {
    format!("\"{}\"", quote(text.as_bytes()))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::base::Axis;

    fn block(name: &str, first_row: usize) -> BlockSpan {
        BlockSpan { name: name.into(), first_row, rows: 2, weight: 1.0 }
    }

    #[test]
    fn a_row_is_named_by_all_that_is_known() {
        let rows = RowTable {
            ids: Some(vec!["S1-R1".into(), "S1\u{1b}[31m".into(), String::new()]),
            groups: Some(vec![0, 0, 1]),
            group_names: vec!["S1".into(), "S2".into()],
            ..RowTable::default()
        };
        let two = [block("upper", 0), block("lower", 2)];
        assert_eq!(row_name(0, &rows, &two), "row 1 (id \"S1-R1\", group \"S1\", block \"upper\")");
        assert_eq!(row_name(1, &rows, &two[..1]), "row 2 (id \"S1\\u{1b}[31m\", group \"S1\")");
        assert_eq!(row_name(2, &rows, &two), "row 3 (group \"S2\", block \"lower\" row 1)");
        assert_eq!(row_name(2, &RowTable::default(), &two[..1]), "row 3");
    }

    #[test]
    fn a_column_is_named_by_its_cell_or_its_kind() {
        let axis = |name: &str| Axis { name: name.into(), cells: 2, spacing: 1.0, origin: 0.0 };
        let grid = Grid::new(vec![axis("x"), axis("z")], "m".into(), "x", None).unwrap();
        let columns = ColumnTable {
            names: Some(vec!["clock".into(), String::new()]),
            kinds: Some(vec!["shift".into(), "cell".into()]),
            ..ColumnTable::default()
        };
        assert_eq!(column_name(0, &columns, None), "column 1 (\"clock\", shift)");
        assert_eq!(
            column_name(1, &columns, Some((&grid, 3))),
            "column 2 (cell (x 2, z 2) at (1.5, 1.5) m)"
        );
    }
}
