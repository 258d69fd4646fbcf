//! The demo problem `demo-problems/embankment`: made here from its seed, and compared with the
//! committed files. To write the files anew:
//!
//! ```text
//! ELLBOW_WRITE_DEMO=demo-problems/embankment cargo test --release --test embankment
//! ```

use std::fmt::Write as _;
use std::fs;
use std::io::{Read, Write};
use std::path::{Path, PathBuf};
use std::sync::Once;

use ellbow::base::random::Stream;
use ellbow::base::{Axis, Grid};
use ellbow::operator::CompressedRows;
use ellbow::system::rays::{self, RayMatrix, Segment};
use flate2::{Compression, read::MultiGzDecoder, write::GzEncoder};
use ndarray::Array1;

const SEED: u64 = 1;
const SOURCES: usize = 24;
const RECEIVERS: usize = 25;
/// One standard deviation of a picked time.
const SIGMA_S: f64 = 4e-4;
/// Times are kept to the microsecond, as a recorder with a 1 MHz clock would.
const CLOCK_HZ: f64 = 1e6;

/// 20 m along the crest between the boreholes, 30 m down; cells of half a metre.
fn grid() -> Grid {
    let axis = |name: &str, cells| Axis { name: name.into(), cells, spacing: 0.5, origin: 0.0 };
    Grid::new(vec![axis("x", 40), axis("z", 60)], "m".into(), "x", None).unwrap()
}

fn source_depth_m(source: usize) -> f64 {
    1.25 + 1.2 * source as f64
}

fn receiver_depth_m(receiver: usize) -> f64 {
    0.75 + 1.2 * receiver as f64
}

/// Row order: all receivers of the first source, then of the next.
fn segments() -> Vec<Segment> {
    (0..SOURCES * RECEIVERS)
        .map(|row| {
            let (source, receiver) = (row / RECEIVERS, row % RECEIVERS);
            Segment::new(&[0.0, source_depth_m(source)], &[20.0, receiver_depth_m(receiver)])
        })
        .collect()
}

/// Speed of the compressional wave at a point: four lifts of fill, a softened zone, a stiff plug.
fn speed_m_per_s(x: f64, z: f64) -> f64 {
    let softened = ((x - 7.75) / 3.25).powi(2) + ((z - 16.0) / 2.0).powi(2) <= 1.0;
    let plug = (12.0..17.0).contains(&x) && (6.5..10.5).contains(&z);
    match (softened, plug) {
        (true, _) => 430.0,
        (_, true) => 1050.0,
        _ if z < 5.0 => 500.0,
        _ if z < 13.0 => 620.0,
        _ if z < 21.0 => 740.0,
        _ => 880.0,
    }
}

struct Demo {
    rays: RayMatrix,
    /// Slowness of each cell, s/m.
    truth: Vec<f64>,
    /// Noise-free times, s.
    exact: Vec<f64>,
    /// What the recorder would show before rounding to its clock, s.
    arrivals: Vec<f64>,
    times: Vec<f64>,
}

fn make() -> Demo {
    let grid = grid();
    let rays = rays::matrix(&grid, &segments()).unwrap();
    let truth: Vec<f64> = (0..grid.cell_count())
        .map(|cell| {
            let centre = grid.centre(cell);
            1.0 / speed_m_per_s(centre[0], centre[1])
        })
        .collect();
    let exact: Vec<f64> = (0..rays.matrix.rows())
        .map(|i| rays.matrix.row(i).entries().map(|(j, length)| length * truth[j]).sum())
        .collect();
    let noise = Stream::new(SEED, 0);
    let arrivals: Vec<f64> =
        exact.iter().zip(0..).map(|(time, i)| time + SIGMA_S * noise.normal(i)).collect();
    let times = arrivals.iter().map(|time| (time * CLOCK_HZ).round() / CLOCK_HZ).collect();
    Demo { rays, truth, exact, arrivals, times }
}

/// Groups are sources. The order runs down the receivers of one source and up those of the next,
/// so that neighbours in order are neighbours in space.
fn rows_csv() -> String {
    let mut text = "id,group,order,source_depth_m,receiver_depth_m\n".to_string();
    for (source, receiver) in (0..SOURCES).flat_map(|s| (0..RECEIVERS).map(move |r| (s, r))) {
        let along = if source % 2 == 0 { receiver } else { RECEIVERS - 1 - receiver };
        writeln!(
            text,
            "S{:02}-R{:02},S{:02},{},{},{}",
            source + 1,
            receiver + 1,
            source + 1,
            source * RECEIVERS + along + 1,
            source_depth_m(source),
            receiver_depth_m(receiver),
        )
        .unwrap();
    }
    text
}

fn matrix_market(matrix: &CompressedRows) -> String {
    let mut text = "%%MatrixMarket matrix coordinate real general\n".to_string();
    text += "% Length in metres of each straight ray in each cell. Invented demo data.\n";
    writeln!(text, "{} {} {}", matrix.rows(), matrix.columns(), matrix.entries()).unwrap();
    for i in 0..matrix.rows() {
        for (j, length) in matrix.row(i).entries() {
            // Rust prints the shortest digits that read back to the same number.
            writeln!(text, "{} {} {length}", i + 1, j + 1).unwrap();
        }
    }
    text
}

fn write_demo(folder: &Path) {
    let demo = make();
    fs::create_dir_all(folder).unwrap();
    let file = fs::File::create(folder.join("rays.mtx.gz")).unwrap();
    let mut packed = GzEncoder::new(file, Compression::best());
    packed.write_all(matrix_market(&demo.rays.matrix).as_bytes()).unwrap();
    packed.finish().unwrap();
    let vector = |name: &str, values: &[f64]| {
        ndarray_npy::write_npy(folder.join(name), &Array1::from(values.to_vec())).unwrap();
    };
    vector("times.npy", &demo.times);
    vector("truth.npy", &demo.truth);
    fs::write(folder.join("rows.csv"), rows_csv()).unwrap();
}

/// The committed folder; written first if the environment asks for it.
fn folder() -> PathBuf {
    static WRITE: Once = Once::new();
    WRITE.call_once(|| {
        if let Some(target) = std::env::var_os("ELLBOW_WRITE_DEMO") {
            write_demo(Path::new(&target));
        }
    });
    Path::new(env!("CARGO_MANIFEST_DIR")).join("demo-problems/embankment")
}

fn committed_vector(name: &str) -> Vec<f64> {
    let vector: Array1<f64> = ndarray_npy::read_npy(folder().join(name)).unwrap();
    vector.to_vec()
}

#[test]
fn committed_rays_are_those_of_the_ray_builder() {
    let packed = fs::File::open(folder().join("rays.mtx.gz")).unwrap();
    let mut text = String::new();
    MultiGzDecoder::new(packed).read_to_string(&mut text).unwrap();
    // The digits are the shortest that read back, so the same text means the same bits.
    assert!(text == matrix_market(&make().rays.matrix), "rays.mtx.gz differs");
}

#[test]
fn committed_truth_and_times_have_the_same_bits() {
    let demo = make();
    assert_eq!(committed_vector("truth.npy"), demo.truth);
    assert_eq!(committed_vector("times.npy"), demo.times);
    // The noise uses ln and cos, whose last bit may differ between platforms: up to 5 standard
    // deviations times a few ε, below 1e-17 s. No arrival is that near to where rounding to the
    // clock turns, so the times have the same bits everywhere.
    for arrival in &demo.arrivals {
        let ticks = arrival * CLOCK_HZ;
        let from_turn = (ticks - ticks.floor() - 0.5).abs() / CLOCK_HZ;
        assert!(from_turn > 1e-14, "arrival {arrival} is at a turn of the clock");
    }
}

#[test]
fn committed_rows_name_every_time() {
    assert_eq!(fs::read_to_string(folder().join("rows.csv")).unwrap(), rows_csv());
    let mut orders: Vec<usize> = rows_csv()
        .lines()
        .skip(1)
        .map(|line| line.split(',').nth(2).unwrap().parse().unwrap())
        .collect();
    orders.sort_unstable();
    assert_eq!(orders, (1..=SOURCES * RECEIVERS).collect::<Vec<_>>());
}

#[test]
fn noise_is_what_the_job_states() {
    let demo = make();
    let m = demo.times.len() as f64;
    let square: f64 = demo
        .times
        .iter()
        .zip(&demo.exact)
        .map(|(time, exact)| ((time - exact) / SIGMA_S).powi(2))
        .sum();
    // χ² of m draws has mean m and variance 2m.
    assert!((square - m).abs() < 3.0 * (2.0 * m).sqrt(), "{square} for {m}");
    let mean = demo.exact.iter().sum::<f64>() / m;
    assert!((0.01..0.02).contains(&(SIGMA_S / mean)), "σ is {} of a time", SIGMA_S / mean);
}

#[test]
fn every_ray_crosses_the_whole_section() {
    let demo = make();
    for (chord, segment) in demo.rays.chords.iter().zip(segments()) {
        assert!((chord - segment.length()).abs() <= 1e-12 * chord);
    }
    assert_eq!(demo.rays.matrix.rows(), 600);
    assert_eq!(demo.rays.matrix.columns(), 2400);
    let mut rays_of_cell = vec![0; 2400];
    for i in 0..600 {
        for (j, _) in demo.rays.matrix.row(i).entries() {
            rays_of_cell[j] += 1;
        }
    }
    // Strips above the shallowest and below the deepest points see no ray.
    assert_eq!(demo.rays.matrix.entries(), 35_554);
    assert_eq!(rays_of_cell.iter().filter(|&&rays| rays == 0).count(), 107);
}

#[test]
fn job_file_states_what_was_made() {
    let text = fs::read_to_string(folder().join("job.toml")).unwrap();
    let job: toml::Table = text.parse().unwrap();
    let numbers = |value: &toml::Value| -> Vec<f64> {
        let number = |v: &toml::Value| v.as_float().or(v.as_integer().map(|i| i as f64));
        value.as_array().unwrap().iter().map(|v| number(v).unwrap()).collect()
    };
    assert_eq!(job["uncertainty"].as_float(), Some(SIGMA_S));
    assert_eq!(job["seed"].as_integer(), Some(SEED as i64));
    for key in ["matrix", "data", "rows"] {
        assert!(folder().join(job[key].as_str().unwrap()).is_file(), "{key}");
    }
    let (stated, grid) = (job["grid"].as_table().unwrap(), grid());
    assert_eq!(
        numbers(&stated["shape"]),
        grid.axes.iter().map(|a| a.cells as f64).collect::<Vec<_>>()
    );
    assert_eq!(
        numbers(&stated["spacing"]),
        grid.axes.iter().map(|a| a.spacing).collect::<Vec<_>>()
    );
    assert_eq!(numbers(&stated["origin"]), grid.axes.iter().map(|a| a.origin).collect::<Vec<_>>());
    assert_eq!(stated["fastest"].as_str(), Some("x"));
    assert_eq!(stated["unit"].as_str(), Some(grid.unit.as_str()));
    let plausible = numbers(&job["units"]["plausible"]);
    assert!(make().truth.iter().all(|slowness| (plausible[0]..=plausible[1]).contains(slowness)));
}

#[test]
fn the_folder_is_small() {
    let bytes: u64 =
        fs::read_dir(folder()).unwrap().map(|entry| entry.unwrap().metadata().unwrap().len()).sum();
    assert!(bytes < 500_000, "{bytes} bytes");
}
