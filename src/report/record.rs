//! The record of a run: `summary.json`. Plain fields, filled by `job`, rendered here.

use serde::{Deserialize, Serialize};
use serde_json::Value;

use crate::choose::Choice;

/// Version of the record's layout.
pub const SCHEMA: &str = "ellbow-summary-1";

#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct Summary {
    pub schema: String,
    pub ellbow_version: String,
    pub command: String,
    /// All settings, defaults resolved.
    pub settings: Value,
    pub system: SystemRecord,
    pub method: String,
    /// λ of the model handed over; null where data sets have different ones.
    pub strength: Option<f64>,
    pub penalty: String,
    #[serde(flatten)]
    pub result: ResultRecord,
    /// Traversals of the matrix: start, iterations, refreshes, certificates.
    pub passes: u64,
    pub column_scaling: bool,
    pub condition: Option<ConditionRecord>,
    pub direct: Option<DirectRecord>,
    pub seconds: Seconds,
    pub bytes_per_pass: u64,
    pub threads: usize,
    pub threads_from: String,
    pub peak_bytes: Option<u64>,
    pub workspace_bytes: u64,
    pub inputs: Vec<InputRecord>,
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
    pub warnings: Vec<String>,
    pub interrupted: bool,
}

#[derive(Debug, Clone, Default, Serialize, Deserialize)]
pub struct SystemRecord {
    pub rows: usize,
    pub columns: usize,
    pub entries: usize,
    /// `f64`, `f32` or `pattern`.
    pub storage: String,
    pub matrix_bytes: u64,
    pub data_sets: usize,
    /// Data of positive weight, of the first data set.
    pub data: usize,
    pub data_unit: String,
    pub model_unit: String,
    pub model_quantity: String,
    pub fixed_unknowns: usize,
    /// Unknowns that no datum touches.
    pub untouched_unknowns: usize,
    pub rows_without_entries: usize,
    /// Share of ‖W(b − Ax)‖² in rows that no model can explain.
    pub unexplainable_share_of_residual: f64,
    pub grid: Option<Value>,
}

/// Norms and end of one reconstruction, or of all data sets together.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct ResultRecord {
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
    pub relative_gradient: f64,
    /// ‖AᵀW²(b − Ax)‖.
    pub orthogonality: f64,
    /// ‖Wb‖.
    pub data_norm: f64,
    /// tr H(λ), where a dense decomposition is cheap.
    pub effective_parameters: Option<f64>,
    pub chi_square_per_dof: Option<f64>,
    /// λ > 0, L invertible: ‖x − x_λ‖ is at most this.
    pub model_error_bound: Option<f64>,
}

#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct StopRecord {
    pub reason: String,
    pub converged: bool,
}

#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct ConditionRecord {
    /// σ_max/σ_min of the weighted matrix, columns not scaled; null where it is infinite.
    pub value: Option<f64>,
    /// Otherwise a lower bound.
    pub exact: bool,
}

#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct DirectRecord {
    pub rank: usize,
    pub rank_tolerance: f64,
    pub condition: Option<f64>,
    pub singular_values: Vec<f64>,
}

#[derive(Debug, Clone, Copy, Default, Serialize, Deserialize)]
pub struct Seconds {
    pub load: f64,
    pub solve: f64,
    pub total: f64,
}

#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct InputRecord {
    pub path: String,
    pub bytes: u64,
    pub checksum: String,
}

#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct SetRecord {
    pub data_set: usize,
    pub strength: f64,
    #[serde(flatten)]
    pub result: ResultRecord,
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub choice: Option<Choice>,
}

#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct BlockRecord {
    pub name: String,
    pub first_row: usize,
    pub rows: usize,
    pub weight: f64,
    pub data: usize,
    /// ‖W(b − Ax)‖ of the block's rows, all data sets.
    pub residual_norm: f64,
    /// χ² over the number of data, not of degrees of freedom.
    pub chi_square_per_datum: Option<f64>,
}

/// One line of sweep.csv.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct SweepRow {
    pub data_set: usize,
    pub strength: f64,
    pub residual_norm: f64,
    pub penalty_norm: f64,
    pub model_norm: f64,
    pub effective_parameters: Option<f64>,
    pub chi_square_per_dof: Option<f64>,
    /// Curvature of the L-curve.
    pub bend: Option<f64>,
    pub gcv: Option<f64>,
    pub iterations: u64,
    pub stop: String,
}
