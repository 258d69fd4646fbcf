//! What a solve or a sweep prints: at most 80 columns, units stated.

use std::fmt::Write as _;

use crate::base::complaint::escape;
use crate::choose::{Choice, Verdict};
use crate::report::record::{ResultRecord, Summary, SweepRow};

/// Widest line.
const WIDTH: usize = 80;

/// The page of a finished run. `place` is where its files lie, as the user would type it.
pub fn page(summary: &Summary, place: &str) -> String {
    let mut out = String::new();
    head(&mut out, summary);
    if !summary.sweep.is_empty() && summary.command == "sweep" {
        sweep(&mut out, summary);
    } else if summary.data_sets.is_empty() {
        result(&mut out, summary, &summary.result);
    } else {
        sets(&mut out, summary);
    }
    for warning in &summary.warnings {
        out.push('\n');
        wrap(&mut out, "Note: ", warning);
    }
    let _ = writeln!(out, "\nResults: {}", escape(place));
    out
}

fn head(out: &mut String, summary: &Summary) {
    let system = &summary.system;
    let sets = match system.data_sets {
        1 => String::new(),
        k => format!(", {k} data sets"),
    };
    let used = match system.rows - system.data {
        0 => system.rows.to_string(),
        left_out => format!("{} ({left_out} left out)", system.data),
    };
    let _ = writeln!(
        out,
        "System   {} data, {} unknowns, {} entries ({}){sets}",
        used, system.columns, system.entries, system.storage
    );
    let _ = writeln!(
        out,
        "Work     {} passes of the matrix, {} iterations, {}, {:.2} s ({:.2} s loading)",
        summary.passes,
        summary.result.iterations,
        summary.method,
        summary.seconds.total,
        summary.seconds.load
    );
    if summary.column_scaling {
        let _ = writeln!(out, "         columns evened out as a preconditioner");
    }
    out.push('\n');
}

fn unit(text: &str) -> String {
    if text.is_empty() { String::new() } else { format!(" {}", escape(text)) }
}

fn result(out: &mut String, summary: &Summary, result: &ResultRecord) {
    let weighted = "weighted, no unit";
    let _ = writeln!(out, "Strength            {:>14}", number(summary.strength));
    let _ = writeln!(
        out,
        "Residual norm       {:>14}   {weighted}; data norm {}",
        number(Some(result.residual_norm)),
        number(Some(result.data_norm))
    );
    let _ = writeln!(
        out,
        "Penalty norm        {:>14}  {}",
        number(Some(result.penalty_norm)),
        unit(&summary.system.model_unit)
    );
    let _ = writeln!(
        out,
        "Model norm          {:>14}  {}",
        number(Some(result.model_norm)),
        unit(&summary.system.model_unit)
    );
    let _ = writeln!(out, "Relative gradient   {:>14}", number(Some(result.relative_gradient)));
    // With a strength the residual is not orthogonal to the matrix, and need not be.
    if summary.strength == Some(0.0) {
        let _ = writeln!(
            out,
            "Orthogonality       {:>14}   of the residual to the matrix, in norm",
            number(Some(result.orthogonality))
        );
    }
    if let Some(chi_square) = result.chi_square_per_dof {
        let _ = writeln!(
            out,
            "Chi-square per dof  {:>14}   near 1 where the uncertainty is right",
            number(Some(chi_square))
        );
    }
    if let Some(direct) = &summary.direct {
        let _ = writeln!(
            out,
            "Rank                {:>14}   tolerance {}",
            direct.rank,
            number(Some(direct.rank_tolerance))
        );
    }
    if let Some(condition) = &summary.condition {
        let note = if condition.exact { "" } else { "   at least" };
        let _ = writeln!(out, "Condition           {:>14}{note}", number(condition.value));
    }
    let word = if result.stop.converged { "converged" } else { "not converged" };
    let _ = writeln!(out, "Stopped             {:>14}   {word}", result.stop.reason);
}

fn sets(out: &mut String, summary: &Summary) {
    let _ = writeln!(
        out,
        "{:>8} {:>12} {:>13} {:>13} {:>6}  stop",
        "data set", "strength", "residual norm", "penalty norm", "iter"
    );
    for set in &summary.data_sets {
        let _ = writeln!(
            out,
            "{:>8} {:>12} {:>13} {:>13} {:>6}  {}",
            set.data_set,
            short(set.strength),
            short(set.result.residual_norm),
            short(set.result.penalty_norm),
            set.result.iterations,
            set.result.stop.reason
        );
    }
}

fn sweep(out: &mut String, summary: &Summary) {
    if summary.data_sets.is_empty() {
        if let Some(choice) = &summary.choice {
            table(out, &summary.sweep, choice);
            verdict(out, choice);
        }
        return;
    }
    for set in &summary.data_sets {
        let Some(choice) = &set.choice else { continue };
        let _ = writeln!(out, "Data set {}", set.data_set);
        let rows: Vec<SweepRow> =
            summary.sweep.iter().filter(|row| row.data_set == set.data_set).cloned().collect();
        table(out, &rows, choice);
        verdict(out, choice);
        out.push('\n');
    }
}

fn table(out: &mut String, rows: &[SweepRow], choice: &Choice) {
    let traces = rows.iter().any(|row| row.effective_parameters.is_some());
    let _ = write!(out, "{:>11} {:>13} {:>12}", "strength", "residual norm", "penalty norm");
    if traces {
        let _ = write!(out, " {:>9}", "eff. par.");
    }
    let _ = writeln!(out, " {:>5}  stop", "iter");
    let stops = rows.iter().map(|row| row.stop.len()).max().unwrap_or(0);
    let marks = marks(rows, choice);
    for (row, mark) in rows.iter().zip(marks) {
        let mut line = format!(
            "{:>11} {:>13} {:>12}",
            short(row.strength),
            short(row.residual_norm),
            short(row.penalty_norm)
        );
        if traces {
            let _ = write!(line, " {:>9.1}", row.effective_parameters.unwrap_or(f64::NAN));
        }
        let _ = write!(line, " {:>5}  {:<stops$}", row.iterations, row.stop);
        let beside = line.chars().count() + 1 + mark.chars().count() <= WIDTH;
        let _ = if beside {
            writeln!(out, "{}", format!("{line} {mark}").trim_end())
        } else {
            writeln!(out, "{}\n{mark:>WIDTH$}", line.trim_end())
        };
    }
}

/// Which rule points at which line.
fn marks(rows: &[SweepRow], choice: &Choice) -> Vec<String> {
    let mut marks = vec![String::new(); rows.len()];
    for result in choice.rules.iter().filter(|r| r.applicable) {
        let Some(strength) = result.strength else { continue };
        let distance = |row: &SweepRow| (row.strength / strength).ln().abs();
        let nearest =
            (0..rows.len()).min_by(|&a, &b| distance(&rows[a]).total_cmp(&distance(&rows[b])));
        if let Some(place) = nearest {
            let decisive = choice.rule == Some(result.rule);
            let word = result.rule.word();
            let mark = &mut marks[place];
            if !mark.is_empty() {
                mark.push_str(", ");
            }
            mark.push_str(if decisive { "< " } else { "" });
            mark.push_str(word);
        }
    }
    marks
}

fn verdict(out: &mut String, choice: &Choice) {
    out.push('\n');
    let rule = choice.rule.map_or("no rule".to_string(), |rule| rule.word().to_string());
    let word = match choice.verdict {
        Verdict::Agreed => "agreed",
        Verdict::Divided => "divided",
        Verdict::Undetermined => "undetermined",
    };
    let _ = writeln!(out, "Chosen   strength {} by {rule}", short(choice.strength));
    let _ = writeln!(out, "Verdict  {word}");
    for reason in &choice.reasons {
        wrap(out, "         ", reason);
    }
    for result in choice.rules.iter().filter(|r| !r.applicable) {
        wrap(out, "         ", &format!("{} does not apply: {}.", result.rule.word(), result.note));
    }
}

fn number(value: Option<f64>) -> String {
    value.map_or(
        "infinite".into(),
        |value| {
            if value == 0.0 { "0".into() } else { format!("{value:.8e}") }
        },
    )
}

fn short(value: f64) -> String {
    if value == 0.0 { "0".into() } else { format!("{value:.4e}") }
}

/// Breaks text into lines of at most 80 columns; the first begins with `first`, the others
/// are indented as far. Line breaks of the text are kept.
pub fn wrap(out: &mut String, first: &str, text: &str) {
    let indent = " ".repeat(first.chars().count());
    let mut start = first;
    for paragraph in text.lines() {
        let mut line = start.to_string();
        let mut used = false;
        for word in paragraph.split_whitespace() {
            let length = line.chars().count() + usize::from(used) + word.chars().count();
            if used && length > WIDTH {
                let _ = writeln!(out, "{}", line.trim_end());
                line.clone_from(&indent);
                used = false;
            }
            if used {
                line.push(' ');
            }
            line.push_str(word);
            used = true;
        }
        let _ = writeln!(out, "{}", line.trim_end());
        start = &indent;
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn long_text_is_broken_at_eighty_columns_and_indented() {
        let mut out = String::new();
        wrap(&mut out, "Note: ", &"word ".repeat(40));
        for (i, line) in out.lines().enumerate() {
            assert!(line.chars().count() <= 80);
            assert!(line.starts_with(if i == 0 { "Note: word" } else { "      word" }));
        }
        assert_eq!(out.matches("word").count(), 40);
    }
}
