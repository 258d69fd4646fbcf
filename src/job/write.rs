//! From a run to its folder. `summary.json` comes last: a folder with one is finished.

use std::fmt::Write as _;

use serde_json::{Value, json};

use crate::appraise::misfit;
use crate::choose::corner;
use crate::files::Folder;
use crate::job::JobError;
use crate::job::conduct::{Run, chi_square};
use crate::job::settings::Command;
use crate::kernel::Twin;
use crate::report::record::{
    BlockRecord, ConditionRecord, DirectRecord, InputRecord, ResultRecord, SCHEMA, Seconds,
    SetRecord, StopRecord, Summary, SweepRow, SystemRecord,
};
use crate::solve::Solved;
use crate::system::System;

/// Every file that a run may write besides its log; the one that vouches for the others first.
pub const RESULTS: [&str; 8] = [
    "summary.json",
    "model.npy",
    "residual.npy",
    "predicted.npy",
    "model_grid.npy",
    "models.npy",
    "sweep.csv",
    "history.csv",
];

/// Writes every file of a finished run and returns its record.
///
/// # Errors
/// A file cannot be written; files already there are whole, the old summary is still the old one.
pub fn write(
    folder: &Folder,
    run: &Run<'_>,
    inputs: Vec<InputRecord>,
) -> Result<Summary, JobError> {
    // An earlier run's summary would vouch for files that are being replaced, and what that run
    // wrote and this one does not would be taken for this one's.
    folder.remove(&RESULTS)?;
    let (m, n) = (run.system.matrix.rows(), run.system.matrix.columns());
    let sets = run.sets.len();
    let per_set = |length: usize| if sets == 1 { vec![length] } else { vec![sets, length] };
    let chosen: Vec<&Solved> = (0..sets).map(|set| run.chosen(set)).collect();
    let models: Vec<f64> = chosen.iter().flat_map(|s| s.model.iter().copied()).collect();
    folder.write_npy("model.npy", &per_set(n), &models)?;
    let (mut residuals, mut predicted) =
        (Vec::with_capacity(sets * m), Vec::with_capacity(sets * m));
    for solved in &chosen {
        let (residual, prediction) = fit(run.system, solved);
        residuals.extend(residual);
        predicted.extend(prediction);
    }
    folder.write_npy("residual.npy", &per_set(m), &residuals)?;
    folder.write_npy("predicted.npy", &per_set(m), &predicted)?;
    write_grid(folder, run.system, &chosen)?;
    let table = table(run);
    if run.settings.command == Command::Sweep {
        let mut shape = vec![run.strengths.len(), n];
        if sets > 1 {
            shape.insert(0, sets);
        }
        let all: Vec<f64> = run
            .sets
            .iter()
            .flat_map(|set| set.solved.iter().flat_map(|s| s.model.iter().copied()))
            .collect();
        folder.write_npy("models.npy", &shape, &all)?;
        folder.write("sweep.csv", sweep_csv(&table, sets).as_bytes())?;
    }
    folder.write_with("history.csv", |out| history(out, run))?;
    let summary = summary(run, inputs, table);
    let event = json!({
        "event": if summary.interrupted { "interrupted" } else { "finished" },
        "command": summary.command,
        "ellbow_version": summary.ellbow_version,
        "stop": summary.result.stop.reason,
        "iterations": summary.result.iterations,
        "passes": summary.passes,
        "seconds": summary.seconds.total,
        "warnings": summary.warnings,
    });
    log(folder, event)?;
    let text = serde_json::to_string_pretty(&summary).expect("a record of plain values");
    folder.write("summary.json", format!("{text}\n").as_bytes())?;
    Ok(summary)
}

/// Appends an event to the folder's log, with the time.
///
/// # Errors
/// The log cannot be written.
pub fn log(folder: &Folder, mut event: Value) -> Result<(), JobError> {
    event["time_unix"] = unix_seconds().into();
    Ok(folder.append("log.jsonl", &format!("{event}\n"))?)
}

/// The stop that outranks all others.
const BROKE_DOWN: &str = "not-finite";

/// Seconds since 1970.
fn unix_seconds() -> u64 {
    let now = std::time::SystemTime::now();
    now.duration_since(std::time::UNIX_EPOCH).map_or(0, |elapsed| elapsed.as_secs())
}

/// b − Ax and Ax in data units as the user gave them; the residual of an absent datum is NaN.
fn fit(system: &System, solved: &Solved) -> (Vec<f64>, Vec<f64>) {
    let absent = |i: usize| system.absent.as_ref().is_some_and(|gone| gone[[i, solved.set]]);
    let shift = |i: usize| system.data_shift.as_ref().map_or(0.0, |shift| shift[i]);
    let mut residuals = Vec::with_capacity(solved.residual.len());
    let mut predicted = Vec::with_capacity(solved.residual.len());
    for (i, residual) in solved.residual.iter().enumerate() {
        residuals.push(if absent(i) { f64::NAN } else { *residual });
        predicted.push(system.data[[i, solved.set]] + shift(i) - residual);
    }
    (residuals, predicted)
}

fn write_grid(folder: &Folder, system: &System, chosen: &[&Solved]) -> Result<(), JobError> {
    let Some(grid) = &system.grid else {
        return Ok(());
    };
    let (mut shape, mut values) = (Vec::new(), Vec::new());
    for solved in chosen {
        let cells: Vec<f64> = solved
            .model
            .iter()
            .enumerate()
            .filter(|(j, _)| system.columns.is_cell(*j))
            .map(|(_, x)| *x)
            .collect();
        let (one, array) = grid.spread(&cells);
        shape = one;
        values.extend(array);
    }
    if chosen.len() > 1 {
        shape.insert(0, chosen.len());
    }
    Ok(folder.write_npy("model_grid.npy", &shape, &values)?)
}

fn table(run: &Run<'_>) -> Vec<SweepRow> {
    let mut rows = Vec::new();
    for (set, swept) in run.sets.iter().enumerate() {
        let bends = corner::bends(swept.process.as_ref(), &run.strengths);
        for (place, solved) in swept.solved.iter().enumerate() {
            let trace = run.traces.as_ref().map(|traces| traces[set][place]);
            rows.push(SweepRow {
                data_set: set + 1,
                strength: solved.strength,
                residual_norm: solved.residual_norm,
                penalty_norm: solved.penalty_norm,
                model_norm: solved.model_norm,
                effective_parameters: trace,
                chi_square_per_dof: chi_square(run, set, place),
                bend: bends.get(place).copied().filter(|bend| bend.is_finite()),
                gcv: trace
                    .and_then(|t| misfit::gcv(solved.residual_norm, run.facts.sets[set].data, t)),
                iterations: solved.iterations,
                stop: solved.stop.word().to_owned(),
            });
        }
    }
    rows
}

/// A number for a csv file; empty where there is none.
fn cell(value: Option<f64>) -> String {
    value.filter(|value| !value.is_nan()).map_or(String::new(), |value| format!("{value:e}"))
}

fn sweep_csv(rows: &[SweepRow], sets: usize) -> String {
    let first = if sets > 1 { "data_set," } else { "" };
    let mut out = format!(
        "{first}strength,residual_norm,penalty_norm,model_norm,effective_parameters,\
         effective_parameters_error,chi_square_per_dof,bend,gcv,gcv_robust,risk,iterations,stop\n"
    );
    for row in rows {
        if sets > 1 {
            let _ = write!(out, "{},", row.data_set);
        }
        // An exact trace has no sampling error; the robust and risk functions belong to rules to come.
        let error = row.effective_parameters.map(|_| 0.0);
        let _ = writeln!(
            out,
            "{:e},{:e},{:e},{:e},{},{},{},{},{},,,{},{}",
            row.strength,
            row.residual_norm,
            row.penalty_norm,
            row.model_norm,
            cell(row.effective_parameters),
            cell(error),
            cell(row.chi_square_per_dof),
            cell(row.bend),
            cell(row.gcv),
            row.iterations,
            row.stop
        );
    }
    out
}

fn history(out: &mut dyn std::io::Write, run: &Run<'_>) -> std::io::Result<()> {
    writeln!(
        out,
        "data_set,strength,purpose,iteration,residual_norm,penalty_norm,model_norm,gradient_norm,seconds"
    )?;
    // Without a reference the model norm is the penalty norm of unit weights; else it would need a vector.
    let plain = run.system.reference.is_none() && run.system.columns.penalty_weights.is_none();
    for row in &run.history {
        let model_norm = if plain { cell(Some(row.penalty_norm)) } else { String::new() };
        writeln!(
            out,
            "{},{:e},model,{},{},{},{},{},{:.6}",
            row.set + 1,
            row.strength,
            row.iteration,
            cell(Some(row.residual_norm)),
            cell(Some(row.penalty_norm)),
            model_norm,
            cell(Some(row.gradient_norm)),
            row.seconds
        )?;
    }
    Ok(())
}

fn summary(run: &Run<'_>, inputs: Vec<InputRecord>, sweep: Vec<SweepRow>) -> Summary {
    let sets: Vec<SetRecord> = (0..run.sets.len())
        .map(|set| SetRecord {
            data_set: set + 1,
            strength: run.chosen(set).strength,
            result: result(run, set),
            choice: run.choices.get(set).cloned(),
        })
        .collect();
    let first = run.chosen(0).strength;
    let one_strength = (0..run.sets.len()).all(|set| run.chosen(set).strength == first);
    let several = sets.len() > 1;
    Summary {
        schema: SCHEMA.into(),
        ellbow_version: env!("CARGO_PKG_VERSION").into(),
        command: run.settings.command.word().into(),
        settings: run.settings.resolved(run.facts.rows, run.facts.columns),
        system: system_record(run),
        method: serde_json::to_value(run.settings.method)
            .ok()
            .and_then(|word| word.as_str().map(str::to_owned))
            .unwrap_or_default(),
        strength: one_strength.then_some(first),
        penalty: run.settings.penalty.into(),
        result: ResultRecord { iterations: run.iterations, ..together(&sets) },
        passes: run.passes,
        column_scaling: run.column_scaling,
        condition: run.condition.map(|condition| ConditionRecord {
            value: finite(condition.value),
            exact: condition.exact,
        }),
        direct: direct(run),
        seconds: Seconds {
            load: run.load_seconds,
            solve: run.solve_seconds,
            total: run.begun.elapsed().as_secs_f64(),
        },
        bytes_per_pass: run.bytes_per_pass,
        pass: run.system.matrix.way(run.lanes).word().into(),
        simd: Twin::current().word().into(),
        threads: run.threads.count,
        threads_from: run.threads.from.clone(),
        peak_bytes: crate::base::memory::peak_bytes(),
        workspace_bytes: run.workspace_bytes,
        inputs,
        seed: run.settings.seed,
        choice: if several { None } else { run.choices.first().cloned() },
        data_sets: if several { sets } else { Vec::new() },
        blocks: blocks(run),
        sweep,
        warnings: run.warnings.clone(),
        interrupted: run.interrupted,
    }
}

fn finite(value: f64) -> Option<f64> {
    value.is_finite().then_some(value)
}

fn result(run: &Run<'_>, set: usize) -> ResultRecord {
    let place = run.chosen_place(set);
    let solved = run.chosen(set);
    let smallest_penalty = run
        .system
        .columns
        .penalty_weights
        .as_ref()
        .map_or(1.0, |p| p.iter().copied().fold(f64::INFINITY, f64::min));
    // ‖x − x_λ‖ ≤ ‖gradient‖/(λ² σ_min(L)²): the objective's curvature is at least that.
    let curvature = (solved.strength * smallest_penalty).powi(2);
    ResultRecord {
        stop: StopRecord { reason: solved.stop.word().into(), converged: solved.stop.converged() },
        iterations: solved.iterations,
        residual_norm: solved.residual_norm,
        penalty_norm: solved.penalty_norm,
        model_norm: solved.model_norm,
        gradient_norm: solved.gradient_norm,
        relative_gradient: solved.relative_gradient,
        orthogonality: solved.orthogonality,
        data_norm: solved.data_norm,
        effective_parameters: run.traces.as_ref().map(|traces| traces[set][place]),
        chi_square_per_dof: chi_square(run, set, place),
        model_error_bound: (curvature > 0.0).then(|| solved.gradient_norm / curvature),
    }
}

/// All data sets as one: norms in quadrature, the least favourable end.
fn together(sets: &[SetRecord]) -> ResultRecord {
    let mut all = sets[0].result.clone();
    for set in &sets[1..] {
        let one = &set.result;
        for (sum, part) in [
            (&mut all.residual_norm, one.residual_norm),
            (&mut all.penalty_norm, one.penalty_norm),
            (&mut all.model_norm, one.model_norm),
            (&mut all.gradient_norm, one.gradient_norm),
            (&mut all.orthogonality, one.orthogonality),
            (&mut all.data_norm, one.data_norm),
        ] {
            *sum = sum.hypot(part);
        }
        all.relative_gradient = all.relative_gradient.max(one.relative_gradient);
        all.iterations = all.iterations.max(one.iterations);
        let broke = one.stop.reason == BROKE_DOWN;
        if broke || (all.stop.converged && !one.stop.converged) {
            all.stop = one.stop.clone();
        }
        all.model_error_bound =
            all.model_error_bound.zip(one.model_error_bound).map(|(a, b)| a.hypot(b));
    }
    if sets.len() > 1 {
        (all.effective_parameters, all.chi_square_per_dof) = (None, None);
    }
    all
}

fn system_record(run: &Run<'_>) -> SystemRecord {
    let (system, facts) = (run.system, run.facts);
    let mut unexplainable = 0.0;
    let mut total = 0.0;
    for set in 0..run.sets.len() {
        let solved = run.chosen(set);
        for (i, residual) in solved.residual.iter().enumerate() {
            let square = (system.weights.at(i, set) * residual).powi(2);
            total += square;
            if facts.row.count[i] == 0 {
                unexplainable += square;
            }
        }
    }
    let fixed = system.columns.fixed.as_ref();
    SystemRecord {
        rows: facts.rows,
        columns: facts.columns,
        entries: facts.entries,
        storage: facts.storage.into(),
        matrix_bytes: facts.matrix_bytes,
        data_sets: facts.data_sets,
        data: facts.sets[0].data,
        data_unit: system.units.data.clone(),
        model_unit: system.units.model.clone(),
        model_quantity: system.units.model_quantity.clone(),
        fixed_unknowns: fixed.map_or(0, |f| f.iter().filter(|value| !value.is_nan()).count()),
        untouched_unknowns: facts.empty_columns.len(),
        rows_without_entries: facts.empty_rows.len(),
        unexplainable_share_of_residual: if total > 0.0 { unexplainable / total } else { 0.0 },
        grid: system.grid.as_ref().map(|grid| {
            json!({
                "axes": grid.axes,
                "unit": grid.unit,
                "fastest": grid.axes[grid.fastest].name,
                "active_cells": grid.unknowns(),
            })
        }),
    }
}

fn direct(run: &Run<'_>) -> Option<DirectRecord> {
    let dense = run.dense.as_ref()?;
    Some(DirectRecord {
        rank: dense.rank,
        rank_tolerance: dense.rank_tolerance,
        condition: finite(dense.condition()),
        singular_values: dense.singular_values.clone(),
    })
}

fn blocks(run: &Run<'_>) -> Vec<BlockRecord> {
    let system = run.system;
    if system.blocks.len() < 2 {
        return Vec::new();
    }
    let of_block = |block: &crate::system::BlockSpan| {
        let (mut square, mut data) = (0.0, 0);
        for set in 0..run.sets.len() {
            let solved = run.chosen(set);
            for i in block.first_row..block.first_row + block.rows {
                let weight = system.weights.at(i, set);
                square += (weight * solved.residual[i]).powi(2);
                data += usize::from(weight > 0.0);
            }
        }
        BlockRecord {
            name: block.name.clone(),
            first_row: block.first_row + 1,
            rows: block.rows,
            weight: block.weight,
            data,
            residual_norm: square.sqrt(),
            chi_square_per_datum: (run.settings.source.weights_are_noise() && data > 0)
                .then(|| square / data as f64),
        }
    };
    system.blocks.iter().map(of_block).collect()
}
