//! A column far out of scale with its peers: one unknown in other units.
//!
//! The size of a column's entries is their contraharmonic mean Σ a²/Σ |a|, which a few grazing
//! hits do not pull down. Peers are the columns of the same kind. A column is named if its size
//! is ten times (or a tenth of) the median of its peers, six robust standard deviations away, and
//! a factor 5 from the nearest peer that is not itself named: sizes that vary smoothly, as those of
//! a kernel that decays with depth do, have no such gap. Few columns (one in fifty) can be in
//! other units than the rest; more are a family of their own. A column that is too small needs
//! eight hits, since one or two rays may just graze a cell.

use super::{Finding, Kind, Severity, number};
use crate::system::spread::middle;
use crate::system::{Facts, System};

const OFF_MIN: f64 = 10.0;
const DEVIATIONS_MIN: f64 = 6.0;
const GAP_MIN: f64 = 5.0;
const PEERS_MIN: usize = 8;
const PEERS_FOR_ONE: usize = 50;
const HITS_OF_SMALL_MIN: u32 = 8;

pub(super) fn find(system: &System, facts: &Facts) -> Vec<Finding> {
    kinds(system).into_iter().filter_map(|columns| among_peers(system, facts, &columns)).collect()
}

/// Columns with entries, by kind, kinds in the order of their first column.
fn kinds(system: &System) -> Vec<Vec<usize>> {
    let all = 0..system.matrix.columns();
    let Some(kinds) = &system.columns.kinds else { return vec![all.collect()] };
    let mut of_kind: Vec<(&str, Vec<usize>)> = Vec::new();
    for j in all {
        match of_kind.iter_mut().find(|(kind, _)| *kind == kinds[j]) {
            Some((_, columns)) => columns.push(j),
            None => of_kind.push((&kinds[j], vec![j])),
        }
    }
    of_kind.into_iter().map(|(_, columns)| columns).collect()
}

fn among_peers(system: &System, facts: &Facts, columns: &[usize]) -> Option<Finding> {
    let size = |j: usize| (facts.column.square_sum[j] / facts.column.absolute_sum[j]).ln();
    let mut sizes: Vec<(f64, usize)> = columns
        .iter()
        .filter(|&&j| facts.column.count[j] > 0)
        .map(|&j| (size(j), j))
        .filter(|(size, _)| size.is_finite())
        .collect();
    if sizes.len() < PEERS_MIN {
        return None;
    }
    sizes.sort_unstable_by(|a, b| a.0.total_cmp(&b.0).then(a.1.cmp(&b.1)));
    let logs: Vec<f64> = sizes.iter().map(|&(log, _)| log).collect();
    let median = middle(&logs);
    let mut away: Vec<f64> = logs.iter().map(|log| (log - median).abs()).collect();
    away.sort_unstable_by(f64::total_cmp);
    let bound = OFF_MIN.ln().max(DEVIATIONS_MIN * 1.4826 * middle(&away));
    let is_off = |&(log, j): &(f64, usize)| {
        let hits = facts.column.count[j];
        log - median >= bound || (median - log >= bound && hits >= HITS_OF_SMALL_MIN)
    };
    let off: Vec<(f64, usize)> = sizes.iter().copied().filter(|entry| is_off(entry)).collect();
    sizes.retain(|entry| !is_off(entry));
    let gap =
        |log: f64| sizes.iter().map(|(peer, _)| (peer - log).abs()).fold(f64::INFINITY, f64::min);
    let apart = off.iter().all(|&(log, _)| gap(log) >= GAP_MIN.ln());
    if off.is_empty() || !apart || off.len() > (columns.len() / PEERS_FOR_ONE).max(1) {
        return None;
    }
    let factor = (off[0].0 - median).exp();
    let sentence = format!(
        "{} has entries {} times the size of its peers': an unknown in other units, or one of another kind.",
        system.column_name(off[0].1),
        number(factor)
    );
    let sentence = uppercase_first(&sentence);
    let remedy = "give the column the unit of the others; if it is meant so, name its kind in the columns table";
    Some(
        Finding::new(Kind::ColumnUnits, Severity::Caution, sentence, remedy)
            .with("size against the median of the peers", factor)
            .at(off.iter().map(|&(_, j)| system.column_name(j))),
    )
}

fn uppercase_first(text: &str) -> String {
    let mut letters = text.chars();
    letters.next().map_or_else(String::new, |first| first.to_uppercase().chain(letters).collect())
}
