//! What looks wrong with a system, and what to do about it.
//!
//! Each family of findings has one file, with its reasoning and the origin of its thresholds at
//! the top. Two principles hold for all:
//!
//! - **A suspicion must repair something.** A hypothesis (index shifted, axes exchanged, sign,
//!   factor) is named only if the system makes sense under it and does not as stated. Kernels to
//!   which the test does not apply fail it under every hypothesis and are left alone.
//! - **Chance is counted.** Repeats are set against the repeats that the data show anyway.

mod columns;
mod coverage;
mod layout;
mod layout_score;
mod naming;
mod noise;
mod repeats;
mod size;

use rayon::prelude::*;

use super::{Facts, System};

/// What a finding is about. Serialised as a word, e.g. `wrong-fastest-axis`.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash, PartialOrd, Ord, serde::Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// Data in another unit than the matrix, e.g. milliseconds for seconds.
    DataUnits,
    /// Data of the opposite sign.
    DataSign,
    /// Values no expert of the field would call possible, for no reason that can be named.
    ImplausibleSize,
    /// Columns numbered from another base.
    IndexShift,
    /// The grid's shape with its axes exchanged.
    AxesSwapped,
    /// The cell number runs fastest along another axis.
    WrongFastestAxis,
    /// One of the two above; with equal spacings no matrix can tell which.
    GridOrder,
    /// Variances where standard deviations are expected.
    VarianceForSigma,
    /// σ a factor 100 off: percent and fraction mistaken for each other.
    PercentForFraction,
    /// Residuals and σ disagree by another factor.
    SigmaMisfit,
    /// Data in another order than the rows of the matrix.
    PermutedRows,
    /// A group or run of rows whose data do not move.
    DeadDetector,
    /// Rows that are there twice with their data.
    DuplicatedRows,
    /// A column far out of scale with its peers.
    ColumnUnits,
    /// Data in rows without entries.
    UnexplainableRows,
    /// Unknowns that no row sees.
    EmptyColumns,
    /// Unknowns that all rows see alike.
    EqualColumns,
    /// The same row measured more than once.
    RepeatedRows,
    /// Column norms that span more than a factor 100.
    ColumnScaling,
}

/// How much a finding should worry its reader.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, serde::Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Severity {
    /// Almost certainly a mistake; a solve would be wasted.
    Fault,
    /// Likely a mistake, or something only the user can settle.
    Caution,
    /// Worth knowing; nothing need be wrong.
    Note,
}

/// A number a finding rests on.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Evidence {
    /// What the number is, e.g. `noise against stated uncertainty`.
    pub name: &'static str,
    /// In `unit`.
    pub value: f64,
    /// Empty for a pure number.
    pub unit: String,
}

/// Something that looks wrong, on what grounds, and what to do.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Finding {
    /// What it is about.
    pub kind: Kind,
    /// How much it should worry its reader.
    pub severity: Severity,
    /// What is seen, in words of the user's own quantities.
    pub sentence: String,
    /// The numbers it rests on.
    pub evidence: Vec<Evidence>,
    /// Names of rows or columns, at most [`PLACES_MAX`].
    pub places: Vec<String>,
    /// What to do about it, as a sentence.
    pub remedy: String,
}

/// Most places a finding lists.
pub const PLACES_MAX: usize = 8;

impl Finding {
    fn new(kind: Kind, severity: Severity, sentence: String, remedy: impl Into<String>) -> Self {
        let remedy = remedy.into();
        Self { kind, severity, sentence, evidence: Vec::new(), places: Vec::new(), remedy }
    }

    fn with(mut self, name: &'static str, value: f64) -> Self {
        self.evidence.push(Evidence { name, value, unit: String::new() });
        self
    }

    fn with_unit(mut self, name: &'static str, value: f64, unit: &str) -> Self {
        self.evidence.push(Evidence { name, value, unit: unit.to_string() });
        self
    }

    fn at(mut self, places: impl Iterator<Item = String>) -> Self {
        self.places = places.take(PLACES_MAX).collect();
        self
    }
}

/// A short run over strengths for one data set: what the data look like once a reasonable model is
/// taken out of them.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct QuickFit {
    /// From 0.
    pub data_set: usize,
    /// Strengths tried, in any order, over a few decades.
    pub trials: Vec<Trial>,
    /// Place in `trials` of the strength that robust GCV chooses.
    pub chosen: usize,
    /// x at the chosen strength, length n, model unit.
    pub model: Vec<f64>,
    /// b − Ax at the chosen strength, length m, data unit.
    pub residual: Vec<f64>,
}

impl QuickFit {
    /// Smallest and largest noise ([`Trial::noise`]) over the strengths whose GCV is within a
    /// factor 2 of the least, the chosen one included; m = `data`.
    ///
    /// Panics if `chosen` is no place in `trials`.
    pub fn noise_range(&self, data: usize) -> (f64, f64) {
        let least = self.trials.iter().map(|t| t.gcv(data)).fold(f64::INFINITY, f64::min);
        let good = self.trials.iter().filter(|t| t.gcv(data) <= 2.0 * least);
        let noises = good.map(|t| t.noise(data)).filter(|noise| noise.is_finite());
        let here = self.trials[self.chosen].noise(data);
        noises.fold((here, here), |(low, high), noise| (low.min(noise), high.max(noise)))
    }
}

/// One strength of a [`QuickFit`].
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Trial {
    /// λ.
    pub strength: f64,
    /// ‖W(Ax − b)‖.
    pub residual_norm: f64,
    /// tr H.
    pub effective_parameters: f64,
}

impl Trial {
    /// m‖W(Ax−b)‖²/(m − tr H)², m the data that count; infinite if nothing is left over.
    pub fn gcv(&self, data: usize) -> f64 {
        let spare = data as f64 - self.effective_parameters;
        if spare > 0.0 { data as f64 * (self.residual_norm / spare).powi(2) } else { f64::INFINITY }
    }

    /// ‖W(Ax−b)‖/√(m − tr H): the noise in units of 1/w; infinite if nothing is left over.
    pub fn noise(&self, data: usize) -> f64 {
        let spare = data as f64 - self.effective_parameters;
        if spare > 0.0 { self.residual_norm / spare.sqrt() } else { f64::INFINITY }
    }
}

/// Everything that looks wrong or is worth knowing, gravest first, in a fixed order.
///
/// `fit` widens what can be seen: without it nothing is said of σ and of the order of the data.
/// The cost is bounded: the layout of the grid is judged from a sample of rows; the matrix is
/// visited once more only where a reference is to be compared with the data.
///
/// # Panics
/// If `facts` or `fit` belong to another system.
pub fn findings(system: &System, facts: &Facts, fit: Option<&QuickFit>) -> Vec<Finding> {
    assert_eq!(facts.rows, system.matrix.rows(), "facts of this system");
    if let Some(fit) = fit {
        assert_eq!(fit.model.len(), facts.columns, "a fit of this system");
        assert_eq!(fit.residual.len(), facts.rows, "a fit of this system");
        assert!(fit.data_set < facts.data_sets, "a fit of this system");
        assert!(fit.chosen < fit.trials.len(), "a fit of this system");
    }
    let repeats = repeats::find(system, facts);
    let has = |kind| repeats.iter().any(|finding: &Finding| finding.kind == kind);
    // Rows that are there twice predict each other, which fools every choice of strength.
    let fit = fit.filter(|_| !has(Kind::DuplicatedRows));
    let dead = has(Kind::DeadDetector);
    let columns = columns::find(system, facts);
    let size = size::find(system, facts, fit, !columns.is_empty());
    let mut found = Vec::new();
    found.extend(layout::find(system));
    found.extend(naming::find(system));
    // Data of another size or sign misfit any σ: noise is judged once that is settled.
    if let Some(fit) = fit.filter(|_| size.finding.is_none()) {
        let known = noise::Known { size: size.tested, dead };
        found.extend(noise::find(system, facts, fit, known));
    }
    found.extend(size.finding);
    found.extend(columns);
    found.extend(repeats);
    found.extend(coverage::find(system, facts));
    found.sort_by_key(|finding| finding.severity);
    found
}

/// A number for a sentence: four digits, in powers of ten where that is shorter.
pub fn number(value: f64) -> String {
    let size = value.abs();
    if value == 0.0 {
        return "0".into();
    }
    if !(1e-3..1e6).contains(&size) {
        return format!("{value:.3e}");
    }
    let digits = (3 - size.log10().floor() as i32).max(0) as usize;
    let text = format!("{value:.digits$}");
    if text.contains('.') {
        text.trim_end_matches('0').trim_end_matches('.').to_string()
    } else {
        text
    }
}

/// A x_ref of data set `set`; `None` without a reference. Rows are independent, so the bits do
/// not depend on threads.
fn predicted_by_reference(system: &System, set: usize) -> Option<Vec<f64>> {
    let reference = system.reference.as_ref()?;
    let model = reference.column(if reference.ncols() == 1 { 0 } else { set });
    let product = |i| system.matrix.row(i).entries().map(|(j, a)| a * model[j]).sum();
    Some((0..system.matrix.rows()).into_par_iter().map(product).collect())
}

/// wᵢ·valueᵢ for each row.
fn weighted(system: &System, set: usize, value: impl Fn(usize) -> f64) -> Vec<f64> {
    (0..system.matrix.rows())
        .map(|i| match system.weights.at(i, set) {
            // Not even a value that is not finite counts where the weight is 0.
            0.0 => 0.0,
            w => w * value(i),
        })
        .collect()
}

#[cfg(test)]
mod tests;
