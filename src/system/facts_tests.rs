use ndarray::{Array2, array};

use super::*;
use crate::base::random::Stream;
use crate::operator::{RowWeights, StoredRows};
use crate::system::{BlockSpan, ColumnTable, RowTable, Units};

fn system(matrix: StoredRows, data: Array2<f64>, weights: RowWeights) -> System {
    let rows = matrix.rows();
    System {
        matrix,
        data,
        absent: None,
        data_shift: None,
        uncertainty: None,
        weights,
        reference: None,
        rows: RowTable::default(),
        columns: ColumnTable::default(),
        blocks: vec![BlockSpan { name: String::new(), first_row: 0, rows, weight: 1.0 }],
        grid: None,
        units: Units::default(),
    }
}

/// Rows (1 −2 · ·), none, (· 4 0 ·), (1 −2 · ·); column 4 empty, column 3 an explicit zero only.
fn small() -> System {
    let matrix = StoredRows::from_compressed(
        4,
        4,
        vec![0, 2, 2, 4, 6],
        vec![0, 1, 1, 2, 0, 1],
        vec![1.0, -2.0, 4.0, 0.0, 1.0, -2.0],
    );
    let data = array![[1.0, 2.0], [3.0, 0.0], [4.0, 4.0], [1.0, 5.0]];
    system(matrix, data, RowWeights::Shared(vec![1.0, 0.5, 2.0, 1.0]))
}

#[test]
fn sums_of_rows_and_columns_by_hand() {
    let facts = small().facts();
    assert_eq!((facts.rows, facts.columns, facts.entries, facts.explicit_zeros), (4, 4, 6, 1));
    assert_eq!(facts.row.count, [2, 0, 1, 2]);
    assert_eq!(facts.row.sum, [-1.0, 0.0, 4.0, -1.0]);
    assert_eq!(facts.row.absolute_sum, [3.0, 0.0, 4.0, 3.0]);
    assert_eq!(facts.row.square_sum, [5.0, 0.0, 16.0, 5.0]);
    assert_eq!(facts.column.count, [2, 3, 0, 0]);
    assert_eq!(facts.column.absolute_sum, [2.0, 8.0, 0.0, 0.0]);
    assert_eq!(facts.column.square_sum, [2.0, 24.0, 0.0, 0.0]);
    // Column 2: 1·4 + 4·16 + 1·4.
    assert_eq!(facts.column.weighted_square_sums, [[2.0, 72.0, 0.0, 0.0]]);
    assert_eq!(facts.weighted_column_squares(1)[1], 72.0);
    assert_eq!(facts.sets[0].weighted_matrix_square, 74.0);
    assert_eq!((facts.empty_rows, facts.empty_columns), (vec![1], vec![2, 3]));
    assert_eq!((facts.entry_magnitude.min, facts.entry_magnitude.max), (1.0, 4.0));
    assert_eq!(facts.row_magnitude, Spread { min: 3.0, median: 3.0, max: 4.0 });
    assert_eq!(facts.column_magnitude, Spread { min: 2.0, median: 5.0, max: 8.0 });
}

#[test]
fn repeats_and_rows_nothing_explains() {
    let facts = small().facts();
    // The rows agree, their data only in the first of two sets: measured twice, not copied.
    assert_eq!(facts.duplicate_rows, [DuplicateRows { rows: vec![0, 3], copies: vec![] }]);
    assert!(facts.duplicate_columns.is_empty());
    assert_eq!(facts.unexplainable_rows, [1]);
    // ‖Wb‖² = 1 + 2.25 + 64 + 1 in the first set, and the empty row's datum is 0 in the second.
    assert_eq!(facts.sets[0].weighted_data_square, 68.25);
    assert_eq!(facts.sets[0].unexplainable_share, 2.25 / 68.25);
    assert_eq!(facts.sets[1].unexplainable_share, 0.0);
}

#[test]
fn the_one_value_that_fits_best_by_hand() {
    let facts = small().facts();
    let fit = facts.sets[0].constant.unwrap();
    // w²s = −1, 0, 16, −1 and Σw²s² = 1 + 64 + 1, Σw²sb = −1 + 64 − 1.
    assert!((fit.value - 62.0 / 66.0).abs() < 1e-15);
    assert!((fit.reciprocal - 66.0 / 62.0).abs() < 1e-15);
    assert!((fit.share - 62.0 * 62.0 / (66.0 * 68.25)).abs() < 1e-15);
    assert!((fit.deviation - 1.0 / 66f64.sqrt()).abs() < 1e-15);
    let balanced = StoredRows::from_dense(1, 2, &[1.0, -1.0]);
    assert_eq!(system(balanced, array![[1.0]], RowWeights::Ones).facts().sets[0].constant, None);
}

#[test]
fn fixed_unknowns_are_no_part_of_the_one_value() {
    let matrix = StoredRows::from_dense(2, 2, &[1.0, 2.0, 3.0, 4.0]);
    let mut system = system(matrix, array![[5.0], [11.0]], RowWeights::Ones);
    system.columns.fixed = Some(vec![f64::NAN, 2.0]);
    let fit = system.facts().sets[0].constant.unwrap();
    assert_eq!((fit.value, fit.share), (1.0, 1.0));
}

/// 3000 rows of 9 entries among 50 columns, two weightings.
fn large() -> System {
    let stream = Stream::new(5, 0);
    let (rows, columns, each) = (3000usize, 50usize, 9usize);
    let mut indices = Vec::new();
    for i in 0..rows {
        let mut list: Vec<u32> = (0..each)
            .map(|e| (stream.bits((i * each + e) as u64) % columns as u64) as u32)
            .collect();
        list.sort_unstable();
        list.dedup();
        indices.push(list);
    }
    let mut pointers = vec![0];
    indices.iter().for_each(|list| pointers.push(pointers.last().unwrap() + list.len()));
    let entries = *pointers.last().unwrap();
    let normal = Stream::new(6, 0);
    let values = (0..entries as u64).map(|e| normal.normal(e)).collect();
    let matrix = StoredRows::from_compressed(rows, columns, pointers, indices.concat(), values);
    let data = Array2::from_shape_fn((rows, 2), |(i, set)| normal.normal((7 * i + set) as u64));
    let weights = Array2::from_shape_fn((rows, 2), |(i, set)| 1.0 + ((i + set) % 3) as f64);
    system(matrix, data, RowWeights::PerSet(weights))
}

#[test]
fn bits_do_not_depend_on_threads() {
    let system = large();
    let with = |threads| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        pool.install(|| system.facts())
    };
    let one = with(1);
    assert_eq!(one, with(2));
    assert_eq!(one, with(5));
}

#[test]
fn grouped_sums_agree_with_plain_ones() {
    let system = large();
    let facts = system.facts();
    let mut plain = vec![0.0; 50];
    for i in 0..3000 {
        let w = system.weights.at(i, 1);
        for (j, a) in system.matrix.row(i).entries() {
            plain[j] += w * w * a * a;
        }
    }
    // 3000 positive terms in either order: relative error below 3000 ε.
    for (got, want) in facts.weighted_column_squares(1).iter().zip(&plain) {
        assert!((got - want).abs() <= 3000.0 * f64::EPSILON * want);
    }
    let total: f64 = plain.iter().sum();
    let norm = facts.sets[1].weighted_matrix_square;
    assert!((norm - total).abs() <= 30_000.0 * f64::EPSILON * total);
    assert_eq!(facts.row.count.iter().map(|&c| c as usize).sum::<usize>(), facts.entries);
}

#[test]
fn equal_columns_are_found_exactly() {
    let matrix =
        StoredRows::from_dense(3, 4, &[1.0, 2.0, 1.0, 0.0, 0.0, 1.0, 0.0, 1.0, 3.0, 0.0, 3.0, 0.0]);
    let facts = system(matrix, array![[1.0], [2.0], [3.0]], RowWeights::Ones).facts();
    assert_eq!(facts.duplicate_columns, [[0, 2]]);
}
