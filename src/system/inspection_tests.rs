use ndarray::array;

use super::*;
use crate::operator::{RowWeights, StoredRows};
use crate::system::findings::Trial;
use crate::system::{ColumnTable, RowTable};

/// Rows (1 2), (3 4), none, (1 2); σ = ½.
fn system() -> System {
    System {
        matrix: StoredRows::from_dense(4, 2, &[1.0, 2.0, 3.0, 4.0, 0.0, 0.0, 1.0, 2.0]),
        data: array![[5.0], [11.0], [1.0], [5.0]],
        data_shift: None,
        absent: None,
        uncertainty: Some(array![[0.5], [0.5], [0.5], [0.5]]),
        weights: RowWeights::Shared(vec![2.0, 2.0, 2.0, 0.0]),
        reference: None,
        rows: RowTable::default(),
        columns: ColumnTable::default(),
        blocks: vec![BlockSpan { name: String::new(), first_row: 0, rows: 4, weight: 1.0 }],
        grid: None,
        units: Units::default(),
    }
}

#[test]
fn counts_names_and_spreads_by_hand() {
    let system = system();
    let facts = system.facts();
    let fit = QuickFit {
        data_set: 0,
        trials: vec![
            Trial { strength: 1.0, residual_norm: 3.0, effective_parameters: 1.0 },
            Trial { strength: 0.1, residual_norm: 2.0, effective_parameters: 2.0 },
        ],
        chosen: 1,
        model: vec![1.0, 2.0],
        residual: vec![0.0; 4],
    };
    let inspection = Inspection::new(&system, &facts, Some(&fit), Vec::new());
    assert_eq!(inspection.shape.filled, 0.75);
    let coverage = &inspection.coverage;
    assert_eq!(coverage.empty_rows, Named { count: 1, first: vec!["row 3".into()] });
    assert_eq!((coverage.repeated_rows, coverage.copied_rows), (1, 1));
    assert_eq!(coverage.unexplainable_rows.count, 1);
    assert_eq!(coverage.column_entries, Spread { min: 3.0, median: 3.0, max: 3.0 });
    let set = &inspection.data_sets[0];
    assert_eq!((set.data, set.left_out), (3, 1));
    assert_eq!(set.values, (1.0, 5.0, 11.0));
    assert_eq!(set.uncertainty.unwrap().median, 0.5);
    assert_eq!(inspection.rows_by_size.heaviest[0], ("row 2".into(), 7.0));
    assert_eq!(inspection.columns_by_size.lightest[0], ("column 1".into(), 5.0));
    // Weighted column norms: 2√(1 + 9), 2√(4 + 16).
    let norm = inspection.scaling.weighted_column_norm;
    assert!((norm.min - 40f64.sqrt()).abs() < 1e-14 && (norm.max - 80f64.sqrt()).abs() < 1e-14);
    // m = 3: noise 3/√2 and 2/√1; GCV 3·9/4 and 3·4/1, within a factor 2 of each other.
    let fit = inspection.quick_fit.unwrap();
    assert_eq!(fit.noise, 2.0);
    assert_eq!(fit.noise_range, (2.0, 3.0 / 2f64.sqrt()));
}

#[test]
fn the_record_does_not_grow_with_the_system() {
    let rows = 5000;
    let mut system = system();
    system.matrix = StoredRows::from_dense(rows, 1, &vec![0.0; rows]);
    system.data = ndarray::Array2::ones((rows, 1));
    system.uncertainty = None;
    system.weights = RowWeights::Ones;
    system.blocks[0].rows = rows;
    let inspection = Inspection::new(&system, &system.facts(), None, Vec::new());
    assert_eq!(inspection.coverage.empty_rows.count, rows);
    let json = serde_json::to_string(&inspection).unwrap();
    assert!(json.len() < 4000, "{} bytes", json.len());
}
