//! Whether rows that say in their id which unknowns they join do join those.
//!
//! In networks an id often names its stations (`P03-P07`). If the ids name the *neighbours* of
//! the columns that have entries, and not those columns, the index is one off. Applies only if
//! under the shift nearly all entries (0.9) are named, which unrelated ids never reach; and as
//! stated at most half are, since consistent ids would name them all.

use super::{Finding, Kind, Severity};
use crate::system::System;

const NAMED_MIN: f64 = 0.9;
const NAMED_AS_STATED_MAX: f64 = 0.5;
/// Longer rows join no stations.
const ENTRIES_MAX: usize = 8;
const ROWS_MAX: usize = 2000;
const PAIRS_MIN: usize = 10;

pub(super) fn find(system: &System) -> Option<Finding> {
    let ids = system.rows.ids.as_ref()?;
    let names = system.columns.names.as_ref()?;
    let step = ids.len().div_ceil(ROWS_MAX).max(1);
    let mut pairs = 0;
    let mut named = [0usize; 3];
    for i in (0..ids.len()).step_by(step) {
        let row = system.matrix.row(i);
        if row.entries().nth(ENTRIES_MAX).is_some() {
            continue;
        }
        for (j, _) in row.entries() {
            pairs += 1;
            for (count, shift) in named.iter_mut().zip([names.len() - 1, 0, 1]) {
                let name = &names[(j + shift) % names.len()];
                *count += usize::from(names_it(&ids[i], name));
            }
        }
    }
    let share = |count: usize| count as f64 / pairs.max(1) as f64;
    let (count, sign) = if named[0] > named[2] { (named[0], 1) } else { (named[2], -1) };
    let told =
        pairs >= PAIRS_MIN && share(count) >= NAMED_MIN && share(named[1]) <= NAMED_AS_STATED_MAX;
    told.then(|| shifted(sign, share(named[1]), share(count)))
}

fn shifted(sign: i32, stated: f64, repaired: f64) -> Finding {
    let way = if sign > 0 { "higher" } else { "lower" };
    let sentence = format!(
        "The rows' ids name the unknowns one column away: the matrix's column numbers are one {way} than the ids say."
    );
    let remedy = "check whether columns are counted from 0 or from 1 where the matrix is written";
    Finding::new(Kind::IndexShift, Severity::Fault, sentence, remedy)
        .with("share of entries whose column the id names", stated)
        .with("the same with columns moved by one", repaired)
}

/// Whether `name` stands in `id` as a word of its own.
fn names_it(id: &str, name: &str) -> bool {
    let is_edge = |c: Option<char>| c.is_none_or(|c| !c.is_alphanumeric());
    !name.is_empty()
        && id.match_indices(name).any(|(place, _)| {
            is_edge(id[..place].chars().next_back())
                && is_edge(id[place + name.len()..].chars().next())
        })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_name_counts_only_as_a_whole_word() {
        assert!(names_it("P1-P12 b", "P12"));
        assert!(names_it("P1", "P1"));
        assert!(!names_it("P12-P3", "P1"));
        assert!(!names_it("P12", ""));
    }
}
