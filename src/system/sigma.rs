//! From uncertainties in any form to the weights wᵢ = block weight/σᵢ.

use std::path::{Path, PathBuf};

use ndarray::{Array2, Axis};

use super::assemble::Names;
use super::lengths::of_block;
use super::{SystemError, Uncertainty};
use crate::base::Complaint;
use crate::operator::RowWeights;

/// What is left of a block once matrix and data are joined.
pub(super) struct Origin {
    pub data_path: PathBuf,
    pub uncertainty: Option<Uncertainty>,
    pub block_weight: f64,
}

impl Origin {
    /// Number of different σ columns: one where all data sets share theirs.
    fn columns(&self, sets: usize) -> usize {
        match &self.uncertainty {
            None => 1,
            Some(Uncertainty::Formula { percent, .. }) => {
                if *percent == 0.0 {
                    1
                } else {
                    sets
                }
            }
            Some(Uncertainty::Values { values, .. }) => values.ncols(),
        }
    }

    fn sigma(&self, row: usize, set: usize, datum: f64) -> f64 {
        match &self.uncertainty {
            None => 1.0,
            Some(Uncertainty::Formula { absolute, percent }) => {
                // Not `hypot`, whose last bit is left to the system's library.
                let relative = percent / 100.0 * datum.abs();
                if relative == 0.0 {
                    *absolute
                } else if *absolute == 0.0 {
                    relative
                } else {
                    (absolute * absolute + relative * relative).sqrt()
                }
            }
            Some(Uncertainty::Values { values, .. }) => {
                values[[row, if values.ncols() == 1 { 0 } else { set }]]
            }
        }
    }
}

/// σ (m×1 or m×k; as read where a datum does not count) and the weights. `data` are as read:
/// percentages refer to them.
pub(super) fn weigh(
    data: &Array2<f64>,
    origins: Vec<Origin>,
    left_out: Option<&Array2<bool>>,
    names: &Names,
) -> Result<(Option<Array2<f64>>, RowWeights), SystemError> {
    check_forms(&origins, names)?;
    let stated = origins.iter().any(|origin| origin.uncertainty.is_some());
    let weighted = origins.iter().any(|origin| origin.block_weight != 1.0);
    if !stated && !weighted && left_out.is_none() {
        return Ok((None, RowWeights::Ones));
    }
    let (rows, sets) = data.dim();
    let sigma_columns = origins.iter().map(|origin| origin.columns(sets)).max().unwrap_or(1);
    let weight_columns = if left_out.is_some() { sets } else { sigma_columns };
    let mut sigma = Array2::from_elem((if stated { rows } else { 0 }, sigma_columns), 1.0);
    let mut weights = Array2::zeros((rows, weight_columns));
    for (origin, span) in origins.iter().zip(names.blocks) {
        for row in 0..span.rows {
            let i = span.first_row + row;
            for set in 0..weight_columns {
                let value = origin.sigma(row, set, data[[i, set]]);
                if stated && set < sigma_columns {
                    sigma[[i, set]] = value;
                }
                if left_out.is_some_and(|out| out[[i, set]]) {
                    continue;
                }
                let datum = Datum { i, set, sets: weight_columns, value: data[[i, set]] };
                weights[[i, set]] = weight(origin, value, datum, names)?;
            }
        }
    }
    Ok((stated.then_some(sigma), narrowed(weights)))
}

/// A formula's own numbers, and blocks of which only some state their uncertainty.
fn check_forms(origins: &[Origin], names: &Names) -> Result<(), SystemError> {
    for (origin, span) in origins.iter().zip(names.blocks) {
        let of = of_block(&span.name);
        match &origin.uncertainty {
            Some(Uncertainty::Formula { absolute, percent }) => {
                let usable = |part: f64| part >= 0.0 && part.is_finite();
                if !usable(*absolute) || !usable(*percent) || absolute + percent == 0.0 {
                    let cause = format!("the uncertainty{of} is {absolute} + {percent} %");
                    let remedy = "give a positive, finite number in data units, a positive percentage, or both";
                    let complaint = Complaint::new(cause, remedy).in_file(&origin.data_path);
                    return Err(SystemError::Uncertainty(complaint));
                }
            }
            None if origins.iter().any(|other| other.uncertainty.is_some()) => {
                let cause =
                    format!("the data{of} have no uncertainty, but those of another block do");
                let remedy = "state the uncertainty of every block or of none: weights 1/σ of one cannot be set against the bare units of another";
                let complaint = Complaint::new(cause, remedy).in_file(&origin.data_path);
                return Err(SystemError::Uncertainty(complaint));
            }
            _ => {}
        }
    }
    Ok(())
}

#[derive(Clone, Copy)]
struct Datum {
    i: usize,
    set: usize,
    sets: usize,
    value: f64,
}

fn weight(origin: &Origin, sigma: f64, datum: Datum, names: &Names) -> Result<f64, SystemError> {
    let weight = origin.block_weight / sigma;
    if sigma > 0.0 && sigma.is_finite() && weight > 0.0 && weight.is_finite() {
        return Ok(weight);
    }
    let place = names.datum(datum.i, datum.set, datum.sets);
    let path: &Path = match &origin.uncertainty {
        Some(Uncertainty::Values { path, .. }) => path,
        _ => &origin.data_path,
    };
    let (cause, remedy) = match &origin.uncertainty {
        Some(Uncertainty::Formula { percent, .. }) if sigma == 0.0 && datum.value == 0.0 => (
            format!(
                "the σ of {place} is 0, because its datum is 0 and the uncertainty is {percent} % of it"
            ),
            "add an absolute part, e.g. `0.5+2%`, or give the row use = 0 in the rows table",
        ),
        _ if sigma > 0.0 && sigma.is_finite() => (
            format!(
                "the σ of {place} is {sigma:e}, so that its weight {} / σ is {weight:e}",
                origin.block_weight
            ),
            "give σ in the unit of the data; this one cannot be turned into a weight",
        ),
        _ => (
            format!("the σ of {place} is {sigma}"),
            "give a positive, finite σ; to leave a row out, give it use = 0 in the rows table",
        ),
    };
    Err(SystemError::Uncertainty(Complaint::new(cause, remedy).in_file(path)))
}

/// One shared column where all data sets agree.
fn narrowed(weights: Array2<f64>) -> RowWeights {
    let agree = weights.rows().into_iter().all(|row| row.iter().all(|&w| w == row[0]));
    if agree {
        RowWeights::Shared(weights.index_axis(Axis(1), 0).to_vec())
    } else {
        RowWeights::PerSet(weights)
    }
}
