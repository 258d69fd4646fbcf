//! Data that repeat where noise would not let them: dead detectors and copied rows.
//!
//! Chance is taken from the data themselves. For a dead detector, p is the share of neighbouring
//! data that are equal outside the classes under suspicion (Laplace's (e+1)/(n+2), so never 0);
//! a class of g equal data among c classes is named if c·p^(g−1) < 0.01, i.e. if one system in a
//! hundred would show it by chance. Rounded data, and data that are 0 for good reasons over a
//! large part of the rows, have a large p and are left alone.
//!
//! For copied rows, p is the chance that two measurements of the same thing give the same datum:
//! q/(2√π σ) for data rounded to steps of q with noise σ. Copies are named if there are three
//! and more than five standard deviations above what that predicts.

use std::collections::BTreeMap;

use super::{Finding, Kind, Severity};
use crate::base::complaint::escape;
use crate::system::{Facts, System};

const CHANCE_MAX: f64 = 0.01;
const CLASS_MIN: usize = 3;
const COPIES_MIN: usize = 3;

pub(super) fn find(system: &System, facts: &Facts) -> Vec<Finding> {
    let mut found: Vec<Finding> =
        (0..facts.data_sets).find_map(|set| dead(system, facts, set)).into_iter().collect();
    found.extend(copied(system, facts));
    found
}

/// Rows that share something, e.g. a detector.
struct Class {
    name: String,
    rows: Vec<usize>,
}

fn dead(system: &System, facts: &Facts, set: usize) -> Option<Finding> {
    // A row without entries has a finding of its own.
    let counts = |i: usize| system.included(i, set) && facts.row.count[i] > 0;
    let datum = |i: usize| system.data[[i, set]];
    let mut classes = classes(system);
    for class in &mut classes {
        class.rows.retain(|&i| counts(i));
    }
    classes.retain(|class| class.rows.len() >= CLASS_MIN);
    let mut class_count = classes.len();
    let still = |class: &Class| class.rows.iter().all(|&i| datum(i) == datum(class.rows[0]));
    let mut suspects: Vec<Class> = classes.into_iter().filter(|class| still(class)).collect();
    let rows: Vec<usize> = (0..facts.rows).filter(|&i| counts(i)).collect();
    if let Some(run) = longest_run(&rows, &datum) {
        suspects.push(run);
        class_count += rows.len();
    }
    let mut suspected = vec![false; facts.rows];
    suspects.iter().flat_map(|class| &class.rows).for_each(|&i| suspected[i] = true);
    let pairs = || rows.windows(2).filter(|p| !suspected[p[0]] && !suspected[p[1]]);
    let equal = pairs().filter(|pair| datum(pair[0]) == datum(pair[1])).count();
    let chance_of_two = (equal + 1) as f64 / (pairs().count() + 2) as f64;
    let chance =
        |class: &Class| class_count as f64 * chance_of_two.powi(class.rows.len() as i32 - 1);
    let worst = suspects
        .into_iter()
        .filter(|class| chance(class) < CHANCE_MAX)
        .max_by_key(|class| class.rows.len())?;
    let value = datum(worst.rows[0]);
    let sentence = format!(
        "All {} data of {} are exactly {value} {}: a detector that does not answer, or values filled in.",
        worst.rows.len(),
        worst.name,
        system.units.data
    );
    let remedy = "leave these rows out (use = 0 in the rows table), or mark the data NaN and use `--missing nan`";
    Some(
        Finding::new(Kind::DeadDetector, Severity::Fault, sentence, remedy)
            .with("data that are all equal", worst.rows.len() as f64)
            .with("such classes expected by chance", chance(&worst))
            .at(worst.rows.iter().map(|&i| system.row_name(i))),
    )
}

/// All classes the rows table knows: groups, equal places in the order, and other columns.
fn classes(system: &System) -> Vec<Class> {
    let table = &system.rows;
    let mut classes = Vec::new();
    if let Some(groups) = &table.groups {
        let mut members: BTreeMap<u32, Vec<usize>> = BTreeMap::new();
        groups.iter().enumerate().for_each(|(i, &g)| members.entry(g).or_default().push(i));
        classes.extend(members.into_values().map(|rows| {
            let name =
                format!("group \"{}\"", escape(system.rows.group_name(rows[0]).unwrap_or("")));
            Class { name, rows }
        }));
    }
    if let Some(order) = &table.order {
        let mut members: BTreeMap<u64, Vec<usize>> = BTreeMap::new();
        order.iter().enumerate().for_each(|(i, v)| members.entry(v.to_bits()).or_default().push(i));
        classes.extend(
            members
                .into_values()
                .map(|rows| Class { name: format!("order {}", order[rows[0]]), rows }),
        );
    }
    for (heading, values) in &table.others {
        let mut members: BTreeMap<&str, Vec<usize>> = BTreeMap::new();
        values.iter().enumerate().for_each(|(i, v)| members.entry(v).or_default().push(i));
        classes.extend(members.into_iter().map(|(value, rows)| Class {
            name: format!("{} \"{}\"", escape(heading), escape(value)),
            rows,
        }));
    }
    classes
}

fn longest_run(rows: &[usize], datum: &impl Fn(usize) -> f64) -> Option<Class> {
    let run = rows
        .chunk_by(|&a, &b| datum(a) == datum(b))
        .max_by_key(|run| run.len())
        .filter(|run| run.len() > CLASS_MIN)?;
    let name = format!("rows {} to {}", run[0] + 1, run[run.len() - 1] + 1);
    Some(Class { name, rows: run.to_vec() })
}

fn copied(system: &System, facts: &Facts) -> Option<Finding> {
    let counts = |i: &usize| (0..facts.data_sets).any(|set| system.included(*i, set));
    let copies: Vec<usize> = facts
        .duplicate_rows
        .iter()
        .flat_map(|class| &class.copies)
        .copied()
        .filter(counts)
        .collect();
    let repeats: usize = facts.duplicate_rows.iter().map(|class| class.rows.len() - 1).sum();
    let expected: f64 = repeats as f64 * chance_of_equal_data(system);
    if copies.len() < COPIES_MIN || (copies.len() as f64) < expected + 5.0 * expected.sqrt() {
        return None;
    }
    let sentence = format!(
        "{} rows are there a second time with exactly the same data: copied rather than measured again, they count twice.",
        copies.len()
    );
    let remedy = "remove the copies, or leave them out (use = 0 in the rows table); they make errors look smaller than they are";
    Some(
        Finding::new(Kind::DuplicatedRows, Severity::Fault, sentence, remedy)
            .with("copied rows", copies.len() as f64)
            .with("equal data expected of true repeats", expected)
            .at(copies.iter().map(|&i| system.row_name(i))),
    )
}

/// Chance that a repeated measurement gives the same datum, from the smallest step between data
/// and the median σ; without σ, steps alone: the share of distinct data that are missing.
fn chance_of_equal_data(system: &System) -> f64 {
    let mut data: Vec<f64> = system.data.column(0).to_vec();
    data.sort_unstable_by(f64::total_cmp);
    let all = data.len();
    data.dedup();
    let step = data.windows(2).map(|pair| pair[1] - pair[0]).fold(f64::INFINITY, f64::min);
    match &system.uncertainty {
        Some(sigma) => {
            let mut sigma: Vec<f64> = sigma.column(0).to_vec();
            sigma.sort_unstable_by(f64::total_cmp);
            let sigma = crate::system::spread::middle(&sigma);
            (step / (2.0 * std::f64::consts::PI.sqrt() * sigma)).min(1.0)
        }
        // Half of the data at most are the copies themselves.
        None => (1.0 - 2.0 * data.len() as f64 / all as f64).max(0.0),
    }
}
