//! What reaches a person or another program: help, pages, JSON, messages, names that bite.

mod cli_common;

use std::process::{Command, Stdio};

use cli_common::{Place, Ran, ellbow, normals, sparse};
use serde_json::Value;

fn plain(place: &Place) {
    place.matrix("a.mtx", &sparse(30, 10, 1));
    place.vector("b.npy", &normals(30, 2));
}

const BASE: &str = "--matrix a.mtx --data b.npy --uncertainty 0.5";

#[test]
fn help_of_every_command_fits_eighty_columns() {
    let place = Place::new();
    for command in ["", "solve", "sweep", "inspect", "demo"] {
        for flag in ["-h", "--help"] {
            let ran = place.expect(0, &format!("{command} {flag}"));
            assert!(ran.err.is_empty());
            assert!(ran.out.contains("Usage: ellbow"), "{}", ran.out);
            for line in ran.out.lines() {
                assert!(line.chars().count() <= 80, "{command} {flag}: {line:?}");
            }
        }
    }
    let ran = place.expect(0, "--help");
    for code in ["65  bad input", "71", "74", "σ", "ELLBOW_SIMD"] {
        assert!(ran.out.contains(code), "{code} in {}", ran.out);
    }
    // A command shows its own options only.
    let solve = place.expect(0, "solve --help").out;
    let sweep = place.expect(0, "sweep --help").out;
    assert!(solve.contains("--pass <auto|one|two-phase>"));
    assert!(solve.contains("--strength <") && !solve.contains("--strength-count"));
    assert!(sweep.contains("--strength-count") && !sweep.contains("--noise-factor"));
    assert_eq!(place.expect(0, "--version").out, format!("ellbow {}\n", env!("CARGO_PKG_VERSION")));
}

#[test]
fn colours_are_off_where_they_are_not_wanted() {
    let of = |variables: &[(&str, &str)]| {
        let mut command = ellbow();
        command.arg("--help").envs(variables.iter().copied());
        String::from_utf8(command.output().unwrap().stdout).unwrap()
    };
    assert!(!of(&[]).contains('\u{1b}'), "no terminal");
    assert!(of(&[("CLICOLOR_FORCE", "1")]).contains('\u{1b}'), "asked for");
    assert!(!of(&[("CLICOLOR_FORCE", "1"), ("NO_COLOR", "1")]).contains('\u{1b}'));
}

#[test]
fn pages_fit_eighty_columns_and_name_what_they_state() {
    let place = Place::new();
    plain(&place);
    place.write("s.csv", "0.5\n".repeat(30));
    let solve = place.expect(0, &format!("solve {BASE} --strength 1 --out o")).out;
    let sweep = place.expect(0, &format!("sweep {BASE} --out s")).out;
    for page in [&solve, &sweep] {
        for line in page.lines() {
            assert!(line.chars().count() <= 80, "{line:?}");
        }
    }
    for part in ["30 data, 10 unknowns", "Residual norm", "Penalty norm", "converged", "Results: o"]
    {
        assert!(solve.contains(part), "{part} in {solve}");
    }
    for part in ["strength", "residual norm", "penalty norm", "iter", "stop", "Chosen", "Verdict"] {
        assert!(sweep.contains(part), "{part} in {sweep}");
    }
    assert!(sweep.contains("< corner"), "the deciding rule is marked: {sweep}");
}

#[test]
fn json_is_all_there_is_on_stdout() {
    let place = Place::new();
    plain(&place);
    for (command, out) in [("solve --strength 1", "o"), ("sweep", "s")] {
        let ran = place.expect(0, &format!("{command} {BASE} --json --out {out}"));
        let record: Value = serde_json::from_str(&ran.out).unwrap();
        assert_eq!(record, place.summary(out));
        assert!(ran.err.is_empty(), "{}", ran.err);
    }
    let ran = place.expect(0, "demo embankment --out d --json");
    let record: Value = serde_json::from_str(&ran.out).unwrap();
    assert_eq!(record["command"], "sweep");
    // A fault leaves stdout to the reader of JSON: empty.
    let ran = place.expect(2, &format!("solve {BASE} --json --out o2"));
    assert!(ran.out.is_empty() && !ran.err.is_empty());
}

#[test]
fn quiet_silences_stderr_but_not_faults() {
    let place = Place::new();
    plain(&place);
    let command = format!("solve {BASE} --strength 1 --threads 64 --out o");
    assert!(place.expect(0, &command).err.contains("--threads 64"));
    let again = place.expect(0, &format!("{command} --quiet"));
    assert!(again.err.is_empty(), "{}", again.err);
    assert!(again.out.contains("Residual norm"));
    let demo = place.expect(0, "demo --out d --quiet");
    assert!(demo.err.is_empty() && demo.out.contains("Where to look"));
    assert!(place.expect(74, "solve absent.toml --strength 1 --quiet").err.contains("absent.toml"));
}

#[test]
fn progress_keeps_off_what_is_no_terminal() {
    let place = Place::new();
    plain(&place);
    let ran = place.expect(0, &format!("sweep {BASE} --out s"));
    assert!(ran.err.is_empty(), "a short run has nothing to say: {:?}", ran.err);
    assert!(!ran.out.contains('\r') && !ran.out.contains('\u{1b}'));
}

#[test]
fn a_reader_that_has_seen_enough_is_no_fault() {
    let place = Place::new();
    plain(&place);
    for arguments in [
        format!("sweep {BASE} --out s"),
        format!("sweep {BASE} --json --out s"),
        "--help".into(),
        "sweep --help".into(),
    ] {
        let mut child = Command::new(assert_cmd::cargo::cargo_bin!("ellbow"))
            .current_dir(place.path(""))
            .args(arguments.split_whitespace())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .unwrap();
        drop(child.stdout.take());
        let output = child.wait_with_output().unwrap();
        let err = String::from_utf8(output.stderr).unwrap();
        assert!(!err.contains("panicked"), "{arguments}: {err}");
        assert_eq!(output.status.code(), Some(0), "{arguments}: {err}");
    }
}

/// Characters that steer a terminal: C0 but line feed, DEL, C1, and those that reorder text.
fn steers(c: char) -> bool {
    (c.is_control() && c != '\n')
        || matches!(c, '\u{200e}' | '\u{200f}' | '\u{2028}'..='\u{202e}' | '\u{2066}'..='\u{2069}')
}

#[track_caller]
fn harmless(ran: &Ran) {
    for text in [&ran.out, &ran.err] {
        if let Some(c) = text.chars().find(|c| steers(*c)) {
            panic!("{c:?} in {text:?}");
        }
        assert!(!text.lines().any(|line| line.starts_with("FAKE")), "a line of its own in {text}");
    }
}

/// Escape sequences (7-bit and 8-bit), a false line, reordering, a script.
const NASTY: &str =
    "\u{1b}[31mred\u{9b}2J\r\nFAKE: all is well\u{202e}txt<script>alert(1)</script>";

fn toml_text(text: &str) -> String {
    // JSON's escapes are TOML's; those JSON leaves alone are escaped here.
    let quoted = serde_json::to_string(text).unwrap();
    quoted
        .chars()
        .map(|c| if c.is_ascii() { c.to_string() } else { format!("\\u{:04x}", c as u32) })
        .collect()
}

#[test]
fn names_in_job_files_and_tables_reach_no_terminal_raw() {
    let place = Place::new();
    plain(&place);
    let nasty = toml_text(NASTY);
    let long = "n".repeat(10_000);
    // Units, block names, axis names: a run that works.
    for (i, name) in [nasty.clone(), format!("\"{long}\"")].into_iter().enumerate() {
        place.write(
            "job.toml",
            format!(
                "strength = 1\n[[data]]\nname = {name}\nmatrix = 'a.mtx'\ndata = 'b.npy'\n\
                 [[data]]\nname = 'two'\nmatrix = 'a.mtx'\ndata = 'b.npy'\n\
                 [units]\ndata = {name}\nmodel = {name}\nmodel_quantity = {name}\n"
            ),
        );
        harmless(&place.expect(0, &format!("solve job.toml --out o{i}")));
        harmless(&place.expect(0, &format!("solve job.toml --json --out o{i}")));
        let record: Value = serde_json::from_str(
            &place.expect(0, &format!("solve job.toml --json --out o{i}")).out,
        )
        .unwrap();
        let read_back = record["blocks"][0]["name"].as_str().unwrap();
        assert_eq!(read_back, if i == 0 { NASTY } else { &long }, "JSON keeps the name itself");
        // A warning that shows a unit, and a refusal that shows a difference.
        place.vector("ones.npy", &cli_common::product(&sparse(30, 10, 1), &[1.0; 10]));
        place.write(
            "warn.toml",
            format!("matrix = 'a.mtx'\ndata = 'ones.npy'\n[units]\nmodel = {name}\n"),
        );
        let ran = place.expect(0, &format!("solve warn.toml --strength 1 --out w{i}"));
        assert!(ran.out.contains("--reference fit"));
        harmless(&ran);
        place.write("warn.toml", "matrix = 'a.mtx'\ndata = 'ones.npy'\n[units]\nmodel = 'm'\n");
        let ran = place.expect(2, &format!("solve warn.toml --strength 1 --out w{i}"));
        harmless(&ran);
        assert!(ran.err.len() < 2_000, "{} characters", ran.err.len());
    }
    // Keys and values at fault.
    for content in [
        format!("{nasty} = 1\n"),
        format!("method = {nasty}\n"),
        format!("time_limit = {nasty}\n"),
        format!("\"{long}\" = 1\n"),
        format!("method = \"{long}\"\n"),
        "matrix = 'a\u{1b}[31m'\n".to_string(),
        format!(
            "[grid]\naxes = [{nasty}]\nshape = [3]\nspacing = [1.0]\norigin = [0.0]\nunit = {nasty}\nfastest = {nasty}\n"
        ),
        format!(
            "[grid]\naxes = ['x']\nshape = [3]\nspacing = [1.0]\norigin = [0.0]\nunit = 'm'\nfastest = {nasty}\n"
        ),
    ] {
        let whole =
            format!("{content}\n").replace("[grid]", "matrix = 'a.mtx'\ndata = 'b.npy'\n[grid]");
        place.write("bad.toml", whole);
        let ran = place.expect(65, "solve bad.toml --strength 1 --out never");
        harmless(&ran);
        assert!(ran.err.len() < 3_000, "{} characters for {:.40}", ran.err.len(), content);
    }
    // Ids of rows that are at fault.
    for id in [format!("\"{}\"", NASTY.replace('"', "")), long.clone()] {
        let rest: String = (1..30).map(|i| format!("r{i}\n")).collect();
        place.write("rows.csv", format!("id\n{id}\n{rest}"));
        let mut data = normals(30, 2);
        data[0] = f64::NAN;
        place.vector("nan.npy", &data);
        let ran = place.expect(
            65,
            "solve --matrix a.mtx --data nan.npy --rows rows.csv --strength 1 --out never",
        );
        assert!(ran.err.contains("row 1 (id"), "{}", ran.err);
        harmless(&ran);
        assert!(ran.err.len() < 2_000, "{} characters", ran.err.len());
    }
}

#[test]
fn paths_and_arguments_reach_no_terminal_raw() {
    let place = Place::new();
    plain(&place);
    let name = "\u{1b}[31mred\u{9b}2J\nFAKE\u{202e}.mtx";
    std::fs::copy(place.path("a.mtx"), place.path(name)).unwrap();
    let list = |arguments: &[&str], code: i32| {
        let ran = place.run_list(arguments);
        assert_eq!(ran.code, code, "{}", ran.err);
        harmless(&ran);
    };
    let data = ["--data", "b.npy", "--strength", "1"];
    list(
        &[&["solve", "--matrix", name, "--out", name.trim_end_matches("mtx")], &data[..]].concat(),
        0,
    );
    list(
        &[&["solve", "--matrix", name, "--json", "--out", name.trim_end_matches("mtx")], &data[..]]
            .concat(),
        0,
    );
    // Its content changes: the refusal names the file.
    place.matrix(name, &sparse(30, 10, 5));
    list(
        &[&["solve", "--matrix", name, "--out", name.trim_end_matches("mtx")], &data[..]].concat(),
        2,
    );
    place.write(name, "rubbish");
    list(&[&["solve", "--matrix", name, "--out", "never"], &data[..]].concat(), 65);
    list(
        &[&["solve", "--matrix", "\u{1b}[2Jabsent\nFAKE", "--out", "never"], &data[..]].concat(),
        74,
    );
    list(&["solve", "\u{1b}[2Jabsent\nFAKE.toml"], 74);
    list(&["demo", "\u{1b}[2J\nFAKE"], 2);
    list(&["solve", "--method", "\u{1b}[2J\u{9b}1m\nFAKE"], 2);
    list(&["solve", "--\u{1b}[2J\u{9b}1m\nFAKE"], 2);
    list(&["\u{1b}[2J\u{9b}1m\nFAKE"], 2);
    list(&["solve", "--strength=\u{1b}[2J\u{9b}1m\nFAKE"], 2);
    list(
        &[&["solve", "--matrix", "a.mtx", "--uncertainty", "\u{1b}[2J\nFAKE%"], &data[..]].concat(),
        2,
    );
    let long = "x".repeat(10_000);
    for arguments in [["solve", "--method", &long], ["demo", &long, "--quiet"]] {
        let ran = place.run_list(&arguments);
        assert_eq!(ran.code, 2);
        assert!(ran.err.len() < 3_000, "{} characters", ran.err.len());
    }
}
