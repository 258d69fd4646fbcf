use ndarray::Array2;

use super::*;
use crate::base::{Axis, Grid};
use crate::operator::{RowWeights, StoredRows};
use crate::system::{BlockSpan, ColumnTable, RowTable, Units};

fn system(rows: &[Vec<(usize, f64)>], columns: usize, data: Vec<f64>) -> System {
    let mut dense = vec![0.0; rows.len() * columns];
    for (i, row) in rows.iter().enumerate() {
        row.iter().for_each(|&(j, a)| dense[i * columns + j] = a);
    }
    let m = rows.len();
    System {
        matrix: StoredRows::from_dense(m, columns, &dense),
        data: Array2::from_shape_vec((m, 1), data).unwrap(),
        data_shift: None,
        absent: None,
        uncertainty: None,
        weights: RowWeights::Ones,
        reference: None,
        rows: RowTable::default(),
        columns: ColumnTable::default(),
        blocks: vec![BlockSpan { name: String::new(), first_row: 0, rows: m, weight: 1.0 }],
        grid: None,
        units: Units::default(),
    }
}

fn kinds(system: &System, fit: Option<&QuickFit>) -> Vec<Kind> {
    findings(system, &system.facts(), fit)
        .iter()
        .filter(|finding| finding.severity != Severity::Note)
        .map(|finding| finding.kind)
        .collect()
}

/// Rays through 12×20 cells of size 1 × `height`: along every row, column and some diagonals.
fn rays(height: f64) -> System {
    let (nx, nz) = (12, 20);
    let mut rows: Vec<Vec<(usize, f64)>> = Vec::new();
    rows.extend((0..nz).map(|z| (0..nx).map(|x| (z * nx + x, 1.0)).collect()));
    rows.extend((0..nx).map(|x| (0..nz).map(|z| (z * nx + x, height)).collect()));
    let slant = (1.0 + height * height).sqrt();
    rows.extend((0..=8).map(|z| (0..nx).map(|x| ((z + x) * nx + x, slant)).collect()));
    let m = rows.len();
    let mut system = system(&rows, nx * nz, (0..m).map(|i| i as f64).collect());
    system.grid = grid(12, 20, height, "x");
    system
}

fn grid(nx: usize, nz: usize, height: f64, fastest: &str) -> Option<Grid> {
    let axis = |name: &str, cells, spacing| Axis { name: name.into(), cells, spacing, origin: 0.0 };
    let axes = vec![axis("x", nx, 1.0), axis("z", nz, height)];
    Some(Grid::new(axes, "m".into(), fastest, None).unwrap())
}

#[test]
fn a_layout_is_named_only_where_it_repairs() {
    let mut system = rays(1.0);
    assert!(layout::find(&system).is_none());
    system.grid = grid(20, 12, 1.0, "x");
    let found = layout::find(&system).unwrap();
    assert_eq!(found.kind, Kind::GridOrder);
    assert!(found.remedy.contains("[12, 20]") && found.remedy.contains("\"z\" as the fastest"));
    system.grid = grid(12, 20, 1.0, "z");
    assert_eq!(layout::find(&system).unwrap().kind, Kind::GridOrder);
}

#[test]
fn unequal_spacings_tell_exchanged_axes_from_a_wrong_fastest_one() {
    // Cells are 1 wide and 3 high and 12 stand side by side. With z called the fastest, the
    // fastest direction gets the spacing 3, against the lengths of the rays.
    let mut system = rays(3.0);
    system.grid = grid(20, 12, 3.0, "x");
    assert_eq!(layout::find(&system).unwrap().kind, Kind::AxesSwapped);
    system.grid = grid(12, 20, 3.0, "z");
    assert_eq!(layout::find(&system).unwrap().kind, Kind::WrongFastestAxis);
}

#[test]
fn columns_one_off_are_named_with_their_direction() {
    let sound = rays(1.0);
    let rows: Vec<Vec<(usize, f64)>> = (0..sound.matrix.rows())
        .map(|i| sound.matrix.row(i).entries().map(|(j, a)| ((j + 239) % 240, a)).collect())
        .collect();
    let mut off = system(&rows, 240, sound.data.column(0).to_vec());
    off.grid = sound.grid;
    let found = layout::find(&off).unwrap();
    assert_eq!(found.kind, Kind::IndexShift);
    assert!(found.sentence.contains("one too low"));
}

#[test]
fn kernels_without_a_layout_are_left_alone() {
    // Entries strewn over the grid hang together under no layout.
    let stream = crate::base::random::Stream::new(4, 0);
    let rows: Vec<Vec<(usize, f64)>> = (0..60)
        .map(|i| (0..9).map(|e| ((stream.bits(9 * i + e) % 240) as usize, 1.0)).collect())
        .collect();
    let mut strewn = system(&rows, 240, vec![1.0; 60]);
    strewn.grid = grid(12, 20, 1.0, "x");
    assert!(layout::find(&strewn).is_none());
}

#[test]
fn ids_that_name_the_neighbouring_stations_tell_a_shift() {
    let rows: Vec<Vec<(usize, f64)>> = (0..11).map(|i| vec![(i, -1.0), (i + 1, 1.0)]).collect();
    let mut network = system(&rows, 12, (0..11).map(|i| i as f64).collect());
    network.columns.names = Some((0..12).map(|j| format!("P{j}")).collect());
    network.rows.ids = Some((0..11).map(|i| format!("P{i}-P{}", i + 1)).collect());
    assert!(naming::find(&network).is_none());
    network.rows.ids = Some((0..11).map(|i| format!("P{}-P{}", i + 1, (i + 2) % 12)).collect());
    let found = naming::find(&network).unwrap();
    assert_eq!(found.kind, Kind::IndexShift);
    assert!(found.sentence.contains("one lower than the ids say"));
}

/// Ten rows of one column, a = 1 … 10, data `factor` times 2a with a wobble of a hundredth.
fn proportional(factor: f64) -> System {
    let rows: Vec<Vec<(usize, f64)>> = (1..=10).map(|a| vec![(0, f64::from(a))]).collect();
    let wobble = |a: i32| if a % 2 == 0 { 1.01 } else { 0.99 };
    let data = (1..=10).map(|a| factor * 2.0 * f64::from(a) * wobble(a)).collect();
    system(&rows, 1, data)
}

#[test]
fn a_reference_tells_sign_and_unit() {
    let against = |factor| {
        let mut system = proportional(factor);
        system.reference = Some(Array2::from_elem((1, 1), 2.0));
        kinds(&system, None)
    };
    assert_eq!(against(1.0), []);
    assert_eq!(against(5.0), []);
    assert_eq!(against(-1.0), [Kind::DataSign]);
    assert_eq!(against(1000.0), [Kind::DataUnits]);
}

#[test]
fn a_plausible_range_tells_sign_unit_and_the_rest() {
    let within = |factor, range| {
        let mut system = proportional(factor);
        system.units.plausible = Some(range);
        kinds(&system, None)
    };
    // The constant is near 2·factor.
    assert_eq!(within(1.0, (1.0, 3.0)), []);
    assert_eq!(within(-1.0, (1.0, 3.0)), [Kind::DataSign]);
    assert_eq!(within(1000.0, (1.0, 3.0)), [Kind::DataUnits]);
    assert_eq!(within(0.01, (1.0, 3.0)), [Kind::DataUnits]);
    assert_eq!(within(7.0, (1.0, 3.0)), [Kind::ImplausibleSize]);
    // Just outside, but within five standard deviations of a wobble of 1 %.
    assert_eq!(within(1.0, (2.01, 3.0)), []);
}

#[test]
fn a_group_that_never_moves_is_dead_unless_repeats_are_common() {
    let rows: Vec<Vec<(usize, f64)>> = (0..40).map(|i| vec![(0, 1.0 + i as f64)]).collect();
    let mut data: Vec<f64> = (0..40).map(|i| f64::from(i) + 0.5).collect();
    // Every fifth row belongs to group 3, which says 7.
    (3..40).step_by(5).for_each(|i| data[i] = 7.0);
    let mut survey = system(&rows, 1, data);
    survey.rows.groups = Some((0..40).map(|i| i % 5).collect());
    survey.rows.group_names = (0..5).map(|g| format!("G{g}")).collect();
    let found = repeats::find(&survey, &survey.facts());
    assert_eq!(found[0].kind, Kind::DeadDetector);
    assert!(found[0].sentence.contains("All 8 data of group \"G3\" are exactly 7"));
    assert_eq!(found[0].places.len(), PLACES_MAX);
    // Data rounded to two values repeat everywhere.
    let coarse = survey.data.map(|b| if *b > 20.0 { 1.0 } else { 0.0 });
    survey.data = coarse;
    assert!(repeats::find(&survey, &survey.facts()).is_empty());
}

#[test]
fn copies_are_told_from_measurements_made_again() {
    let rows: Vec<Vec<(usize, f64)>> =
        (0..20).map(|i| vec![(0, 1.0 + f64::from(i % 10))]).collect();
    let once: Vec<f64> = (0..10).map(|i| f64::from(i).sin()).collect();
    let copied = system(&rows, 1, [once.clone(), once.clone()].concat());
    let found = repeats::find(&copied, &copied.facts());
    assert_eq!((found.len(), found[0].kind), (1, Kind::DuplicatedRows));
    assert_eq!(found[0].evidence[0].value, 10.0);
    let again = once.iter().map(|b| b + 1e-3).collect::<Vec<f64>>();
    let repeated = system(&rows, 1, [once, again].concat());
    assert!(repeats::find(&repeated, &repeated.facts()).is_empty());
}

#[test]
fn one_column_in_other_units_stands_out_and_a_family_does_not() {
    let with = |odd: usize, factor: f64| {
        let rows: Vec<Vec<(usize, f64)>> = (0..10)
            .map(|i| {
                let size = |j: usize| 1.0 + 0.1 * ((i + j) % 7) as f64;
                (0..60).map(|j| (j, if j < odd { factor * size(j) } else { size(j) })).collect()
            })
            .collect();
        system(&rows, 60, (0..10).map(f64::from).collect())
    };
    let found = |odd, factor| {
        let system = with(odd, factor);
        columns::find(&system, &system.facts())
    };
    assert!(found(0, 1.0).is_empty());
    assert!(found(1, 5.0).is_empty());
    for factor in [1000.0, 1e-3] {
        let found = found(1, factor);
        assert_eq!((found.len(), found[0].kind), (1, Kind::ColumnUnits));
        assert!(found[0].sentence.starts_with("Column 1 has entries"));
        // Within the spread of the peers, which is below a tenth.
        assert!((found[0].evidence[0].value / factor - 1.0).abs() < 0.1);
    }
    assert!(found(12, 1000.0).is_empty());
}

/// A hundred data of σ `stated` whose residuals are ±`residual`, at one strength.
fn noisy(stated: f64, residual: f64) -> (System, QuickFit) {
    let rows: Vec<Vec<(usize, f64)>> =
        (0..100).map(|i| vec![(i % 10, 1.0 + 0.1 * (i / 10) as f64)]).collect();
    let data: Vec<f64> = (0..100).map(|i| 50.0 * f64::from(i % 10)).collect();
    let mut system = system(&rows, 10, data);
    system.uncertainty = Some(Array2::from_elem((100, 1), stated));
    system.weights = RowWeights::Shared(vec![1.0 / stated; 100]);
    let sign = |i: usize| if i.is_multiple_of(2) { residual } else { -residual };
    let trial = Trial {
        strength: 1.0,
        residual_norm: 10.0 * residual / stated,
        effective_parameters: 10.0,
    };
    let fit = QuickFit {
        data_set: 0,
        trials: vec![trial],
        chosen: 0,
        model: vec![1.0; 10],
        residual: (0..100).map(sign).collect(),
    };
    (system, fit)
}

#[test]
fn sigma_against_the_noise() {
    // The scale of residuals ±e is 1.4826 e/√0.9 = 1.5628 e.
    let found = |stated, noise: f64| {
        let (system, fit) = noisy(stated, noise / 1.5628);
        kinds(&system, Some(&fit))
    };
    assert_eq!(found(0.2, 0.2), []);
    assert_eq!(found(0.2, 0.5), []);
    assert_eq!(found(0.04, 0.2), [Kind::VarianceForSigma]);
    assert_eq!(found(25.0, 5.0), [Kind::VarianceForSigma]);
    assert_eq!(found(0.002, 0.2), [Kind::PercentForFraction]);
    assert_eq!(found(20.0, 0.2), [Kind::PercentForFraction]);
    // Nothing else has told the size: a factor 1000 may be a unit.
    assert_eq!(found(2e-4, 0.2), [Kind::DataUnits]);
    assert_eq!(found(2.0, 20.0), [Kind::SigmaMisfit]);
}

#[test]
fn a_strength_that_predicts_as_well_excuses_sigma() {
    let (system, mut fit) = noisy(2.0, 20.0 / 1.5628);
    assert_eq!(kinds(&system, Some(&fit)), [Kind::SigmaMisfit]);
    // m = 100: at this strength noise is a tenth, and GCV, (ρ/(m − tr H))², 1.6 times as large.
    let chosen = fit.trials[0];
    let spare = 90.0 / 160.0;
    fit.trials.push(Trial {
        strength: 0.1,
        residual_norm: chosen.residual_norm * 1.26f64 * spare / 90.0,
        effective_parameters: 100.0 - spare,
    });
    assert_eq!(kinds(&system, Some(&fit)), []);
}

#[test]
fn data_that_nothing_predicts_are_in_another_order() {
    let (system, fit) = noisy(2.0, 150.0);
    assert_eq!(kinds(&system, Some(&fit))[0], Kind::PermutedRows);
}

#[test]
fn data_in_empty_rows_are_a_caution_from_one_part_in_a_hundred() {
    let with = |lost: f64| {
        let mut rows: Vec<Vec<(usize, f64)>> = (0..20).map(|i| vec![(i, 1.0)]).collect();
        rows.push(vec![]);
        let data: Vec<f64> = (0..20).map(|i| 1.0 + f64::from(i)).chain([lost]).collect();
        let system = system(&rows, 20, data);
        findings(&system, &system.facts(), None)
            .into_iter()
            .find(|finding| finding.kind == Kind::UnexplainableRows)
            .map(|finding| (finding.severity, finding.places))
    };
    // Σ b² of the others is 2870.
    assert_eq!(with(0.0), None);
    assert_eq!(with(5.0).unwrap().0, Severity::Note);
    assert_eq!(with(6.0).unwrap(), (Severity::Caution, vec!["row 21".to_string()]));
}

#[test]
fn kinds_are_words_and_the_gravest_come_first() {
    let word = serde_json::to_string(&Kind::WrongFastestAxis).unwrap();
    assert_eq!(word, "\"wrong-fastest-axis\"");
    let mut system = proportional(-1.0);
    system.units.plausible = Some((1.0, 3.0));
    system.matrix = StoredRows::from_dense(
        10,
        2,
        &(1..=10).flat_map(|a| [f64::from(a), 0.0]).collect::<Vec<f64>>(),
    );
    let found = findings(&system, &system.facts(), None);
    assert_eq!(found[0].kind, Kind::DataSign);
    assert_eq!(found.last().unwrap().kind, Kind::EmptyColumns);
}
