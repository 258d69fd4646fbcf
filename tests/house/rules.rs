//! The rules, each a function from a file to the breaches in it.

use crate::reading::{Source, tokens};

/// Most lines of a file, its tests apart.
const FILE_LINES_MAX: usize = 450;

/// Most lines of a function.
const FUNCTION_LINES_MAX: usize = 80;

/// What a room may use: the arrows of the design, spelt out. `None` for an unknown room.
///
/// cli ► batch ► job ► {report, choose, appraise, sweep, files}
/// {choose, appraise} ► sweep ► solve ► operator ► {kernel, team} ► base
/// files ► system ► operator
///
/// Two rooms get less than what stands below them: `choose` never sees the matrix, and `report`
/// sees records only.
pub fn uses(room: &str) -> Option<&'static [&'static str]> {
    Some(match room {
        "base" => &[],
        "kernel" | "team" => &["base"],
        "operator" => &["kernel", "team", "base"],
        "solve" | "system" => &["operator", "kernel", "team", "base"],
        "sweep" => &["solve", "operator", "kernel", "team", "base"],
        "choose" => &["sweep", "solve", "team", "base"],
        "appraise" => &["sweep", "solve", "operator", "kernel", "team", "base"],
        "files" => &["system", "operator", "kernel", "team", "base"],
        "report" => &["choose", "sweep", "system", "base"],
        "job" => &[
            "report", "choose", "appraise", "sweep", "files", "system", "solve", "operator",
            "kernel", "team", "base",
        ],
        "batch" => &[
            "job", "report", "choose", "appraise", "sweep", "files", "system", "solve", "operator",
            "kernel", "team", "base",
        ],
        "cli" => &[
            "batch", "job", "report", "choose", "appraise", "sweep", "files", "system", "solve",
            "operator", "kernel", "team", "base",
        ],
        _ => return None,
    })
}

/// Macros that the whole crate sees stand at its root; this is where they are written.
const MACROS: [(&str, &str); 1] = [("each_storage", "operator")];

/// All breaches in a file, each beginning with its place.
pub fn check(source: &Source) -> Vec<String> {
    [arrows, printing, disk, unsafe_code, lengths, float_order]
        .iter()
        .flat_map(|rule| rule(source))
        .map(|(line, fault)| format!("{}:{line}: {fault}", source.path))
        .collect()
}

type Breach = (usize, String);

fn arrows(source: &Source) -> Vec<Breach> {
    let Some(room) = source.room() else { return Vec::new() };
    let allowed = uses(&room).unwrap_or_default();
    source
        .reaches()
        .into_iter()
        .filter(|reach| {
            let written = MACROS.iter().find(|(name, _)| *name == reach.name);
            let of = written.map_or(reach.name.as_str(), |(_, room)| room);
            of != room && !allowed.contains(&of)
        })
        .map(|reach| (reach.line, format!("{room} may not use {}", reach.name)))
        .collect()
}

/// Only `cli` prints.
fn printing(source: &Source) -> Vec<Breach> {
    if source.room().as_deref() == Some("cli") {
        return Vec::new();
    }
    let words = ["print", "println", "eprint", "eprintln", "dbg", "stdout", "stderr"];
    let tokens = tokens(&source.code);
    let mut breaches = Vec::new();
    for (at, token) in tokens.iter().enumerate() {
        let next = tokens.get(at + 1).map_or("", |t| t.text.as_str());
        let stream = matches!(token.text.as_str(), "stdout" | "stderr");
        if words.contains(&token.text.as_str()) && (stream || next == "!") {
            breaches.push((token.line, format!("{} prints, outside cli", token.text)));
        }
    }
    breaches
}

/// Only `files` touches the disk.
fn disk(source: &Source) -> Vec<Breach> {
    // What the system says of this process's memory stands in /proc: no file of anyone's.
    let excepted = source.path == "base/memory.rs";
    if excepted || source.room().as_deref() == Some("files") {
        return Vec::new();
    }
    let modules = ["fs", "OpenOptions", "tempfile", "memmap2", "Mmap"];
    let methods = [
        "exists",
        "try_exists",
        "is_dir",
        "is_file",
        "canonicalize",
        "metadata",
        "read_dir",
        "read_link",
        "symlink_metadata",
    ];
    let tokens = tokens(&source.code);
    let mut breaches = Vec::new();
    for (at, token) in tokens.iter().enumerate() {
        let word = token.text.as_str();
        let called = at > 0 && tokens[at - 1].text == "." && methods.contains(&word);
        // Not a variant of the same name, such as an error's.
        let opened = word == "File"
            && tokens.get(at + 1).is_some_and(|t| t.text == "::")
            && (at == 0 || tokens[at - 1].text != "::");
        if called || opened || modules.contains(&word) {
            breaches.push((token.line, format!("{word} touches the disk, outside files")));
        }
    }
    breaches
}

/// Unsafe code only in `files` (mapping) and `kernel` (vector instructions), each with its reason.
fn unsafe_code(source: &Source) -> Vec<Breach> {
    let allowed = matches!(source.room().as_deref(), Some("files" | "kernel"));
    let mut breaches = Vec::new();
    for token in tokens(&source.code) {
        let loosened = token.text == "unsafe_code" && source.path != "lib.rs";
        if (token.text == "unsafe" || loosened) && !allowed {
            breaches.push((token.line, "unsafe code, outside files and kernel".into()));
        }
        if token.text == "unsafe" && allowed && !reasoned(source, token.line) {
            breaches.push((token.line, "unsafe without a SAFETY comment above".into()));
        }
    }
    breaches
}

/// Whether the comment lines and attributes right above a line hold the word.
fn reasoned(source: &Source, line: usize) -> bool {
    source.written[..line - 1]
        .iter()
        .rev()
        .take_while(|text| {
            let text = text.trim_start();
            text.starts_with("//") || text.starts_with("#[")
        })
        .any(|text| {
            let text = text.to_ascii_lowercase();
            text.contains("safety:") || text.contains("# safety")
        })
}

fn lengths(source: &Source) -> Vec<Breach> {
    let mut breaches = Vec::new();
    let lines = source.lines_without_tests();
    if lines > FILE_LINES_MAX {
        breaches.push((lines, format!("{lines} lines, at most {FILE_LINES_MAX}")));
    }
    for function in source.functions() {
        if function.lines > FUNCTION_LINES_MAX {
            let fault = format!(
                "{} has {} lines, at most {FUNCTION_LINES_MAX}",
                function.name, function.lines
            );
            breaches.push((function.line, fault));
        }
    }
    breaches
}

/// Parallel sums and reductions have no fixed order: a statement that begins a parallel iterator
/// may not end in one.
fn float_order(source: &Source) -> Vec<Breach> {
    let tokens = tokens(&source.code);
    let mut breaches = Vec::new();
    for (at, token) in tokens.iter().enumerate() {
        if !token.text.starts_with("par_") && token.text != "into_par_iter" {
            continue;
        }
        let mut depth = 0i32;
        for pair in tokens[at..].windows(2) {
            match pair[0].text.as_str() {
                "(" | "[" | "{" => depth += 1,
                ")" | "]" | "}" => depth -= 1,
                ";" if depth == 0 => break,
                // What follows is no longer parallel.
                "collect" | "into_iter" | "iter" if depth == 0 => break,
                "." if depth == 0
                    && matches!(
                        pair[1].text.as_str(),
                        "sum" | "product" | "reduce" | "fold" | "reduce_with"
                    ) =>
                {
                    breaches.push((
                        pair[1].line,
                        format!("parallel {} has no fixed order", pair[1].text),
                    ));
                }
                _ => {}
            }
            if depth < 0 {
                break;
            }
        }
    }
    breaches
}
