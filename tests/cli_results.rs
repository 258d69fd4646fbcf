//! What a run writes, and that its numbers are right: survey systems with published norms, several
//! data sets, threads.

mod cli_common;

use cli_common::{
    Place, Ran, csv, distance, lsq, normals, number, plain_truth, product, row, sparse, truth, word,
};
use ellbow::kernel::Twin;
use nalgebra::DMatrix;
use ndarray::Array2;
use serde_json::Value;

/// Tikhonov on well1033 at λ = 0.1: recomputed in more than double precision for the table of
/// published checks; σ_max and σ_min of the same table agree with those of the collection
/// (Harwell–Boeing, set LSQ).
const RESIDUAL_NORM: f64 = 368.62465586;
const MODEL_NORM: f64 = 6177.8417338;
const EFFECTIVE_PARAMETERS: f64 = 305.7250368013;

fn well() -> String {
    format!("--matrix {} --data {}", lsq("well1033.mtx.gz"), lsq("well1033_rhs1.mtx.gz"))
}

#[track_caller]
fn near(value: f64, expected: f64, relative: f64) {
    assert!(
        (value - expected).abs() <= relative * expected.abs(),
        "{value} is not within {relative} of {expected}"
    );
}

#[test]
fn every_method_meets_the_published_norms_on_a_survey_system() {
    let place = Place::new();
    for method in ["lsqr", "lsmr", "cgls", "direct"] {
        // The error of the norms is at most the gradient over λ² (model) or λ (residual): a relative
        // gradient of 1e-14 of ‖A‖_F‖r‖ ≈ 2e4 bounds it by 2e-8, some 3e-12 of the model norm.
        let flags = "--strength 0.1 --gradient-tolerance 1e-14 --json";
        let ran =
            place.expect(0, &format!("solve {} {flags} --method {method} --out {method}", well()));
        let record = place.summary(method);
        near(number(&record, "/residual_norm"), RESIDUAL_NORM, 1e-9);
        near(number(&record, "/model_norm"), MODEL_NORM, 1e-9);
        near(number(&record, "/penalty_norm"), MODEL_NORM, 1e-9);
        if method == "direct" {
            near(number(&record, "/effective_parameters"), EFFECTIVE_PARAMETERS, 1e-9);
        }
        assert_eq!(record["stop"]["converged"], true, "{method}");
        assert!(record["chi_square_per_dof"].is_null(), "no uncertainty was stated");
        assert_eq!(serde_json::from_str::<Value>(&ran.out).unwrap(), record, "{method}");
        let (passes, iterations) = (number(&record, "/passes"), number(&record, "/iterations"));
        match method {
            "lsqr" | "lsmr" => assert_eq!(passes, iterations + 2.0, "{method}"),
            // Refreshes are passes too.
            "cgls" => assert!(passes >= iterations + 2.0),
            _ => assert_eq!((passes, iterations), (1.0, 0.0)),
        }
        let model = place.numbers(format!("{method}/model.npy"));
        near(cli_common::norm(&model), MODEL_NORM, 1e-9);
    }
}

/// Every field that the design lists for `summary.json`, with the kind of its value.
#[test]
fn the_record_has_every_field_and_the_folder_every_file() {
    let place = Place::new();
    let a = sparse(30, 12, 1);
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &normals(30, 2));
    place.write(
        "grid.toml",
        "matrix = 'a.mtx'\ndata = 'b.npy'\nuncertainty = 0.5\n\
         [grid]\naxes = ['x', 'z']\nshape = [4, 3]\nspacing = [1.0, 1.0]\norigin = [0.0, 0.0]\n\
         unit = 'm'\nfastest = 'x'\n",
    );
    place.expect(0, "solve grid.toml --strength 0.3 --out solve");
    place.expect(0, "sweep grid.toml --strengths 0.01..10 --strength-count 13 --out sweep");
    for command in ["solve", "sweep"] {
        let record = place.summary(command);
        for pointer in [
            "/strength",
            "/iterations",
            "/passes",
            "/residual_norm",
            "/penalty_norm",
            "/model_norm",
            "/gradient_norm",
            "/relative_gradient",
            "/chi_square_per_dof",
            "/seconds/load",
            "/seconds/solve",
            "/seconds/total",
            "/bytes_per_pass",
            "/threads",
            "/peak_bytes",
            "/seed",
            "/inputs/0/bytes",
            "/inputs/1/bytes",
            "/system/rows",
            "/system/columns",
            "/system/entries",
            "/settings/seed",
            "/settings/max_iterations",
            "/settings/gradient_tolerance",
        ] {
            let value = number(&record, pointer);
            assert!(value >= 0.0, "{pointer} {value}");
        }
        for (pointer, expected) in [
            ("/command", command),
            ("/ellbow_version", env!("CARGO_PKG_VERSION")),
            ("/method", "lsqr"),
            ("/penalty", "size"),
            // What so small a system holds stays in the caches.
            ("/pass", "two-phase"),
            ("/simd", Twin::current().word()),
            ("/stop/reason", "gradient"),
            ("/settings/command", command),
            ("/settings/duplicates", "sum"),
            ("/settings/precision", "double"),
            ("/settings/grid/fastest", "x"),
            ("/inputs/0/path", "a.mtx"),
            ("/inputs/1/path", "b.npy"),
        ] {
            assert_eq!(word(&record, pointer), expected);
        }
        assert!(word(&record, "/schema").starts_with("ellbow-summary-"));
        assert_eq!(word(&record, "/inputs/0/checksum").len(), 64);
        assert_eq!(record["stop"]["converged"], true);
        assert_eq!(number(&record, "/inputs/0/bytes"), place.bytes("a.mtx").len() as f64);
        let mut names: Vec<String> = std::fs::read_dir(place.path(command))
            .unwrap()
            .map(|entry| entry.unwrap().file_name().into_string().unwrap())
            .collect();
        names.sort();
        let mut expected = vec![
            "history.csv",
            "log.jsonl",
            "model.npy",
            "model_grid.npy",
            "predicted.npy",
            "residual.npy",
            "summary.json",
        ];
        if command == "sweep" {
            expected.extend(["models.npy", "sweep.csv"]);
            expected.sort_unstable();
        }
        assert_eq!(names, expected);
        for line in place.read(format!("{command}/log.jsonl")).lines() {
            serde_json::from_str::<Value>(line).unwrap();
        }
        let shape = |name: &str| place.array(format!("{command}/{name}")).shape().to_vec();
        assert_eq!(shape("model.npy"), [12]);
        assert_eq!(shape("residual.npy"), [30]);
        assert_eq!(shape("predicted.npy"), [30]);
        // z slow, x fast: rows of the array are depths.
        assert_eq!(shape("model_grid.npy"), [3, 4]);
        assert_eq!(
            place.numbers(format!("{command}/model_grid.npy")),
            place.numbers(format!("{command}/model.npy"))
        );
    }
    let record = place.summary("sweep");
    for pointer in ["/choice/strength", "/choice/spread_decades", "/choice/rules/0/strength"] {
        number(&record, pointer);
    }
    for pointer in
        ["/choice/rule", "/choice/verdict", "/choice/rules/0/rule", "/choice/rules/0/note"]
    {
        word(&record, pointer);
    }
    assert!(["agreed", "divided", "undetermined"].contains(&word(&record, "/choice/verdict")));
    assert!(record["choice"]["rules"][0]["applicable"].is_boolean());
    assert!(record["choice"]["rules"][0]["at_edge"].is_boolean());
    assert!(record["choice"]["reasons"].is_array());
    assert_eq!(place.array("sweep/models.npy").shape(), [13, 12]);
}

#[test]
fn tables_have_their_headings_and_agree_with_the_arrays() {
    let place = Place::new();
    let a = sparse(40, 10, 3);
    let b = normals(40, 4);
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &b);
    let flags = "--matrix a.mtx --data b.npy --uncertainty 0.25 --gradient-tolerance 1e-13";
    place.expect(0, &format!("sweep {flags} --strengths 0.01..100 --strength-count 9 --out s"));
    let sweep = place.read("s/sweep.csv");
    assert!(sweep.starts_with(
        "strength,residual_norm,penalty_norm,model_norm,effective_parameters,\
         effective_parameters_error,chi_square_per_dof,bend,gcv,gcv_robust,risk,iterations,stop\n"
    ));
    let history = place.read("s/history.csv");
    assert!(history.starts_with(
        "data_set,strength,purpose,iteration,residual_norm,penalty_norm,model_norm,\
         gradient_norm,seconds\n"
    ));
    let models = place.array("s/models.npy");
    let lines = csv(&sweep);
    assert_eq!(lines.len(), 10);
    for (i, line) in lines[1..].iter().enumerate() {
        assert_eq!(line.len(), 13);
        let cell = |place: usize| line[place].parse::<f64>().unwrap();
        let strength = cell(0);
        let x = row(&models, i);
        let exact = truth(&a, &b, &[4.0; 40], strength, &[1.0; 10], &[0.0; 10]);
        // ‖x − x_λ‖ ≤ gradient/λ², 1e-13·‖[WA; λI]‖_F‖r‖/λ² < 1e-13 · 4e2 · 2e1 / 1e-4 at the weakest;
        // well-determined columns (σ_min near 10 after weighting) make it some 1e-11 in truth.
        assert!(distance(&x, &exact) < 1e-10, "{strength}");
        let r: Vec<f64> = product(&a, &exact).iter().zip(&b).map(|(p, b)| 4.0 * (b - p)).collect();
        near(cell(1), cli_common::norm(&r), 1e-9);
        near(cell(2), cli_common::norm(&exact), 1e-9);
        let s2: Vec<f64> = a.singular_values().iter().map(|s| (4.0 * s).powi(2)).collect();
        let trace: f64 = s2.iter().map(|s| s / (s + strength * strength)).sum();
        near(cell(4), trace, 1e-9);
        near(cell(6), cell(1).powi(2) / (40.0 - trace), 1e-9);
        near(cell(8), 40.0 * cell(1).powi(2) / (40.0 - trace).powi(2), 1e-9);
        assert_eq!(line[12], "gradient");
    }
    // The last iteration of each strength in the history is the one the table states.
    let history = csv(&history);
    for line in &lines[1..] {
        let last = history.iter().rfind(|row| row[1] == line[0]).unwrap();
        assert_eq!((last[3].as_str(), last[2].as_str()), (line[11].as_str(), "model"));
        near(last[4].parse().unwrap(), line[1].parse().unwrap(), 1e-6);
    }
    let chosen = number(&place.summary("s"), "/strength");
    let at = lines[1..].iter().position(|line| line[0].parse::<f64>().unwrap() == chosen).unwrap();
    assert_eq!(place.numbers("s/model.npy"), row(&models, at));
}

#[test]
fn predicted_and_residual_are_in_data_units_and_add_up_to_the_data() {
    let place = Place::new();
    let a = sparse(25, 8, 5);
    let b: Vec<f64> = normals(25, 6).iter().map(|v| 1e-3 * v).collect();
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &b);
    let flags = "--matrix a.mtx --data b.npy --uncertainty 1e-4 --gradient-tolerance 1e-13";
    place.expect(0, &format!("solve {flags} --strength 2 --out o"));
    let (model, residual, predicted) = (
        place.numbers("o/model.npy"),
        place.numbers("o/residual.npy"),
        place.numbers("o/predicted.npy"),
    );
    let expected = product(&a, &model);
    // Sums of eight products: a few ulp.
    assert!(distance(&predicted, &expected) < 1e-14);
    for i in 0..25 {
        assert!((predicted[i] + residual[i] - b[i]).abs() <= 2.0 * f64::EPSILON * 1e-3, "{i}");
    }
    let record = place.summary("o");
    near(number(&record, "/residual_norm"), cli_common::norm(&residual) / 1e-4, 1e-12);
    let dof = 25.0 - number(&record, "/effective_parameters");
    near(
        number(&record, "/chi_square_per_dof"),
        (cli_common::norm(&residual) / 1e-4).powi(2) / dof,
        1e-12,
    );
}

#[test]
fn a_sweep_costs_the_passes_of_its_slowest_strength() {
    let place = Place::new();
    for method in ["lsqr", "lsmr"] {
        let flags = format!("--strengths 1e-3..3 --strength-count 32 --method {method}");
        place.expect(0, &format!("sweep {} {flags} --out {method}", well()));
        let record = place.summary(method);
        let table = record["sweep"].as_array().unwrap();
        assert_eq!(table.len(), 32);
        let slowest = table.iter().map(|row| number(row, "/iterations")).fold(0.0, f64::max);
        assert_eq!(number(&record, "/passes"), slowest + 1.0 + 1.0, "one start, one certificate");
        // One more strength needs one more certificate.
        let flags = format!("--strengths 1e-3..3 --strength-count 33 --method {method}");
        place.expect(0, &format!("sweep {} {flags} --out {method}33", well()));
        let record = place.summary(&format!("{method}33"));
        let table = record["sweep"].as_array().unwrap();
        let slowest = table.iter().map(|row| number(row, "/iterations")).fold(0.0, f64::max);
        assert_eq!(number(&record, "/passes"), slowest + 1.0 + 2.0);
    }
}

#[test]
fn a_range_found_by_itself_spans_five_decades_below_the_largest_singular_value() {
    let place = Place::new();
    place.expect(0, &format!("sweep {} --out fan", well()));
    place.expect(0, &format!("sweep {} --method cgls --out lanes", well()));
    for folder in ["fan", "lanes"] {
        let record = place.summary(folder);
        let table = record["sweep"].as_array().unwrap();
        assert_eq!(table.len(), 51, "ten a decade");
        let (first, last) = (number(&table[0], "/strength"), number(&table[50], "/strength"));
        // Published for the collection: σ_max = 1.806511, rounded there. From below, after twenty steps.
        assert!((0.95..=1.0 + 0.5e-6).contains(&(first / 1.806511)), "{first}");
        near(last, 1e-5 * first, 1e-12);
        let ratio = number(&table[20], "/strength") / number(&table[21], "/strength");
        near(ratio, 10f64.powf(0.1), 1e-12);
    }
}

/// One column of numbers per data set.
type Columns = Vec<Vec<f64>>;

/// k data sets, their own σ and their own reference.
fn several(place: &Place) -> (DMatrix<f64>, Columns, Columns, Columns) {
    let (m, n, k) = (60, 20, 3);
    let a = sparse(m, n, 7);
    let data: Vec<Vec<f64>> = (0..k).map(|set| normals(m, 10 + set)).collect();
    let sigma: Vec<Vec<f64>> =
        (0..k).map(|set| normals(m, 20 + set).iter().map(|v| 0.2 + v.abs()).collect()).collect();
    let reference: Vec<Vec<f64>> = (0..k).map(|set| normals(n, 30 + set)).collect();
    place.matrix("a.mtx", &a);
    let block = |name: &str, columns: &[Vec<f64>]| {
        let array =
            Array2::from_shape_fn((columns[0].len(), columns.len()), |(i, j)| columns[j][i]);
        place.block(&format!("{name}.npy"), &array);
        for (set, column) in columns.iter().enumerate() {
            place.vector(&format!("{name}{set}.npy"), column);
        }
    };
    block("b", &data);
    block("s", &sigma);
    block("r", &reference);
    (a, data, sigma, reference)
}

#[test]
fn several_data_sets_in_one_run_equal_as_many_runs() {
    let place = Place::new();
    let (a, data, sigma, reference) = several(&place);
    let of = |set: &str, out: &str| {
        format!(
            "--matrix a.mtx --data b{set}.npy --uncertainty s{set}.npy --reference r{set}.npy \
             --gradient-tolerance 1e-14 --out {out}"
        )
    };
    place.expect(0, &format!("solve {} --strength 1.5", of("", "all")));
    place.expect(0, &format!("sweep {} --strengths 0.1..10 --strength-count 5", of("", "swept")));
    let all = place.array("all/model.npy");
    let swept = place.array("swept/models.npy");
    assert_eq!(all.shape(), [3, 20]);
    assert_eq!(place.array("all/residual.npy").shape(), [3, 60]);
    assert_eq!(place.array("all/predicted.npy").shape(), [3, 60]);
    assert_eq!(swept.shape(), [3, 5, 20]);
    assert!(place.read("swept/sweep.csv").starts_with("data_set,strength,"));
    assert_eq!(csv(&place.read("swept/sweep.csv")).len(), 1 + 3 * 5);
    let record = place.summary("all");
    for set in 0..3 {
        let one = format!("one{set}");
        let word = set.to_string();
        place.expect(0, &format!("solve {} --strength 1.5", of(&word, &one)));
        let single = place.numbers(format!("{one}/model.npy"));
        assert!(distance(&row(&all, set), &single) < 1e-10);
        let weights: Vec<f64> = sigma[set].iter().map(|s| 1.0 / s).collect();
        let exact = truth(&a, &data[set], &weights, 1.5, &[1.0; 20], &reference[set]);
        assert!(distance(&single, &exact) < 1e-10);
        let alone = place.summary(&one);
        let pointer = format!("/data_sets/{set}");
        for key in ["residual_norm", "penalty_norm", "model_norm"] {
            near(
                number(&record, &format!("{pointer}/{key}")),
                number(&alone, &format!("/{key}")),
                1e-10,
            );
        }
        place.expect(
            0,
            &format!(
                "sweep {} --strengths 0.1..10 --strength-count 5",
                of(&word, &format!("t{set}"))
            ),
        );
        let family = place.array(format!("t{set}/models.npy"));
        for strength in 0..5 {
            let together: Vec<f64> =
                swept.slice(ndarray::s![set, strength, ..]).iter().copied().collect();
            assert!(distance(&together, &row(&family, strength)) < 1e-10);
        }
    }
}

#[test]
fn results_have_the_same_bytes_for_any_number_of_threads() {
    let place = Place::new();
    several(&place);
    let sets = "--matrix a.mtx --data b.npy --uncertainty s.npy";
    let runs = [
        ("solve", format!("solve {} --strength 0.1", well())),
        ("cgls", format!("solve {} --strength 0.1 --method cgls", well())),
        ("sweep", format!("sweep {} --strengths 1e-3..1 --strength-count 7", well())),
        ("sets", format!("sweep {sets} --reference r.npy")),
    ];
    for (name, command) in &runs {
        for threads in [1, 2, 5] {
            place
                .expect(0, &format!("{command} --threads {threads} --quiet --out {name}{threads}"));
        }
        for file in ["model.npy", "residual.npy", "predicted.npy", "sweep.csv", "models.npy"] {
            let of =
                |threads: u32| std::fs::read(place.path(format!("{name}{threads}/{file}"))).ok();
            assert_eq!(
                of(1).is_some(),
                file.starts_with(['m', 'r', 'p']) && file != "models.npy"
                    || name.starts_with("s") && *name != "solve",
                "{name} {file}"
            );
            assert!(of(1) == of(2) && of(1) == of(5), "{name} {file}");
        }
        assert_eq!(number(&place.summary(&format!("{name}5")), "/threads"), 5.0);
    }
}

#[test]
fn many_strengths_in_one_run_equal_as_many_solves() {
    let place = Place::new();
    let flags = "--gradient-tolerance 1e-14";
    place.expect(
        0,
        &format!("sweep {} {flags} --strengths 1e-3..10 --strength-count 25 --out s", well()),
    );
    let models = place.array("s/models.npy");
    let lines = csv(&place.read("s/sweep.csv"));
    for i in (0..25).step_by(6) {
        let strength = &lines[1 + i][0];
        place.expect(0, &format!("solve {} {flags} --strength {strength} --out one{i}", well()));
        let model = place.numbers(format!("one{i}/model.npy"));
        assert!(distance(&row(&models, i), &model) < 1e-10, "{strength}");
    }
}

#[test]
fn a_penalty_towards_nothing_is_pointed_out_where_one_value_explains_most() {
    let place = Place::new();
    let n = 10;
    let a = sparse(30, n, 8);
    let noise = normals(30, 9);
    let data: Vec<f64> =
        product(&a, &[5.0; 10]).iter().zip(&noise).map(|(p, e)| p + 0.01 * e).collect();
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &data);
    place.vector("noise.npy", &normals(30, 11));
    let warned = |arguments: &str, out: &str| {
        let Ran { out: page, .. } = place.expect(0, &format!("{arguments} --out {out}"));
        let record = place.summary(out);
        let listed = record["warnings"].as_array().unwrap();
        let told = listed.iter().any(|w| w.as_str().unwrap().contains("--reference fit"));
        assert_eq!(page.contains("--reference fit"), told);
        told
    };
    let base = "--matrix a.mtx --data b.npy --strength 1";
    assert!(warned(&format!("solve {base}"), "towards-0"));
    assert!(warned("sweep --matrix a.mtx --data b.npy", "sweep"));
    assert!(!warned(&format!("solve {base} --reference fit"), "towards-fit"));
    assert!(!warned(&format!("solve {base} --reference 4"), "towards-4"));
    assert!(!warned("solve --matrix a.mtx --data noise.npy --strength 1", "noise"));
    assert!(!warned("solve --matrix a.mtx --data b.npy --strength 0", "no-penalty"));
    // A start says where to begin, not where the penalty pulls.
    place.vector("x0.npy", &[5.0; 10]);
    assert!(warned(&format!("solve {base} --start x0.npy"), "start"));
    // The fitted constant is the one of the closed form Σ sᵢbᵢ/Σ sᵢ².
    let sums: Vec<f64> = product(&a, &[1.0; 10]);
    let constant = sums.iter().zip(&data).map(|(s, b)| s * b).sum::<f64>()
        / sums.iter().map(|s| s * s).sum::<f64>();
    place.expect(
        0,
        &format!("solve {base} --strength 1e9 --out stiff --reference fit")
            .replace("--strength 1 ", ""),
    );
    assert!(distance(&place.numbers("stiff/model.npy"), &vec![constant; n]) < 1e-12);
}

#[test]
fn a_solve_at_strength_nothing_is_least_squares() {
    let place = Place::new();
    let a = sparse(40, 12, 12);
    let b = normals(40, 13);
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &b);
    for method in ["lsqr", "lsmr", "cgls", "direct"] {
        let flags =
            format!("--strength 0 --method {method} --gradient-tolerance 1e-13 --out {method}");
        place.expect(0, &format!("solve --matrix a.mtx --data b.npy {flags}"));
        let model = place.numbers(format!("{method}/model.npy"));
        assert!(distance(&model, &plain_truth(&a, &b, 0.0)) < 1e-11, "{method}");
    }
    let record = place.summary("direct");
    assert_eq!(number(&record, "/direct/rank"), 12.0);
    let sigma = a.singular_values();
    near(number(&record, "/direct/condition"), sigma.max() / sigma.min(), 1e-12);
}
