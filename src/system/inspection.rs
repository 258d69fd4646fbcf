//! What `inspect` has to say, as one small record: counts and spreads, named extremes, findings.
//! No list in it grows with the system.

use super::facts::{ConstantFit, Facts, Spread};
use super::findings::{Finding, PLACES_MAX, QuickFit};
use super::spread::middle;
use super::{BlockSpan, System, Units};
use crate::base::Grid;
pub use crate::operator::OrderedBy;

/// The record of an inspection.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Inspection {
    /// Gravest first.
    pub findings: Vec<Finding>,
    /// Sizes and storage.
    pub shape: Shape,
    /// As stated by the user.
    pub units: Units,
    /// Hits.
    pub coverage: Coverage,
    /// Magnitudes.
    pub scaling: Scaling,
    /// One for each data set.
    pub data_sets: Vec<SetSummary>,
    /// By Σⱼ |aᵢⱼ|.
    pub rows_by_size: Extremes,
    /// By Σᵢ |aᵢⱼ|.
    pub columns_by_size: Extremes,
    /// `None` if no short run was made.
    pub quick_fit: Option<FitSummary>,
    /// `None` until somebody who knows the machine fills it in.
    pub forecast: Option<Forecast>,
}

/// Sizes of the system and how it is held.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Shape {
    /// m, data that are left out among them.
    pub rows: usize,
    /// n, fixed unknowns among them.
    pub columns: usize,
    /// k, columns of the data.
    pub data_sets: usize,
    /// Stored, explicit zeros included.
    pub entries: usize,
    /// entries/(rows · columns).
    pub filled: f64,
    /// Stored entries that are 0.
    pub explicit_zeros: usize,
    /// Stored entries that are NaN or infinite.
    pub nonfinite_entries: usize,
    /// `f64`, `f32` or `pattern`.
    pub storage: &'static str,
    /// Memory of the arrays that a pass reads.
    pub matrix_bytes: u64,
    /// Unknowns of a tile of the stored matrix.
    pub tile_unknowns: usize,
    /// By what the unknowns are ordered in it.
    pub unknowns_by: OrderedBy,
    /// Whether its rows are in another order than in the file.
    pub rows_reordered: bool,
    /// At most [`BLOCKS_MAX`]; `blocks_total` counts all.
    pub blocks: Vec<BlockSpan>,
    /// Blocks that are stacked, listed or not.
    pub blocks_total: usize,
    /// `None` if the user describes none.
    pub grid: Option<GridSummary>,
}

/// Most blocks a record lists.
pub const BLOCKS_MAX: usize = 100;

/// The grid without its list of active cells.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct GridSummary {
    /// As listed by the user: name, cells, spacing.
    pub axes: Vec<(String, usize, f64)>,
    /// Unit of all lengths.
    pub unit: String,
    /// Name of the axis along which the cell number runs fastest.
    pub fastest: String,
    /// Active cells.
    pub unknowns: usize,
}

/// How often, and where not at all.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Coverage {
    /// Entries in each row that has any.
    pub row_entries: Spread,
    /// Entries in each column that has any: hits.
    pub column_entries: Spread,
    /// Rows without entries: their data say nothing of the model.
    pub empty_rows: Named,
    /// Columns without entries: no datum touches their unknowns.
    pub empty_columns: Named,
    /// Rows that repeat an earlier one.
    pub repeated_rows: usize,
    /// Of these, rows whose data too are the same.
    pub copied_rows: usize,
    /// Unknowns that share their column with another.
    pub equal_columns: usize,
    /// Rows without entries whose datum counts and is not 0.
    pub unexplainable_rows: Named,
}

/// A count and the first few names.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Named {
    /// How many there are, named or not.
    pub count: usize,
    /// At most [`PLACES_MAX`].
    pub first: Vec<String>,
}

/// Spreads of magnitudes over entries, rows and columns.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Scaling {
    /// |aᵢⱼ|; the median within 3 %.
    pub entry: Spread,
    /// Σⱼ |aᵢⱼ|.
    pub row: Spread,
    /// Σᵢ |aᵢⱼ|.
    pub column: Spread,
    /// √(Σᵢ wᵢ² aᵢⱼ²) in the first data set.
    pub weighted_column_norm: Spread,
}

/// The data of one data set.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct SetSummary {
    /// Data that count.
    pub data: usize,
    /// Data that are missing or whose row is not used.
    pub left_out: usize,
    /// Smallest, median and largest datum that counts.
    pub values: (f64, f64, f64),
    /// σ of the data that count; `None` if not stated.
    pub uncertainty: Option<Spread>,
    /// ‖Wb‖.
    pub weighted_data_norm: f64,
    /// ‖WA‖_F.
    pub weighted_matrix_norm: f64,
    /// Share of ‖Wb‖² in rows without entries, which no model explains.
    pub unexplainable_share: f64,
    /// The one value for all unknowns that fits best, `None` where every value fits equally well.
    pub constant: Option<ConstantFit>,
}

/// The lightest and the heaviest, by the sum of |entries|, empty ones aside.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Extremes {
    /// (name, sum), smallest first.
    pub lightest: Vec<(String, f64)>,
    /// (name, sum), largest first.
    pub heaviest: Vec<(String, f64)>,
}

/// What a short run over strengths says of the noise.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct FitSummary {
    /// From 1.
    pub data_set: usize,
    /// λ that robust GCV chooses.
    pub strength: f64,
    /// tr H at that strength; an estimate where the system is not small.
    pub effective_parameters: f64,
    /// ‖W(b − Ax)‖/√(m − tr H): 1 where weights are 1/σ and σ is right.
    pub noise: f64,
    /// The same over all strengths whose GCV is within a factor 2 of the least.
    pub noise_range: (f64, f64),
    /// Strengths that the run has reached.
    pub strengths_tried: usize,
}

/// What a run with LSQR will cost on this machine.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Forecast {
    /// Of a solve at one strength.
    pub peak_bytes: u64,
    /// Of a sweep over the default number of strengths.
    pub sweep_peak_bytes: u64,
    /// Of all data sets in one group, measured on a probe.
    pub seconds_per_iteration: f64,
    /// Counted from the sizes.
    pub bytes_per_pass: u64,
    /// `bytes_per_pass` over `seconds_per_iteration`; more than memory grants where the cache
    /// helps.
    pub bandwidth_bytes_per_second: f64,
}

/// Rows and columns named at either end.
const EXTREMES: usize = 3;

impl Inspection {
    /// Sums up; `forecast` is left to the caller.
    ///
    /// Panics if `facts` or `fit` belong to another system.
    pub fn new(
        system: &System,
        facts: &Facts,
        fit: Option<&QuickFit>,
        findings: Vec<Finding>,
    ) -> Self {
        let norms = facts.weighted_column_squares(0).iter().map(|square| square.sqrt());
        let row_name = |i: usize| system.row_name(i);
        let column_name = |j: usize| system.column_name(j);
        Self {
            findings,
            shape: shape(system, facts),
            units: system.units.clone(),
            coverage: coverage(system, facts),
            scaling: Scaling {
                entry: facts.entry_magnitude,
                row: facts.row_magnitude,
                column: facts.column_magnitude,
                weighted_column_norm: Spread::of(norms),
            },
            data_sets: (0..facts.data_sets).map(|set| set_summary(system, facts, set)).collect(),
            rows_by_size: extremes(&facts.row.absolute_sum, row_name),
            columns_by_size: extremes(&facts.column.absolute_sum, column_name),
            quick_fit: fit.map(|fit| fit_summary(facts, fit)),
            forecast: None,
        }
    }
}

fn shape(system: &System, facts: &Facts) -> Shape {
    Shape {
        rows: facts.rows,
        columns: facts.columns,
        data_sets: facts.data_sets,
        entries: facts.entries,
        filled: facts.entries as f64 / (facts.rows as f64 * facts.columns as f64),
        explicit_zeros: facts.explicit_zeros,
        nonfinite_entries: facts.nonfinite_entries,
        storage: facts.storage,
        matrix_bytes: facts.matrix_bytes,
        tile_unknowns: system.matrix.cut().tile,
        unknowns_by: system.matrix.unknowns_by(),
        rows_reordered: system.matrix.rows_are_reordered(),
        blocks: system.blocks.iter().take(BLOCKS_MAX).cloned().collect(),
        blocks_total: system.blocks.len(),
        grid: system.grid.as_ref().map(grid_summary),
    }
}

fn grid_summary(grid: &Grid) -> GridSummary {
    let axis = |axis: &crate::base::Axis| (axis.name.clone(), axis.cells, axis.spacing);
    GridSummary {
        axes: grid.axes.iter().map(axis).collect(),
        unit: grid.unit.clone(),
        fastest: grid.axes[grid.fastest].name.clone(),
        unknowns: grid.unknowns(),
    }
}

fn coverage(system: &System, facts: &Facts) -> Coverage {
    let counts = |list: &[u32]| Spread::of(list.iter().map(|&count| f64::from(count)));
    let named = |list: &[usize], name: &dyn Fn(usize) -> String| Named {
        count: list.len(),
        first: list.iter().take(PLACES_MAX).map(|&place| name(place)).collect(),
    };
    let row_name = |i| system.row_name(i);
    let classes = &facts.duplicate_rows;
    Coverage {
        row_entries: counts(&facts.row.count),
        column_entries: counts(&facts.column.count),
        empty_rows: named(&facts.empty_rows, &row_name),
        empty_columns: named(&facts.empty_columns, &|j| system.column_name(j)),
        repeated_rows: classes.iter().map(|class| class.rows.len() - 1).sum(),
        copied_rows: classes.iter().map(|class| class.copies.len()).sum(),
        equal_columns: facts.duplicate_columns.iter().map(Vec::len).sum(),
        unexplainable_rows: named(&facts.unexplainable_rows, &row_name),
    }
}

fn set_summary(system: &System, facts: &Facts, set: usize) -> SetSummary {
    let of_set = &facts.sets[set];
    let rows = || (0..facts.rows).filter(|&i| system.included(i, set));
    let mut values: Vec<f64> = rows().map(|i| system.data[[i, set]]).collect();
    values.sort_unstable_by(f64::total_cmp);
    let uncertainty = system.uncertainty.as_ref().map(|sigma| {
        let column = if sigma.ncols() == 1 { 0 } else { set };
        Spread::of(rows().map(|i| sigma[[i, column]]))
    });
    SetSummary {
        data: of_set.data,
        left_out: facts.rows - of_set.data,
        // Assembly refuses a data set without a datum that counts.
        values: (values[0], middle(&values), values[values.len() - 1]),
        uncertainty,
        weighted_data_norm: of_set.weighted_data_square.sqrt(),
        weighted_matrix_norm: of_set.weighted_matrix_square.sqrt(),
        unexplainable_share: of_set.unexplainable_share,
        constant: of_set.constant,
    }
}

fn extremes(sizes: &[f64], name: impl Fn(usize) -> String) -> Extremes {
    let mut order: Vec<usize> = (0..sizes.len()).filter(|&place| sizes[place] > 0.0).collect();
    // Equal sizes keep the order of the file.
    order.sort_by(|&a, &b| sizes[a].total_cmp(&sizes[b]));
    let entry = |&place: &usize| (name(place), sizes[place]);
    Extremes {
        lightest: order.iter().take(EXTREMES).map(entry).collect(),
        heaviest: order.iter().rev().take(EXTREMES).map(entry).collect(),
    }
}

fn fit_summary(facts: &Facts, fit: &QuickFit) -> FitSummary {
    let data = facts.sets[fit.data_set].data;
    let chosen = &fit.trials[fit.chosen];
    FitSummary {
        data_set: fit.data_set + 1,
        strength: chosen.strength,
        effective_parameters: chosen.effective_parameters,
        noise: chosen.noise(data),
        noise_range: fit.noise_range(data),
        strengths_tried: fit.trials.len(),
    }
}

#[cfg(test)]
#[path = "inspection_tests.rs"]
mod tests;
