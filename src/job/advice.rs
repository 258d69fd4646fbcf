//! What a user should be told about a finished run, in sentences that can be acted on.

use crate::base::complaint::quote;
use crate::job::conduct::Run;
use crate::sweep::{Condition, conditioning};

/// Adds the warnings that follow from the numbers of a run to those it has.
pub fn add(run: &mut Run<'_>) {
    let (settings, system, facts) = (run.settings, run.system, run.facts);
    if run.interrupted {
        let tracks = run.sets.iter().map(|set| set.solved.len()).sum::<usize>();
        let open = run.sets.iter().flat_map(|set| &set.solved);
        let open = open.filter(|solved| !solved.stop.converged()).count();
        run.warnings.push(format!(
            "Stopped early by a time limit or a signal: {open} of {tracks} reconstructions had not converged. The same command runs again."
        ));
    }
    let smallest = run.strengths.iter().copied().fold(f64::INFINITY, f64::min);
    if let Some(condition) = run.condition.filter(|_| smallest == 0.0) {
        run.warnings.extend(condition_warning(condition));
    }
    if smallest == 0.0 && run.condition.is_none() {
        run.warnings.push(
                "The condition of the system is not known from this run: at strength 0 check it with --method lsqr before you trust the model.".into(),
            );
    }
    let wide = system.matrix.rows() < system.matrix.columns();
    if smallest == 0.0 && wide && run.dense.is_none() {
        run.warnings.push(
                "Strength 0 with fewer data than unknowns: of all models that fit, the one nearest to the start is found, and on the way the number of iterations acts as the regularisation. `ellbow sweep` looks at strengths above 0.".into(),
            );
    }
    // A start says where to begin, and fixed unknowns say nothing of the others.
    let stated = settings.source.reference.is_some();
    for (set, facts) in facts.sets.iter().enumerate() {
        if let Some(fit) = facts.constant.as_ref().filter(|fit| fit.share > 0.5)
            && !stated
            && smallest > 0.0
        {
            let of = if run.sets.len() > 1 {
                format!("Data set {}: one", set + 1)
            } else {
                "One".into()
            };
            run.warnings.push(format!(
                    "{of} constant model of {:.6e} {} explains {:.1} % of the data (squared, weighted), but the penalty pulls towards 0: give --reference fit or --reference {:.4e}.",
                    fit.value, quote(system.units.model.as_bytes()), 100.0 * fit.share, fit.value
                ));
        }
    }
    let unseen = facts.empty_columns.len();
    if unseen > 0 {
        run.warnings.push(format!(
                "{unseen} of {} unknowns are touched by no datum: they stay at the reference and mean nothing.",
                system.matrix.columns()
            ));
    }
}
fn condition_warning(condition: Condition) -> Option<String> {
    let value = if condition.exact {
        format!("{:.2e}", condition.value)
    } else if condition.possible > condition.value {
        format!("at least {:.2e} and may be {:.2e}", condition.value, condition.possible)
    } else {
        format!("at least {:.2e}", condition.value)
    };
    if condition.hopeless() {
        Some(format!(
            "The system {} singular to working precision: its condition is {value}, beyond 1e13. At strength 0 the model is not determined in double precision and may be wrong in every digit. Scale or centre the columns, remove dependent ones, or use a strength above 0.",
            if condition.exact || condition.value > conditioning::CONDITION_MAX {
                "is"
            } else {
                "may be"
            }
        ))
    } else if condition.value > 1e8 {
        Some(format!(
            "The condition of the system is {value}: at strength 0 about {:.0} of 16 digits are lost.",
            condition.value.log10()
        ))
    } else {
        None
    }
}
