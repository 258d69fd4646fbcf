//! What the settings mean: blocks, tables, missing data, penalties, linearisation, references,
//! starts, scaling, precision, job files. Each against a dense truth or the same system by hand.

mod cli_common;

use cli_common::{
    Place, distance, norm, normals, number, plain_truth, product, sparse, truth, word,
};
use nalgebra::DMatrix;

/// Tight enough that the distance to a dense truth is rounding: the systems here have conditions
/// below 100, so a relative gradient of 1e-14 leaves at most some 1e-12 in the model.
const TIGHT: &str = "--gradient-tolerance 1e-14";

fn plain(place: &Place, m: usize, n: usize, seed: u64) -> (DMatrix<f64>, Vec<f64>) {
    let a = sparse(m, n, seed);
    let b = normals(m, seed + 100);
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &b);
    (a, b)
}

#[test]
fn stacked_blocks_equal_the_system_stacked_by_hand() {
    let place = Place::new();
    let n = 9;
    let (upper, lower) = (sparse(20, n, 1), sparse(15, n, 2));
    let (b1, b2) = (normals(20, 3), normals(15, 4));
    place.matrix("upper.mtx", &upper);
    place.matrix("lower.mtx", &lower);
    place.vector("b1.npy", &b1);
    place.vector("b2.npy", &b2);
    place.vector("s2.npy", &[0.5; 15]);
    place.write(
        "job.toml",
        "strength = 0.7\ngradient_tolerance = 1e-14\n\
         [[data]]\nname = 'upper'\nmatrix = 'upper.mtx'\ndata = 'b1.npy'\nuncertainty = 0.2\n\
         [[data]]\nmatrix = 'lower.mtx'\ndata = 'b2.npy'\nuncertainty = 's2.npy'\nweight = 3\n",
    );
    place.expect(0, "solve job.toml --out o");
    let a = DMatrix::from_fn(35, n, |i, j| if i < 20 { upper[(i, j)] } else { lower[(i - 20, j)] });
    let b = [b1.clone(), b2].concat();
    let weights: Vec<f64> = (0..35).map(|i| if i < 20 { 5.0 } else { 6.0 }).collect();
    let exact = truth(&a, &b, &weights, 0.7, &vec![1.0; n], &vec![0.0; n]);
    let model = place.numbers("o/model.npy");
    assert!(distance(&model, &exact) < 1e-12);
    let record = place.summary("o");
    assert_eq!(word(&record, "/blocks/0/name"), "upper");
    assert_eq!(word(&record, "/blocks/1/name"), "block 2");
    assert_eq!(number(&record, "/blocks/1/first_row"), 21.0);
    let r: Vec<f64> = product(&upper, &exact).iter().zip(&b1).map(|(p, b)| 5.0 * (b - p)).collect();
    assert!((number(&record, "/blocks/0/residual_norm") / norm(&r) - 1.0).abs() < 1e-11);
    assert_eq!(place.array("o/residual.npy").shape(), [35]);
}

#[test]
fn rows_left_out_and_missing_data_equal_the_system_without_them() {
    let place = Place::new();
    let (a, b) = plain(&place, 24, 7, 5);
    let gone = [3, 4, 17];
    let kept: Vec<usize> = (0..24).filter(|i| !gone.contains(i)).collect();
    let small = DMatrix::from_fn(kept.len(), 7, |i, j| a[(kept[i], j)]);
    let short: Vec<f64> = kept.iter().map(|&i| b[i]).collect();
    place.matrix("small.mtx", &small);
    place.vector("short.npy", &short);
    let flags = format!("{TIGHT} --strength 0.4 --uncertainty 0.5");
    place.expect(0, &format!("solve --matrix small.mtx --data short.npy {flags} --out without"));
    let without = place.numbers("without/model.npy");

    let mut table = String::from("id,use,note\n");
    for i in 0..24 {
        table += &format!("S{i},{},x\n", if gone.contains(&i) { "no" } else { "1" });
    }
    place.write("rows.csv", table);
    let mut holes = b.clone();
    gone.iter().for_each(|&i| holes[i] = f64::NAN);
    place.vector("holes.npy", &holes);
    place.expect(
        0,
        &format!("solve --matrix a.mtx --data b.npy --rows rows.csv {flags} --out unused"),
    );
    place.expect(
        0,
        &format!("solve --matrix a.mtx --data holes.npy --missing nan {flags} --out missing"),
    );
    place.expect(
        0,
        &format!("solve --matrix a.mtx --data holes.npy --rows rows.csv {flags} --out both"),
    );
    for folder in ["unused", "missing", "both"] {
        assert!(
            distance(&place.numbers(format!("{folder}/model.npy")), &without) < 1e-12,
            "{folder}"
        );
        let record = place.summary(folder);
        assert_eq!(number(&record, "/system/data"), 21.0);
        let ours = number(&record, "/chi_square_per_dof");
        let theirs = number(&place.summary("without"), "/chi_square_per_dof");
        assert!((ours / theirs - 1.0).abs() < 1e-10, "{folder} {ours} {theirs}");
        // The model predicts every row, counted or not.
        let predicted = place.numbers(format!("{folder}/predicted.npy"));
        assert!(distance(&predicted, &product(&a, &without)) < 1e-12, "{folder}");
        let residual = place.numbers(format!("{folder}/residual.npy"));
        for i in 0..24 {
            let known = !gone.contains(&i) || folder == "unused";
            assert_eq!(residual[i].is_nan(), !known, "{folder} {i}: {}", residual[i]);
            assert!(!known || (residual[i] + predicted[i] - b[i]).abs() < 1e-14);
        }
    }
    // Without the option a missing datum is a fault, named by its row.
    let ran = place.expect(65, "solve --matrix a.mtx --data holes.npy --strength 1 --out never");
    assert!(ran.err.contains("row 4") && ran.err.contains("--missing nan"), "{}", ran.err);
    assert!(!place.path("never").exists());
}

#[test]
fn fixed_unknowns_equal_the_system_with_their_columns_on_the_data_side() {
    let place = Place::new();
    let (a, b) = plain(&place, 30, 8, 6);
    let fixed = [(2, 1.5), (6, -2.0)];
    let free: Vec<usize> = (0..8).filter(|j| fixed.iter().all(|(k, _)| k != j)).collect();
    let reduced = DMatrix::from_fn(30, 6, |i, j| a[(i, free[j])]);
    let moved: Vec<f64> =
        (0..30).map(|i| b[i] - fixed.iter().map(|(j, v)| a[(i, *j)] * v).sum::<f64>()).collect();
    let mut table = String::from("name,fixed\n");
    for j in 0..8 {
        let value =
            fixed.iter().find(|(k, _)| *k == j).map_or(String::new(), |(_, v)| v.to_string());
        table += &format!("c{j},{value}\n");
    }
    place.write("columns.csv", table);
    for (method, scaling) in
        [("lsqr", "auto"), ("lsmr", "on"), ("cgls", "off"), ("cgls", "on"), ("direct", "auto")]
    {
        for strength in [0.0, 0.8] {
            let out = format!("{method}-{scaling}-{strength}");
            place.expect(
                0,
                &format!(
                    "solve --matrix a.mtx --data b.npy --columns columns.csv {TIGHT} \
                     --strength {strength} --method {method} --column-scaling {scaling} --out {out}"
                ),
            );
            let model = place.numbers(format!("{out}/model.npy"));
            let exact = plain_truth(&reduced, &moved, strength);
            let found: Vec<f64> = free.iter().map(|&j| model[j]).collect();
            assert!(distance(&found, &exact) < 1e-12, "{out}");
            fixed.iter().for_each(|(j, v)| assert_eq!(model[*j], *v, "{out}"));
            let record = place.summary(&out);
            assert_eq!(number(&record, "/system/fixed_unknowns"), 2.0);
        }
    }
}

#[test]
fn penalty_weights_equal_the_dense_penalty_also_where_they_are_zero() {
    let place = Place::new();
    let (a, b) = plain(&place, 30, 8, 7);
    let reference = normals(8, 55);
    place.vector("r.npy", &reference);
    for (name, penalty) in [
        ("positive", [1.0, 2.0, 0.5, 10.0, 1.0, 0.1, 3.0, 1.0]),
        ("zeros", [1.0, 0.0, 0.5, 10.0, 0.0, 0.1, 3.0, 1.0]),
    ] {
        let table: String = penalty.iter().map(|p| format!("{p}\n")).collect();
        place.write("p.csv", format!("penalty_weight\n{table}"));
        let exact = truth(&a, &b, &[1.0; 30], 1.3, &penalty, &reference);
        let eta: Vec<f64> = (0..8).map(|j| penalty[j] * (exact[j] - reference[j])).collect();
        for method in ["lsqr", "lsmr", "cgls", "direct"] {
            let out = format!("{name}-{method}");
            let command = format!(
                "solve --matrix a.mtx --data b.npy --reference r.npy --columns p.csv {TIGHT} \
                 --strength 1.3 --method {method} --out {out}"
            );
            if name == "zeros" && method == "direct" {
                assert!(place.expect(2, &command).err.contains("penalty_weight 0"));
                continue;
            }
            place.expect(0, &command);
            assert!(distance(&place.numbers(format!("{out}/model.npy")), &exact) < 1e-12, "{out}");
            let found = number(&place.summary(&out), "/penalty_norm");
            assert!((found / norm(&eta) - 1.0).abs() < 1e-11, "{out}");
        }
        // A family of strengths goes other ways (a fan, or lanes side by side).
        place.expect(
            0,
            &format!(
                "sweep --matrix a.mtx --data b.npy --reference r.npy --columns p.csv {TIGHT} \
                 --strengths 0.1..10 --strength-count 3 --out {name}-sweep"
            ),
        );
        let models = place.array(format!("{name}-sweep/models.npy"));
        for (i, strength) in [10.0, 1.0, 0.1].into_iter().enumerate() {
            let exact = truth(&a, &b, &[1.0; 30], strength, &penalty, &reference);
            assert!(distance(&cli_common::row(&models, i), &exact) < 1e-11, "{name} {strength}");
        }
    }
}

/// g(x) with g_i = Σⱼ Aᵢⱼ (xⱼ + 0.05 xⱼ²), and its derivative.
fn forward(a: &DMatrix<f64>, x: &[f64]) -> (Vec<f64>, DMatrix<f64>) {
    let bent: Vec<f64> = x.iter().map(|x| x + 0.05 * x * x).collect();
    let jacobian = DMatrix::from_fn(a.nrows(), a.ncols(), |i, j| a[(i, j)] * (1.0 + 0.1 * x[j]));
    (product(a, &bent), jacobian)
}

#[test]
fn an_outer_loop_of_linearisations_minimises_the_nonlinear_objective() {
    let place = Place::new();
    let (m, n, strength, sigma) = (25, 6, 3.0, 0.4);
    let a = sparse(m, n, 8);
    let noise = normals(m, 9);
    let (clean, _) = forward(&a, &[1.0, -0.5, 2.0, 0.3, -1.2, 0.8]);
    let data: Vec<f64> = clean.iter().zip(&noise).map(|(g, e)| g + 0.3 * e).collect();
    let reference = 0.4;
    place.vector("b.npy", &data);
    let mut x = vec![0.0; n];
    let flags = format!(
        "--data b.npy --uncertainty {sigma} --reference {reference} --strength {strength} {TIGHT} \
         --linearised-at x.npy --predicted g.npy --force --quiet --out o"
    );
    for _ in 0..25 {
        let (g, jacobian) = forward(&a, &x);
        place.matrix("j.mtx", &jacobian);
        place.vector("x.npy", &x);
        place.vector("g.npy", &g);
        place.expect(0, &format!("solve --matrix j.mtx {flags}"));
        x = place.numbers("o/model.npy");
    }
    // Gradient of Σ(g(x) − b)²/σ² + λ²‖x − x_ref‖² itself: zero at the minimum. Had the loop
    // penalised steps, its fixed point would make the first part alone zero.
    let (g, jacobian) = forward(&a, &x);
    let misfit: Vec<f64> = g.iter().zip(&data).map(|(g, b)| (b - g) / (sigma * sigma)).collect();
    let pull = product(&jacobian.transpose(), &misfit);
    let gradient: Vec<f64> =
        (0..n).map(|j| pull[j] - strength * strength * (x[j] - reference)).collect();
    // The outer iteration converges linearly until its step is rounding in x, some 1e-13 of the pull.
    assert!(norm(&gradient) < 1e-9 * norm(&pull), "{} {}", norm(&gradient), norm(&pull));
    assert!(norm(&pull) > 1.0, "the penalty holds against a real pull");
    // The record's residual and prediction are those of the linearised g at the last model: g itself here.
    let predicted = place.numbers("o/predicted.npy");
    assert!(distance(&predicted, &g) < 1e-9);
    let residual = place.numbers("o/residual.npy");
    for i in 0..m {
        assert!((residual[i] + predicted[i] - data[i]).abs() < 1e-12);
    }
}

#[test]
fn a_linearised_row_that_is_left_out_keeps_a_residual_that_means_something() {
    let place = Place::new();
    let (a, b) = plain(&place, 12, 4, 10);
    let (x, g) = ([1.0, 2.0, 3.0, 4.0], normals(12, 12));
    place.vector("x.npy", &x);
    place.vector("g.npy", &g);
    place.write("rows.csv", format!("use\n{}", "1\n".repeat(11) + "0\n"));
    let flags = "--linearised-at x.npy --predicted g.npy --rows rows.csv --strength 1 --out o";
    place.expect(0, &format!("solve --matrix a.mtx --data b.npy {flags}"));
    let model = place.numbers("o/model.npy");
    let step: Vec<f64> = model.iter().zip(&x).map(|(a, b)| a - b).collect();
    let (predicted, residual) = (place.numbers("o/predicted.npy"), place.numbers("o/residual.npy"));
    let expected: Vec<f64> = product(&a, &step).iter().zip(&g).map(|(p, g)| p + g).collect();
    assert!(distance(&predicted, &expected) < 1e-13);
    for i in 0..12 {
        assert!((predicted[i] + residual[i] - b[i]).abs() < 1e-12, "row {}", i + 1);
    }
}

#[test]
fn a_reference_in_every_form_pulls_where_it_says() {
    let place = Place::new();
    let (a, b) = plain(&place, 20, 6, 11);
    let values = normals(6, 13);
    place.vector("r.npy", &values);
    let text: String = values.iter().map(|v| format!("{v:e}\n")).collect();
    place.write("r.txt", text);
    let sums = product(&a, &[1.0; 6]);
    let fit = sums.iter().zip(&b).map(|(s, b)| s * b).sum::<f64>()
        / sums.iter().map(|s| s * s).sum::<f64>();
    for (word, reference) in [
        ("2.5", vec![2.5; 6]),
        ("-1e-1", vec![-0.1; 6]),
        ("r.npy", values.clone()),
        ("r.txt", values),
        ("fit", vec![fit; 6]),
    ] {
        for strength in [1.0, 30.0] {
            let flags = format!("--reference {word} --strength {strength} {TIGHT} --force --out o");
            place.expect(0, &format!("solve --matrix a.mtx --data b.npy {flags}"));
            let exact = truth(&a, &b, &[1.0; 20], strength, &[1.0; 6], &reference);
            assert!(distance(&place.numbers("o/model.npy"), &exact) < 1e-12, "{word} {strength}");
        }
    }
}

#[test]
fn a_start_changes_the_way_and_not_the_solution() {
    let place = Place::new();
    let (a, b) = plain(&place, 30, 10, 14);
    let base = format!("solve --matrix a.mtx --data b.npy {TIGHT}");
    for strength in [0.0, 2.0] {
        let exact = plain_truth(&a, &b, strength);
        let far: Vec<f64> = normals(10, 15).iter().map(|v| 100.0 * v).collect();
        place.vector("far.npy", &far);
        place.vector("there.npy", &exact);
        for method in ["lsqr", "lsmr", "cgls"] {
            let out = |start: &str| format!("{method}-{strength}-{start}");
            for start in ["far", "there"] {
                place.expect(
                    0,
                    &format!(
                        "{base} --strength {strength} --method {method} --start {start}.npy --out {}",
                        out(start)
                    ),
                );
                let model = place.numbers(format!("{}/model.npy", out(start)));
                assert!(distance(&model, &exact) < 1e-11, "{}", out(start));
            }
            let iterations = |start: &str| number(&place.summary(&out(start)), "/iterations");
            assert!(iterations("there") <= 3.0 && iterations("far") >= 5.0, "{method} {strength}");
        }
    }
    let ran = place.expect(2, &format!("{base} --strength 1 --method direct --start far.npy"));
    assert!(ran.err.contains("--start"));
    place.vector("short.npy", &[1.0; 9]);
    let ran = place.expect(65, &format!("{base} --strength 1 --start short.npy"));
    assert!(ran.err.contains("short.npy") && ran.err.contains("10 unknowns"), "{}", ran.err);
}

#[test]
fn uncertainties_in_every_form_weigh_as_they_say() {
    let place = Place::new();
    let (a, b) = plain(&place, 20, 6, 16);
    let sigma: Vec<f64> = normals(20, 17).iter().map(|v| 0.5 + v.abs()).collect();
    place.vector("s.npy", &sigma);
    let percent = |absolute: f64, percent: f64| -> Vec<f64> {
        b.iter().map(|b| absolute.hypot(percent / 100.0 * b)).collect()
    };
    for (word, sigma) in [
        ("0.25", vec![0.25; 20]),
        ("s.npy", sigma),
        ("2%", percent(0.0, 2.0)),
        ("0.1+2%", percent(0.1, 2.0)),
    ] {
        let flags = format!("--uncertainty {word} --strength 1 {TIGHT} --force --out o");
        place.expect(0, &format!("solve --matrix a.mtx --data b.npy {flags}"));
        let weights: Vec<f64> = sigma.iter().map(|s| 1.0 / s).collect();
        let exact = truth(&a, &b, &weights, 1.0, &[1.0; 6], &[0.0; 6]);
        // 2 % of data near 0 makes weights that span several powers of ten.
        assert!(distance(&place.numbers("o/model.npy"), &exact) < 1e-10, "{word}");
    }
    for (word, code) in [("0", 65), ("nan", 65), ("x%", 2), ("missing.npy", 74)] {
        let ran = place.run(&format!(
            "solve --matrix a.mtx --data b.npy --strength 1 --uncertainty {word} --out bad"
        ));
        assert_eq!(ran.code, code, "{word}: {}", ran.err);
        assert!(!place.path("bad").exists());
    }
}

#[test]
fn the_strength_of_a_run_can_be_taken_over_to_the_last_bit() {
    let place = Place::new();
    plain(&place, 30, 10, 18);
    let base = "--matrix a.mtx --data b.npy";
    place.expect(0, &format!("sweep {base} --strengths 0.003..50 --strength-count 37 --out swept"));
    place.expect(0, &format!("solve {base} --strength-from swept --out solved"));
    place.expect(0, &format!("solve {base} --strength-from solved --out again"));
    let bits = |pointer: &str, folder: &str| number(&place.summary(folder), pointer).to_bits();
    assert_eq!(bits("/strength", "solved"), bits("/choice/strength", "swept"));
    assert_eq!(bits("/strength", "again"), bits("/choice/strength", "swept"));
    assert_eq!(place.bytes("again/model.npy"), place.bytes("solved/model.npy"));
    place.expect(74, &format!("solve {base} --strength-from nowhere --out never"));
}

#[test]
fn column_scaling_is_a_preconditioner_and_nothing_else() {
    let place = Place::new();
    let base = sparse(40, 8, 19);
    let b = normals(40, 20);
    // Columns over three decades: `auto` scales a solve.
    let a = DMatrix::from_fn(40, 8, |i, j| base[(i, j)] * 10f64.powf(3.0 * j as f64 / 7.0 - 1.5));
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &b);
    for method in ["lsqr", "lsmr", "cgls"] {
        for strength in ["0", "0.2"] {
            let exact = plain_truth(&a, &b, strength.parse().unwrap());
            for scaling in ["on", "auto", "off"] {
                let out = format!("{method}-{strength}-{scaling}");
                let flags = format!("--strength {strength} --method {method} {TIGHT}");
                place.expect(
                    0,
                    &format!(
                        "solve --matrix a.mtx --data b.npy {flags} --column-scaling {scaling} --out {out}"
                    ),
                );
                let record = place.summary(&out);
                let on = record["column_scaling"].as_bool().unwrap();
                match (scaling, strength) {
                    ("on", _) => assert!(on),
                    ("off", _) => assert!(!on),
                    // With λ = 0.2 the columns of [A; λI] span more than 100 as well.
                    _ => assert!(on, "{out}"),
                }
                let model = place.numbers(format!("{out}/model.npy"));
                // Condition about 1e4 unscaled: 1e-14 · 1e4, some digits for the way there.
                assert!(distance(&model, &exact) < 1e-9, "{out} {}", distance(&model, &exact));
            }
        }
    }
}

#[test]
fn single_precision_refuses_what_it_cannot_hold_by_its_place() {
    let place = Place::new();
    let head = "%%MatrixMarket matrix coordinate real general\n2 2 3\n1 1 1\n2 1 0.1\n";
    place.write("big.mtx", format!("{head}2 2 1e39\n"));
    place.write("fine.mtx", format!("{head}2 2 3\n"));
    place.write("b.txt", "1\n2\n");
    let flags = "--data b.txt --strength 0 --gradient-tolerance 1e-12";
    let ran =
        place.expect(65, &format!("solve --matrix big.mtx {flags} --precision single --out o"));
    for part in ["big.mtx", "1e39", "remedy"] {
        assert!(ran.err.contains(part), "{part} in {}", ran.err);
    }
    assert!(
        ran.err.contains("line 5") || ran.err.contains("row 2") && ran.err.contains("column 2")
    );
    assert!(!place.path("o").exists());
    place.expect(0, &format!("solve --matrix fine.mtx {flags} --precision single --out single"));
    place.expect(0, &format!("solve --matrix fine.mtx {flags} --out double"));
    assert_eq!(word(&place.summary("single"), "/system/storage"), "f32");
    assert_eq!(word(&place.summary("double"), "/system/storage"), "f64");
    let rounded = f64::from(0.1f32);
    let expected = [1.0, (2.0 - rounded) / 3.0];
    assert!(distance(&place.numbers("single/model.npy"), &expected) < 1e-14);
}

#[test]
fn duplicates_are_summed_refused_or_the_last_one_wins() {
    let place = Place::new();
    place.write(
        "a.mtx",
        "%%MatrixMarket matrix coordinate real general\n2 1 3\n1 1 1\n2 1 1\n2 1 3\n",
    );
    place.write("b.txt", "0\n1\n");
    let model = |word: &str| {
        let flags = format!("--data b.txt --strength 0 --duplicates {word} --out {word}");
        place.expect(0, &format!("solve --matrix a.mtx {flags}"));
        place.numbers(format!("{word}/model.npy"))[0]
    };
    // Least squares of [1; c] x = [0; 1]: c/(1 + c²).
    assert!((model("sum") - 4.0 / 17.0).abs() < 1e-15);
    assert!((model("last") - 3.0 / 10.0).abs() < 1e-15);
    let ran = place.expect(65, "solve --matrix a.mtx --data b.txt --strength 0 --duplicates error");
    assert!(ran.err.contains("a.mtx"), "{}", ran.err);
}

#[test]
fn every_key_of_a_job_file_works_and_flags_win() {
    let place = Place::new();
    let (a, b) = plain(&place, 12, 6, 21);
    std::fs::create_dir(place.path("job")).unwrap();
    for file in ["a.mtx", "b.npy"] {
        std::fs::rename(place.path(file), place.path("job").join(file)).unwrap();
    }
    place.vector("job/s.npy", &[0.5; 12]);
    place.vector("job/r.npy", &[0.25; 6]);
    place.vector("job/x.npy", &[0.0; 6]);
    place.vector("job/g.npy", &[0.0; 12]);
    place.write("job/rows.csv", format!("use\n{}", "1\n".repeat(12)));
    place.write(
        "job/columns.csv",
        format!("name\n{}", (0..6).map(|j| format!("c{j}\n")).collect::<String>()),
    );
    place.write("job/active.csv", "0\n1\n2\n3\n4\n5\n");
    let tables = "[units]\ndata = 's'\nmodel = 's/m'\nmodel_quantity = 'slowness'\nplausible = [0.0, 1.0]\n\
         [grid]\naxes = ['x', 'z']\nshape = [4, 2]\nspacing = [1.0, 1]\norigin = [0.0, 0]\nunit = 'm'\n\
         fastest = 'x'\nactive = 'active.csv'\n";
    let common = "matrix = 'a.mtx'\ndata = 'b.npy'\nuncertainty = 's.npy'\nreference = 'r.npy'\n\
         start = 'x.npy'\nrows = 'rows.csv'\ncolumns = 'columns.csv'\nmissing = 'nan'\n\
         linearised_at = 'x.npy'\npredicted = 'g.npy'\nduplicates = 'error'\nallow_nonfinite = false\n\
         precision = 'double'\nmethod = 'lsmr'\ncolumn_scaling = 'off'\nmax_iterations = 500\n\
         gradient_tolerance = 1e-14\ntime_limit = '2m'\nout = 'result'\npass = 'two-phase'\nthreads = 2\nseed = 7\n";
    place.write("job/solve.toml", format!("command = 'solve'\n{common}strength = 2\n{tables}"));
    place.expect(0, "solve job/solve.toml");
    let record = place.summary("job/result");
    for (pointer, value) in [("/strength", 2.0), ("/seed", 7.0), ("/threads", 2.0)] {
        assert_eq!(number(&record, pointer), value, "{pointer}");
    }
    for (pointer, value) in [
        ("/method", "lsmr"),
        ("/pass", "two-phase"),
        ("/system/data_unit", "s"),
        ("/system/model_unit", "s/m"),
        ("/system/model_quantity", "slowness"),
        ("/settings/column_scaling", "off"),
        ("/settings/duplicates", "error"),
        ("/settings/missing", "nan"),
    ] {
        assert_eq!(word(&record, pointer), value, "{pointer}");
    }
    assert_eq!(number(&record, "/settings/max_iterations"), 500.0);
    assert_eq!(number(&record, "/settings/time_limit"), 120.0);
    assert_eq!(record["inputs"].as_array().unwrap().len(), 9);
    let exact = truth(&a, &b, &[2.0; 12], 2.0, &[1.0; 6], &[0.25; 6]);
    assert!(distance(&place.numbers("job/result/model.npy"), &exact) < 1e-12);
    let cells = place.numbers("job/result/model_grid.npy");
    assert_eq!(place.array("job/result/model_grid.npy").shape(), [2, 4]);
    assert!(cells[6].is_nan() && cells[7].is_nan() && cells[..6].iter().all(|c| c.is_finite()));

    place.expect(0, "solve job/solve.toml --strength 3 --method cgls --out flags");
    let record = place.summary("flags");
    assert_eq!((number(&record, "/strength"), word(&record, "/method")), (3.0, "cgls"));
    // A flag that says the strength in another way wins as well.
    place.expect(0, "solve job/solve.toml --strength-from flags --out taken");
    assert_eq!(number(&place.summary("taken"), "/strength"), 3.0);
    place.write("job/from.toml", "matrix = 'a.mtx'\ndata = 'b.npy'\nstrength_from = '../flags'\n");
    place.expect(0, "solve job/from.toml --out from");
    assert_eq!(number(&place.summary("from"), "/strength"), 3.0);
    place.expect(0, "solve job/from.toml --strength 4 --out from4");
    assert_eq!(number(&place.summary("from4"), "/strength"), 4.0);

    place.write(
        "job/sweep.toml",
        format!("command = 'sweep'\n{common}strengths = '0.1..10'\nstrength_count = 4\nrule = 'corner-pruned'\n{tables}")
            .replace("start = 'x.npy'\n", ""),
    );
    place.expect(0, "sweep job/sweep.toml --out swept");
    let record = place.summary("swept");
    assert_eq!(record["sweep"].as_array().unwrap().len(), 4);
    place.write(
        "job/noise.toml",
        "matrix = 'a.mtx'\ndata = 'b.npy'\nuncertainty = 2\nstrength = 0\nnoise_factor = 1.0\nresidual_tolerance = 1e-3\n",
    );
    place.expect(0, "solve job/noise.toml --out noise");
    let record = place.summary("noise");
    assert_eq!(word(&record, "/stop/reason"), "noise-level");
    assert!(number(&record, "/residual_norm") <= 12f64.sqrt() * (1.0 + 1e-6));
}

#[test]
fn a_fault_in_a_job_file_is_named_by_line_and_text() {
    let place = Place::new();
    let refused = |content: &str, parts: &[&str]| {
        place.write("job.toml", content);
        let ran = place.expect(65, "solve job.toml --strength 1 --out never");
        for part in parts.iter().chain(&["job.toml"]) {
            assert!(ran.err.contains(part), "{part:?} in {}", ran.err);
        }
        assert!(!place.path("never").exists());
    };
    refused("matrix = 'a'\nstrenght = 1\n", &["line 2", "strenght = 1", "unknown field"]);
    refused("matrix = 'a'\n\nseed = 'x'\n", &["line 3", "seed = 'x'"]);
    refused("matrix = 5\n", &["line 1", "matrix = 5"]);
    refused("method = 'qr'\n", &["line 1", "method = 'qr'", "`lsqr`, `lsmr`, `cgls`, `direct`"]);
    refused("time_limit = '5 days'\n", &["line 1", "5 days", "2h"]);
    refused("strengths = '5..'\n", &["line 1", "5.."]);
    refused("[[data]]\nmatrix = 'a'\ndata = 'b'\nwieght = 2\n", &["line 4", "wieght = 2"]);
    refused("[grid]\nshape = 3\n", &["line 2", "shape = 3"]);
    refused("[units]\nmass = 'kg'\n", &["line 2", "mass = 'kg'"]);
    refused("matrix = 'a'\nmatrix = 'b'\n", &["line 2", "matrix = 'b'"]);
    refused("matrix = \n", &["line 1"]);
    refused("command = 'slove'\n", &["line 1", "command = 'slove'"]);
    place.write("job.toml", b"matrix = '\xff'\n");
    let ran = place.expect(65, "solve job.toml --strength 1");
    assert!(ran.err.contains("UTF-8") && ran.err.contains("line 1"), "{}", ran.err);
    place.expect(74, "solve absent.toml --strength 1");
}
