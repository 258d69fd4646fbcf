//! The last step of building stored rows: sort each row by column, merge repeated entries.
//!
//! The sort keeps file order among repeats, so a sum does not depend on threads or on how the
//! file was cut. Memory beyond the arrays: 8 bytes an entry of the rows being sorted at the moment.

use rayon::prelude::*;
use sprs::CsMatI;

use super::compressed::CompressedRows;
use super::keep::Keep;
use crate::kernel::Value;

/// What several entries at the same row and column mean.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Duplicates {
    /// They are added, in file order.
    #[default]
    Sum,
    /// They are an error.
    Error,
    /// The last one counts.
    Last,
}

/// How to settle.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Rules {
    /// What entries at one place mean.
    pub duplicates: Duplicates,
    /// A sum may overflow.
    pub allow_nonfinite: bool,
    /// Sums are rounded to f32; otherwise the storage is widened where a sum needs it.
    pub rounded: bool,
}

impl Rules {
    /// Whether sums in this storage are rounded to it.
    fn rounds<V: Keep>(&self) -> bool {
        self.rounded && V::BYTES == f32::BYTES
    }
}

/// Compressed rows whose columns may be unsorted and may repeat.
pub struct Unsettled<V> {
    /// n.
    pub columns_total: usize,
    /// m + 1 places, ascending from 0 to the number of entries.
    pub pointers: Vec<usize>,
    /// Column of each entry, below n.
    pub columns: Vec<u32>,
    /// One per entry.
    pub values: Vec<V>,
}

/// The matrix, and how many entries were merged into another.
#[derive(Debug)]
pub struct Settled {
    /// Columns ascend and do not repeat.
    pub matrix: CompressedRows,
    /// Entries that are no longer entries of their own.
    pub duplicates: u64,
}

/// Why rows could not be settled; rows and columns from 0.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Refused {
    /// Several entries at one place, and that is to be an error.
    Repeated {
        /// From 0.
        row: usize,
        /// From 0.
        column: usize,
    },
    /// Finite entries whose sum is not.
    SumOverflows {
        /// From 0.
        row: usize,
        /// From 0.
        column: usize,
    },
    /// The sum is not 0, but 0 once rounded to f32.
    SumVanishes {
        /// From 0.
        row: usize,
        /// From 0.
        column: usize,
    },
    /// More than 2³² − 1 entries in one row.
    RowTooLong {
        /// From 0.
        row: usize,
    },
}

impl Refused {
    /// Row and column, where it is one entry that is refused.
    pub fn entry(self) -> Option<(usize, usize)> {
        match self {
            Self::Repeated { row, column }
            | Self::SumOverflows { row, column }
            | Self::SumVanishes { row, column } => Some((row, column)),
            Self::RowTooLong { .. } => None,
        }
    }
}

impl<V: Keep> Unsettled<V> {
    /// Sorts, merges, and hands over the matrix.
    ///
    /// Panics if the arrays are not compressed rows with columns in range.
    ///
    /// # Errors
    /// See [`Refused`]; the first in order of rows, then columns.
    pub fn settle(mut self, rules: &Rules) -> Result<Settled, Refused> {
        let too_long = |pair: &[usize]| pair[1] - pair[0] > u32::MAX as usize;
        if let Some(row) = self.pointers.windows(2).position(too_long) {
            return Err(Refused::RowTooLong { row });
        }
        let found = self.sort_rows(rules);
        if let Some(refused) = found.refused {
            return Err(refused);
        }
        if found.repeats > 0 && !found.exact && !rules.rounds::<V>() {
            return self.widened().settle(rules);
        }
        if found.repeats > 0 {
            self.merge(rules);
        }
        let rows = self.pointers.len() - 1;
        let matrix =
            CsMatI::try_new((rows, self.columns_total), self.pointers, self.columns, self.values)
                .map_err(|(.., error)| error)
                .expect("sorted and merged rows are valid");
        Ok(Settled { matrix: V::store(matrix), duplicates: found.repeats })
    }

    fn widened(self) -> Unsettled<V::Wider> {
        let values = self.values.iter().map(|value| V::Wider::keep(value.number())).collect();
        let Self { columns_total, pointers, columns, .. } = self;
        Unsettled { columns_total, pointers, columns, values }
    }

    /// Sorts every row and looks at what repeats.
    fn sort_rows(&mut self, rules: &Rules) -> Found {
        let (mut columns, mut values) = (self.columns.as_mut_slice(), self.values.as_mut_slice());
        let mut jobs = Vec::new();
        for rows in cut_by_entries(&self.pointers) {
            let entries = self.pointers[rows.end] - self.pointers[rows.start];
            let (column_head, tail) = columns.split_at_mut(entries);
            columns = tail;
            let (value_head, tail) = values.split_at_mut(entries);
            values = tail;
            jobs.push((rows, column_head, value_head));
        }
        let pointers = &self.pointers;
        let found: Vec<Found> = jobs
            .into_par_iter()
            .map_init(Vec::new, |keys, (rows, columns, values)| {
                let first = pointers[rows.start];
                let mut found = Found::default();
                for row in rows {
                    let entries = pointers[row] - first..pointers[row + 1] - first;
                    let (columns, values) = (&mut columns[entries.clone()], &mut values[entries]);
                    if !columns.is_sorted() {
                        sort_row(columns, values, keys);
                    }
                    found.look(row, columns, values, rules);
                }
                found
            })
            .collect();
        found.into_iter().fold(Found::default(), Found::and)
    }

    /// Merges repeats and closes the gaps.
    fn merge(&mut self, rules: &Rules) {
        let mut end = 0;
        for row in 0..self.pointers.len() - 1 {
            // The end of the row before was moved already; its old value is where this one starts.
            let start = if row == 0 { 0 } else { std::mem::replace(&mut self.pointers[row], end) };
            let mut place = start;
            while place < self.pointers[row + 1] {
                let stop = run_end(&self.columns[..self.pointers[row + 1]], place);
                let merged = V::keep(value_of_run(&self.values[place..stop], rules.duplicates));
                self.columns[end] = self.columns[place];
                self.values[end] = merged;
                end += 1;
                place = stop;
            }
        }
        if let Some(last) = self.pointers.last_mut() {
            *last = end;
        }
        self.columns.truncate(end);
        self.values.truncate(end);
        self.columns.shrink_to_fit();
        self.values.shrink_to_fit();
    }
}

/// One past the last place with the same column as `place`.
fn run_end(columns: &[u32], place: usize) -> usize {
    let same = columns[place..].iter().take_while(|&&column| column == columns[place]).count();
    place + same
}

fn value_of_run<V: Keep>(values: &[V], duplicates: Duplicates) -> f64 {
    match duplicates {
        Duplicates::Last => values[values.len() - 1].number(),
        _ => values[1..].iter().fold(values[0].number(), |sum, value| sum + value.number()),
    }
}

/// Sorts one row by column, keeping the order of equal columns.
///
/// Keys of column and place are sorted, then the values follow the cycles of the permutation:
/// 8 bytes an entry instead of a second copy of columns and values.
fn sort_row<V: Keep>(columns: &mut [u32], values: &mut [V], keys: &mut Vec<u64>) {
    keys.clear();
    keys.extend(columns.iter().zip(0u64..).map(|(&column, place)| u64::from(column) << 32 | place));
    keys.sort_unstable();
    for (column, key) in columns.iter_mut().zip(&*keys) {
        *column = (key >> 32) as u32;
    }
    let place_of = |key: u64| (key & 0xffff_ffff) as usize;
    for start in 0..values.len() {
        let first = values[start];
        let mut place = start;
        loop {
            let source = place_of(keys[place]);
            // A place that is its own source is done.
            keys[place] = place as u64;
            if source == start {
                values[place] = first;
                break;
            }
            values[place] = values[source];
            place = source;
        }
    }
}

/// Ranges of rows of about as many entries each.
fn cut_by_entries(pointers: &[usize]) -> Vec<std::ops::Range<usize>> {
    let (rows, total) = (pointers.len() - 1, pointers[pointers.len() - 1]);
    let share = (total / 256).max(4096);
    let mut ranges = Vec::new();
    let mut start = 0;
    while start < rows {
        let stop = pointers.partition_point(|&pointer| pointer < pointers[start] + share);
        let stop = stop.clamp(start + 1, rows);
        ranges.push(start..stop);
        start = stop;
    }
    ranges
}

/// What a look at sorted rows finds.
struct Found {
    repeats: u64,
    /// Every merged value fits the storage exactly.
    exact: bool,
    refused: Option<Refused>,
}

impl Default for Found {
    fn default() -> Self {
        Self { repeats: 0, exact: true, refused: None }
    }
}

impl Found {
    fn and(self, later: Self) -> Self {
        Self {
            repeats: self.repeats + later.repeats,
            exact: self.exact && later.exact,
            refused: self.refused.or(later.refused),
        }
    }

    fn look<V: Keep>(&mut self, row: usize, columns: &[u32], values: &[V], rules: &Rules) {
        if columns.is_sorted_by(|a, b| a < b) {
            return;
        }
        let mut place = 0;
        while place < columns.len() {
            let stop = run_end(columns, place);
            if stop > place + 1 {
                self.repeats += (stop - place - 1) as u64;
                let refused = self.judge(row, columns[place] as usize, &values[place..stop], rules);
                self.refused = self.refused.or(refused);
            }
            place = stop;
        }
    }

    fn judge<V: Keep>(
        &mut self,
        row: usize,
        column: usize,
        values: &[V],
        rules: &Rules,
    ) -> Option<Refused> {
        if rules.duplicates == Duplicates::Error {
            return Some(Refused::Repeated { row, column });
        }
        let merged = value_of_run(values, rules.duplicates);
        self.exact &= V::keep_exactly(merged).is_some();
        let kept = if rules.rounds::<V>() { V::keep(merged).number() } else { merged };
        let all_finite = values.iter().all(|value| value.number().is_finite());
        if all_finite && !kept.is_finite() && !rules.allow_nonfinite {
            return Some(Refused::SumOverflows { row, column });
        }
        (kept == 0.0 && merged != 0.0).then_some(Refused::SumVanishes { row, column })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn one_row<V: Keep>(entries: &[(u32, f64)], rules: &Rules) -> Result<Settled, Refused> {
        let (columns, values) =
            entries.iter().map(|&(column, value)| (column, V::keep(value))).unzip();
        Unsettled { columns_total: 9, pointers: vec![0, entries.len()], columns, values }
            .settle(rules)
    }

    fn listed(settled: &Settled) -> Vec<(usize, f64)> {
        settled.matrix.row(0).entries().collect()
    }

    #[test]
    fn repeats_are_added_in_file_order_or_the_last_counts() {
        // 1e16 + 1 − 1e16 is 0 in this order and 1 in another.
        let entries = [(4, 1e16), (1, 5.0), (4, 1.0), (4, -1e16), (0, 2.0)];
        let sum = one_row::<f64>(&entries, &Rules::default()).unwrap();
        assert_eq!(listed(&sum), [(0, 2.0), (1, 5.0), (4, 0.0)]);
        assert_eq!(sum.duplicates, 2);
        let last = Rules { duplicates: Duplicates::Last, ..Rules::default() };
        assert_eq!(listed(&one_row::<f64>(&entries, &last).unwrap())[2], (4, -1e16));
        let error = Rules { duplicates: Duplicates::Error, ..Rules::default() };
        let refused = one_row::<f64>(&entries, &error).unwrap_err();
        assert_eq!(refused, Refused::Repeated { row: 0, column: 4 });
    }

    #[test]
    fn storage_widens_only_where_a_sum_needs_it() {
        let rules = Rules::default();
        let twice = one_row::<()>(&[(3, 1.0), (3, 1.0)], &rules).unwrap();
        assert_eq!((twice.matrix.storage_name(), listed(&twice)[0]), ("f32", (3, 2.0)));
        let fine = one_row::<f32>(&[(3, 1.5), (3, 1.0)], &rules).unwrap();
        assert_eq!(fine.matrix.storage_name(), "f32");
        let wide = one_row::<f32>(&[(3, 1.0), (3, f64::from(1e-10f32))], &rules).unwrap();
        assert_eq!(wide.matrix.storage_name(), "f64");
        assert_eq!(listed(&wide)[0].1, 1.0 + f64::from(1e-10f32));
        let rounded = Rules { rounded: true, ..rules };
        let kept = one_row::<f32>(&[(3, 1.0), (3, f64::from(1e-10f32))], &rounded).unwrap();
        assert_eq!((kept.matrix.storage_name(), listed(&kept)[0].1), ("f32", 1.0));
        let twice = one_row::<()>(&[(3, 1.0), (3, 1.0)], &rounded).unwrap();
        assert_eq!((twice.matrix.storage_name(), listed(&twice)[0]), ("f32", (3, 2.0)));
    }

    #[test]
    fn a_sum_that_overflows_is_refused_by_entry() {
        let entries = [(2, 1e308), (2, 1e308)];
        let refused = one_row::<f64>(&entries, &Rules::default()).unwrap_err();
        assert_eq!(refused, Refused::SumOverflows { row: 0, column: 2 });
        let allowed = Rules { allow_nonfinite: true, ..Rules::default() };
        assert_eq!(listed(&one_row::<f64>(&entries, &allowed).unwrap())[0].1, f64::INFINITY);
    }
}
