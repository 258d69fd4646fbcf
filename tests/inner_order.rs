//! The order in which a matrix is stored is nobody's business: with a grid and without, with rows
//! shuffled, whichever way a pass goes, files, names and numbers are those of the user's order.

mod cli_common;

use std::fmt::Write as _;

use cli_common::{Place, number, word};
use ellbow::base::random::Stream;
use ellbow::system::rays::{self, Segment};
use serde_json::Value;

#[path = "support/grids.rs"]
mod grids;

/// Cells along x, which runs fastest, and z. Rays run down, so that the natural tiles (34 layers
/// each) cut every ray more often than squares of 64×64 cells do.
const SHAPE: [usize; 2] = [120, 70];
const UNKNOWNS: usize = SHAPE[0] * SHAPE[1];
const RAYS: usize = 420;
const STRENGTH: f64 = 10.0;
const TOLERANCE: f64 = 1e-11;
/// An unknown in the second tile of either order, held at [`HELD_AT`].
const HELD: usize = 30 * SHAPE[0] + 100;
const HELD_AT: f64 = 1.75;

/// Everything a run is given, in the order of its files.
struct Problem {
    rows: Vec<Vec<(usize, f64)>>,
    data: Vec<f64>,
    sigma: Vec<f64>,
    penalty: Vec<f64>,
    reference: Vec<f64>,
}

impl Problem {
    fn new() -> Self {
        let grid = grids::grid(&[(SHAPE[0], 1.0, 0.0), (SHAPE[1], 1.0, 0.0)]);
        let places = Stream::new(11, 0);
        let segments: Vec<Segment> = (0..RAYS as u64)
            .map(|i| {
                let x = 120.0 * places.uniform(2 * i);
                let beside = (x + 20.0 * (places.uniform(2 * i + 1) - 0.5)).clamp(0.0, 120.0);
                Segment::new(&[x, 0.0], &[beside, 70.0])
            })
            .collect();
        let matrix = rays::matrix(&grid, &segments).unwrap().matrix;
        let rows: Vec<Vec<(usize, f64)>> =
            (0..RAYS).map(|i| matrix.row(i).entries().collect()).collect();
        let stream = Stream::new(11, 1);
        let mut truth: Vec<f64> =
            (0..UNKNOWNS as u64).map(|j| 1.0 + 0.3 * stream.normal(j)).collect();
        truth[HELD] = HELD_AT;
        let noise = Stream::new(11, 2);
        let sigma: Vec<f64> =
            (0..RAYS as u64).map(|i| 0.05 + 0.1 * noise.uniform(1000 + i)).collect();
        let data = rows
            .iter()
            .zip(&sigma)
            .zip(0..)
            .map(|((row, sigma), i)| product(row, &truth) + sigma * noise.normal(i))
            .collect();
        let factor = Stream::new(11, 3);
        Self {
            rows,
            data,
            sigma,
            penalty: (0..UNKNOWNS as u64).map(|j| 0.5 + 1.5 * factor.uniform(j)).collect(),
            reference: (0..UNKNOWNS as u64).map(|j| 1.0 + 0.1 * factor.normal(9000 + j)).collect(),
        }
    }

    /// The same with its rows in another order.
    fn shuffled(&self) -> Self {
        let stream = Stream::new(11, 4);
        let mut order: Vec<usize> = (0..RAYS).collect();
        order.sort_by_key(|&i| stream.bits(i as u64));
        Self {
            rows: order.iter().map(|&i| self.rows[i].clone()).collect(),
            data: order.iter().map(|&i| self.data[i]).collect(),
            sigma: order.iter().map(|&i| self.sigma[i]).collect(),
            penalty: self.penalty.clone(),
            reference: self.reference.clone(),
        }
    }

    /// Matrix, data and uncertainty as files with this beginning, and job files without and with
    /// the grid.
    fn write(&self, place: &Place, name: &str) {
        let mut entries = String::new();
        let mut count = 0;
        for (i, row) in self.rows.iter().enumerate() {
            for (j, a) in row {
                let _ = writeln!(entries, "{} {} {a:e}", i + 1, j + 1);
                count += 1;
            }
        }
        let head = "%%MatrixMarket matrix coordinate real general";
        let sizes = format!("{RAYS} {UNKNOWNS} {count}");
        place.write(&format!("{name}.mtx"), format!("{head}\n{sizes}\n{entries}"));
        place.vector(&format!("{name}-data.npy"), &self.data);
        place.vector(&format!("{name}-sigma.npy"), &self.sigma);
        let files = format!(
            "matrix = '{name}.mtx'\ndata = '{name}-data.npy'\nuncertainty = '{name}-sigma.npy'\n\
             reference = 'reference.npy'\ncolumns = 'columns.csv'\n\
             gradient_tolerance = {TOLERANCE:e}\nstrength = {STRENGTH:e}\n"
        );
        let [x, z] = SHAPE;
        let grid = format!(
            "[grid]\naxes = ['x', 'z']\nshape = [{x}, {z}]\nspacing = [1.0, 1.0]\n\
             origin = [0.0, 0.0]\nunit = 'm'\nfastest = 'x'\n"
        );
        place.write(&format!("{name}.toml"), &files);
        place.write(&format!("{name}-grid.toml"), format!("{files}{grid}"));
    }

    fn write_all(&self, place: &Place) {
        self.write(place, "plain");
        self.shuffled().write(place, "shuffled");
        place.vector("reference.npy", &self.reference);
        let stream = Stream::new(11, 5);
        let start: Vec<f64> = (0..UNKNOWNS as u64).map(|j| 1.0 + stream.normal(j)).collect();
        place.vector("start.npy", &start);
        let mut table = String::from("name,penalty_weight,fixed\n");
        for (j, p) in self.penalty.iter().enumerate() {
            let fixed = if j == HELD { HELD_AT.to_string() } else { String::new() };
            let _ = writeln!(table, "c{j},{p:e},{fixed}");
        }
        place.write("columns.csv", table);
    }

    /// Checks everything a run has left against the entries, in file order, and returns the model
    /// and the most that it can be away from the minimum.
    #[track_caller]
    fn certify(&self, place: &Place, folder: &str) -> (Vec<f64>, f64) {
        let model = place.numbers(format!("{folder}/model.npy"));
        assert_eq!(model[HELD], HELD_AT, "{folder}");
        let residual = place.numbers(format!("{folder}/residual.npy"));
        let predicted = place.numbers(format!("{folder}/predicted.npy"));
        let mut gradient = vec![0.0; UNKNOWNS];
        let (mut squares, mut frobenius) = (0.0, 0.0);
        for (i, row) in self.rows.iter().enumerate() {
            let (expected, weight) = (self.data[i] - product(row, &model), 1.0 / self.sigma[i]);
            // Sums of as many terms as the row has entries, rounded in either order.
            let sizes = row.iter().map(|(j, a)| (a * model[*j]).abs()).sum::<f64>();
            let rounding = (row.len() + 2) as f64 * f64::EPSILON * (sizes + self.data[i].abs());
            assert!((residual[i] - expected).abs() <= rounding, "{folder}, row {i}");
            assert!((predicted[i] + residual[i] - self.data[i]).abs() <= rounding, "{folder}, {i}");
            squares += (weight * expected).powi(2);
            for &(j, a) in row {
                gradient[j] += a * weight * weight * expected;
                frobenius += (weight * a).powi(2);
            }
        }
        let mut penalty = 0.0;
        for j in 0..UNKNOWNS {
            let departure = self.penalty[j] * (model[j] - self.reference[j]);
            gradient[j] -= STRENGTH * STRENGTH * self.penalty[j] * departure;
            penalty += if j == HELD { 0.0 } else { departure * departure };
            frobenius += (STRENGTH * self.penalty[j]).powi(2);
        }
        gradient[HELD] = 0.0;
        let size = cli_common::norm(&gradient);
        let total = (squares + STRENGTH * STRENGTH * penalty).sqrt();
        // Converged is up to ten tolerances. The sums here round to about 1e-14 of their terms, and
        // data and predictions are about a hundred times the total: a tenth of one tolerance.
        let one = TOLERANCE * frobenius.sqrt() * total;
        let bound = 10.1 * one;
        assert!(size <= bound, "{folder}: gradient {size:e}, at most {bound:e}");
        // The objective's curvature is at least λ² min p² in every direction.
        let least = self.penalty.iter().copied().fold(f64::INFINITY, f64::min);
        (model, (size + 0.1 * one) / (STRENGTH * least).powi(2))
    }
}

fn product(row: &[(usize, f64)], x: &[f64]) -> f64 {
    row.iter().map(|(j, a)| a * x[*j]).sum()
}

fn difference(a: &[f64], b: &[f64]) -> f64 {
    a.iter().zip(b).map(|(a, b)| (a - b).powi(2)).sum::<f64>().sqrt()
}

fn inspected(place: &Place, job: &str) -> Value {
    serde_json::from_str(&place.expect(0, &format!("inspect {job} --json")).out).unwrap()
}

#[test]
fn grid_and_order_of_rows_change_no_model_and_every_file_is_in_the_users_order() {
    let (place, problem) = (Place::new(), Problem::new());
    problem.write_all(&place);
    let shuffled = problem.shuffled();
    for (job, is_curve) in [("plain", false), ("plain-grid", true), ("shuffled-grid", true)] {
        let stored = inspected(&place, &format!("{job}.toml"));
        assert_eq!(word(&stored, "/shape/unknowns_by") == "curve", is_curve, "{job}");
    }
    let departure = difference(&problem.reference, &vec![1.0; UNKNOWNS]);
    let mut models: Vec<(String, Vec<f64>, f64)> = Vec::new();
    for method in ["lsqr", "lsmr", "cgls"] {
        for (more, flags) in [("", ""), ("-start", "--start start.npy --column-scaling on")] {
            for job in ["plain", "plain-grid", "shuffled-grid"] {
                let folder = format!("{method}-{job}{more}");
                place.expect(
                    0,
                    &format!("solve {job}.toml --method {method} {flags} --quiet --out {folder}"),
                );
                let given = if job.starts_with("shuffled") { &shuffled } else { &problem };
                let (model, error) = given.certify(&place, &folder);
                // Small enough that unknowns in another order could not pass.
                assert!(error < 1e-5 * departure, "{folder}: {error:e}");
                if job.ends_with("grid") {
                    let cells = place.array(format!("{folder}/model_grid.npy"));
                    assert_eq!(cells.shape(), [SHAPE[1], SHAPE[0]]);
                    assert!(cells.iter().eq(&model), "{folder}");
                }
                models.push((folder, model, error));
            }
        }
    }
    let (first, truth, least) = &models[0];
    for (folder, model, error) in &models[1..] {
        let apart = difference(model, truth);
        assert!(apart <= error + least, "{first} and {folder}: {apart:e}");
    }
}

#[test]
fn models_of_a_sweep_are_in_the_users_order() {
    let (place, problem) = (Place::new(), Problem::new());
    problem.write_all(&place);
    let job = place.read("plain-grid.toml").replace(&format!("strength = {STRENGTH:e}\n"), "");
    place.write("sweep.toml", job);
    place.expect(0, "sweep sweep.toml --strengths 10..100 --strength-count 3 --quiet --out swept");
    place.expect(0, "solve plain.toml --quiet --out one");
    let (model, error) = problem.certify(&place, "one");
    let models = place.array("swept/models.npy");
    assert_eq!(models.shape(), [3, UNKNOWNS]);
    let weakest = cli_common::row(&models, 2);
    let record = place.summary("swept");
    assert_eq!(number(&record, "/sweep/2/strength"), STRENGTH);
    // Either run may be ten tolerances away from its minimum; `error` is what one of them was.
    let bound = number(&place.summary("one"), "/relative_gradient");
    assert!(difference(&weakest, &model) <= error * (1.0 + 10.0 * TOLERANCE / bound));
}

#[test]
fn names_in_messages_and_pages_are_those_of_the_users_order() {
    let (place, problem) = (Place::new(), Problem::new());
    problem.write_all(&place);
    let (plain, grid) = (inspected(&place, "plain.toml"), inspected(&place, "plain-grid.toml"));
    let touched = {
        let mut touched = vec![false; UNKNOWNS];
        problem.rows.iter().flatten().for_each(|(j, _)| touched[*j] = true);
        touched
    };
    let untouched: Vec<usize> = (0..UNKNOWNS).filter(|&j| !touched[j]).collect();
    assert_eq!(number(&grid, "/coverage/empty_columns/count"), untouched.len() as f64);
    let names = grid["coverage"]["empty_columns"]["first"].as_array().unwrap();
    for (name, j) in names.iter().zip(&untouched) {
        let (x, z) = (j % SHAPE[0] + 1, j / SHAPE[0] + 1);
        let name = name.as_str().unwrap();
        assert!(name.starts_with(&format!("column {} (", j + 1)), "{name}");
        assert!(name.contains(&format!("cell (x {x}, z {z}) at")), "{name}");
    }
    for list in ["rows_by_size", "columns_by_size"] {
        for end in ["lightest", "heaviest"] {
            for place in 0..3 {
                let of = |record: &Value| {
                    let name = word(record, &format!("/{list}/{end}/{place}/0")).to_owned();
                    name.split_whitespace().take(2).collect::<Vec<_>>().join(" ")
                };
                assert_eq!(of(&plain), of(&grid), "{list} {end}");
            }
        }
    }
    // Where numbers break down: the square of what one enormous entry pulls into its column.
    let (row, enormous) = (problem.rows[7].clone(), problem.rows[7][40].0);
    let text = place.read("plain.mtx");
    let entry = format!("8 {} {:e}\n", enormous + 1, row[40].1);
    assert!(text.contains(&entry));
    place.write("plain.mtx", text.replace(&entry, &format!("8 {} 1e170\n", enormous + 1)));
    for method in ["lsqr", "lsmr", "cgls"] {
        for flags in ["", "--start start.npy"] {
            let arguments = format!("solve plain-grid.toml --method {method} {flags} --out never");
            let ran = place.expect(4, &arguments);
            let names = [format!("column {} (", enormous + 1), "row 8".into()];
            assert!(names.iter().any(|name| ran.err.contains(name)), "{arguments}: {}", ran.err);
        }
    }
}

#[test]
fn the_way_of_a_pass_changes_no_bit_and_makes_no_other_run() {
    let (place, problem) = (Place::new(), Problem::new());
    problem.write_all(&place);
    let base = "shuffled-grid.toml --quiet --out";
    for way in ["one", "two-phase"] {
        place.expect(0, &format!("solve {base} {way} --pass {way}"));
        assert_eq!(word(&place.summary(way), "/pass"), way);
        assert!(place.summary(way)["settings"].get("pass").is_none());
    }
    let job = place.read("shuffled-grid.toml");
    place.write("way.toml", format!("pass = 'two-phase'\n{job}"));
    place.expect(0, "solve way.toml --quiet --out auto --pass auto");
    place.expect(0, "solve way.toml --quiet --out key");
    assert_eq!(word(&place.summary("key"), "/pass"), "two-phase");
    assert!(["one", "two-phase"].contains(&word(&place.summary("auto"), "/pass")));
    for file in ["model.npy", "residual.npy", "predicted.npy", "model_grid.npy"] {
        let bytes = |folder: &str| place.bytes(format!("{folder}/{file}"));
        for folder in ["two-phase", "auto", "key"] {
            assert!(bytes("one") == bytes(folder), "{folder}/{file}");
        }
    }
    let again = place.expect(0, "solve shuffled-grid.toml --out one --pass two-phase");
    assert!(again.err.contains("finished already"), "{}", again.err);
    // Counted bytes of a pass tell that it is heeded: two phases read the matrix twice.
    let of = |way: &str| {
        let record = inspected(&place, &format!("shuffled-grid.toml --pass {way}"));
        (number(&record, "/forecast/bytes_per_pass"), number(&record, "/shape/matrix_bytes"))
    };
    let ((one, matrix), (two, _)) = (of("one"), of("two-phase"));
    assert_eq!(two - one, matrix);
    assert_eq!(number(&place.summary("two-phase"), "/bytes_per_pass"), two);
    let ran = place.expect(2, "solve plain.toml --pass three --out never");
    assert!(ran.err.contains("auto, one, two-phase"), "{}", ran.err);
}
