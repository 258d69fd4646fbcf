//! What the rows see and what they do not: worth knowing, seldom wrong.
//!
//! Data in rows without entries stay in the residual whatever the model; from one part in a
//! hundred of ‖Wb‖² they bend every choice of strength, and are a caution.

use super::{Finding, Kind, Severity};
use crate::system::{Facts, System};

const UNEXPLAINABLE_CAUTION: f64 = 0.01;
/// Column norms beyond this spread make solvers scale columns by themselves.
const SCALING_NOTE: f64 = 100.0;

pub(super) fn find(system: &System, facts: &Facts) -> Vec<Finding> {
    let mut found = Vec::new();
    found.extend(unexplainable(system, facts));
    found.extend(empty_columns(system, facts));
    found.extend(equal_columns(system, facts));
    found.extend(repeated_rows(system, facts));
    found.extend(scaling(facts));
    found
}

fn unexplainable(system: &System, facts: &Facts) -> Option<Finding> {
    let rows = &facts.unexplainable_rows;
    let share = facts.sets.iter().map(|set| set.unexplainable_share).fold(0.0, f64::max);
    if rows.is_empty() {
        return None;
    }
    let severity = if share >= UNEXPLAINABLE_CAUTION { Severity::Caution } else { Severity::Note };
    let sentence = format!(
        "{} without entries in the matrix {} data that cannot be explained by any model.",
        counted(rows.len(), "row"),
        if rows.len() == 1 { "has" } else { "have" }
    );
    let remedy = "check that these measurements cross the model; leave them out otherwise";
    Some(
        Finding::new(Kind::UnexplainableRows, severity, sentence, remedy)
            .with("largest share of the weighted data's square", share)
            .at(rows.iter().map(|&i| system.row_name(i))),
    )
}

fn empty_columns(system: &System, facts: &Facts) -> Option<Finding> {
    let columns = &facts.empty_columns;
    if columns.is_empty() {
        return None;
    }
    let sentence = format!(
        "{} of {} unknowns are seen by no row: the data say nothing about them.",
        columns.len(),
        facts.columns
    );
    let remedy = "none needed; a model shows the reference there, not a finding";
    Some(
        Finding::new(Kind::EmptyColumns, Severity::Note, sentence, remedy)
            .with("unknowns without a row", columns.len() as f64)
            .at(columns.iter().map(|&j| system.column_name(j))),
    )
}

fn equal_columns(system: &System, facts: &Facts) -> Option<Finding> {
    let classes = &facts.duplicate_columns;
    let members: usize = classes.iter().map(Vec::len).sum();
    if classes.is_empty() {
        return None;
    }
    let sentence = format!(
        "{members} unknowns form {} within which all rows see them alike: the data cannot tell them apart.",
        counted_groups(classes.len())
    );
    let remedy = "none needed; merge such unknowns, or read only their sum";
    Some(
        Finding::new(Kind::EqualColumns, Severity::Note, sentence, remedy)
            .with("unknowns that share a column", members as f64)
            .at(classes.iter().map(|class| {
                class.iter().take(3).map(|&j| system.column_name(j)).collect::<Vec<_>>().join(" = ")
            })),
    )
}

fn repeated_rows(system: &System, facts: &Facts) -> Option<Finding> {
    let repeats: usize = facts.duplicate_rows.iter().map(|class| class.rows.len() - 1).sum();
    if repeats == 0 {
        return None;
    }
    let sentence = format!("{} of the matrix repeat an earlier one.", counted(repeats, "row"));
    let remedy = "none needed if they were measured again; folds should keep repeats together";
    Some(
        Finding::new(Kind::RepeatedRows, Severity::Note, sentence, remedy)
            .with("rows that repeat an earlier one", repeats as f64)
            .at(facts.duplicate_rows.iter().map(|class| system.row_name(class.rows[1]))),
    )
}

fn scaling(facts: &Facts) -> Option<Finding> {
    let norms = facts.column.square_sum.iter().map(|square| square.sqrt());
    let ratio = crate::system::facts::Spread::of(norms).ratio();
    if ratio <= SCALING_NOTE {
        return None;
    }
    let sentence = "The columns of the matrix differ widely in size.".to_string();
    let remedy = "none needed: solvers scale columns by themselves where it helps, without changing the solution";
    Some(
        Finding::new(Kind::ColumnScaling, Severity::Note, sentence, remedy)
            .with("largest column norm over the smallest", ratio),
    )
}

fn counted(count: usize, noun: &str) -> String {
    if count == 1 { format!("1 {noun}") } else { format!("{count} {noun}s") }
}

fn counted_groups(count: usize) -> String {
    if count == 1 { "a group".into() } else { format!("{count} groups") }
}
