//! Damped, weighted, shifted problems against numpy's and SciPy's solutions of them. The problems
//! and their models lie in `tests/data/scipy`, written by `tests/data/make_scipy.py`.

mod common;

use common::{Case, METHODS, distance, matrix, vector};
use ellbow::operator::RowWeights;
use ellbow::sweep;

const STRENGTHS: [f64; 3] = [3.0, 0.5, 0.05];

/// Both sides iterate to rounding: ‖x − x_λ‖ ≤ 10ε‖WA‖_F‖r‖/λ² for the worst strength 0.05 and these
/// norms (‖WA‖_F ≤ 132, ‖r‖ ≤ 3.1, ‖x‖ ≥ 5) is below 1e-10 relatively; 1e-9 is what is promised.
const CLOSE: f64 = 1e-9;

fn case(name: &str) -> Case {
    let file = |part: &str| format!("scipy/{name}{part}");
    let data = vector(&file("_data.npy")).into_raw_vec_and_offset().0;
    let weights = vector(&file("_sigma.npy")).iter().map(|sigma| 1.0 / sigma).collect();
    let case = Case::new(matrix(&file(".npz")), data);
    let reference = Some(vector(&file("_reference.npy")));
    Case { weights: RowWeights::Shared(weights), reference, ..case }
}

#[test]
fn models_equal_those_of_numpy_and_scipy() {
    for name in ["tall", "weighted", "shifted", "wide"] {
        let published = ["dense", "lsqr", "lsmr"].map(|way| {
            let models = vector(&format!("scipy/{name}_{way}.npy"));
            assert_eq!(models.ncols(), STRENGTHS.len());
            (way, models)
        });
        let compare = |ours: &str, strength: usize, model: &[f64]| {
            for (theirs, models) in &published {
                let apart = distance(model, &models.column(strength).to_vec());
                println!("{name} λ {} {ours} and {theirs}: {apart:.1e}", STRENGTHS[strength]);
                assert!(apart <= CLOSE, "{name} {ours} {theirs}: {apart:e}");
            }
        };
        for method in METHODS {
            let case = Case { method, ..case(name) };
            let together = case.sweep(&STRENGTHS);
            for (place, solved) in together.sets[0].solved.iter().enumerate() {
                compare(&format!("{method:?} together"), place, &solved.model);
                compare(&format!("{method:?} alone"), place, &case.solve(STRENGTHS[place]).model);
            }
        }
        let case = case(name);
        let exact = sweep::dense::run(&case.request(&STRENGTHS)).unwrap();
        for (place, solved) in exact.sets[0].solved.iter().enumerate() {
            compare("direct", place, &solved.model);
        }
    }
}
