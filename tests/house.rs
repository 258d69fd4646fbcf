//! Keeps the house in order: who uses whom, who prints, who touches the disk, what may be unsafe,
//! how long files and functions are. Each rule is also shown to find a planted breach.

#[path = "house/reading.rs"]
mod reading;
#[path = "house/rules.rs"]
mod rules;

use std::fs;
use std::path::{Path, PathBuf};

use reading::Source;
use rules::check;

/// Every source file, by its path below `src/`.
fn sources() -> Vec<Source> {
    let root = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let mut paths = Vec::new();
    walk(&root, &mut paths);
    paths.sort();
    paths
        .iter()
        .map(|path| {
            let below = path.strip_prefix(&root).unwrap().to_str().unwrap().replace('\\', "/");
            Source::new(&below, &fs::read_to_string(path).unwrap())
        })
        .collect()
}

fn walk(folder: &Path, paths: &mut Vec<PathBuf>) {
    for entry in fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        if path.is_dir() {
            walk(&path, paths);
        } else if path.extension().is_some_and(|e| e == "rs") {
            paths.push(path);
        }
    }
}

#[test]
fn the_house_is_in_order() {
    let sources = sources();
    assert!(sources.len() > 60, "the walk finds the house");
    let breaches: Vec<String> = sources.iter().flat_map(check).collect();
    assert!(breaches.is_empty(), "{}\n", breaches.join("\n"));
}

#[test]
fn main_only_starts() {
    let sources = sources();
    let main = sources.iter().find(|source| source.path == "main.rs").unwrap();
    assert!(main.lines_without_tests() < 60);
}

#[test]
fn every_room_has_a_place_in_the_order() {
    let mut rooms: Vec<String> = sources().iter().filter_map(Source::room).collect();
    rooms.sort();
    rooms.dedup();
    for room in &rooms {
        assert!(rules::uses(room).is_some(), "{room} stands nowhere in the arrows");
    }
    // The arrows have no circle, and whoever may use a room may use what stands below it,
    // apart from the two that see records only.
    for room in &rooms {
        for below in rules::uses(room).unwrap() {
            assert!(!rules::uses(below).unwrap().contains(&room.as_str()), "{room} and {below}");
            if !["choose", "report"].contains(&room.as_str()) {
                for further in rules::uses(below).unwrap() {
                    assert!(
                        rules::uses(room).unwrap().contains(further),
                        "{room}, {below}, {further}"
                    );
                }
            }
        }
    }
}

/// Breaches that must be found, one of each kind and in every disguise.
#[test]
fn planted_breaches_are_found() {
    let long_body = "    let x = 1;\n".repeat(81);
    for (path, text, word) in [
        ("solve/a.rs", "use crate::files::Folder;\n".to_string(), "files"),
        ("solve/a.rs", "use crate::{base::sums, system::System};\n".into(), "system"),
        ("solve/a.rs", "use crate::{\n    base::sums,\n    system::{self, System},\n};\n".into(), "system"),
        ("solve/a.rs", "fn f() { crate::job::conduct(); }\n".into(), "job"),
        ("solve/a.rs", "fn f() { let x: Vec<crate::sweep::Plan> = vec![]; }\n".into(), "sweep"),
        ("solve/a.rs", "macro_rules! m { () => { $crate::system::System } }\n".into(), "system"),
        ("solve/a.rs", "use super::super::system::System;\n".into(), "system"),
        ("solve/mod.rs", "use super::system::System;\n".into(), "system"),
        ("solve/deep/a.rs", "use super::super::super::{base, files};\n".into(), "files"),
        ("solve/a.rs", "pub use crate :: sweep :: Plan;\n".into(), "sweep"),
        ("solve/a.rs", "use crate::*;\n".into(), "everything"),
        ("solve/a.rs", "use crate as root;\n".into(), "renamed"),
        ("solve/a.rs", "use ellbow::job;\n".into(), "job"),
        ("choose/a.rs", "use crate::operator::Operator;\n".into(), "operator"),
        ("choose/a.rs", "use crate::kernel::pass;\n".into(), "kernel"),
        ("report/page.rs", "use crate::solve::Solved;\n".into(), "solve"),
        ("files/a.rs", "use crate::job::Typed;\n".into(), "job"),
        ("base/a.rs", "use crate::team::Threads;\n".into(), "team"),
        ("kernel/a.rs", "use crate::operator::StoredRows;\n".into(), "operator"),
        ("job/a.rs", "use crate::cli::say;\n".into(), "cli"),
        ("job/a.rs", "use crate::attic::Box;\n".into(), "attic"),
        ("job/a.rs", "fn f() { println!(\"x\"); }\n".into(), "prints"),
        ("job/a.rs", "fn f() { dbg!(1); }\n".into(), "prints"),
        ("solve/a.rs", "fn f() { let _ = std::io::stderr().lock(); }\n".into(), "prints"),
        ("solve/a.rs", "use std::io::stdout;\n".into(), "prints"),
        ("job/a.rs", "use std::fs;\n".into(), "disk"),
        ("job/a.rs", "use std::{io, fs::read};\n".into(), "disk"),
        ("job/a.rs", "fn f() { std::fs::read(\"x\"); }\n".into(), "disk"),
        ("job/a.rs", "fn f() { File::open(\"x\"); }\n".into(), "disk"),
        ("job/a.rs", "fn f(p: &Path) -> bool { p.exists() }\n".into(), "disk"),
        ("job/a.rs", "use tempfile::NamedTempFile;\n".into(), "disk"),
        ("base/other.rs", "fn f() { std::fs::read(\"/proc/self/status\"); }\n".into(), "disk"),
        ("solve/a.rs", "// SAFETY: fine.\nfn f() { unsafe { g() } }\n".into(), "unsafe"),
        ("files/a.rs", "fn f() { unsafe { g() } }\n".into(), "SAFETY"),
        ("files/a.rs", "#[allow(unsafe_code)]\nunsafe impl Send for X {}\n".into(), "SAFETY"),
        ("solve/a.rs", "#[allow(unsafe_code)]\nfn f() {}\n".into(), "unsafe"),
        ("solve/a.rs", "// x\n".repeat(451), "lines"),
        ("solve/a.rs", format!("fn long() {{\n{long_body}}}\n"), "long"),
        ("solve/a.rs", "fn f(v: &[f64]) -> f64 { v.par_iter().sum() }\n".into(), "order"),
        ("solve/a.rs", "fn f(v: &[f64]) -> f64 {\n    v.par_iter()\n        .map(|x| x * x)\n        .reduce(|| 0.0, |a, b| a + b)\n}\n".into(), "order"),
    ] {
        let found = check(&Source::new(path, &text));
        assert!(
            found.iter().any(|breach| breach.contains(word) && breach.starts_with(path)),
            "{path}: {word} not found in {text:?}: {found:?}"
        );
    }
}

#[test]
fn what_is_allowed_is_not_accused() {
    for (path, text) in [
        (
            "solve/a.rs",
            "use crate::{base::sums, operator::{self, Operator}};\nuse super::stop::Stop;\n",
        ),
        (
            "solve/a.rs",
            "// use crate::files::Folder; println!()\n/* std::fs */\nconst S: &str = \"crate::files\";\n",
        ),
        ("solve/a.rs", "/// Unlike [`crate::files`] this prints nothing: `println!`.\nfn f() {}\n"),
        (
            "solve/a.rs",
            "const S: &str = r#\"use crate::job; \" std::fs \"#;\nconst C: char = '\"';\nfn f<'a>(x: &'a str) {}\n",
        ),
        ("solve/a.rs", "pub(crate) fn f() {}\npub(super) fn g() {}\n"),
        (
            "solve/a.rs",
            "#[cfg(test)]\nmod tests {\n    use crate::job::Typed;\n    fn f() { println!(\"{}\", std::fs::read(\"x\")); }\n}\n",
        ),
        (
            "cli/a.rs",
            "fn f() { println!(\"x\"); }\nuse crate::job::conduct;\nuse crate::solve::Watch;\n",
        ),
        (
            "files/a.rs",
            "#[allow(unsafe_code)]\nfn f() {\n    // SAFETY: the file is ours.\n    unsafe { g() }\n}\nuse std::fs;\n",
        ),
        ("base/memory.rs", "fn f() { std::fs::read_to_string(\"/proc/self/status\"); }\n"),
        ("files/deep/a.rs", "use super::super::FileError;\nuse super::walk;\n"),
        (
            "solve/a.rs",
            "fn f(v: &[f64]) -> Vec<f64> { v.par_iter().map(|x| 2.0 * x).collect() }\nfn g(v: &[f64]) -> f64 { v.iter().sum() }\n",
        ),
    ] {
        let found = check(&Source::new(path, text));
        assert!(found.is_empty(), "{path}: {found:?} in {text:?}");
    }
}
