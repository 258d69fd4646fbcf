//! Running again: a finished, identical command prints its result; a different one is refused.

use std::path::Path;

use serde_json::Value;

use crate::base::Complaint;
use crate::base::complaint::quote;
use crate::files::Folder;
use crate::job::write::RESULTS;
use crate::job::{JobError, Settings};
use crate::report::record::InputRecord;

/// What a folder holds already.
pub enum Standing {
    /// Nothing, or an interrupted run of the same command, or anything with --force.
    Free,
    /// The finished record of the same settings and inputs.
    Same(Box<Value>),
}

/// Compares what is wanted with the record in the folder.
///
/// # Errors
/// A record of other settings or inputs (the message names the first differences), or one that
/// cannot be read.
pub fn standing(
    folder: &Folder,
    settings: &Settings,
    inputs: &[InputRecord],
) -> Result<Standing, JobError> {
    let refused = |cause: String| {
        let remedy = "name another folder with --out, or replace what is there with --force";
        Err(JobError::Usage(Complaint::new(cause, remedy).in_file(folder.path())))
    };
    refuse_own_inputs(folder, inputs)?;
    if settings.force {
        return Ok(Standing::Free);
    }
    let Some(content) = folder.read("summary.json")? else {
        // A run that was cut short leaves its log; anything else belongs to somebody.
        let foreign = RESULTS.iter().find(|name| folder.holds(name) && !folder.holds("log.jsonl"));
        return match foreign {
            Some(name) => refused(format!("the folder holds a {name} that no run has written")),
            None => Ok(Standing::Free),
        };
    };
    let Ok(record) = serde_json::from_slice::<Value>(&content) else {
        return refused("the folder holds a summary.json that is not a record".into());
    };
    // The same inputs make a system of the same size; other inputs are a difference anyway.
    let size = |key: &str| record.pointer(key).and_then(Value::as_u64).unwrap_or(0) as usize;
    let wanted = settings.resolved(size("/system/rows"), size("/system/columns"));
    let mut differences = Vec::new();
    let stated = record.get("settings").cloned().unwrap_or_default();
    let files = serde_json::to_value(inputs).expect("inputs are plain values");
    let before = record.get("inputs").cloned().unwrap_or_default();
    compare("", &by_name(stated, &before), &by_name(wanted, &files), &mut differences);
    if differences.is_empty() {
        compare_inputs(&before, &files, &mut differences);
    }
    let version = record.get("ellbow_version").and_then(Value::as_str).unwrap_or_default();
    if version != env!("CARGO_PKG_VERSION") {
        differences.push(format!("version {version:?}, now {:?}", env!("CARGO_PKG_VERSION")));
    }
    if differences.is_empty() {
        let interrupted = record.get("interrupted").and_then(Value::as_bool).unwrap_or(true);
        return Ok(if interrupted { Standing::Free } else { Standing::Same(Box::new(record)) });
    }
    differences.truncate(5);
    refused(format!("the folder holds a different run: {}", differences.join("; ")))
}

/// Results would replace a file that they are computed from: refused even when forced.
fn refuse_own_inputs(folder: &Folder, inputs: &[InputRecord]) -> Result<(), JobError> {
    let own = inputs.iter().find_map(|input| {
        let name = folder.name_of(Path::new(&input.path))?;
        (RESULTS.contains(&name.as_str()) || name == "log.jsonl").then_some(name)
    });
    match own {
        None => Ok(()),
        Some(name) => Err(JobError::Usage(
            Complaint::new(
                format!("the results would replace {name}, which is an input of this run"),
                "name another folder with --out",
            )
            .in_file(folder.path()),
        )),
    }
}

/// Settings with every input's path cut to its file name: the same files are the same run from
/// wherever it is started; what is in them is compared by checksum.
fn by_name(settings: Value, inputs: &Value) -> Value {
    match settings {
        Value::String(text) => {
            let listed = inputs.as_array().is_some_and(|list| {
                list.iter().any(|input| input.get("path").and_then(Value::as_str) == Some(&text))
            });
            let name = Path::new(&text).file_name().filter(|_| listed);
            Value::String(name.map_or(text.clone(), |name| name.to_string_lossy().into_owned()))
        }
        Value::Array(list) => {
            Value::Array(list.into_iter().map(|value| by_name(value, inputs)).collect())
        }
        Value::Object(map) => {
            Value::Object(map.into_iter().map(|(key, v)| (key, by_name(v, inputs))).collect())
        }
        other => other,
    }
}

/// Lists the keys at which two values differ.
fn compare(key: &str, before: &Value, now: &Value, differences: &mut Vec<String>) {
    match (before, now) {
        (Value::Object(before), Value::Object(now)) => {
            let mut keys: Vec<&String> = before.keys().chain(now.keys()).collect();
            keys.sort_unstable();
            keys.dedup();
            for name in keys {
                let below = if key.is_empty() { name.clone() } else { format!("{key}.{name}") };
                let at = |map: &serde_json::Map<String, Value>| {
                    map.get(name).cloned().unwrap_or(Value::Null)
                };
                compare(&below, &at(before), &at(now), differences);
            }
        }
        (Value::Array(before), Value::Array(now)) if before.len() == now.len() => {
            for (place, (before, now)) in before.iter().zip(now).enumerate() {
                compare(&format!("{key}[{place}]"), before, now, differences);
            }
        }
        (Value::Number(a), Value::Number(b)) if a.as_f64() == b.as_f64() => {}
        _ if before == now => {}
        _ => {
            let shown = |value: &Value| quote(value.to_string().as_bytes());
            differences.push(format!("{key} was {}, now {}", shown(before), shown(now)));
        }
    }
}

/// The files in order: equal settings name them in the same one.
fn compare_inputs(before: &Value, now: &Value, differences: &mut Vec<String>) {
    let list = |value: &Value| value.as_array().cloned().unwrap_or_default();
    let (before, now) = (list(before), list(now));
    let of = |value: &Value, key: &str| value.get(key).and_then(Value::as_str).map(str::to_owned);
    if before.len() != now.len() {
        differences.push(format!("it has {} input files, not {}", before.len(), now.len()));
    }
    for (earlier, file) in before.iter().zip(&now) {
        if of(earlier, "checksum") != of(file, "checksum") {
            let path = of(file, "path").unwrap_or_default();
            differences.push(format!("the content of {} changed", quote(path.as_bytes())));
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use serde_json::json;

    #[test]
    fn differences_name_their_key() {
        let mut differences = Vec::new();
        let before = json!({"a": 1.0, "b": {"c": "x", "d": [1, {"e": 2}]}});
        let now = json!({"a": 1, "b": {"c": "y", "d": [1, {"e": 3}]}, "e": true});
        compare("", &before, &now, &mut differences);
        assert_eq!(
            differences,
            ["b.c was \"x\", now \"y\"", "b.d[1].e was 2, now 3", "e was null, now true"]
        );
    }
}
