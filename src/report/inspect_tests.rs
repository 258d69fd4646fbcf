use super::*;
use crate::system::facts::ConstantFit;
use crate::system::findings::Kind;
use crate::system::inspection::{Coverage, GridSummary, Scaling, Shape};
use crate::system::{BlockSpan, Units};

fn inspection() -> Inspection {
    let spread = |min, median, max| Spread { min, median, max };
    let none = || Named { count: 0, first: vec![] };
    Inspection {
        findings: vec![Finding {
            kind: Kind::DataUnits,
            severity: Severity::Fault,
            sentence: "The one value that fits all data alike is 0.5 s/m, outside the plausible 0.0002 to 0.005 s/m; data divided by 1000 would bring it inside.".into(),
            evidence: vec![Evidence { name: "one value for all unknowns", value: 0.5, unit: "s/m".into() }],
            places: vec!["row 1 (id \"S1-R1\")".into(), "row 2".into()],
            remedy: "convert the data to the unit in which the matrix predicts them, and their uncertainty with them".into(),
        }],
        shape: Shape {
            rows: 1234,
            columns: 2400,
            data_sets: 1,
            entries: 98_765,
            filled: 0.03335,
            explicit_zeros: 3,
            nonfinite_entries: 0,
            storage: "f64",
            matrix_bytes: 997_526,
            tile_unknowns: 4096,
            unknowns_by: OrderedBy::File,
            rows_reordered: true,
            blocks: vec![
                BlockSpan { name: "upper".into(), first_row: 0, rows: 1000, weight: 1.0 },
                BlockSpan { name: "low\u{1b}er".into(), first_row: 1000, rows: 234, weight: 0.5 },
            ],
            blocks_total: 2,
            grid: Some(GridSummary {
                axes: vec![("x".into(), 40, 0.5), ("z".into(), 60, 0.5)],
                unit: "m".into(),
                fastest: "x".into(),
                unknowns: 2400,
            }),
        },
        units: Units {
            data: "s".into(),
            model: "s/m".into(),
            model_quantity: "slowness".into(),
            plausible: Some((0.0002, 0.005)),
        },
        coverage: Coverage {
            row_entries: spread(40.0, 52.0, 97.0),
            column_entries: spread(1.0, 33.0, 120.0),
            empty_rows: none(),
            empty_columns: Named { count: 20, first: vec!["column 1 (cell (x 1, z 1) at (0.25, 0.25) m)".into(); 8] },
            repeated_rows: 2,
            copied_rows: 0,
            equal_columns: 0,
            unexplainable_rows: none(),
        },
        scaling: Scaling {
            entry: spread(1e-7, 0.5, 0.7),
            row: spread(20.0, 22.0, 36.0),
            column: spread(1e-3, 14.0, 61.0),
            weighted_column_norm: spread(1.0, 2e4, 8e4),
        },
        data_sets: vec![SetSummary {
            data: 1230,
            left_out: 4,
            values: (0.01, 0.02, 0.03),
            uncertainty: Some(spread(2e-5, 2e-5, 2e-5)),
            weighted_data_norm: 1e4,
            weighted_matrix_norm: 1e6,
            unexplainable_share: 0.0,
            constant: Some(ConstantFit { value: 0.5, reciprocal: 2.0, share: 0.997, deviation: 1e-6 }),
        }],
        rows_by_size: Extremes { lightest: vec![("row 9".into(), 20.0)], heaviest: vec![("row 7".into(), 36.0)] },
        columns_by_size: Extremes { lightest: vec![], heaviest: vec![] },
        quick_fit: Some(FitSummary {
            data_set: 1,
            strength: 5e4,
            effective_parameters: 311.5,
            noise: 1.02,
            noise_range: (0.8, 1.4),
            strengths_tried: 30,
        }),
        forecast: Some(Forecast {
            sweep_peak_bytes: 2_500_000_000,
            peak_bytes: 12_300_000,
            seconds_per_iteration: 2.5e-4,
            bytes_per_pass: 987_650,
            bandwidth_bytes_per_second: 1.2e10,
        }),
    }
}

#[test]
fn findings_come_first_and_no_line_is_wider_than_eighty() {
    let page = page(&inspection());
    assert!(page.starts_with("FAULT    The one value that fits all data alike is 0.5 s/m,"));
    let remedy = page.find("Remedy: convert the data").unwrap();
    assert!(remedy < page.find("Shape").unwrap());
    for line in page.lines() {
        assert!(line.chars().count() <= 80, "{line}");
    }
}

#[test]
fn numbers_stand_with_their_units_and_names_are_escaped() {
    let page = page(&inspection());
    for expected in [
        "  rows (data)               1,234\n",
        "98,765, 3.335 % of all places",
        "997.5 kB, f64, 10.1 bytes an entry\n",
        "all unknowns in one tile\n",
        "  order of rows           by the tiles they touch\n",
        "x 40 × 0.5 m, z 60 × 0.5 m; x runs fastest;",
        "rows 1,001 to 1,234, weight 0.5",
        "low\\u{1b}er",
        "Scaling, s per s/m",
        "slowness 0.5 s/m\n",
        "2 m/s\n",
        "99.7 % of the weighted data's square",
        "1,230, 4 left out",
        "12.3 MB",
        "2.500e-4 s",
        "12 GB/s measured",
        "  smallest            20  row 9",
    ] {
        assert!(page.contains(expected), "{expected}\n{page}");
    }
}

#[test]
fn an_order_of_its_own_is_stated_in_plain_words() {
    let mut large = inspection();
    (large.shape.columns, large.shape.unknowns_by) = (8400, OrderedBy::Curve);
    let page = page(&large);
    assert!(page.contains("in tiles of 4,096 unknowns\n"), "{page}");
    assert!(page.contains("along a curve through the grid\n"), "{page}");
}

#[test]
fn a_sound_system_is_said_to_be_one() {
    let sound = Inspection { findings: vec![], forecast: None, quick_fit: None, ..inspection() };
    assert!(page(&sound).starts_with("Nothing looks wrong with this system.\n"));
    assert!(!page(&sound).contains("Forecast"));
}

#[test]
fn counts_have_their_thousands_apart() {
    assert_eq!(count(7), "7");
    assert_eq!(count(1000), "1,000");
    assert_eq!(count(1_234_567), "1,234,567");
    assert_eq!(reciprocal("1/m"), "m");
    assert_eq!(reciprocal("K"), "1/K");
    assert_eq!(reciprocal("W/m/K"), "1/(W/m/K)");
    assert_eq!(number(0.00123456), "0.001235");
    assert_eq!(number(-1234.56), "-1235");
    assert_eq!(number(1e-9), "1.000e-9");
}
