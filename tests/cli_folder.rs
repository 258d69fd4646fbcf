//! How a run ends and what it leaves: exit codes, limits, signals, running again.

mod cli_common;

use std::fs;
use std::path::Path;
use std::process::{Child, Command, Stdio};
use std::time::{Duration, Instant, SystemTime};

use cli_common::{Place, normals, number, plain_truth, product, sparse, word};
use nalgebra::DMatrix;
use serde_json::Value;

fn plain(place: &Place) -> (DMatrix<f64>, Vec<f64>) {
    let (a, b) = (sparse(30, 10, 1), normals(30, 2));
    place.matrix("a.mtx", &a);
    place.vector("b.npy", &b);
    (a, b)
}

/// Names and times of everything in a folder.
fn listing(folder: &Path) -> Vec<(String, SystemTime, u64)> {
    let mut all: Vec<_> = fs::read_dir(folder)
        .unwrap()
        .map(|entry| {
            let entry = entry.unwrap();
            let facts = entry.metadata().unwrap();
            let name = entry.file_name().into_string().unwrap();
            (name, facts.modified().unwrap(), facts.len())
        })
        .collect();
    all.sort();
    all
}

#[test]
fn usage_is_two_and_points_to_the_way_out() {
    let place = Place::new();
    plain(&place);
    let base = "--matrix a.mtx --data b.npy --out never";
    for (arguments, parts) in [
        (format!("solve {base}"), vec!["no strength", "ellbow sweep"]),
        (format!("solve {base} --strength 1 --strength-from x"), vec!["--strength-from"]),
        (format!("solve {base} --strength -1"), vec!["--strength", "negative"]),
        (format!("solve {base} --strength nan"), vec!["--strength"]),
        (format!("solve {base} --strengths 1..2"), vec!["one strength", "ellbow sweep"]),
        (format!("sweep {base} --strength 1"), vec!["range", "ellbow solve"]),
        (format!("sweep {base} --strengths 0..1"), vec!["positive"]),
        (format!("sweep {base} --strength-count 0"), vec!["at least one"]),
        (format!("sweep {base} --residual-tolerance 0.1"), vec!["--residual-tolerance"]),
        (
            format!("solve {base} --strength 1 --residual-tolerance 0.1"),
            vec!["--residual-tolerance"],
        ),
        (format!("solve {base} --strength 0 --noise-factor 1"), vec!["--uncertainty"]),
        (
            format!("solve {base} --strength 1 --uncertainty 1 --noise-factor 1"),
            vec!["--strength 0"],
        ),
        (
            format!("solve {base} --strength 1 --gradient-tolerance -1"),
            vec!["--gradient-tolerance"],
        ),
        (format!("solve {base} --strength 1 --threads 0"), vec!["--threads"]),
        (format!("solve {base} --strength 1 --method qr"), vec!["lsqr"]),
        (format!("solve {base} --strength 1 --time-limit 5"), vec!["90s"]),
        (format!("solve {base} --strength 1 --linearised-at b.npy"), vec!["--predicted"]),
        (format!("solve {base} --strength 1 --no-such-option"), vec!["--no-such-option"]),
        (format!("solve --reference {base} --strength 1"), vec!["--reference", "--matrix"]),
        ("solve --data b.npy --strength 1".into(), vec!["--matrix"]),
        ("solve --matrix a.mtx --strength 1".into(), vec!["--data"]),
        ("demo atlantis --out never".into(), vec!["embankment"]),
        (String::new(), vec!["solve", "sweep"]),
    ] {
        let ran = place.run(&arguments);
        assert_eq!(ran.code, 2, "{arguments}: {}{}", ran.out, ran.err);
        for part in parts {
            assert!(ran.err.contains(part), "{arguments}: {part:?} in {}", ran.err);
        }
        assert!(!place.path("never").exists(), "{arguments}");
    }
    let mixed = "matrix = 'a.mtx'\n[[data]]\nmatrix = 'a.mtx'\ndata = 'b.npy'\n";
    place.write("mixed.toml", mixed);
    assert!(place.expect(2, "solve mixed.toml --strength 1").err.contains("[[data]]"));
}

#[test]
fn an_iteration_limit_is_three_and_the_result_is_there() {
    let place = Place::new();
    let (a, b) = plain(&place);
    let flags = "--strength 0.1 --max-iterations 2 --out o";
    let ran = place.expect(3, &format!("solve --matrix a.mtx --data b.npy {flags}"));
    assert!(
        ran.out.contains("iteration-limit") && ran.out.contains("not converged"),
        "{}",
        ran.out
    );
    let record = place.summary("o");
    assert_eq!(word(&record, "/stop/reason"), "iteration-limit");
    assert_eq!(record["stop"]["converged"], false);
    assert_eq!(number(&record, "/iterations"), 2.0);
    // The stated norm is that of the model that was written.
    let model = place.numbers("o/model.npy");
    let r: Vec<f64> = product(&a, &model).iter().zip(&b).map(|(p, b)| b - p).collect();
    let stated = number(&record, "/residual_norm");
    assert!((stated / cli_common::norm(&r) - 1.0).abs() < 1e-13);
    // Its bound on the distance to the solution holds.
    let exact = plain_truth(&a, &b, 0.1);
    let off: Vec<f64> = model.iter().zip(&exact).map(|(a, b)| a - b).collect();
    assert!(cli_common::norm(&off) <= number(&record, "/model_error_bound"));
    // A sweep whose chosen strength did not converge ends likewise.
    let flags = "--strengths 0.001..1 --strength-count 6 --max-iterations 2 --out s";
    place.expect(3, &format!("sweep --matrix a.mtx --data b.npy {flags}"));
    assert_eq!(place.array("s/models.npy").shape(), [6, 10]);
    // That run is finished: the same command prints it again, with the same code.
    let before = listing(&place.path("o"));
    place.expect(3, "solve --matrix a.mtx --data b.npy --strength 0.1 --max-iterations 2 --out o");
    assert_eq!(listing(&place.path("o")), before);
}

/// A system that will not converge before anyone loses patience: columns over seven decades, not
/// scaled, and a tolerance below rounding level.
fn endless(place: &Place) -> String {
    let base = sparse(300, 120, 3);
    let a = DMatrix::from_fn(300, 120, |i, j| base[(i, j)] * 10f64.powf(-7.0 * j as f64 / 119.0));
    place.matrix("slow.mtx", &a);
    place.vector("slow.npy", &normals(300, 4));
    "--matrix slow.mtx --data slow.npy --strength 0 --column-scaling off --method cgls \
     --gradient-tolerance 1e-15 --max-iterations 100000000"
        .into()
}

#[test]
fn a_time_limit_is_three_and_the_result_is_there() {
    let place = Place::new();
    let flags = endless(&place);
    let begun = Instant::now();
    place.expect(3, &format!("solve {flags} --time-limit 0.001s --out o"));
    assert!(begun.elapsed() < Duration::from_secs(20));
    let record = place.summary("o");
    assert_eq!(word(&record, "/stop/reason"), "time-limit");
    assert_eq!(place.array("o/model.npy").shape(), [120]);
    assert!(place.numbers("o/model.npy").iter().all(|x| x.is_finite()));
    assert_eq!(place.array("o/residual.npy").shape(), [300]);
    // One limit for all groups of lanes, counted from the start of the command: loading alone
    // takes longer than this, so that no group gets an iteration.
    let lanes = flags.replace("--strength 0 ", "--strengths 0.01..1 --strength-count 40 ");
    place.expect(3, &format!("sweep {lanes} --time-limit 0.0001s --out lanes"));
    let record = place.summary("lanes");
    assert_eq!(record["sweep"].as_array().unwrap().len(), 40);
    assert_eq!(number(&record, "/iterations"), 0.0);
    assert!(record["sweep"].as_array().unwrap().iter().all(|row| row["stop"] == "time-limit"));
    // Before the range of a sweep is known.
    let sweep = flags.replace("--strength 0 ", "").replace("cgls", "lsqr");
    let ran = place.expect(3, &format!("sweep {sweep} --time-limit 0.000001s --out s"));
    assert!(ran.out.contains("time-limit"), "{}", ran.out);
    assert_eq!(word(&place.summary("s"), "/stop/reason"), "time-limit");
}

fn spawn(place: &Place, arguments: &str) -> Child {
    Command::new(assert_cmd::cargo::cargo_bin!("ellbow"))
        .current_dir(place.path(""))
        .args(arguments.split_whitespace())
        .stdout(Stdio::null())
        .stderr(Stdio::null())
        .spawn()
        .unwrap()
}

/// Events of a folder's log.
fn events(place: &Place, folder: &str) -> Vec<String> {
    let path = place.path(format!("{folder}/log.jsonl"));
    let text = fs::read_to_string(path).unwrap_or_default();
    text.lines()
        .filter_map(|line| serde_json::from_str::<Value>(line).ok())
        .map(|event| event["event"].as_str().unwrap().to_owned())
        .collect()
}

#[track_caller]
fn wait_for_events(place: &Place, folder: &str, count: usize) {
    let begun = Instant::now();
    while events(place, folder).len() < count {
        assert!(begun.elapsed() < Duration::from_secs(60), "the run did not start");
        std::thread::sleep(Duration::from_millis(5));
    }
}

#[test]
#[cfg(unix)]
fn a_signal_ends_a_run_with_whole_files_and_it_can_run_again() {
    let place = Place::new();
    let flags = format!("solve {} --out o", endless(&place));
    for (round, signal) in ["TERM", "INT", "USR1"].into_iter().enumerate() {
        let mut child = spawn(&place, &flags);
        wait_for_events(&place, "o", 2 * round + 1);
        std::thread::sleep(Duration::from_millis(30));
        let kill = format!("kill -{signal} {}", child.id());
        assert!(Command::new("sh").args(["-c", &kill]).status().unwrap().success());
        let begun = Instant::now();
        assert_eq!(child.wait().unwrap().code(), Some(3), "{signal}");
        assert!(begun.elapsed() < Duration::from_secs(20));
        let record = place.summary("o");
        assert_eq!(word(&record, "/stop/reason"), "signal");
        assert_eq!(record["interrupted"], true);
        assert_eq!(record["stop"]["converged"], false);
        assert!(number(&record, "/iterations") >= 0.0);
        assert!(place.numbers("o/model.npy").iter().all(|x| x.is_finite()));
        let names: Vec<String> = listing(&place.path("o")).into_iter().map(|f| f.0).collect();
        let whole = [
            "history.csv",
            "log.jsonl",
            "model.npy",
            "predicted.npy",
            "residual.npy",
            "summary.json",
        ];
        assert_eq!(names, whole, "nothing half-written is left");
    }
    let expected = ["started", "interrupted"].repeat(3);
    assert_eq!(events(&place, "o"), expected);
    // Another command on that folder is refused even though the run was interrupted.
    let other = flags.replace("--strength 0", "--strength 1");
    assert!(place.expect(2, &other).err.contains("strengths"));
}

#[test]
fn numbers_that_overflow_are_four() {
    let place = Place::new();
    let (a, b) = (sparse(6, 3, 5), normals(6, 6));
    place.matrix("huge.mtx", &(a * 1e200));
    place.vector("b.npy", &b);
    for method in ["lsqr", "lsmr", "cgls"] {
        let flags = format!("--strength 1 --method {method} --out o");
        let ran = place.expect(4, &format!("solve --matrix huge.mtx --data b.npy {flags}"));
        assert!(ran.err.contains("finite") && ran.err.contains("remedy"), "{}", ran.err);
        assert!(!place.path("o/summary.json").exists(), "a run that broke down is not finished");
        assert!(!place.path("o/model.npy").exists());
    }
}

#[test]
fn bad_input_is_sixty_five_and_nothing_is_written() {
    let place = Place::new();
    plain(&place);
    let head = "%%MatrixMarket matrix coordinate real general\n";
    for (name, content, parts) in [
        ("index.mtx", format!("{head}2 2 1\n1 3 1.0\n"), vec!["index.mtx", "line 3", "1 3 1.0"]),
        ("text.mtx", format!("{head}2 2 1\n1 2 1.5abc\n"), vec!["text.mtx", "line 3", "1.5abc"]),
        ("few.mtx", format!("{head}2 2 2\n1 2 1.5\n"), vec!["few.mtx", "2", "1"]),
        ("empty.mtx", String::new(), vec!["empty.mtx"]),
        ("huge.mtx", format!("{head}9 9 999999999999\n1 1 1\n"), vec!["huge.mtx", "line 2"]),
    ] {
        place.write(name, content);
        for command in ["solve --strength 1", "sweep"] {
            let ran =
                place.expect(65, &format!("{command} --matrix {name} --data b.npy --out never"));
            for part in parts.iter().chain(&["remedy"]) {
                assert!(ran.err.contains(part), "{part:?} in {}", ran.err);
            }
            assert!(ran.out.is_empty());
            assert!(!place.path("never").exists());
        }
    }
    place.vector("short.npy", &normals(29, 7));
    let ran = place.expect(65, "solve --matrix a.mtx --data short.npy --strength 1 --out never");
    for part in ["short.npy", "29", "30", "a.mtx"] {
        assert!(ran.err.contains(part), "{part} in {}", ran.err);
    }
    assert!(!place.path("never").exists());
}

#[test]
fn a_dense_decomposition_that_would_not_fit_is_seventy_one() {
    let place = Place::new();
    let mut text =
        String::from("%%MatrixMarket matrix coordinate pattern general\n5000 5000 5000\n");
    (1..=5000).for_each(|i| text += &format!("{i} {i}\n"));
    place.write("a.mtx", text);
    place.write("b.txt", "1\n".repeat(5000));
    let flags = "--matrix a.mtx --data b.txt --strength 1 --method direct --out never";
    let ran = place.expect(71, &format!("solve {flags}"));
    assert!(ran.err.contains("5000×5000") && ran.err.contains("lsqr"), "{}", ran.err);
    assert!(!place.path("never").exists());
}

/// One entry can declare four thousand million unknowns: 32 GB for each vector of that length, and
/// a run needs eight of them, more than any machine this is tested on has free.
#[test]
fn unknowns_that_only_a_header_declares_are_refused_before_they_take_memory() {
    let place = Place::new();
    let text = "%%MatrixMarket matrix coordinate real general\n2 4000000000 1\n1 7 1.5\n";
    place.write("a.mtx", text);
    place.write("b.txt", "1\n2\n");
    for command in ["solve --strength 1 --out never", "sweep --out never", "inspect"] {
        let ran = place.expect(71, &format!("{command} --matrix a.mtx --data b.txt"));
        for part in ["a.mtx", "4000000000 unknowns", "GB", "remedy"] {
            assert!(ran.err.contains(part), "{part} in {}", ran.err);
        }
        assert!(!place.path("never").exists());
    }
}

#[test]
fn a_file_in_the_way_is_seventy_four_before_anything_is_computed() {
    let place = Place::new();
    plain(&place);
    place.write("taken", "mine");
    // Would run for ever if the folder were only looked at in the end.
    let flags = endless(&place);
    let begun = Instant::now();
    for out in ["taken", "taken/below"] {
        let ran = place.expect(74, &format!("solve {flags} --out {out}"));
        assert!(ran.err.contains("taken"), "{}", ran.err);
    }
    assert!(begun.elapsed() < Duration::from_secs(20));
    assert_eq!(place.read("taken"), "mine");
    // A folder where a result file belongs.
    fs::create_dir_all(place.path("o/model.npy")).unwrap();
    let ran = place.expect(74, "solve --matrix a.mtx --data b.npy --strength 1 --out o");
    assert!(ran.err.contains("model.npy"), "{}", ran.err);
    assert!(!place.path("o/summary.json").exists());
    place.expect(74, "solve --matrix absent.mtx --data b.npy --strength 1 --out never");
    assert!(!place.path("never").exists());
}

#[test]
fn the_same_command_prints_its_result_and_rewrites_nothing() {
    let place = Place::new();
    plain(&place);
    for command in ["solve --strength 0.6201747031", "sweep"] {
        let arguments = format!("{command} --matrix a.mtx --data b.npy --uncertainty 0.1 --out o");
        let arguments = arguments.replace("--out o", &format!("--out {}", &command[..5]));
        let folder = place.path(&command[..5]);
        let first = place.expect(0, &arguments);
        let before = listing(&folder);
        std::thread::sleep(Duration::from_millis(20));
        let again = place.expect(0, &arguments);
        assert_eq!(again.out, first.out);
        assert!(again.err.contains("finished already"), "{}", again.err);
        assert_eq!(listing(&folder), before);
        // The number of threads and the way of printing make no other run.
        let json = place.expect(0, &format!("{arguments} --threads 2 --json"));
        let record: Value = serde_json::from_str(&json.out).unwrap();
        assert_eq!(record, place.summary(&command[..5]));
        assert_eq!(listing(&folder), before);
        // With --force it is computed anew.
        place.expect(0, &format!("{arguments} --force"));
        let after = listing(&folder);
        assert!(after.iter().zip(&before).all(|(a, b)| a.1 > b.1), "{after:?}");
    }
}

/// Settings whose digits a careless reader of decimal numbers gets wrong in the last bit.
#[test]
fn awkward_numbers_are_the_same_command_too() {
    let place = Place::new();
    plain(&place);
    for (i, strength) in
        ["0.7322781189", "1.0715193052376064e-3", "51.7947467923121"].iter().enumerate()
    {
        let arguments =
            format!("solve --matrix a.mtx --data b.npy --strength {strength} --out o{i}");
        place.expect(0, &arguments);
        let again = place.expect(0, &arguments);
        assert!(again.err.contains("finished already"), "{}", again.err);
    }
    // Every double survives the record: a sweep's strengths, read back, are those of its table.
    place.expect(0, "sweep --matrix a.mtx --data b.npy --strength-count 200 --out s");
    let record = place.summary("s");
    let lines = cli_common::csv(&place.read("s/sweep.csv"));
    for (row, line) in record["sweep"].as_array().unwrap().iter().zip(&lines[1..]) {
        assert_eq!(number(row, "/strength"), line[0].parse::<f64>().unwrap());
    }
}

#[test]
fn a_different_command_on_the_same_folder_is_refused_by_its_difference() {
    let place = Place::new();
    plain(&place);
    let grid = "[grid]\naxes = ['x', 'z']\nshape = [5, 2]\nspacing = [1.0, 1.0]\n\
                origin = [0.0, 0.0]\nunit = 'm'\nfastest = 'x'\n";
    place.write("job.toml", format!("matrix = 'a.mtx'\ndata = 'b.npy'\nuncertainty = 0.5\n{grid}"));
    let base = "solve job.toml --strength 1 --out o";
    place.expect(0, base);
    let before = listing(&place.path("o"));
    for (change, parts) in [
        ("--strength 2", vec!["strengths", "1.0", "2.0"]),
        ("--strength 1 --method lsmr", vec!["method", "lsqr", "lsmr"]),
        ("--strength 1 --gradient-tolerance 1e-9", vec!["gradient_tolerance"]),
        ("--strength 1 --uncertainty 0.25", vec!["uncertainty", "0.5", "0.25"]),
        ("--strength 1 --reference 1", vec!["reference"]),
        ("--strength 1 --max-iterations 7", vec!["max_iterations", "7"]),
        ("--strength 1 --seed 2", vec!["seed"]),
        ("--strength 1 --time-limit 1h", vec!["time_limit"]),
    ] {
        let ran = place.expect(2, &base.replace("--strength 1", change));
        for part in parts.iter().chain(&["different run", "--force"]) {
            assert!(ran.err.contains(part), "{change}: {part:?} in {}", ran.err);
        }
        assert!(ran.err.len() < 600, "a difference, not two records: {}", ran.err);
        assert_eq!(listing(&place.path("o")), before);
    }
    let ran = place.expect(2, "sweep job.toml --out o");
    assert!(ran.err.contains("command was \"solve\", now \"sweep\""), "{}", ran.err);
    // The content of an input.
    let old = place.bytes("b.npy");
    place.vector("b.npy", &normals(30, 8));
    let ran = place.expect(2, base);
    assert!(ran.err.contains("content of b.npy changed"), "{}", ran.err);
    place.write("b.npy", old);
    // The grid of the job file.
    let moved = place.read("job.toml").replace("origin = [0.0, 0.0]", "origin = [0.0, 9.0]");
    let original = place.read("job.toml");
    place.write("job.toml", moved);
    assert!(place.expect(2, base).err.contains("grid"), "another grid is another run");
    place.write("job.toml", original);
    assert!(place.expect(0, base).err.contains("finished already"));
    // A summary that is none.
    fs::create_dir(place.path("other")).unwrap();
    place.write("other/summary.json", "{ not a record");
    place.expect(2, &base.replace("--out o", "--out other"));
    place.expect(0, &base.replace("--out o", "--out other --force"));
}

#[test]
fn force_leaves_nothing_of_the_earlier_run() {
    let place = Place::new();
    plain(&place);
    let base = "--matrix a.mtx --data b.npy --out o";
    place.expect(0, &format!("sweep {base}"));
    place.write("o/notes.txt", "mine");
    place.expect(0, &format!("solve {base} --strength 1 --force"));
    assert_eq!(word(&place.summary("o"), "/command"), "solve");
    // A reader must not take the sweep's models for the solve's; what we did not write stays.
    for (name, there) in
        [("models.npy", false), ("sweep.csv", false), ("model.npy", true), ("notes.txt", true)]
    {
        assert_eq!(place.path("o").join(name).exists(), there, "{name}");
    }
}
