//! What a careful tool does not do: replace what is not its own, take weights for noise, read a
//! comma for a column, lose one data set for another's fault.

mod cli_common;

use cli_common::{Place, ellbow, normals, number, sparse, word};
use ellbow::kernel::Twin;
use ndarray::Array2;

/// A 30×20 system in a.mtx with data in b.npy.
fn plain(place: &Place) {
    place.matrix("a.mtx", &sparse(30, 20, 5));
    place.vector("b.npy", &normals(30, 6));
}

#[test]
fn inputs_and_files_of_others_are_never_replaced() {
    let place = Place::new();
    plain(&place);
    std::fs::create_dir_all(place.path("o")).unwrap();
    place.vector("o/model.npy", &[1.5; 20]);
    let before = place.bytes("o/model.npy");
    let flags = "solve --matrix a.mtx --data b.npy --strength 1 --out o";
    let ran = place.expect(2, flags);
    assert!(ran.err.contains("model.npy that no run has written"), "{}", ran.err);
    for force in ["", " --force"] {
        let ran = place.expect(2, &format!("{flags} --reference o/../o/model.npy{force}"));
        assert!(ran.err.contains("model.npy, which is an input"), "{}", ran.err);
    }
    assert_eq!(place.bytes("o/model.npy"), before);
    assert!(!place.path("o/log.jsonl").exists());
    place.expect(0, &format!("{flags} --force"));
    assert_ne!(place.bytes("o/model.npy"), before);
}

#[test]
fn a_demo_replaces_nobodys_file_unless_forced() {
    let place = Place::new();
    std::fs::create_dir_all(place.path("d")).unwrap();
    place.write("d/README.md", "mine");
    let ran = place.expect(2, "demo embankment --out d");
    assert!(ran.err.contains("another README.md"), "{}", ran.err);
    assert_eq!(place.read("d/README.md"), "mine");
    assert!(!place.path("d/job.toml").exists());
    place.expect(0, "demo embankment --out d --force");
    place.expect(0, "demo embankment --out d");
}

#[test]
fn the_same_files_are_the_same_run_from_wherever_it_is_started() {
    let place = Place::new();
    plain(&place);
    let job = "matrix = \"a.mtx\"\ndata = \"b.npy\"\nstrength = 1.0\nout = \"o\"\n";
    place.write("job.toml", job);
    place.expect(0, "solve job.toml");
    let ran = place.expect(0, "solve ./job.toml --matrix ./a.mtx");
    assert!(ran.err.contains("finished already"), "{}", ran.err);
    // The same content under another name is another input.
    place.write("c.npy", place.bytes("b.npy"));
    let ran = place.expect(2, "solve job.toml --data c.npy");
    assert!(ran.err.contains("blocks[0].data was"), "{}", ran.err);
}

#[test]
fn a_block_weight_is_not_noise() {
    let place = Place::new();
    let a = sparse(40, 12, 7);
    place.matrix("a.mtx", &a.rows(0, 20).into_owned());
    place.matrix("c.mtx", &a.rows(20, 20).into_owned());
    place.vector("b.npy", &normals(20, 8));
    place.vector("d.npy", &normals(20, 9));
    let job = |weight: &str| {
        format!(
            "uncertainty = 1.0\n[[data]]\nmatrix = \"a.mtx\"\ndata = \"b.npy\"\n\
             [[data]]\nmatrix = \"c.mtx\"\ndata = \"d.npy\"\nweight = {weight}\n"
        )
    };
    place.write("one.toml", job("1.0"));
    place.write("ten.toml", job("10.0"));
    place.expect(0, "solve one.toml --strength 0.5 --out one");
    let one = place.summary("one");
    // Forty unit normals with fewer than 12 parameters: χ²/dof is 1 ± √(2/28), five of them allowed.
    assert!((number(&one, "/chi_square_per_dof") - 1.0).abs() < 5.0 * (2.0f64 / 28.0).sqrt());
    place.expect(0, "solve ten.toml --strength 0.5 --out ten");
    assert!(place.summary("ten").pointer("/chi_square_per_dof").unwrap().is_null());
    let ran = place.expect(2, "solve ten.toml --strength 0 --noise-factor 1 --out never");
    assert!(ran.err.contains("no block a weight"), "{}", ran.err);
    place.run("sweep ten.toml --out swept");
    let rules = place.summary("swept").pointer("/choice/rules").unwrap().clone();
    let noise = rules.as_array().unwrap().iter().find(|r| word(r, "/rule") == "noise-plain");
    assert!(!noise.unwrap()["applicable"].as_bool().unwrap());
}

#[test]
fn columns_that_look_like_decimals_are_not_taken_for_data_sets_unseen() {
    let place = Place::new();
    plain(&place);
    let lines: Vec<String> = (0..30).map(|i| format!("0,{}", 100 + i)).collect();
    place.write("comma.csv", format!("t\n{}\n", lines.join("\n")));
    let flags = "solve --matrix a.mtx --strength 1 --out o --data";
    let ran = place.expect(65, &format!("{flags} comma.csv"));
    assert!(ran.err.contains("1 headings, but 2 columns"), "{}", ran.err);
    assert!(ran.err.contains("decimals with a point"), "{}", ran.err);
    place.write("bare.csv", format!("{}\n", lines.join("\n")));
    let ran = place.expect(0, &format!("{flags} bare.csv"));
    assert!(ran.out.contains("read as 2 data sets"), "{}", ran.out);
}

#[test]
fn a_fitted_reference_is_one_of_cells() {
    let place = Place::new();
    // Two cells and a station term: data are 3·(row sum of the cells), the term adds nothing.
    place.write(
        "a.mtx",
        "%%MatrixMarket matrix array real general\n3 3\n1\n2\n0\n1\n0\n2\n1\n1\n1\n",
    );
    place.write("b.txt", "6\n6\n6\n");
    place.write("columns.csv", "name,kind\nc1,cell\nc2,cell\ns1,station\n");
    let flags = "--matrix a.mtx --data b.txt --columns columns.csv --reference fit";
    place.expect(0, &format!("solve {flags} --strength 1e6 --out o"));
    let model = place.numbers("o/model.npy");
    assert!((model[0] - 3.0).abs() < 1e-9 && (model[1] - 3.0).abs() < 1e-9, "{model:?}");
    assert!(model[2].abs() < 1e-9, "{model:?}");
}

#[test]
fn a_data_set_that_breaks_down_does_not_take_the_others_with_it() {
    let place = Place::new();
    plain(&place);
    let data = normals(60, 6);
    let both =
        Array2::from_shape_fn(
            (30, 2),
            |(i, set)| {
                if set == 1 && i == 3 { 1e200 } else { data[2 * i + set] }
            },
        );
    place.block("b.npy", &both);
    let flags = "--matrix a.mtx --data b.npy --strength 1";
    let ran = place.expect(4, &format!("solve {flags} --out o"));
    assert!(ran.out.contains("data set 2 stopped being finite"), "{}", ran.out);
    let record = place.summary("o");
    assert_eq!(word(&record, "/data_sets/0/stop/reason"), "gradient");
    assert_eq!(word(&record, "/data_sets/1/stop/reason"), "not-finite");
    place.vector("c.npy", &both.column(0).to_vec());
    place.expect(0, "solve --matrix a.mtx --data c.npy --strength 1 --out alone");
    assert_eq!(place.numbers("o/model.npy")[..20], place.numbers("alone/model.npy")[..]);
}

#[test]
fn numbers_whose_squares_vanish_are_not_taken_for_zeros() {
    let place = Place::new();
    let a = sparse(30, 20, 5);
    place.matrix("a.mtx", &a);
    place.matrix("tiny.mtx", &(&a * 1e-170));
    place.vector("b.npy", &normals(30, 6));
    place.vector("small.npy", &normals(30, 6).iter().map(|b| b * 1e-200).collect::<Vec<_>>());
    for (files, what) in [
        ("--matrix a.mtx --data small.npy", "the weighted data"),
        ("--matrix tiny.mtx --data b.npy", "entries of the matrix"),
    ] {
        let ran = place.expect(65, &format!("solve {files} --strength 1 --out never"));
        assert!(ran.err.contains(what) && ran.err.contains("units"), "{}", ran.err);
    }
    assert!(!place.path("never").exists());
}

#[test]
fn settings_beyond_all_sense_are_refused() {
    let place = Place::new();
    plain(&place);
    let flags = "--matrix a.mtx --data b.npy --out never";
    for (settings, words) in [
        ("solve --strength 1e160", "1e160"),
        ("sweep --strengths 1e-200..1", "double precision"),
        ("sweep --strength-count 1000000000000000000", "at most"),
    ] {
        let ran = place.expect(2, &format!("{settings} {flags}"));
        assert!(ran.err.contains(words), "{settings}: {}", ran.err);
    }
    place.write("job.toml", "data = []\n");
    for command in ["solve --strength 1", "inspect"] {
        let ran = place.expect(2, &format!("{command} job.toml"));
        assert!(ran.err.contains("list of data blocks is empty"), "{}", ran.err);
    }
    assert!(!place.path("never").exists());
}

#[test]
fn an_instruction_set_that_the_environment_names_is_used_and_recorded_or_refused() {
    let place = Place::new();
    plain(&place);
    let run = |value: &str, arguments: &str| {
        let mut command = ellbow();
        command.current_dir(place.path("")).env("ELLBOW_SIMD", value);
        let output = command.args(arguments.split_whitespace()).output().unwrap();
        (output.status.code().unwrap(), String::from_utf8(output.stderr).unwrap())
    };
    let solve = "solve --matrix a.mtx --data b.npy --strength 1 --out";
    let (code, err) = run("portable", &format!("{solve} o"));
    assert_eq!(code, 0, "{err}");
    assert_eq!(word(&place.summary("o"), "/simd"), "portable");
    let before = place.bytes("o/summary.json");
    // Another set is no other run, and the record keeps saying what the files were made with.
    let (code, err) = run("", &format!("{solve} o"));
    assert!(code == 0 && err.contains("finished already"), "{err}");
    assert!(place.bytes("o/summary.json") == before);
    let available = Twin::ALL.into_iter().filter(|twin| twin.is_available());
    let has: Vec<&str> = available.map(Twin::word).collect();
    for twin in Twin::ALL {
        let folder = format!("of-{}", twin.word());
        let (code, err) = run(twin.word(), &format!("{solve} {folder}"));
        if twin.is_available() {
            assert_eq!(code, 0, "{err}");
            assert_eq!(word(&place.summary(&folder), "/simd"), twin.word());
        } else {
            assert_eq!(code, 2, "{err}");
            assert!(err.contains("this processor lacks it"), "{err}");
        }
    }
    for arguments in [format!("{solve} never").as_str(), "demo --out never", "inspect absent.toml"]
    {
        let (code, err) = run("sse9", arguments);
        assert_eq!(code, 2, "{err}");
        for part in ["ELLBOW_SIMD", "sse9", &has.join(", "), "remedy: unset"] {
            assert!(err.contains(part), "{part} in {err}");
        }
    }
    assert!(!place.path("never").exists());
}
