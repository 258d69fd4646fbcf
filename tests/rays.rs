//! Lengths of straight rays against values worked by hand and a plain box-by-box reference.

use ellbow::base::random::Stream;
use ellbow::base::{Complaint, Grid};
use ellbow::system::rays::{RayFlaw, Segment, matrix, trace};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;

#[path = "support/grids.rs"]
mod grids;

use grids::grid;

fn unit_cells(cells: &[usize]) -> Grid {
    grid(&cells.iter().map(|&cells| (cells, 1.0, 0.0)).collect::<Vec<_>>())
}

fn traced(grid: &Grid, from: &[f64], to: &[f64]) -> Vec<(u32, f64)> {
    let mut out = vec![(7, 7.0)];
    let chord = trace(grid, &Segment::new(from, to), &mut out).unwrap();
    let sum: f64 = out.iter().map(|(_, length)| length).sum();
    assert!((sum - chord).abs() <= 1e-12 * chord, "lengths {sum} against chord {chord}");
    out
}

fn assert_lengths(found: &[(u32, f64)], expected: &[(u32, f64)]) {
    assert_eq!(found.len(), expected.len(), "{found:?} against {expected:?}");
    for (&(cell, length), &(cell_expected, length_expected)) in found.iter().zip(expected) {
        assert_eq!(cell, cell_expected, "{found:?} against {expected:?}");
        assert!((length - length_expected).abs() <= 4.0 * f64::EPSILON * length_expected);
    }
}

// Values worked by hand from Siddon, Medical Physics 12:252, 1985.

#[test]
fn a_diagonal_touches_only_the_cells_on_it() {
    let root = 2f64.sqrt();
    let found = traced(&unit_cells(&[4, 4]), &[0.0, 0.0], &[4.0, 4.0]);
    assert_lengths(&found, &[(0, root), (5, root), (10, root), (15, root)]);
}

#[test]
fn a_ray_of_slope_one_half_passes_a_corner_between_cells() {
    // √5/2 in each of (0,0), (1,1), (2,1), (3,2); (1,1) is entered through a corner.
    let found = traced(&unit_cells(&[4, 4]), &[0.0, 0.5], &[4.0, 2.5]);
    let expected = [0, 5, 6, 11].map(|cell| (cell, 1.118_033_988_749_895));
    assert_lengths(&found, &expected);
}

#[test]
fn corners_stay_corners_where_spacings_are_not_exact_numbers() {
    // A tenth, three tenths and seven tenths are not binary fractions: the planes of the axes
    // meet only up to rounding, and no sliver may show up beside the diagonal.
    for (cells, origin) in [(17usize, 0.3), (50, -1.7), (333, 1234.567)] {
        let grid = grid(&[(cells, 0.1, origin), (cells, 0.3, origin), (cells, 0.7, origin)]);
        let far = [0.1, 0.3, 0.7].map(|spacing| origin + spacing * cells as f64);
        let found = traced(&grid, &[origin; 3], &far);
        assert_eq!(found.len(), cells, "{cells} cells from {origin}");
        let other = traced(&grid, &[far[0], origin, origin], &[origin, far[1], far[2]]);
        assert_eq!(other.len(), cells);
        // From and to where no plane is, so that each axis rounds its crossings differently.
        for (before, beyond) in [(0.37, 0.41), (1.0 / 3.0, 1.7), (2.9, 0.1)] {
            let near = [0.1, 0.3, 0.7].map(|spacing| origin - before * spacing);
            let far = [0.1, 0.3, 0.7].map(|spacing| origin + spacing * (cells as f64 + beyond));
            assert_eq!(traced(&grid, &near, &far).len(), cells);
        }
    }
}

#[test]
fn a_ray_along_a_border_counts_once_on_the_larger_side() {
    let square = unit_cells(&[3, 3]);
    assert_lengths(&traced(&square, &[0.0, 1.0], &[3.0, 1.0]), &[(3, 1.0), (4, 1.0), (5, 1.0)]);
    assert_lengths(&traced(&square, &[2.0, 3.0], &[2.0, 0.0]), &[(8, 1.0), (5, 1.0), (2, 1.0)]);
    // The outer borders belong to the cells inside.
    assert_lengths(&traced(&square, &[0.0, 3.0], &[3.0, 3.0]), &[(6, 1.0), (7, 1.0), (8, 1.0)]);
    assert_lengths(&traced(&square, &[-1.0, 0.0], &[1.5, 0.0]), &[(0, 1.0), (1, 0.5)]);
    // 0.1 + 0.2 is a border of this grid only up to rounding, and so is 0.3.
    let tenths = grid(&[(4, 0.1, 0.0), (4, 0.1, 0.0)]);
    for height in [0.1 + 0.2, 0.3] {
        let found = traced(&tenths, &[0.0, height], &[0.4, 0.3]);
        assert_eq!(found.iter().map(|e| e.0).collect::<Vec<_>>(), [12, 13, 14, 15]);
    }
    // Along an edge of three dimensions: once too, in the cell above it on both axes.
    let cube = unit_cells(&[2, 2, 2]);
    assert_lengths(&traced(&cube, &[1.0, 1.0, 0.0], &[1.0, 1.0, 2.0]), &[(3, 1.0), (7, 1.0)]);
}

#[test]
fn end_points_may_lie_inside_or_outside() {
    let square = unit_cells(&[3, 3]);
    assert_lengths(&traced(&square, &[0.25, 0.5], &[0.75, 0.5]), &[(0, 0.5)]);
    assert_lengths(&traced(&square, &[1.5, 0.5], &[9.0, 0.5]), &[(1, 0.5), (2, 1.0)]);
    assert_lengths(&traced(&square, &[-5.0, 2.5], &[0.5, 2.5]), &[(6, 0.5)]);
    // Ends on borders leave nothing beyond them.
    assert_lengths(&traced(&square, &[1.0, 0.5], &[2.0, 0.5]), &[(1, 1.0)]);
    assert_lengths(&traced(&unit_cells(&[5]), &[4.5], &[2.0]), &[(4, 0.5), (3, 1.0), (2, 1.0)]);
}

#[test]
fn rays_that_miss_or_touch_in_a_point_leave_nothing() {
    let square = unit_cells(&[3, 3]);
    for (from, to) in [
        ([-1.0, 4.0], [4.0, 4.0]),
        ([-1.0, 1.0], [1.0, -1.0]),
        ([2.0, 4.0], [4.0, 2.0]),
        ([-2.0, 1.0], [0.0, 1.0]),
        ([-2.0, 1.0], [-1.0, 1.0]),
        ([3.0, 1.5], [5.0, 1.5]),
        ([3.5, 0.0], [3.5, 3.0]),
    ] {
        assert_eq!(traced(&square, &from, &to), [], "{from:?} to {to:?}");
    }
}

#[test]
fn faulty_rays_are_refused_by_number() {
    let square = unit_cells(&[3, 3]);
    let good = Segment::new(&[0.0, 0.0], &[3.0, 1.0]);
    for (from, to, flaw) in [
        ([1.0, 1.0, 0.0], [1.0, 1.0, 0.0], RayFlaw::ZeroLength),
        ([f64::NAN, 1.0, 0.0], [1.0, 1.0, 0.0], RayFlaw::NotFinite),
        ([0.0, 1.0, 0.0], [f64::INFINITY, 1.0, 0.0], RayFlaw::NotFinite),
        ([-1e300, 1.0, 0.0], [1e300, 1.0, 0.0], RayFlaw::TooLarge),
        ([0.0, 1.0, 2.0], [1.0, 1.0, 2.0], RayFlaw::BeyondAxes),
    ] {
        // Far enough down that several tasks run, and with a second fault after the first.
        let mut segments = vec![good; 1000];
        segments[700] = Segment { from, to };
        segments[999] = Segment { from: [2.0; 3], to: [2.0; 3] };
        let fault = matrix(&square, &segments).unwrap_err();
        assert_eq!((fault.row, fault.flaw), (700, flaw));
        let complaint = Complaint::from(fault);
        assert!(complaint.cause.starts_with("ray 701: "), "{complaint}");
        assert!(complaint.text.is_some() && !complaint.remedy.is_empty());
    }
    let tiny = grid(&[(3, 1e-300, 0.0)]);
    let mut out = Vec::new();
    let long = Segment::new(&[0.0], &[1e100]);
    assert_eq!(trace(&tiny, &long, &mut out), Err(RayFlaw::TooLarge));
}

#[test]
fn inactive_cells_are_left_out_and_counted() {
    let whole = unit_cells(&[3, 2]);
    // Columns in an order of their own: unknown 0 is cell 5.
    let holed = Grid::new(whole.axes.clone(), "m".into(), "x", Some(vec![5, 0, 2, 3])).unwrap();
    let segments = [
        Segment::new(&[0.0, 0.5], &[3.0, 0.5]),
        Segment::new(&[3.0, 1.5], &[0.5, 1.5]),
        Segment::new(&[1.5, 0.0], &[1.5, 2.0]),
    ];
    let built = matrix(&holed, &segments).unwrap();
    let rows: Vec<Vec<(usize, f64)>> =
        (0..3).map(|i| built.matrix.row(i).entries().collect()).collect();
    assert_eq!(rows[0], [(1, 1.0), (2, 1.0)]);
    assert_eq!(rows[1], [(0, 1.0), (3, 0.5)]);
    assert_eq!(rows[2], []);
    assert_eq!(built.inactive_crossings, 4);
    assert_eq!(built.chords, [3.0, 2.5, 2.0]);
    assert_eq!(built.matrix.columns(), 4);
}

#[test]
fn no_rays_make_an_empty_matrix() {
    let built = matrix(&unit_cells(&[3, 3]), &[]).unwrap();
    assert_eq!((built.matrix.rows(), built.matrix.columns(), built.matrix.entries()), (0, 9, 0));
}

/// Length of a ray inside each cell, cell by cell: the part of α in [0, 1] between the six (four,
/// two) faces. Knows no order of crossings; a border counts for both its sides.
fn box_by_box(grid: &Grid, segment: &Segment) -> Vec<f64> {
    (0..grid.cell_count())
        .map(|cell| {
            let (mut enter, mut leave) = (0f64, 1f64);
            for (place, (&i, axis)) in grid.indices(cell).iter().zip(&grid.axes).enumerate() {
                let low = axis.origin + i as f64 * axis.spacing;
                let high = axis.origin + (i + 1) as f64 * axis.spacing;
                let (from, run) = (segment.from[place], segment.to[place] - segment.from[place]);
                if run == 0.0 {
                    if from < low || from > high {
                        return 0.0;
                    }
                    continue;
                }
                let (one, other) = ((low - from) / run, (high - from) / run);
                enter = enter.max(one.min(other));
                leave = leave.min(one.max(other));
            }
            (leave - enter).max(0.0) * segment.length()
        })
        .collect()
}

fn axis_strategy() -> impl Strategy<Value = (usize, f64, f64)> {
    (1usize..9, 0.05f64..3.0, -20.0f64..20.0)
}

/// Grids of one to three axes with rays that start and end inside, outside, on borders, or share
/// a coordinate.
fn cases() -> impl Strategy<Value = (Grid, Segment)> {
    let axes = prop::collection::vec(axis_strategy(), 1..4);
    let ends = prop::collection::vec((-0.7f64..1.7, -0.7f64..1.7, 0u8..6), 3);
    (axes, ends).prop_map(|(axes, ends)| {
        let grid = grid(&axes);
        let (mut from, mut to) = ([0.0; 3], [0.0; 3]);
        for (place, (axis, (start, end, kind))) in grid.axes.iter().zip(ends).enumerate() {
            let cells = axis.cells as f64;
            let at = |share: f64| axis.origin + share * cells * axis.spacing;
            let border = |share: f64| axis.origin + (share * cells).round() * axis.spacing;
            (from[place], to[place]) = match kind {
                0 => (border(start), border(end)),
                1 => (at(start), at(start)),
                2 => (border(start), border(start)),
                _ => (at(start), at(end)),
            };
        }
        (grid, Segment { from, to })
    })
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 4000, failure_persistence: None, rng_seed: RngSeed::Fixed(1), ..Default::default() })]

    /// Where a ray crosses the planes of an axis at a shallow angle, rounding of the coordinates
    /// moves the crossings along the ray; up to 1e-9 of a cell (3 wide) the tracer may then join
    /// two of them, which moves that length to a neighbour. Random ends make steeper angles than
    /// those at which the reference itself is worse than 1e-9.
    #[test]
    fn lengths_agree_with_the_box_by_box_reference((grid, segment) in cases()) {
        let mut out = Vec::new();
        if segment.from == segment.to {
            prop_assert_eq!(trace(&grid, &segment, &mut out), Err(RayFlaw::ZeroLength));
            return Ok(());
        }
        let chord = trace(&grid, &segment, &mut out).unwrap();
        let sum: f64 = out.iter().map(|e| e.1).sum();
        prop_assert!((sum - chord).abs() <= 1e-12 * chord.max(1e-3));
        let truth = box_by_box(&grid, &segment);
        let mut found = vec![0.0; truth.len()];
        for &(cell, length) in &out {
            prop_assert!(length > 0.0);
            prop_assert_eq!(found[cell as usize], 0.0, "cell {} twice", cell);
            found[cell as usize] = length;
        }
        // On a border the reference counts both sides: there only an upper bound.
        let on_border = truth.iter().sum::<f64>() > chord + 1e-9;
        for (&found, &truth) in found.iter().zip(&truth) {
            prop_assert!(found <= truth + 4e-9, "{found} against {truth}");
            prop_assert!(on_border || found >= truth - 4e-9, "{found} against {truth}");
        }
    }

    #[test]
    fn a_reversed_ray_has_the_same_bits_in_reverse((grid, segment) in cases()) {
        let (mut there, mut back) = (Vec::new(), Vec::new());
        let chord = trace(&grid, &segment, &mut there);
        let reverse = Segment { from: segment.to, to: segment.from };
        prop_assert_eq!(chord, trace(&grid, &reverse, &mut back));
        back.reverse();
        prop_assert_eq!(there, back);
    }
}

fn random_rays(grid: &Grid, count: u64, seed: u64) -> Vec<Segment> {
    let stream = Stream::new(seed, 0);
    (0..count)
        .map(|ray| {
            let point = |end: u64| {
                let mut point = [0.0; 3];
                for (place, axis) in grid.axes.iter().enumerate() {
                    let share = 1.4 * stream.uniform(6 * ray + 3 * end + place as u64) - 0.2;
                    point[place] = axis.origin + share * axis.cells as f64 * axis.spacing;
                }
                point
            };
            Segment { from: point(0), to: point(1) }
        })
        .collect()
}

/// Chord by clipping at the grid's outer borders alone.
fn chord_by_clipping(grid: &Grid, segment: &Segment) -> f64 {
    let outer: Vec<_> =
        grid.axes.iter().map(|a| (1, a.cells as f64 * a.spacing, a.origin)).collect();
    box_by_box(&grids::grid(&outer), segment)[0]
}

#[test]
fn row_sums_are_chords_and_columns_ascend() {
    for (axes, seed) in [
        (vec![(80, 0.25, -3.0), (57, 0.7, 11.0)], 1),
        (vec![(31, 0.3, 5.0), (40, 1.1, -8.0), (23, 0.9, 0.0)], 2),
    ] {
        let grid = grid(&axes);
        let rays = random_rays(&grid, 5000, seed);
        let built = matrix(&grid, &rays).unwrap();
        for (i, ray) in rays.iter().enumerate() {
            let row = built.matrix.row(i);
            assert!(row.columns.is_sorted_by(|a, b| a < b));
            let sum: f64 = row.entries().map(|e| e.1).sum();
            let chord = chord_by_clipping(&grid, ray);
            assert!((sum - chord).abs() <= 1e-12 * ray.length(), "{sum} against {chord}");
            assert!((built.chords[i] - chord).abs() <= 1e-12 * ray.length());
        }
    }
}

#[test]
fn any_number_of_threads_gives_the_same_bits() {
    let grid = grid(&[(60, 0.5, 0.0), (40, 0.3, -2.0)]);
    let rays = random_rays(&grid, 3000, 3);
    let with = |threads| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        pool.install(|| matrix(&grid, &rays).unwrap())
    };
    let one = with(1);
    for threads in [2, 5] {
        assert_eq!(one, with(threads));
    }
}
