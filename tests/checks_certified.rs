//! Certified linear regressions, and an adjusted levelling network.
//!
//! NIST Statistical Reference Datasets (public domain): files in `tests/data/nist`, certified
//! values in their headers.
//!
//! Tolerances that double precision can meet, of coefficients and residual standard deviation:
//! 1e-9 Norris, NoInt1, NoInt2 and column-scaled Pontius; 1e-7 Longley; 1e-5 Wampler1 to 5.

mod common;

use common::{Case, JobFolder, METHODS, check, check_printed, data_path};
use ellbow::job::Typed;
use ellbow::job::typed::{Data, MethodName, NumberOrText, ScalingName};
use ellbow::operator::StoredRows;
use ellbow::solve::Method;

struct Certified {
    name: &'static str,
    rows: usize,
    columns: usize,
    design: Vec<f64>,
    response: Vec<f64>,
    coefficients: Vec<f64>,
    standard_deviation: f64,
}

fn numbers(line: &str) -> Vec<f64> {
    line.split_whitespace().filter_map(|word| word.parse().ok()).collect()
}

/// Reads a file of the collection; the powers of one predictor or the predictors themselves are
/// the columns, after a column of ones where there is a parameter B0.
fn read(name: &'static str) -> Certified {
    let text = std::fs::read_to_string(data_path(&format!("nist/{name}.dat"))).unwrap();
    let lines: Vec<&str> = text.lines().collect();
    let is_parameter = |line: &&&str| {
        let first = line.split_whitespace().next().unwrap_or("");
        first.strip_prefix('B').is_some_and(|digits| digits.parse::<u32>().is_ok())
    };
    let parameters: Vec<&str> = lines.iter().filter(is_parameter).copied().collect();
    let coefficients: Vec<f64> = parameters.iter().map(|line| numbers(line)[0]).collect();
    let deviation =
        lines.iter().map(|line| line.trim()).filter(|line| line.starts_with("Standard Deviation"));
    let standard_deviation =
        deviation.map(numbers).find(|found| found.len() == 1).expect("a residual deviation")[0];
    let first = lines.iter().rposition(|line| line.starts_with("Data:")).unwrap() + 1;
    let table: Vec<Vec<f64>> =
        lines[first..].iter().map(|line| numbers(line)).filter(|row| row.len() > 1).collect();
    let intercept = parameters[0].trim_start().starts_with("B0");
    let columns = coefficients.len();
    let mut design = Vec::new();
    for row in &table {
        let regressors = columns - usize::from(intercept);
        design.extend(intercept.then_some(1.0));
        match row.len() - 1 {
            // Exact products where the powers are exact, else one rounding a factor.
            1 => design.extend((1..=regressors).map(|p| row[1].powi(p as i32))),
            _ => design.extend(&row[1..]),
        }
    }
    let response: Vec<f64> = table.iter().map(|row| row[0]).collect();
    assert_eq!(design.len(), response.len() * columns);
    Certified {
        name,
        rows: response.len(),
        columns,
        design,
        response,
        coefficients,
        standard_deviation,
    }
}

impl Certified {
    fn matrix(&self) -> StoredRows {
        StoredRows::from_dense(self.rows, self.columns, &self.design)
    }

    fn compare(&self, way: &str, model: &[f64], residual_norm: f64, tolerance: f64) {
        let name = self.name;
        for (j, (found, certified)) in model.iter().zip(&self.coefficients).enumerate() {
            check(&format!("{name} {way} coefficient {j}"), *found, *certified, tolerance);
        }
        let found = residual_norm / ((self.rows - self.columns) as f64).sqrt();
        if self.standard_deviation == 0.0 {
            // The data are a polynomial exactly: what is left is the error of the coefficients.
            let data = common::norm(&self.response);
            println!("{name} {way} residual deviation: {found:e}, certified 0");
            assert!(residual_norm <= tolerance * data, "{name} {way}: {residual_norm:e}");
        } else {
            check(&format!("{name} {way} deviation"), found, self.standard_deviation, tolerance);
        }
    }
}

/// Data sets and the relative error that double precision can keep to.
const SETS: [(&str, f64); 10] = [
    ("Norris", 1e-9),
    ("NoInt1", 1e-9),
    ("NoInt2", 1e-9),
    ("Pontius", 1e-9),
    ("Longley", 1e-7),
    ("Wampler1", 1e-5),
    ("Wampler2", 1e-5),
    ("Wampler3", 1e-5),
    ("Wampler4", 1e-5),
    ("Wampler5", 1e-5),
];

#[test]
fn every_method_meets_the_certified_values() {
    for (name, tolerance) in SETS {
        let certified = read(name);
        for method in METHODS {
            let mut case = Case::new(certified.matrix(), certified.response.clone());
            case.method = method;
            let solved = case.solve(0.0);
            println!("{name} {method:?}: {} iterations, {:?}", solved.iterations, solved.stop);
            let way = method.word();
            certified.compare(way, &solved.model, solved.residual_norm, tolerance);
        }
    }
}

/// A dense decomposition of columns as they come loses κ·ε: 1e-6 of Longley (κ 4.9e9) and more of
/// the rest; where κ ≤ 1e6 it keeps to 1e-9.
#[test]
fn a_decomposition_meets_the_certified_values_of_the_well_conditioned() {
    for name in ["Norris", "NoInt1", "NoInt2"] {
        let certified = read(name);
        let case = Case::new(certified.matrix(), certified.response.clone());
        let dense = case.decompose();
        assert!(dense.condition() < 1e6);
        let model = dense.solve(&certified.response, 0.0);
        let residual: Vec<f64> = (0..certified.rows)
            .map(|i| {
                let predicted: f64 = case.matrix.row(i).entries().map(|(j, a)| a * model[j]).sum();
                certified.response[i] - predicted
            })
            .collect();
        certified.compare("direct", &model, common::norm(&residual), 1e-9);
    }
}

fn typed(folder: &JobFolder, matrix: &StoredRows, data: &[f64]) -> Typed {
    Typed {
        matrix: Some(folder.write_matrix("design.mtx", matrix)),
        data: Some(Data::File(folder.write_values("response.csv", data))),
        strength: Some(0.0),
        ..Typed::default()
    }
}

/// Filip: condition 1.8e15 as it comes, 5e9 with even columns; beyond a Krylov method.
#[test]
fn filip_is_answered_with_a_warning_by_every_method() {
    let filip = read("Filip");
    let folder = JobFolder::new();
    let base = typed(&folder, &filip.matrix(), &filip.response);
    for method in [MethodName::Lsqr, MethodName::Lsmr, MethodName::Cgls, MethodName::Direct] {
        for scaling in [ScalingName::Auto, ScalingName::Off] {
            let out = format!("{method:?}-{scaling:?}");
            let typed =
                Typed { method: Some(method), column_scaling: Some(scaling), ..base.clone() };
            let summary = folder.solve(typed, &out);
            let condition = summary.condition.as_ref().expect("a condition");
            // 1.8e15 is itself lost to rounding in the last digits: σ_min ± ε σ_max.
            let value = condition.value.unwrap_or(f64::INFINITY);
            assert!(value > 1e15, "{value:e}");
            let warned = |w: &String| w.contains("condition") && w.contains("beyond 1e13");
            assert!(summary.warnings.iter().any(warned), "{out}: {:?}", summary.warnings);
        }
    }
}

/// Thirty Filips side by side: too large for a decomposition that nobody asked for.
#[test]
fn a_larger_system_of_filips_kind_is_not_answered_in_silence() {
    let filip = read("Filip");
    let (m, n, copies) = (filip.rows, filip.columns, 30);
    let mut pointers = vec![0];
    let (mut columns, mut values) = (Vec::new(), Vec::new());
    for copy in 0..copies {
        for i in 0..m {
            columns.extend((0..n).map(|j| (copy * n + j) as u32));
            values.extend(&filip.design[i * n..][..n]);
            pointers.push(values.len());
        }
    }
    let matrix = StoredRows::from_compressed(copies * m, copies * n, pointers, columns, values);
    assert!(!ellbow::solve::direct::cheap(matrix.rows(), matrix.columns()));
    let folder = JobFolder::new();
    let base = typed(&folder, &matrix, &filip.response.repeat(copies));
    for method in [Method::Lsqr, Method::Lsmr, Method::Cgls] {
        let name = match method {
            Method::Lsqr => MethodName::Lsqr,
            Method::Lsmr => MethodName::Lsmr,
            Method::Cgls => MethodName::Cgls,
        };
        let typed = Typed { method: Some(name), ..base.clone() };
        let summary = folder.solve(typed, method.word());
        println!("{method:?} {:?} {:?}", summary.result.stop, summary.warnings);
        // CGLS leaves no scalars to learn the even columns' condition from: it is warned of by
        // what the column norms alone prove.
        let word = if method == Method::Cgls { "digits are lost" } else { "beyond 1e13" };
        let warned = summary.warnings.iter().any(|w| w.contains("condition") && w.contains(word));
        assert!(warned, "{method:?}: {:?} {:?}", summary.condition, summary.warnings);
    }
}

/// Levelling network of a tutorial (CC0): height differences with σ = 0.7 mm times the length in
/// kilometres, H₄ fixed at 101.345 m. Published: heights to a tenth of a millimetre; recomputed: m₀,
/// vᵀPv, and three redundant lines.
struct Levelling {
    lines: Vec<(usize, usize, f64, f64)>,
}

const FIXED_HEIGHT_M: f64 = 101.345;
const HEIGHTS_M: [f64; 3] = [104.2350, 103.4868, 102.9588];
const UNIT_WEIGHT_DEVIATION: f64 = 1.6549977;
const WEIGHTED_SQUARE_SUM: f64 = 8.2170518;

impl Levelling {
    fn read() -> Self {
        let text = std::fs::read_to_string(data_path("level/levelling_cc0.csv")).unwrap();
        let lines = text.lines().filter(|line| !line.starts_with('#'));
        let parse = |line: &str| {
            let parts: Vec<f64> = line.split(',').map(|part| part.parse().unwrap()).collect();
            (parts[0] as usize, parts[1] as usize, parts[2], 0.7e-3 * parts[3])
        };
        Self { lines: lines.map(parse).collect() }
    }

    /// Differences of the first `unknowns` heights; a height beyond them goes to the data.
    fn typed(&self, folder: &JobFolder, unknowns: usize) -> Typed {
        let mut dense = Vec::new();
        let mut data = Vec::new();
        for &(from, to, difference, _) in &self.lines {
            let mut row = vec![0.0; unknowns];
            let mut datum = difference;
            for (point, sign) in [(from, -1.0), (to, 1.0)] {
                match row.get_mut(point - 1) {
                    Some(entry) => *entry = sign,
                    None => datum -= sign * FIXED_HEIGHT_M,
                }
            }
            dense.extend(row);
            data.push(datum);
        }
        let sigma: Vec<f64> = self.lines.iter().map(|line| line.3).collect();
        let matrix = StoredRows::from_dense(self.lines.len(), unknowns, &dense);
        let sigma = folder.write_values("sigma.csv", &sigma);
        Typed {
            uncertainty: Some(NumberOrText(sigma.to_str().unwrap().into())),
            gradient_tolerance: Some(0.0),
            ..typed(folder, &matrix, &data)
        }
    }
}

#[test]
fn a_levelling_network_with_its_fixed_height_held_or_moved_to_the_data() {
    let network = Levelling::read();
    for held in [true, false] {
        let folder = JobFolder::new();
        let mut base = network.typed(&folder, if held { 4 } else { 3 });
        if held {
            let table = format!("name,fixed\nH1,\nH2,\nH3,\nH4,{FIXED_HEIGHT_M}\n");
            base.columns = Some(folder.write("points.csv", &table));
        }
        for method in [MethodName::Direct, MethodName::Lsqr, MethodName::Lsmr, MethodName::Cgls] {
            let out = format!("{method:?}");
            let summary = folder.solve(Typed { method: Some(method), ..base.clone() }, &out);
            assert!(summary.result.stop.converged, "{method:?} {:?}", summary.result.stop);
            let heights = folder.model(&out);
            for (place, (found, published)) in heights.iter().zip(HEIGHTS_M).enumerate() {
                check_printed(&format!("{out} H{}", place + 1), *found, published, 4);
            }
            if held {
                assert_eq!(heights[3], FIXED_HEIGHT_M);
            }
            let square_sum = summary.result.residual_norm.powi(2);
            check_printed(&format!("{out} vᵀPv"), square_sum, WEIGHTED_SQUARE_SUM, 7);
            check_printed(
                &format!("{out} m₀"),
                (square_sum / 3.0).sqrt(),
                UNIT_WEIGHT_DEVIATION,
                7,
            );
            // An iteration on a held unknown has no decomposition at hand to count parameters with.
            if held && method != MethodName::Direct {
                continue;
            }
            let parameters = summary.result.effective_parameters.expect("exact on a small system");
            check(&format!("{out} redundancy"), 6.0 - parameters, 3.0, 1e-12);
            let deviation = summary.result.chi_square_per_dof.expect("σ is known").sqrt();
            check_printed(&format!("{out} √(χ²/dof)"), deviation, UNIT_WEIGHT_DEVIATION, 7);
        }
    }
}
