//! Survey systems with measured right-hand sides, and test problems with a known damped solution.

mod common;

use common::{Case, METHODS, check, check_printed, distance, norm};
use ellbow::appraise::misfit;
use ellbow::operator::StoredRows;
use ellbow::solve::Method;
use ellbow::sweep::Scaling;

fn well() -> Case {
    Case::from_files("lsq/well1033.mtx.gz", "lsq/well1033_rhs1.mtx.gz")
}

fn illc() -> Case {
    Case::from_files("lsq/illc1033.mtx.gz", "lsq/illc1033_rhs1.mtx.gz")
}

/// Harwell–Boeing LSQ set (M. A. Saunders, 1979). Singular values as published with the SuiteSparse
/// collection and recomputed in 50 digits, as are the norms.
#[test]
fn singular_values_and_least_squares_norms_of_the_survey_systems() {
    let sizes = |case: &Case| (case.matrix.rows(), case.matrix.columns(), case.matrix.entries());
    // κ of 1.9e4 and a small residual: ε(κ + κ²‖r‖/(‖A‖‖x‖)) = 1e-11, a hundredfold of it allowed.
    let tolerance = 1e-9;
    for (name, case, largest, smallest, model_norm, residual_norm) in [
        ("well1033", well(), 1.806511, 1.087386e-2, 10278.82228229, 0.7521578691564),
        ("illc1033", illc(), 2.144355, 1.135292e-4, 10302.31519925, 0.7521578686991),
    ] {
        assert_eq!(sizes(&case), (1033, 320, 4732), "{name}");
        let zeros: usize = (0..1033)
            .map(|i| case.matrix.row(i).entries().filter(|(_, value)| *value == 0.0).count())
            .sum();
        assert_eq!(zeros, if name == "illc1033" { 13 } else { 0 }, "explicit zeros of {name}");
        let data = case.data.as_slice().unwrap();
        check(&format!("{name} ‖b‖"), norm(data), 6597.792154297, 1e-12);
        let dense = case.decompose();
        assert_eq!(dense.rank, 320);
        check_printed(&format!("{name} σ_max"), dense.singular_values[0], largest, 6);
        // Seven digits printed: half a unit of the last is 5e-7/1.08 of the value.
        check(&format!("{name} σ_min"), dense.singular_values[319], smallest, 5e-7);
        let model = dense.solve(data, 0.0);
        check(&format!("{name} ‖x‖"), norm(&model), model_norm, tolerance);
        let residual: Vec<f64> = (0..1033)
            .map(|i| {
                let row = case.matrix.row(i).entries();
                data[i] - row.map(|(j, a)| a * model[j]).sum::<f64>()
            })
            .collect();
        check(&format!("{name} ‖r‖"), norm(&residual), residual_norm, tolerance);
    }
}

/// λ, ρ, η, tr H and (ρ/(m − tr H))² of well1033, recomputed in 50 digits.
const TIKHONOV: [[f64; 5]; 3] = [
    [1.0, 2384.2682369, 3065.4056025, 149.9957007555, 7.2909578937],
    [0.1, 368.62465586, 6177.8417338, 305.7250368013, 0.25690436669],
    [0.01, 24.909912024, 9441.2222224, 318.1941779100, 1.2144180822e-3],
];

#[test]
fn damped_solutions_of_well1033_from_every_method() {
    let dense = well().decompose();
    for method in METHODS {
        let case = Case { method, ..well() };
        let strengths = TIKHONOV.map(|row| row[0]);
        let solved = case.sweep(&strengths).sets.remove(0).solved;
        for (solved, [strength, rho, eta, trace, gcv]) in solved.iter().zip(TIKHONOV) {
            let name = |what| format!("well1033 {} λ {strength} {what}", method.word());
            assert!(solved.stop.converged(), "{:?}", solved.stop);
            check(&name("ρ"), solved.residual_norm, rho, 1e-9);
            check(&name("η"), solved.penalty_norm, eta, 1e-9);
            let exact = dense.trace(strength);
            check(&name("tr H"), exact, trace, 1e-9);
            let found = misfit::gcv(solved.residual_norm, 1033, exact).unwrap();
            check(&name("GCV"), found, 1033.0 * gcv, 1e-9);
        }
    }
}

#[test]
fn well1033_without_damping_takes_at_most_270_iterations() {
    for method in METHODS {
        let solved = Case { method, gradient_tolerance: 1e-11, ..well() }.solve(0.0);
        println!(
            "well1033 {method:?}: {} iterations, relative gradient {:.2e}, {:?}",
            solved.iterations, solved.relative_gradient, solved.stop
        );
        assert!(solved.iterations <= 270 && solved.stop.converged());
        assert!(solved.relative_gradient <= 1e-11, "{method:?} {:e}", solved.relative_gradient);
        check("well1033 ‖x‖", solved.model_norm, 10278.822282, 1e-8);
        check("well1033 ‖r‖", solved.residual_norm, 0.7521578691564, 1e-8);
    }
}

#[test]
fn illc1033_takes_about_3700_iterations() {
    for method in [Method::Lsqr, Method::Lsmr] {
        let solved = Case { method, gradient_tolerance: 1e-12, ..illc() }.solve(0.0);
        println!(
            "illc1033 {method:?}: {} iterations, relative gradient {:.2e}, {:?}",
            solved.iterations, solved.relative_gradient, solved.stop
        );
        assert!((2775..=4625).contains(&solved.iterations), "{}", solved.iterations);
        check("illc1033 ‖x‖", solved.model_norm, 10302.31519925, 1e-8);
    }
}

/// Recomputed in 40 digits (conjugate gradients and conjugate residuals on the normal equations,
/// the same models in exact arithmetic); ten steps lose next to nothing.
#[test]
fn ten_iterations_on_well1033_leave_the_norms_of_exact_arithmetic() {
    for (method, residual, gradient) in [
        (Method::Lsqr, 492.3530599086725, 248.3371427360792),
        (Method::Lsmr, 661.6462457452175, 82.199287049730),
    ] {
        let solved = Case { method, max_iterations: 10, ..well() }.solve(0.0);
        assert_eq!(solved.iterations, 10);
        check(&format!("{method:?} ‖r‖ after 10"), solved.residual_norm, residual, 1e-8);
        check(&format!("{method:?} ‖Aᵀr‖ after 10"), solved.orthogonality, gradient, 1e-8);
    }
}

#[test]
fn a_fan_of_25_strengths_equals_25_solves() {
    let strengths: Vec<f64> = (0..25).map(|i| 2.0 * 10f64.powf(-f64::from(i) / 8.0)).collect();
    for method in METHODS {
        let case = Case { method, ..well() };
        let together = case.sweep(&strengths);
        let mut worst = 0f64;
        for (solved, &strength) in together.sets[0].solved.iter().zip(&strengths) {
            assert_eq!(solved.strength, strength);
            worst = worst.max(distance(&solved.model, &case.solve(strength).model));
        }
        println!("25 strengths, {method:?}: largest difference {worst:.1e}");
        assert!(worst <= 1e-10);
        if method != Method::Cgls {
            // Start, the steps of the slowest strength, one certificate pass.
            assert_eq!(together.passes, together.iterations + 2);
        }
    }
}

/// Harwell–Boeing, pattern; singular values of the collection, norms recomputed in 50 digits.
#[test]
fn ash219_is_a_pattern_with_known_singular_values() {
    let matrix = common::matrix("lsq/ash219.mtx");
    assert_eq!((matrix.rows(), matrix.columns(), matrix.storage_name()), (219, 85, "pattern"));
    let case = Case::new(matrix, (1..=219).map(f64::from).collect());
    let dense = case.decompose();
    check_printed("ash219 σ_max", dense.singular_values[0], 3.484572, 6);
    check_printed("ash219 σ_min", dense.singular_values[84], 1.151979, 6);
    for method in METHODS {
        let case = Case { method, ..Case::new(case.matrix.clone(), case.data.column(0).to_vec()) };
        let solved = case.solve(0.0);
        // κ of 3: only the digits printed limit the comparison.
        check(&format!("ash219 {method:?} ‖x‖"), solved.model_norm, 619.4151651152, 1e-12);
        check(&format!("ash219 {method:?} ‖r‖"), solved.residual_norm, 172.0553124568, 1e-12);
    }
}

/// P(m, n, d, p): A = Y D Z with reflections Y = I − 2yyᵀ, Z = I − 2zzᵀ, y_i ∝ sin(4πi/m),
/// z_i ∝ cos(4πi/n), D_ii = (⌈i/d⌉ d/min(m,n))^p, and data for which x_true solves the damped
/// problem exactly. Source: Paige & Saunders, ACM TOMS 8(1):43, 1982, section 8.1.
struct Reflected {
    m: usize,
    n: usize,
    a: Vec<f64>,
    diagonal: Vec<f64>,
    x_true: Vec<f64>,
    data: Vec<f64>,
    residual_norm: f64,
}

fn unit(length: usize, term: impl Fn(f64) -> f64) -> Vec<f64> {
    let raw: Vec<f64> = (1..=length).map(|i| term(i as f64)).collect();
    let size = norm(&raw);
    raw.iter().map(|value| value / size).collect()
}

fn reflect(direction: &[f64], values: &[f64]) -> Vec<f64> {
    let twice = 2.0 * direction.iter().zip(values).map(|(a, b)| a * b).sum::<f64>();
    values.iter().zip(direction).map(|(value, d)| value - twice * d).collect()
}

impl Reflected {
    fn new(m: usize, n: usize, d: usize, power: i32, strength: f64, four_pi: f64) -> Self {
        let least = m.min(n);
        let y = unit(m, |i| (four_pi * i / m as f64).sin());
        let z = unit(n, |i| (four_pi * i / n as f64).cos());
        let diagonal: Vec<f64> =
            (1..=least).map(|i| ((i.div_ceil(d) * d) as f64 / least as f64).powi(power)).collect();
        let middle: f64 = (0..least).map(|k| y[k] * diagonal[k] * z[k]).sum();
        let at = |list: &[f64], i: usize| list.get(i).copied().unwrap_or(0.0);
        let mut a = vec![0.0; m * n];
        for i in 0..m {
            for j in 0..n {
                let straight = if i == j { diagonal[i] } else { 0.0 };
                a[i * n + j] = straight
                    - 2.0 * y[i] * y[..].get(j).map_or(0.0, |y| y * at(&diagonal, j))
                    - 2.0 * at(&diagonal, i) * at(&z, i) * z[j]
                    + 4.0 * y[i] * middle * z[j];
            }
        }
        // Below the diagonal's end nothing of Z x reaches the data, so a wide problem's solution
        // of least norm has zeros there.
        let mut turned = reflect(&z, &(1..=n).map(|j| 0.1 * j as f64).collect::<Vec<_>>());
        turned[least..].fill(0.0);
        let x_true = reflect(&z, &turned);
        let inner: Vec<f64> = (0..m)
            .map(|i| if i < least { strength.powi(2) * turned[i] / diagonal[i] } else { 1.0 })
            .collect();
        let residual = reflect(&y, &inner);
        let image: Vec<f64> = (0..m).map(|i| at(&diagonal, i) * at(&turned, i)).collect();
        let data = reflect(&y, &image).iter().zip(&residual).map(|(p, r)| p + r).collect();
        Self { m, n, a, diagonal, x_true, data, residual_norm: norm(&residual) }
    }

    fn case(&self) -> Case {
        let matrix = StoredRows::from_dense(self.m, self.n, &self.a);
        Case { scaling: Scaling::Off, ..Case::new(matrix, self.data.clone()) }
    }

    /// What rounding of A and b (n+10 operations an element) can do to x, and what a gradient of
    /// this size leaves: (AᵀA + λ²)δx = δAᵀr + Aᵀ(δb − δA x) − g.
    fn error_max(&self, strength: f64, gradient_norm: f64) -> f64 {
        let smallest = self.diagonal[0];
        let curvature = smallest * smallest + strength * strength;
        let slope = (1.0 / smallest).min(0.5 / strength);
        let relative = (self.n + 10) as f64 * f64::EPSILON;
        let (a, x) = (norm(&self.diagonal), norm(&self.x_true));
        gradient_norm / curvature
            + relative * a * self.residual_norm / curvature
            + relative * (a * x + norm(&self.data)) * slope
    }
}

#[test]
fn problems_with_a_known_damped_solution() {
    let four_pi = 4.0 * std::f64::consts::PI;
    for (m, n, d, power, strength) in [
        (60, 40, 4, 1, 0.1),
        (60, 40, 4, 1, 0.0),
        (100, 40, 1, 2, 0.01),
        (40, 40, 2, 2, 0.3),
        (80, 50, 5, 3, 0.01),
        (40, 60, 4, 2, 0.1),
        (300, 200, 10, 2, 1e-3),
    ] {
        let problem = Reflected::new(m, n, d, power, strength, four_pi);
        let name = format!("P({m},{n},{d},{power}) λ {strength}");
        let dense = problem.case().decompose();
        let condition = (m.min(n) as f64 / d as f64).powi(power);
        check(&format!("{name} condition"), dense.condition(), condition, 1e-10);
        let error = |model: &[f64]| {
            norm(&model.iter().zip(&problem.x_true).map(|(a, b)| a - b).collect::<Vec<_>>())
        };
        let direct = error(&dense.solve(&problem.data, strength));
        // A backward stable decomposition: as if A had been rounded once more, (m+n) operations.
        let allowed = 3.0 * problem.error_max(strength, 0.0);
        println!("{name} direct: error {direct:.1e}, bound {allowed:.1e}");
        assert!(direct <= allowed);
        for method in METHODS {
            let solved = Case { method, ..problem.case() }.solve(strength);
            let allowed = problem.error_max(strength, solved.gradient_norm);
            let found = error(&solved.model);
            println!("{name} {method:?}: error {found:.1e}, bound {allowed:.1e}");
            assert!(found <= allowed, "{name} {method:?}: {:?}", solved.stop);
            assert!(allowed < 1e-4 * norm(&problem.x_true), "{name}: the bound says little");
        }
    }
}

/// Published listing of the authors' tests of their method on P(2000, 1000, 40, 2), λ = 1e-8, with
/// 4π taken as 12.5663681…: x₁ and ‖r‖ after 1, 2, 3 and 10 iterations.
#[test]
fn the_published_listing_of_p_2000_1000_40_2() {
    // Four times a single-precision 3.141592, as in that listing's program.
    let four_pi = 12.566_368_103_027_344;
    let problem = Reflected::new(2000, 1000, 40, 2, 1e-8, four_pi);
    check("‖r‖ of the exact solution", problem.residual_norm, 1000f64.sqrt(), 1e-12);
    let mut case = problem.case();
    for (iterations, first, residual) in [
        (1, -15.69523708, 450.8643183),
        (2, 2.895287270, 238.1656023),
        (3, 6.914168784, 149.6722377),
        (10, -9.437438588, 38.07969510),
    ] {
        case.max_iterations = iterations;
        let solved = case.solve(1e-8);
        check(&format!("x₁ after {iterations}"), solved.model[0], first, 1e-8);
        check(&format!("‖r‖ after {iterations}"), solved.residual_norm, residual, 1e-8);
    }
}
