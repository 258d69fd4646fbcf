//! Systems whose solutions or singular values are known by algebra, from textbooks, or from the
//! papers that introduced them.

mod common;

use std::f64::consts::{FRAC_PI_2, PI};

use common::{Case, METHODS, check, check_printed, distance, norm};
use ellbow::appraise::misfit;
use ellbow::base::random::Stream;
use ellbow::base::{Axis, Grid};
use ellbow::choose::{Curve, Point, Rule, choose};
use ellbow::operator::{StoredRows, Weighted};
use ellbow::solve::direct::Dense;
use ellbow::sweep::Strengths;
use ellbow::system::rays::{self, Segment};

const EPSILON: f64 = f64::EPSILON;

fn decompose(matrix: &StoredRows) -> Dense {
    Dense::new(&Weighted::new(matrix, &Default::default(), None), 0).unwrap()
}

/// Singular values carry an error of a modest multiple of ε σ₁ each, whatever their size.
#[track_caller]
fn check_singular_values(name: &str, dense: &Dense, expected: &[f64]) {
    let allowed = 20.0 * EPSILON * expected[0];
    for (j, (found, expected)) in dense.singular_values.iter().zip(expected).enumerate() {
        let error = (found - expected).abs();
        assert!(error <= allowed, "{name} σ{}: {found:e} {expected:e} {error:e}", j + 1);
    }
    println!("{name}: {} singular values within {allowed:.1e}", expected.len());
}

/// Läuchli, Numer. Math. 3:226, 1961: [1ᵀ; μI], b = e₁ has x_j = 1/(n + μ²).
#[test]
fn laeuchli() {
    let n = 10usize;
    for mu in [1e-2, 1e-4, 1e-6f64] {
        let mut a = vec![0.0; (n + 1) * n];
        a[..n].fill(1.0);
        (0..n).for_each(|j| a[(j + 1) * n + j] = mu);
        let mut data = vec![0.0; n + 1];
        data[0] = 1.0;
        let exact = 1.0 / (n as f64 + mu * mu);
        let residual = mu / (n as f64 + mu * mu).sqrt();
        let largest = (n as f64 + mu * mu).sqrt();
        let condition = largest / mu;
        // Perturbation theory of least squares: ε(κ + κ²‖r‖/(‖A‖‖x‖)), with m·n as its factor.
        let model_norm = exact * (n as f64).sqrt();
        let tolerance = (n * (n + 1)) as f64
            * EPSILON
            * (condition + condition.powi(2) * residual / (largest * model_norm));
        let case = Case::dense(n + 1, n, &a, data.clone());
        let dense = case.decompose();
        let mut sigma = vec![mu; n];
        sigma[0] = largest;
        check_singular_values(&format!("Läuchli μ {mu}"), &dense, &sigma);
        for x in dense.solve(&data, 0.0) {
            check(&format!("Läuchli μ {mu} direct"), x, exact, tolerance);
        }
        for method in METHODS {
            let solved = Case { method, ..Case::dense(n + 1, n, &a, data.clone()) }.solve(0.0);
            // b excites one singular value only: one step, and no digit is lost.
            assert!(solved.iterations <= 3, "{method:?} {}", solved.iterations);
            for &x in &solved.model {
                check(&format!("Läuchli μ {mu} {method:?}"), x, exact, tolerance);
            }
            check(&format!("Läuchli μ {mu} {method:?} ‖r‖"), solved.residual_norm, residual, 1e-9);
        }
    }
}

/// Row sums and column sums of N×N cells: σ = √(2N) once, √N 2N−2 times, 0 once.
#[test]
fn row_and_column_sums() {
    for side in [3usize, 5, 8] {
        let mut a = vec![0.0; 2 * side * side * side];
        for cell in 0..side * side {
            a[(cell / side) * side * side + cell] = 1.0;
            a[(side + cell % side) * side * side + cell] = 1.0;
        }
        let dense = decompose(&StoredRows::from_dense(2 * side, side * side, &a));
        let mut sigma = vec![(side as f64).sqrt(); 2 * side];
        sigma[0] = (2.0 * side as f64).sqrt();
        sigma[2 * side - 1] = 0.0;
        check_singular_values(&format!("{side}×{side} sums"), &dense, &sigma);
        assert_eq!(dense.rank, 2 * side - 1);
    }
}

/// At λ = 0 and tolerance 0, on systems without full rank and with data that nothing fits, every
/// method ends at the solution of least norm and stays there.
#[test]
fn rank_deficient_systems_end_at_the_solution_of_least_norm() {
    let (m, n) = (24, 30);
    for rank in [3usize, 11, 20] {
        let stream = Stream::new(rank as u64, 4);
        let factor = |from: u64, i: usize, r: usize| stream.normal(from + (64 * i + r) as u64);
        let a: Vec<f64> = (0..m * n)
            .map(|p| (0..rank).map(|r| factor(0, p / n, r) * factor(9_000, p % n, r)).sum())
            .collect();
        let data: Vec<f64> = (0..m).map(|i| stream.normal(90_000 + i as u64)).collect();
        let case = Case::dense(m, n, &a, data.clone());
        let dense = case.decompose();
        assert_eq!(dense.rank, rank);
        let expected = dense.solve(&data, 0.0);
        let condition = dense.singular_values[0] / dense.singular_values[rank - 1];
        // Perturbation theory again: ε(κ + κ²‖r‖/(‖A‖‖x‖)) with m·n as its factor, and ‖r‖ ≤ ‖b‖.
        let inconsistency = norm(&data) / (dense.singular_values[0] * norm(&expected));
        let tolerance = (m * n) as f64 * EPSILON * (condition + condition.powi(2) * inconsistency);
        for method in METHODS {
            let solved = Case { method, ..Case::dense(m, n, &a, data.clone()) }.solve(0.0);
            let apart = distance(&solved.model, &expected);
            println!(
                "rank {rank} {method:?}: {} iterations, {:?}, apart {apart:.1e} of {tolerance:.1e}",
                solved.iterations, solved.stop
            );
            assert!(solved.stop.converged(), "{method:?} {:?}", solved.stop);
            assert!(apart <= tolerance, "{method:?}: {apart:e}");
        }
    }
}

/// Every ray from the left to the right edge is as long in each column of cells as in the next, so
/// a pattern constant in depth with zero sum cannot be seen.
#[test]
fn rays_from_left_to_right_do_not_see_differences_between_columns() {
    let (nx, nz) = (6, 5);
    let axis = |name: &str, cells| Axis { name: name.into(), cells, spacing: 1.0, origin: 0.0 };
    let grid = Grid::new(vec![axis("x", nx), axis("z", nz)], "m".into(), "x", None).unwrap();
    let segments: Vec<Segment> = (0..81)
        .map(|ray| {
            let (from, to) = (ray / 9, ray % 9);
            let depth = |place: usize| 0.25 + 0.5625 * place as f64;
            Segment::new(&[0.0, depth(from)], &[nx as f64, depth(to)])
        })
        .collect();
    let built = rays::matrix(&grid, &segments).unwrap();
    let dense = decompose(&StoredRows::build(built.matrix.clone(), None));
    println!("left to right: rank {} of {}", dense.rank, nx * nz);
    assert!(nx * nz - dense.rank >= nx - 1);
    for column in 1..nx {
        let seen: Vec<f64> = (0..segments.len())
            .map(|i| {
                let sign = |x: usize| f64::from(i32::from(x == column) - i32::from(x == 0));
                built.matrix.row(i).entries().map(|(j, a)| a * sign(j % nx)).sum()
            })
            .collect();
        // Each sum has at most 2·nz terms of length at most 1.3, good to a few ε.
        assert!(norm(&seen) <= 100.0 * EPSILON * 9.0, "column {column}: {:e}", norm(&seen));
    }
}

/// 3×3 cells: column rays, row rays, the main diagonal, one ray of √2 in cell 9. Aster, Borchers &
/// Thurber, Parameter Estimation and Inverse Problems, Example 3.1.
#[test]
fn textbook_tomography() {
    let root = 2f64.sqrt();
    let mut a = vec![0.0; 72];
    for line in 0..3 {
        for place in 0..3 {
            a[line * 9 + 3 * line + place] = 1.0;
            a[(3 + line) * 9 + 3 * place + line] = 1.0;
        }
    }
    [0, 4, 8].iter().for_each(|cell| a[6 * 9 + cell] = root);
    a[7 * 9 + 8] = root;
    let dense = decompose(&StoredRows::from_dense(8, 9, &a));
    let printed = [3.1798, 2.0, 1.7321, 1.7321, 1.7321, 1.6070, 0.5535, 0.0];
    for (j, sigma) in printed.iter().enumerate() {
        check_printed(&format!("textbook σ{}", j + 1), dense.singular_values[j], *sigma, 4);
    }
    assert_eq!(dense.rank, 7);
    let diagonal = [0.8333, 0.8333, 0.6667, 0.8333, 0.8333, 0.6667, 0.6667, 0.6667, 1.0];
    for (cell, printed) in diagonal.iter().enumerate() {
        // Data of a spike, and what comes back: a column of the resolution matrix.
        let data: Vec<f64> = (0..8).map(|i| a[9 * i + cell]).collect();
        let back = dense.solve(&data, 0.0);
        check_printed(&format!("textbook R{}", cell + 1), back[cell], *printed, 4);
        if cell == 4 {
            let spike = [0.1667, 0.0, -0.1667, 0.0, 0.8333, 0.1667, -0.1667, 0.1667, 0.0];
            for method in METHODS {
                let model = Case { method, ..Case::dense(8, 9, &a, data.clone()) }.solve(0.0).model;
                for (j, printed) in spike.iter().enumerate() {
                    check_printed(&format!("spike {j} direct"), back[j], *printed, 4);
                    check_printed(&format!("spike {j} {method:?}"), model[j], *printed, 4);
                }
            }
        }
    }
}

/// 10×8 Hilbert system y = 1, −1, 1, … of the manual of the GNU Scientific Library, regularised
/// regression; rows λ, ρ, η, tr H recomputed in 60 digits from the normal equations.
const HILBERT: [[f64; 4]; 8] = [
    [1.0, 3.1230747906680145, 0.27543443106565424, 0.841346367422939],
    [1e-1, 3.04394132559566, 2.5006763109941557, 1.99270697041539],
    [1e-2, 3.0024344133778813, 22.23350071278651, 2.93744268642971],
    [1e-3, 2.8742301491842674, 379.24332868230255, 3.79191026311147],
    [1e-4, 2.846603454896939, 2186.1099038373995, 4.40631420258907],
    [1e-5, 2.8107306146638673, 26540.53740257815, 5.04249428323674],
    [1e-6, 2.607445501381715, 393724.17432947014, 5.85955649291177],
    [1e-7, 2.5937515957274577, 1513857.869206083, 6.17650508156482],
];

fn hilbert() -> Case {
    let a: Vec<f64> = (0..80).map(|place| 1.0 / (place / 8 + place % 8 + 1) as f64).collect();
    Case::dense(10, 8, &a, (0..10).map(|i| if i % 2 == 0 { 1.0 } else { -1.0 }).collect())
}

#[test]
fn hilbert_without_damping_needs_the_decomposition() {
    let case = hilbert();
    let dense = case.decompose();
    let data = case.data.column(0).to_vec();
    let model = dense.solve(&data, 0.0);
    let residual: Vec<f64> = (0..10)
        .map(|i| data[i] - case.matrix.row(i).entries().map(|(j, a)| a * model[j]).sum::<f64>())
        .collect();
    // ε σ₁/σ₈ = 8e-7 of the smallest singular value, and so of the model that it dominates, is
    // lost: six digits are what double precision has.
    check("Hilbert λ 0 η", norm(&model), 2.92216520705618e9, 5e-6);
    check("Hilbert λ 0 ρ", norm(&residual), 2.1537589203447, 5e-6);
    check("Hilbert λ 0 η as printed", norm(&model), 2.92217e9, 5e-6);
    check("Hilbert λ 0 ρ as printed", norm(&residual), 2.15376, 5e-6);
}

/// η moves by ε σ₁/λ at most when A is rounded, relatively: δη/η ≤ ‖δA‖/(2λ)·(1 + ρ/(λη)).
fn hilbert_tolerance([strength, rho, eta, _]: [f64; 4]) -> f64 {
    let rounding = 80.0 * EPSILON * 1.75;
    rounding * (1.0 + rho / (strength * eta)) / strength + 1e-13
}

#[test]
fn hilbert_rows_of_a_sweep_and_its_corner() {
    let case = hilbert();
    let strengths = HILBERT.map(|row| row[0]);
    let dense = case.decompose();
    let sweep = case.sweep(&strengths);
    for (solved, row) in sweep.sets[0].solved.iter().zip(HILBERT) {
        let [strength, rho, eta, trace] = row;
        let tolerance = hilbert_tolerance(row);
        check(&format!("Hilbert λ {strength} ρ"), solved.residual_norm, rho, tolerance);
        check(&format!("Hilbert λ {strength} η"), solved.penalty_norm, eta, tolerance);
        check(&format!("Hilbert λ {strength} tr H"), dense.trace(strength), trace, tolerance);
    }
    // λ = 7.11407e-7, the corner on that manual's grid.
    let solved = case.solve(7.11407e-7);
    check_printed("Hilbert corner on a grid ρ", solved.residual_norm, 2.60386, 5);
    check_printed("Hilbert corner on a grid η", solved.penalty_norm, 424507.0, 0);
}

#[test]
fn hilbert_corner_is_found_between_the_strengths_and_gcv_sits_on_the_edge() {
    let case = hilbert();
    let Strengths::Given(strengths) = Strengths::between(1.72278, 1e-8, Some(83)) else {
        unreachable!("an explicit range")
    };
    let sweep = case.sweep(&strengths);
    let set = &sweep.sets[0];
    let points: Vec<Point> = set.solved.iter().map(Point::from).collect();
    let choice = choose(
        &Curve { points: &points, process: set.process.as_ref(), data_of_known_noise: None },
        None,
    );
    println!("{choice:?}");
    let corner = choice.rules.iter().find(|result| result.rule == Rule::Corner).unwrap();
    assert!(corner.applicable && !corner.at_edge);
    // A peak of curvature is flat: its place is good to the root of the curvature's own error, and
    // that is about ε σ₁/λ = 5e-10 relatively. Recomputed in 60 digits: 6.96420824e-7.
    check("Hilbert corner", corner.strength.unwrap(), 6.96420824e-7, 1e-4);
    check("Hilbert curvature at the corner", corner.bend.unwrap(), 0.1336659796, 1e-6);
    let dense = case.decompose();
    let gcv: Vec<f64> = set
        .solved
        .iter()
        .map(|s| misfit::gcv(s.residual_norm, 10, dense.trace(s.strength)).unwrap())
        .collect();
    let least = (0..gcv.len()).min_by(|&a, &b| gcv[a].total_cmp(&gcv[b])).unwrap();
    // The "minimum" at 1.72278 that the manual prints is the edge of the range.
    assert_eq!(least, 0, "GCV falls to the largest strength");
}

/// ∫ K(s, t) f(t) dt over an interval by the midpoint rule on n cells, s at midpoints too.
struct Kernel<K> {
    name: &'static str,
    s: [f64; 2],
    t: [f64; 2],
    kernel: K,
}

fn midpoints([from, to]: [f64; 2], n: usize) -> Vec<f64> {
    (0..n).map(|i| from + (to - from) * (i as f64 + 0.5) / n as f64).collect()
}

impl<K: Fn(f64, f64) -> f64> Kernel<K> {
    fn matrix(&self, n: usize) -> StoredRows {
        let (s, t) = (midpoints(self.s, n), midpoints(self.t, n));
        let h = (self.t[1] - self.t[0]) / n as f64;
        let a: Vec<f64> =
            (0..n * n).map(|place| h * (self.kernel)(s[place / n], t[place % n])).collect();
        StoredRows::from_dense(n, n, &a)
    }

    fn check_printed_sigmas(&self, n: usize, printed: &[(f64, i32)]) {
        let dense = decompose(&self.matrix(n));
        for (j, &(sigma, decimals)) in printed.iter().enumerate() {
            let name = format!("{} n {n} σ{}", self.name, j + 1);
            check_printed(&name, dense.singular_values[j], sigma, decimals);
        }
    }

    /// A f against g. The midpoint rule is off by at most h²(b − a)/24 · max|∂²(K f)/∂t²|; the
    /// derivative is taken from samples fifty times finer, and allowed a tenth more.
    fn check_image(&self, n: usize, f: impl Fn(f64) -> f64, g: impl Fn(f64) -> f64) {
        let matrix = self.matrix(n);
        let model: Vec<f64> = midpoints(self.t, n).into_iter().map(&f).collect();
        let (mut error_max, mut bound_max) = (0f64, 0f64);
        let width = self.t[1] - self.t[0];
        let (h, fine) = (width / n as f64, width / (50 * n) as f64);
        for (i, s) in midpoints(self.s, n).into_iter().enumerate() {
            let found: f64 = matrix.row(i).entries().map(|(j, a)| a * model[j]).sum();
            let product = |t: f64| (self.kernel)(s, t) * f(t);
            let bend = midpoints(self.t, 50 * n)
                .into_iter()
                .map(|t| (product(t + fine) - 2.0 * product(t) + product(t - fine)).abs())
                .fold(0.0, f64::max)
                / (fine * fine);
            let bound = 1.1 * h * h * width / 24.0 * bend;
            let error = (found - g(s)).abs();
            assert!(error <= bound + 1e-13, "{} at {s}: {error:e} > {bound:e}", self.name);
            (error_max, bound_max) = (error_max.max(error), bound_max.max(bound));
        }
        println!("{} n {n}: image off by {error_max:.1e}, bound {bound_max:.1e}", self.name);
    }
}

/// Phillips, J. ACM 9:84, 1962.
#[test]
fn phillips() {
    let phi = |x: f64| if x.abs() < 3.0 { 1.0 + (PI * x / 3.0).cos() } else { 0.0 };
    let kernel =
        Kernel { name: "Phillips", s: [-6.0, 6.0], t: [-6.0, 6.0], kernel: |s, t| phi(s - t) };
    kernel.check_printed_sigmas(32, &[(5.803585, 6), (5.246281, 6), (4.416543, 6)]);
    kernel.check_image(400, phi, |s| {
        let angle = PI * s.abs() / 3.0;
        (6.0 - s.abs()) * (1.0 + 0.5 * angle.cos()) + 9.0 / (2.0 * PI) * angle.sin()
    });
}

/// Baart, IMA J. Numer. Anal. 2:241, 1982. The singular values are those of 32 cells.
#[test]
fn baart() {
    let kernel = Kernel {
        name: "Baart",
        s: [0.0, FRAC_PI_2],
        t: [0.0, PI],
        kernel: |s: f64, t: f64| (s * t.cos()).exp(),
    };
    kernel.check_printed_sigmas(32, &[(4.565526, 6), (0.8923961, 7), (0.1009966, 7)]);
    kernel.check_image(400, f64::sin, |s| 2.0 * s.sinh() / s);
}

/// Shaw, J. Math. Anal. Appl. 37:83, 1972.
#[test]
fn shaw() {
    let kernel = Kernel {
        name: "Shaw",
        s: [-FRAC_PI_2, FRAC_PI_2],
        t: [-FRAC_PI_2, FRAC_PI_2],
        kernel: |s: f64, t: f64| {
            let u = PI * (s.sin() + t.sin());
            let wave = if u == 0.0 { 1.0 } else { u.sin() / u };
            ((s.cos() + t.cos()) * wave).powi(2)
        },
    };
    kernel.check_printed_sigmas(20, &[(2.993365879, 9), (1.85689824, 8), (1.034314519, 9)]);
}

/// Delves & Mohamed, Computational Methods for Integral Equations, 1985: s(t−1) for s < t, else
/// t(s−1), on [0,1]². Exact σ_j = 1/(jπ)².
///
/// At midpoints the matrix is the inverse of second differences with a zero half a cell outside, so
/// its own singular values are (h/2)²/sin²(jπh/2) exactly, and those tend to 1/(jπ)² from above by
/// (jπh)²/12 relatively, to leading order.
#[test]
fn second_derivative_kernel() {
    let kernel = Kernel {
        name: "second derivative",
        s: [0.0, 1.0],
        t: [0.0, 1.0],
        kernel: |s: f64, t: f64| if s < t { s * (t - 1.0) } else { t * (s - 1.0) },
    };
    let n = 128usize;
    let h = 1.0 / n as f64;
    let dense = decompose(&kernel.matrix(n));
    let exact: Vec<f64> =
        (1..=n).map(|j| (0.5 * h / (j as f64 * PI * h / 2.0).sin()).powi(2)).collect();
    check_singular_values("second derivative", &dense, &exact);
    for j in 1..=8 {
        let x = j as f64 * PI * h / 2.0;
        let continuous = 1.0 / (j as f64 * PI).powi(2);
        // x²/sin²x − 1 = x²/3 + x⁴/15 + …; for x < 0.1 the rest is below x⁴/10.
        let excess = dense.singular_values[j - 1] / continuous - 1.0;
        println!("second derivative σ{j}·(jπ)² − 1: {excess:.3e}, x²/3 {:.3e}", x * x / 3.0);
        assert!((excess - x * x / 3.0).abs() <= x.powi(4) / 10.0 + 1e-12);
    }
}
