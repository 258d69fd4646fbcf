//! Running again: a finished, identical command prints its result; a different one is refused.

use serde_json::Value;

use crate::base::Complaint;
use crate::base::complaint::quote;
use crate::files::Folder;
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
    let Some(content) = folder.read("summary.json")? else {
        return Ok(Standing::Free);
    };
    if settings.force {
        return Ok(Standing::Free);
    }
    let refused = |cause: String| {
        let remedy = "name another folder with --out, or replace what is there with --force";
        Err(JobError::Usage(Complaint::new(cause, remedy).in_file(folder.path())))
    };
    let Ok(record) = serde_json::from_slice::<Value>(&content) else {
        return refused("the folder holds a summary.json that is not a record".into());
    };
    // The same inputs make a system of the same size; other inputs are a difference anyway.
    let size = |key: &str| record.pointer(key).and_then(Value::as_u64).unwrap_or(0) as usize;
    let wanted = settings.resolved(size("/system/rows"), size("/system/columns"));
    let mut differences = Vec::new();
    let stated = record.get("settings").cloned().unwrap_or_default();
    compare("", &stated, &wanted, &mut differences);
    let files = serde_json::to_value(inputs).expect("inputs are plain values");
    compare_inputs(record.get("inputs").unwrap_or(&Value::Null), &files, &mut differences);
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

fn compare_inputs(before: &Value, now: &Value, differences: &mut Vec<String>) {
    let list = |value: &Value| value.as_array().cloned().unwrap_or_default();
    let (before, now) = (list(before), list(now));
    let of = |value: &Value, key: &str| value.get(key).and_then(Value::as_str).map(str::to_owned);
    for file in &now {
        let path = of(file, "path");
        let earlier = before.iter().find(|other| of(other, "path") == path);
        // A file that was not used before shows in the settings.
        if earlier.is_some_and(|earlier| of(earlier, "checksum") != of(file, "checksum")) {
            let path = path.unwrap_or_default();
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
