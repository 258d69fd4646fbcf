//! Rows and columns that occur more than once: candidates by hash, then compared exactly.

use std::sync::atomic::{AtomicBool, Ordering};

use ndarray::Array2;
use rayon::prelude::*;

use crate::operator::StoredRows;

/// Rows with the same non-zero entries.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize)]
pub struct DuplicateRows {
    /// Ascending, at least two.
    pub rows: Vec<usize>,
    /// Those whose data too, in all data sets, are the data of an earlier one of them: copies,
    /// where repeated measurements would differ by their noise.
    pub copies: Vec<usize>,
}

/// Classes of equal rows, by first member. Rows without entries are left to their own list.
pub(super) fn duplicate_rows(
    matrix: &StoredRows,
    data: &Array2<f64>,
    count: &[u32],
    hash: &[u64],
) -> Vec<DuplicateRows> {
    let mut classes = Vec::new();
    for candidates in candidates(count, hash) {
        // A hash that means two different rows splits here into one class for each.
        let mut split: Vec<Vec<usize>> = Vec::new();
        for i in candidates {
            match split.iter_mut().find(|class| equal_rows(matrix, class[0], i)) {
                Some(class) => class.push(i),
                None => split.push(vec![i]),
            }
        }
        classes.extend(split.into_iter().filter(|class| class.len() > 1));
    }
    classes.sort_unstable_by_key(|class| class[0]);
    classes.into_iter().map(|rows| DuplicateRows { copies: copies(data, &rows), rows }).collect()
}

fn equal_rows(matrix: &StoredRows, a: usize, b: usize) -> bool {
    let entries = |i| matrix.row(i).entries().filter(|&(_, value)| value != 0.0);
    entries(a).eq(entries(b))
}

fn copies(data: &Array2<f64>, rows: &[usize]) -> Vec<usize> {
    let mut seen: Vec<usize> = rows.to_vec();
    let key = |i: usize| data.row(i).into_iter().map(|value| value.to_bits());
    seen.sort_by(|&a, &b| key(a).cmp(key(b)).then(a.cmp(&b)));
    let mut copies: Vec<usize> =
        seen.windows(2).filter(|pair| key(pair[0]).eq(key(pair[1]))).map(|pair| pair[1]).collect();
    copies.sort_unstable();
    copies
}

/// Lists of two or more places that share count and hash, each ascending.
fn candidates(count: &[u32], hash: &[u64]) -> Vec<Vec<usize>> {
    let mut order: Vec<usize> = (0..count.len()).filter(|&place| count[place] > 0).collect();
    let key = |place: usize| (hash[place], count[place]);
    order.sort_unstable_by_key(|&place| (key(place), place));
    order
        .chunk_by(|&a, &b| key(a) == key(b))
        .filter(|class| class.len() > 1)
        .map(<[usize]>::to_vec)
        .collect()
}

const NO_CLASS: u32 = u32::MAX;

/// Classes of equal columns, ascending, by first member. One more visit of the rows, and only
/// where there are candidates. A class whose members turn out to differ (two different columns
/// with one hash: odds of about 2⁻⁶⁴ a pair) is dropped as a whole.
pub(super) fn duplicate_columns(
    matrix: &StoredRows,
    count: &[u32],
    hash: &[u64],
) -> Vec<Vec<usize>> {
    let classes = candidates(count, hash);
    if classes.is_empty() {
        return classes;
    }
    let mut class_of = vec![NO_CLASS; count.len()];
    for (class, members) in classes.iter().enumerate() {
        members.iter().for_each(|&j| class_of[j] = class as u32);
    }
    let equal: Vec<AtomicBool> = classes.iter().map(|_| AtomicBool::new(true)).collect();
    (0..matrix.cut().slices()).into_par_iter().for_each_init(Vec::new, |found, slice| {
        matrix.each_row(slice..slice + 1, |_, entries| {
            found.clear();
            for &(j, a) in entries {
                let class = class_of[j as usize];
                if a != 0.0 && class != NO_CLASS {
                    found.push((class, a.to_bits()));
                }
            }
            found.sort_unstable();
            for run in found.chunk_by(|a, b| a.0 == b.0) {
                let class = run[0].0 as usize;
                let whole = run.len() == classes[class].len();
                if !(whole && run.iter().all(|entry| entry.1 == run[0].1)) {
                    equal[class].store(false, Ordering::Relaxed);
                }
            }
        });
    });
    let mut kept: Vec<Vec<usize>> = classes
        .into_iter()
        .zip(equal)
        .filter(|(_, equal)| equal.load(Ordering::Relaxed))
        .map(|(class, _)| class)
        .collect();
    kept.sort_unstable_by_key(|class| class[0]);
    kept
}

#[cfg(test)]
mod tests {
    use super::*;
    use ndarray::array;

    #[test]
    fn equal_rows_are_one_class_and_only_equal_data_are_copies() {
        let matrix = StoredRows::from_compressed(
            5,
            2,
            vec![0, 2, 3, 5, 6, 7],
            // Row 1 holds an explicit zero in column 1 that rows 4 lacks.
            vec![0, 1, 1, 0, 1, 0, 0],
            vec![7.0, 0.0, 7.0, 7.0, 1.0, 7.0, 7.0],
        );
        let data = array![[1.0], [1.0], [1.0], [2.0], [1.0]];
        // All hashes equal: everything must be settled by comparison.
        let classes = duplicate_rows(&matrix, &data, &[1; 5], &[9; 5]);
        assert_eq!(classes, [DuplicateRows { rows: vec![0, 3, 4], copies: vec![4] }]);
    }

    #[test]
    fn columns_that_only_share_a_hash_are_no_duplicates() {
        let matrix = StoredRows::from_dense(2, 4, &[1.0, 1.0, 2.0, 5.0, 3.0, 3.0, 3.0, 6.0]);
        assert_eq!(duplicate_columns(&matrix, &[2; 4], &[1, 1, 2, 3]), [[0, 1]]);
        assert!(duplicate_columns(&matrix, &[2; 4], &[1, 2, 1, 3]).is_empty());
    }
}
