//! Stacks the rows of several matrices into one.
//!
//! Memory: the result is allocated once at its final size and each part is dropped as soon as it
//! is copied, so the peak is the parts plus the result: at most 12 + 12 bytes an entry.

use sprs::CsMatI;

use crate::operator::CompressedRows;

/// The rows of all parts in order; one part is handed back as it is. Values are kept in the
/// widest way found among the parts: f64 over f32 over pattern.
///
/// Panics if there is no part or the parts differ in their number of columns.
pub fn stack(mut parts: Vec<CompressedRows>) -> CompressedRows {
    assert!(!parts.is_empty(), "at least one matrix to stack");
    if parts.len() == 1 {
        return parts.remove(0);
    }
    if parts.iter().any(|part| matches!(part, CompressedRows::Double(_))) {
        CompressedRows::Double(stack_as(parts, append_double))
    } else if parts.iter().any(|part| matches!(part, CompressedRows::Single(_))) {
        CompressedRows::Single(stack_as(parts, append_single))
    } else {
        CompressedRows::Pattern(stack_as(parts, append_nothing))
    }
}

fn stack_as<V>(
    parts: Vec<CompressedRows>,
    append: fn(&CompressedRows, &mut Vec<V>),
) -> CsMatI<V, u32, usize> {
    let rows = parts.iter().map(CompressedRows::rows).sum();
    let entries = parts.iter().map(CompressedRows::entries).sum();
    let columns = parts[0].columns();
    let mut pointers = Vec::with_capacity(rows + 1);
    pointers.push(0);
    let mut indices: Vec<u32> = Vec::with_capacity(entries);
    let mut values: Vec<V> = Vec::with_capacity(entries);
    for part in parts {
        assert_eq!(part.columns(), columns, "stacked matrices have the same columns");
        let first = indices.len();
        pointers.extend(part.pointers()[1..].iter().map(|end| first + end));
        indices.extend_from_slice(column_indices(&part));
        append(&part, &mut values);
        // The part ends here, before the next one is copied.
    }
    CsMatI::try_new((rows, columns), pointers, indices, values)
        .map_err(|(.., error)| error)
        .expect("stacked valid rows are valid rows")
}

fn column_indices(part: &CompressedRows) -> &[u32] {
    match part {
        CompressedRows::Double(a) => a.indices(),
        CompressedRows::Single(a) => a.indices(),
        CompressedRows::Pattern(a) => a.indices(),
    }
}

fn append_double(part: &CompressedRows, values: &mut Vec<f64>) {
    match part {
        CompressedRows::Double(a) => values.extend_from_slice(a.data()),
        CompressedRows::Single(a) => values.extend(a.data().iter().map(|&value| f64::from(value))),
        CompressedRows::Pattern(a) => values.extend(std::iter::repeat_n(1.0, a.nnz())),
    }
}

fn append_single(part: &CompressedRows, values: &mut Vec<f32>) {
    match part {
        CompressedRows::Double(_) => unreachable!("a stack with an f64 part is kept as f64"),
        CompressedRows::Single(a) => values.extend_from_slice(a.data()),
        CompressedRows::Pattern(a) => values.extend(std::iter::repeat_n(1.0f32, a.nnz())),
    }
}

fn append_nothing(part: &CompressedRows, values: &mut Vec<()>) {
    values.extend(std::iter::repeat_n((), part.entries()));
}

#[cfg(test)]
mod tests {
    use super::*;

    fn double() -> CompressedRows {
        CompressedRows::from_dense(2, 3, &[1.0, 0.0, 2.0, 0.0, 0.5, 0.0])
    }

    fn single() -> CompressedRows {
        CompressedRows::Single(
            CsMatI::try_new((1, 3), vec![0, 2], vec![0, 1], vec![3.0, 4.0]).unwrap(),
        )
    }

    fn pattern() -> CompressedRows {
        CompressedRows::Pattern(
            CsMatI::try_new((2, 3), vec![0, 0, 1], vec![2], vec![(); 1]).unwrap(),
        )
    }

    fn dense(matrix: &CompressedRows) -> Vec<Vec<f64>> {
        (0..matrix.rows())
            .map(|i| {
                let mut row = vec![0.0; matrix.columns()];
                matrix.row(i).entries().for_each(|(j, value)| row[j] = value);
                row
            })
            .collect()
    }

    #[test]
    fn rows_follow_each_other_in_the_widest_storage() {
        let all = stack(vec![pattern(), double(), single()]);
        assert_eq!(all.storage_name(), "f64");
        assert_eq!(
            dense(&all),
            [[0.0, 0.0, 0.0], [0.0, 0.0, 1.0], [1.0, 0.0, 2.0], [0.0, 0.5, 0.0], [3.0, 4.0, 0.0]]
        );
        assert_eq!(stack(vec![single(), pattern()]).storage_name(), "f32");
        let patterns = stack(vec![pattern(), pattern()]);
        assert_eq!((patterns.storage_name(), patterns.entries()), ("pattern", 2));
        assert_eq!(dense(&patterns)[3], [0.0, 0.0, 1.0]);
    }

    #[test]
    fn one_part_is_moved_and_not_copied() {
        let part = double();
        let place = part.row(0).columns.as_ptr();
        assert_eq!(stack(vec![part]).row(0).columns.as_ptr(), place);
    }
}
