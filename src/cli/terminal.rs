//! The only place that prints. Whatever a name, a path or a message holds, no character that
//! steers a terminal or reorders text leaves raw.

use std::ffi::OsString;
use std::io::Write;

use serde_json::Value;

use crate::base::complaint::{escape, quote};

/// A message, to stderr. A closed stderr is no reason to fail.
pub(super) fn say(text: &str) {
    let _ = writeln!(std::io::stderr().lock(), "{}", lines_escaped(text));
}

/// A result, to stdout. A reader that closed the pipe has seen enough.
pub(super) fn print(text: &str) {
    let mut out = std::io::stdout().lock();
    let _ = out.write_all(lines_escaped(text).as_bytes()).and_then(|()| out.flush());
}

/// A record, to stdout, as JSON.
pub(super) fn print_json(record: &Value) {
    let mut out = std::io::stdout().lock();
    let text = json_escaped(&format!("{record:#}\n"));
    let _ = out.write_all(text.as_bytes()).and_then(|()| out.flush());
}

/// What the parser says of the arguments: help, a version, or a fault in them. The parser repeats
/// arguments as they are; where one could steer a terminal, or is longer than a message should
/// be, it gets to see them quoted.
pub(super) fn print_parsed(
    error: &clap::Error,
    arguments: &[OsString],
    parse: impl FnOnce(Vec<OsString>) -> Result<(), clap::Error>,
) {
    let quoted: Vec<OsString> =
        arguments.iter().map(|text| quote(text.to_string_lossy().as_bytes()).into()).collect();
    if quoted == arguments {
        let _ = error.print();
    } else if let Err(error) = parse(quoted) {
        let _ = error.print();
    } else {
        say("error: an argument is not understood");
    }
}

/// Line feeds are ours: what comes from a user is escaped where it enters a message.
fn lines_escaped(text: &str) -> String {
    text.split('\n').map(escape).collect::<Vec<_>>().join("\n")
}

/// JSON leaves DEL, C1 and reordering characters as they are; they mean the same escaped.
fn json_escaped(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    let mut buffer = [0; 4];
    for c in text.chars() {
        let plain: &str = c.encode_utf8(&mut buffer);
        if c == '\n' || escape(plain) == plain {
            out.push(c);
        } else {
            out.push_str(&format!("\\u{:04x}", u32::from(c)));
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_that_steers_is_left_and_json_means_the_same() {
        let nasty = "a\u{1b}[31m\u{9b}2J\u{7f}\r\u{202e}é\n";
        assert_eq!(lines_escaped(nasty), "a\\u{1b}[31m\\u{9b}2J\\u{7f}\\r\\u{202e}é\n");
        let value = Value::from(nasty);
        let text = json_escaped(&value.to_string());
        assert!(text.chars().all(|c| !c.is_control() && c != '\u{202e}'), "{text:?}");
        assert_eq!(serde_json::from_str::<Value>(&text).unwrap(), value);
    }
}
