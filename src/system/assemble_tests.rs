use std::path::PathBuf;

use ndarray::{Array2, array};

use crate::base::{Axis, Grid};
use crate::operator::{CompressedRows, RowWeights};
use crate::system::*;

/// A = [1 2; 3 4; 0 5], b = 5, 11, 10: x = (1, 2).
fn part(name: &str) -> BlockPart {
    BlockPart {
        name: name.into(),
        matrix: CompressedRows::from_dense(3, 2, &[1.0, 2.0, 3.0, 4.0, 0.0, 5.0]),
        matrix_path: format!("{name}.mtx").into(),
        data: array![[5.0], [11.0], [10.0]],
        data_path: format!("{name}.npy").into(),
        uncertainty: None,
        weight: 1.0,
    }
}

fn parts(blocks: Vec<BlockPart>) -> Parts {
    Parts {
        blocks,
        rows: None,
        columns: None,
        reference: None,
        missing_nan: false,
        linearisation: None,
        grid: None,
        units: Units::default(),
    }
}

fn assembled(parts: Parts) -> System {
    System::assemble(parts).expect("a sound system").0
}

fn refusal(parts: Parts) -> String {
    System::assemble(parts).expect_err("a refusal").to_string()
}

fn with_sigma(uncertainty: Uncertainty) -> Parts {
    let mut block = part("a");
    block.uncertainty = Some(uncertainty);
    parts(vec![block])
}

fn formula(absolute: f64, percent: f64) -> Uncertainty {
    Uncertainty::Formula { absolute, percent }
}

fn values(values: Array2<f64>) -> Uncertainty {
    Uncertainty::Values { values, path: "s.npy".into() }
}

fn rows_table(table: RowTable) -> Option<(RowTable, PathBuf)> {
    Some((table, "rows.csv".into()))
}

#[test]
fn one_block_has_weights_of_one() {
    let system = assembled(parts(vec![part("a")]));
    assert_eq!(system.weights, RowWeights::Ones);
    assert_eq!(system.reference, None);
    assert_eq!((system.sets(), system.blocks.len()), (1, 1));
    assert!(system.included(2, 0));
}

#[test]
fn blocks_are_stacked_with_their_own_weights() {
    let mut lower = part("lower");
    lower.weight = 0.5;
    lower.uncertainty = Some(formula(0.25, 0.0));
    let mut upper = part("upper");
    upper.uncertainty = Some(values(array![[1.0], [2.0], [4.0]]));
    let system = assembled(parts(vec![upper, lower]));
    assert_eq!(system.matrix.rows(), 6);
    assert_eq!(system.data.column(0).to_vec(), [5.0, 11.0, 10.0, 5.0, 11.0, 10.0]);
    assert_eq!(system.weights, RowWeights::Shared(vec![1.0, 0.5, 0.25, 2.0, 2.0, 2.0]));
    assert_eq!(system.uncertainty.as_ref().unwrap().column(0)[5], 0.25);
    assert_eq!(system.row_name(4), "row 5 (block \"lower\" row 2)");
}

#[test]
fn lengths_that_disagree_are_named_with_both_files() {
    let mut short = part("a");
    short.data = array![[1.0], [2.0]];
    let message = refusal(parts(vec![short]));
    assert!(message.starts_with(
        "a.npy: the data of block \"a\" are shorter than the rows of a.mtx: 2 against 3"
    ));
    assert!(message.contains("as many values as the matrix has columns"));

    let mut flat = part("a");
    flat.data = array![[5.0, 11.0, 10.0]];
    assert!(refusal(parts(vec![flat])).contains("look transposed"));

    let mut wide = part("b");
    wide.matrix = CompressedRows::from_dense(3, 3, &[1.0; 9]);
    let message = refusal(parts(vec![part("a"), wide]));
    assert!(message.contains("b.mtx: the matrix of block \"b\" has 3 columns, but a.mtx has 2"));

    let mut two = part("b");
    two.data = Array2::zeros((3, 2));
    assert!(refusal(parts(vec![part("a"), two])).contains("hold 2 data sets, but a.npy holds 1"));

    let message = refusal(with_sigma(values(Array2::ones((4, 1)))));
    assert!(message.contains("s.npy: the uncertainties of block \"a\" are longer than the rows"));

    let mut tabled = parts(vec![part("a"), part("b")]);
    tabled.rows = rows_table(RowTable { ids: Some(vec![String::new(); 3]), ..Default::default() });
    assert!(refusal(tabled).contains(
        "rows.csv: the rows table is shorter than the rows of all 2 blocks together: 3 against 6"
    ));
}

#[test]
fn percentages_and_absolute_parts_add_in_quadrature() {
    // 0.3 absolute and 4 % of |b| = 5, 11, 10: third row √(0.09 + 0.16) = 0.5.
    let system = assembled(with_sigma(formula(0.3, 4.0)));
    let RowWeights::Shared(weights) = &system.weights else { panic!("shared weights") };
    assert!((weights[2] - 2.0).abs() < 1e-15);
    let system = assembled(with_sigma(formula(0.0, 10.0)));
    assert_eq!(system.uncertainty.unwrap()[[2, 0]], 1.0);
}

#[test]
fn percentages_differ_between_data_sets_and_absolutes_do_not() {
    let two = |uncertainty| {
        let mut block = part("a");
        block.data = array![[1.0, 2.0], [-4.0, 4.0], [5.0, 8.0]];
        block.uncertainty = Some(uncertainty);
        assembled(parts(vec![block])).weights
    };
    assert_eq!(two(formula(0.5, 0.0)), RowWeights::Shared(vec![2.0; 3]));
    let per_set = two(formula(0.0, 100.0));
    assert_eq!(per_set, RowWeights::PerSet(array![[1.0, 0.5], [0.25, 0.25], [0.2, 0.125]]));
}

#[test]
fn unusable_sigma_is_refused_by_row() {
    let table =
        RowTable { ids: Some(vec!["p".into(), "q\n".into(), "r".into()]), ..RowTable::default() };
    for (bad, word) in [(0.0, "is 0"), (-1.0, "is -1"), (f64::NAN, "NaN"), (f64::INFINITY, "inf")] {
        let mut parts = with_sigma(values(array![[1.0], [bad], [1.0]]));
        parts.rows = rows_table(table.clone());
        let message = refusal(parts);
        assert!(message.starts_with("s.npy: the σ of row 2 (id \"q\\n\")"), "{message}");
        assert!(message.contains(word), "{message}");
    }
    let message = refusal(with_sigma(values(array![[1.0], [1.0], [1e-320]])));
    assert!(message.contains("row 3") && message.contains("inf"), "{message}");
    let mut zero_datum = with_sigma(formula(0.0, 2.0));
    zero_datum.blocks[0].data[[2, 0]] = 0.0;
    let message = refusal(zero_datum);
    assert!(
        message.contains("row 3 is 0, because its datum is 0 and the uncertainty is 2 % of it")
    );
    assert!(refusal(with_sigma(formula(0.0, 0.0))).contains("0 + 0 %"));
    assert!(refusal(with_sigma(formula(-1.0, 2.0))).contains("-1 + 2 %"));
}

#[test]
fn blocks_state_their_uncertainty_all_or_none_and_have_positive_weights() {
    let mut stated = part("a");
    stated.uncertainty = Some(formula(1.0, 0.0));
    assert!(refusal(parts(vec![stated, part("b")])).contains("block \"b\" have no uncertainty"));
    for weight in [0.0, -1.0, f64::NAN, f64::INFINITY] {
        let mut block = part("a");
        block.weight = weight;
        assert!(refusal(parts(vec![block])).contains("the weight of block \"a\" is"));
    }
}

#[test]
fn rows_not_used_and_missing_data_weigh_nothing() {
    let mut block = part("a");
    block.data = array![[5.0, f64::NAN], [f64::NAN, 11.0], [10.0, 10.0]];
    block.uncertainty = Some(values(array![[0.5], [0.5], [0.0]]));
    let mut missing = parts(vec![block]);
    missing.missing_nan = true;
    // The σ of 0 stands in a row that is not used, so it is nobody's concern.
    let table = RowTable { used: Some(vec![true, true, false]), ..Default::default() };
    missing.rows = rows_table(table);
    let (system, warnings) = System::assemble(missing).unwrap();
    assert_eq!(system.weights, RowWeights::PerSet(array![[2.0, 0.0], [0.0, 2.0], [0.0, 0.0]]));
    assert_eq!(system.data, array![[5.0, 0.0], [0.0, 11.0], [10.0, 10.0]]);
    assert!(!system.included(0, 1) && system.included(0, 0));
    assert!(warnings[0].0.cause.starts_with("2 of 6 data are missing"));
}

#[test]
fn data_that_are_no_numbers_are_refused_with_the_way_out() {
    let mut bad = parts(vec![part("a"), part("b")]);
    bad.blocks[1].data[[1, 0]] = f64::NAN;
    let message = refusal(bad);
    assert!(message.starts_with("b.npy: the datum of row 5 (block \"b\" row 2) is NaN"));
    assert!(message.contains("--missing nan"));
    let mut infinite = parts(vec![part("a")]);
    infinite.blocks[0].data[[1, 0]] = f64::INFINITY;
    infinite.missing_nan = true;
    assert!(refusal(infinite).contains("row 2 is inf"));
}

#[test]
fn a_system_without_a_datum_is_refused() {
    let mut unused = parts(vec![part("a")]);
    unused.rows = rows_table(RowTable { used: Some(vec![false; 3]), ..Default::default() });
    assert!(refusal(unused).contains("all 3 data are left out"));
    let mut missing = parts(vec![part("a")]);
    missing.blocks[0].data = array![[1.0, f64::NAN], [1.0, f64::NAN], [1.0, f64::NAN]];
    missing.missing_nan = true;
    assert!(refusal(missing).contains("all 3 data of data set 2 are left out"));
    let mut empty = parts(vec![part("a")]);
    empty.blocks[0].matrix = CompressedRows::from_dense(0, 2, &[]);
    empty.blocks[0].data = Array2::zeros((0, 1));
    assert!(refusal(empty).contains("the matrix has no rows"));
}

#[test]
fn a_linearisation_point_shifts_the_data_and_not_the_uncertainty() {
    let mut point = with_sigma(formula(0.0, 10.0));
    point.linearisation = Some(Linearisation {
        model: vec![1.0, 1.0],
        model_path: "x.npy".into(),
        predicted: vec![4.0, 7.0, 4.0],
        predicted_path: "g.npy".into(),
    });
    let system = assembled(point);
    // A x_k = 3, 7, 5, so g − A x_k = 1, 0, −1 and b − g + A x_k = 4, 11, 11.
    assert_eq!(system.data_shift.unwrap(), [1.0, 0.0, -1.0]);
    assert_eq!(system.data.column(0).to_vec(), [4.0, 11.0, 11.0]);
    assert_eq!(system.uncertainty.unwrap()[[0, 0]], 0.5);

    let mut short = parts(vec![part("a")]);
    short.linearisation = Some(Linearisation {
        model: vec![1.0],
        model_path: "x.npy".into(),
        predicted: vec![4.0, 7.0, 4.0],
        predicted_path: "g.npy".into(),
    });
    assert!(refusal(short).starts_with(
        "x.npy: the linearisation point is shorter than the columns of a.mtx: 1 against 2"
    ));
}

#[test]
fn references_of_every_form() {
    let given = |reference| {
        let mut parts = parts(vec![part("a")]);
        parts.reference = Some(reference);
        System::assemble(parts).map(|(system, _)| system.reference.unwrap())
    };
    assert_eq!(given(Reference::Number(2.0)).unwrap(), array![[2.0], [2.0]]);
    // Row sums 3, 7, 5: c = (15 + 77 + 50) / (9 + 49 + 25) = 142/83.
    assert_eq!(given(Reference::Fit).unwrap(), array![[142.0 / 83.0], [142.0 / 83.0]]);
    let file = |values| Reference::Values { values, path: "r.npy".into() };
    assert_eq!(given(file(array![[1.0], [3.0]])).unwrap(), array![[1.0], [3.0]]);
    let refused = |reference| given(reference).unwrap_err().to_string();
    assert!(refused(file(array![[1.0]])).contains("shorter than the columns"));
    assert!(refused(file(array![[1.0, 1.0], [1.0, 1.0]])).contains("2 models for 1 data sets"));
    assert!(refused(file(array![[1.0], [f64::NAN]])).contains("r.npy: the reference of column 2"));
    assert!(refused(Reference::Number(f64::NAN)).contains("the reference is NaN"));
}

#[test]
fn fixed_unknowns_stand_in_the_reference() {
    let fixed = |values: Vec<f64>, reference| {
        let mut parts = parts(vec![part("a")]);
        let table = ColumnTable { fixed: Some(values), ..ColumnTable::default() };
        parts.columns = Some((table, "columns.csv".into()));
        parts.reference = reference;
        System::assemble(parts).map(|(system, _)| system.reference)
    };
    let nan = f64::NAN;
    assert_eq!(fixed(vec![nan, 2.0], None).unwrap().unwrap(), array![[0.0], [2.0]]);
    let number = Some(Reference::Number(7.0));
    assert_eq!(fixed(vec![nan, 2.0], number).unwrap().unwrap(), array![[7.0], [2.0]]);
    // With x₂ = 2 known, b − 2a₂ = 1, 3, 0 and the free column is 1, 3, 0: c = 1 exactly.
    let fit = fixed(vec![nan, 2.0], Some(Reference::Fit)).unwrap().unwrap();
    assert_eq!(fit, array![[1.0], [2.0]]);
    assert_eq!(fixed(vec![nan, nan], None).unwrap(), None);
    assert!(fixed(vec![1.0, 2.0], None).unwrap_err().to_string().contains("all 2 unknowns"));
    assert!(fixed(vec![1.0, f64::INFINITY], None).is_err());
}

#[test]
fn the_grid_must_have_as_many_cells_as_the_matrix_has_columns() {
    let axis = |name: &str, cells| Axis { name: name.into(), cells, spacing: 1.0, origin: 0.0 };
    let grid = |nx, nz| Grid::new(vec![axis("x", nx), axis("z", nz)], "m".into(), "x", None).ok();
    let mut wrong = parts(vec![part("a")]);
    wrong.grid = grid(2, 2);
    assert!(refusal(wrong).contains("the grid of 2 × 2 has 4 cells, but the matrix has 2 columns"));
    // One column is a station, so one cell is right.
    let mut mixed = parts(vec![part("a")]);
    let kinds = Some(vec!["station".into(), "cell".into()]);
    let table = ColumnTable { kinds, ..ColumnTable::default() };
    mixed.columns = Some((table, "columns.csv".into()));
    mixed.grid = grid(1, 1);
    let system = assembled(mixed);
    assert_eq!(system.column_name(0), "column 1 (station)");
    assert_eq!(system.column_name(1), "column 2 (cell (x 1, z 1) at (0.5, 0.5) m)");
}
