//! The record of a run: `summary.json`. Plain fields, filled by `job`, rendered here.

use serde::{Deserialize, Serialize};
use serde_json::Value;

use crate::choose::Choice;

/// Version of the record's layout.
pub const SCHEMA: &str = "ellbow-summary-1";

/// `summary.json`: what was asked for, what came out, and what it cost.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct Summary {
    /// [`SCHEMA`].
    pub schema: String,
    /// Version of the program that wrote it.
    pub ellbow_version: String,
    /// `solve` or `sweep`.
    pub command: String,
    /// All settings, defaults resolved.
    pub settings: Value,
    /// What was solved.
    pub system: SystemRecord,
    /// `lsqr`, `lsmr`, `cgls` or `direct`.
    pub method: String,
    /// λ of the model handed over; null where data sets have different ones.
    pub strength: Option<f64>,
    /// What λ² multiplies: `size` is ‖P(x − x_ref)‖², P the penalty weights.
    pub penalty: String,
    /// Of the models handed over, all data sets together.
    #[serde(flatten)]
    pub result: ResultRecord,
    /// Traversals of the matrix: start, iterations, refreshes, certificates.
    pub passes: u64,
    /// Whether columns were evened out as a preconditioner.
    pub column_scaling: bool,
    /// Null where nothing is known of it.
    pub condition: Option<ConditionRecord>,
    /// What the decomposition of `--method direct` says; null for the others.
    pub direct: Option<DirectRecord>,
    /// Wall clock.
    pub seconds: Seconds,
    /// What a pass moves, counted from the sizes, with as many lanes as the widest group of lanes.
    pub bytes_per_pass: u64,
    /// `one` or `two-phase`: how such a pass went through the matrix; no number depends on it.
    #[serde(default)]
    pub pass: String,
    /// `portable`, `avx2` or `avx512`: the inner loops. `portable` differs from the others in last bits.
    #[serde(default)]
    pub simd: String,
    /// Threads that took part; no number depends on it.
    pub threads: usize,
    /// `--threads`, the name of an environment variable, or `affinity`.
    pub threads_from: String,
    /// Most memory the process held; null where the system does not say.
    pub peak_bytes: Option<u64>,
    /// Blocks, tracks and scratch of the largest group; 0 for `direct`.
    pub workspace_bytes: u64,
    /// Every file the system was read from, each once.
    pub inputs: Vec<InputRecord>,
    /// Of everything random.
    pub seed: u64,
    /// One per data set, where there are several.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub data_sets: Vec<SetRecord>,
    /// One per stacked block, where there are several.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub blocks: Vec<BlockRecord>,
    /// A sweep's.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub choice: Option<Choice>,
    /// A sweep's table, the same as sweep.csv.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub sweep: Vec<SweepRow>,
    /// As printed, each a sentence or more.
    pub warnings: Vec<String>,
    /// A signal or the time limit cut it short.
    pub interrupted: bool,
}

/// Sizes and units of the system.
#[derive(Debug, Clone, Default, Serialize, Deserialize)]
pub struct SystemRecord {
    /// m, data that are left out among them.
    pub rows: usize,
    /// n, fixed unknowns among them.
    pub columns: usize,
    /// Stored, explicit zeros included.
    pub entries: usize,
    /// `f64`, `f32` or `pattern`.
    pub storage: String,
    /// Memory of the arrays that a pass reads.
    pub matrix_bytes: u64,
    /// k, columns of the data.
    pub data_sets: usize,
    /// Data of positive weight, of the first data set.
    pub data: usize,
    /// As the user states it; empty where unstated.
    pub data_unit: String,
    /// As the user states it; empty where unstated.
    pub model_unit: String,
    /// As the user states it; empty where unstated.
    pub model_quantity: String,
    /// Unknowns that the columns table holds at a value.
    pub fixed_unknowns: usize,
    /// Unknowns that no datum touches.
    pub untouched_unknowns: usize,
    /// Their data say nothing of the model.
    pub rows_without_entries: usize,
    /// Share of ‖W(b − Ax)‖² in rows that no model can explain.
    pub unexplainable_share_of_residual: f64,
    /// Axes, unit, fastest axis and number of active cells; null without a grid.
    pub grid: Option<Value>,
}

/// Norms and end of one reconstruction, or of all data sets together.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct ResultRecord {
    /// Of several data sets, the first end without convergence, if there is one.
    pub stop: StopRecord,
    /// Of a data set: of the model handed over. Of the whole run: of the slowest strength.
    pub iterations: u64,
    /// ‖W(b − Ax)‖.
    pub residual_norm: f64,
    /// ‖L(x − x_ref)‖.
    pub penalty_norm: f64,
    /// ‖x‖.
    pub model_norm: f64,
    /// ‖AᵀW²(b − Ax) − λ²LᵀL(x − x_ref)‖.
    pub gradient_norm: f64,
    /// gradient_norm/(‖[WA; λL]‖_F ‖[W(b−Ax); λL(x−x_ref)]‖); the largest of several data sets.
    pub relative_gradient: f64,
    /// ‖AᵀW²(b − Ax)‖.
    pub orthogonality: f64,
    /// ‖Wb‖.
    pub data_norm: f64,
    /// tr H(λ), where a dense decomposition is cheap.
    pub effective_parameters: Option<f64>,
    /// residual_norm²/(m − tr H), m data of positive weight; null where σ or tr H is unknown.
    pub chi_square_per_dof: Option<f64>,
    /// λ > 0, L invertible: ‖x − x_λ‖ is at most this.
    pub model_error_bound: Option<f64>,
}

/// How the iteration ended.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct StopRecord {
    /// A word of [`crate::solve::Stop::word`].
    pub reason: String,
    /// Whether the model is what was asked for.
    pub converged: bool,
}

/// Condition of the weighted matrix.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct ConditionRecord {
    /// σ_max/σ_min of the weighted matrix, columns not scaled; null where it is infinite.
    pub value: Option<f64>,
    /// Otherwise a lower bound.
    pub exact: bool,
}

/// A dense decomposition W A P⁻¹ = U Σ Vᵀ, of the first data set.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct DirectRecord {
    /// Singular values above `rank_tolerance`.
    pub rank: usize,
    /// max(m, n) ε σ₁.
    pub rank_tolerance: f64,
    /// σ₁ over the smallest σ; null where that is 0.
    pub condition: Option<f64>,
    /// min(m, n) of them, descending.
    pub singular_values: Vec<f64>,
}

/// Wall clock, in seconds.
#[derive(Debug, Clone, Copy, Default, Serialize, Deserialize)]
pub struct Seconds {
    /// Checksums, reading and checking.
    pub load: f64,
    /// Sweep, traces and choice.
    pub solve: f64,
    /// From the start of the command to the record, writing of the other files included.
    pub total: f64,
}

/// A file that was read.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct InputRecord {
    /// As the settings name it.
    pub path: String,
    /// Length.
    pub bytes: u64,
    /// BLAKE3 of the content, 64 hexadecimal digits.
    pub checksum: String,
}

/// One data set's part of the record.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct SetRecord {
    /// From 1.
    pub data_set: usize,
    /// λ of the model handed over.
    pub strength: f64,
    /// Of that model.
    #[serde(flatten)]
    pub result: ResultRecord,
    /// A sweep's.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub choice: Option<Choice>,
}

/// How one stacked block is fitted.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct BlockRecord {
    /// As the user calls it.
    pub name: String,
    /// From 1, in the stacked matrix.
    pub first_row: usize,
    /// Rows of the block, those that are left out among them.
    pub rows: usize,
    /// Multiplies 1/σ of the block's rows.
    pub weight: f64,
    /// Data of positive weight, all data sets.
    pub data: usize,
    /// ‖W(b − Ax)‖ of the block's rows, all data sets.
    pub residual_norm: f64,
    /// χ² over the number of data, not of degrees of freedom.
    pub chi_square_per_datum: Option<f64>,
}

/// One line of sweep.csv.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct SweepRow {
    /// From 0; sweep.csv counts from 1.
    pub data_set: usize,
    /// λ.
    pub strength: f64,
    /// ‖W(b − Ax)‖.
    pub residual_norm: f64,
    /// ‖L(x − x_ref)‖.
    pub penalty_norm: f64,
    /// ‖x‖.
    pub model_norm: f64,
    /// tr H(λ), where a dense decomposition is cheap.
    pub effective_parameters: Option<f64>,
    /// residual_norm²/(m − tr H); null where σ or tr H is unknown.
    pub chi_square_per_dof: Option<f64>,
    /// Curvature of the L-curve.
    pub bend: Option<f64>,
    /// m residual_norm²/(m − tr H)²; null where tr H is unknown.
    pub gcv: Option<f64>,
    /// Of this strength.
    pub iterations: u64,
    /// A word of [`crate::solve::Stop::word`].
    pub stop: String,
}
