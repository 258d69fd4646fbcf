//! The page of `inspect`: at most 80 columns, units stated, findings first.

use std::fmt::Write as _;

use crate::base::complaint::escape;
use crate::report::page::wrap;
use crate::system::facts::Spread;
use crate::system::findings::{Evidence, Finding, Severity, number};
use crate::system::inspection::{
    Extremes, FitSummary, Forecast, Inspection, Named, OrderedBy, SetSummary, Shape,
};

/// Width of the label before each value.
const LABEL: usize = 25;

/// The page as plain text. Words of the user are escaped.
pub fn page(inspection: &Inspection) -> String {
    let mut out = String::new();
    findings(&mut out, &inspection.findings);
    shape(&mut out, inspection);
    coverage(&mut out, inspection);
    scaling(&mut out, inspection);
    for (place, set) in inspection.data_sets.iter().enumerate() {
        data_set(&mut out, inspection, place, set);
    }
    if let Some(fit) = &inspection.quick_fit {
        quick_fit(&mut out, fit);
    }
    extremes(&mut out, "Rows by sum of |entries|", &inspection.rows_by_size);
    extremes(&mut out, "Columns by sum of |entries|", &inspection.columns_by_size);
    if let Some(expected) = &inspection.forecast {
        forecast(&mut out, expected);
    }
    out
}

/// Places shown with what accuses nobody.
const NOTE_PLACES: usize = 2;

fn findings(out: &mut String, findings: &[Finding]) {
    if findings.is_empty() {
        let _ = writeln!(out, "Nothing looks wrong with this system.");
    }
    for finding in findings {
        let word = match finding.severity {
            Severity::Fault => "FAULT    ",
            Severity::Caution => "CAUTION  ",
            Severity::Note => "Note     ",
        };
        wrap(out, word, &finding.sentence);
        for evidence in &finding.evidence {
            wrap(out, "         - ", &evidence_line(evidence));
        }
        // What accuses names all it has; a note is only illustrated. The record holds the rest.
        let shown = if finding.severity == Severity::Note { NOTE_PLACES } else { usize::MAX };
        if !finding.places.is_empty() {
            wrap(out, "         at ", &listed(&finding.places, shown));
        }
        wrap(out, "         Remedy: ", &finding.remedy);
    }
}

fn evidence_line(evidence: &Evidence) -> String {
    format!("{}: {}", evidence.name, with_unit(evidence.value, &evidence.unit))
}

fn heading(out: &mut String, text: &str) {
    out.push('\n');
    wrap(out, "", text);
}

fn line(out: &mut String, label: &str, value: &str) {
    wrap(out, &format!("  {label:<width$} ", width = LABEL), value);
}

fn shape(out: &mut String, inspection: &Inspection) {
    let shape = &inspection.shape;
    heading(out, "Shape");
    let sets = if shape.data_sets == 1 {
        String::new()
    } else {
        format!(", in {} data sets each", shape.data_sets)
    };
    line(out, "rows (data)", &format!("{}{sets}", count(shape.rows)));
    line(out, "columns (unknowns)", &count(shape.columns));
    let filled = number(100.0 * shape.filled);
    line(out, "entries", &format!("{}, {filled} % of all places", count(shape.entries)));
    if shape.explicit_zeros > 0 {
        line(out, "  of these 0", &count(shape.explicit_zeros));
    }
    if shape.nonfinite_entries > 0 {
        line(out, "  of these not finite", &count(shape.nonfinite_entries));
    }
    storage(out, shape);
    if let Some(grid) = &shape.grid {
        let axes: Vec<String> = grid
            .axes
            .iter()
            .map(|(name, cells, spacing)| {
                let spacing = with_unit(*spacing, &grid.unit);
                format!("{} {} × {spacing}", escape(name), count(*cells))
            })
            .collect();
        let text = format!(
            "{}; {} runs fastest; {} unknowns",
            axes.join(", "),
            escape(&grid.fastest),
            count(grid.unknowns)
        );
        line(out, "grid", &text);
    }
    if shape.blocks_total > 1 {
        line(out, "blocks", &count(shape.blocks_total));
        for block in &shape.blocks {
            let last = block.first_row + block.rows;
            let rows = format!(
                "rows {} to {}, weight {}",
                count(block.first_row + 1),
                count(last),
                number(block.weight)
            );
            line(out, &format!("  {}", escape(&block.name)), &rows);
        }
    }
}

/// How the matrix is held, each fact on a line of its own.
fn storage(out: &mut String, shape: &Shape) {
    let each = match shape.entries {
        0 => String::new(),
        entries => {
            format!(", {} bytes an entry", number(shape.matrix_bytes as f64 / entries as f64))
        }
    };
    line(
        out,
        "matrix in memory",
        &format!("{}, {}{each}", bytes(shape.matrix_bytes), shape.storage),
    );
    let tiles = if shape.columns <= shape.tile_unknowns {
        "all unknowns in one tile".into()
    } else {
        format!("in tiles of {} unknowns", count(shape.tile_unknowns))
    };
    line(out, "  stored", &tiles);
    let unknowns = match shape.unknowns_by {
        OrderedBy::File => "as in the file",
        OrderedBy::Curve => "along a curve through the grid",
        OrderedBy::Count => "those in most rows first",
        OrderedBy::Touch => "as the rows first touch them",
    };
    line(out, "  order of unknowns", unknowns);
    let rows = if shape.rows_reordered { "by the tiles they touch" } else { "as in the file" };
    line(out, "  order of rows", rows);
}

fn coverage(out: &mut String, inspection: &Inspection) {
    let coverage = &inspection.coverage;
    heading(out, "Coverage                    smallest       median      largest");
    spread(out, "entries in a row", &coverage.row_entries);
    spread(out, "entries in a column", &coverage.column_entries);
    named(out, "rows without entries", &coverage.empty_rows);
    named(out, "columns without entries", &coverage.empty_columns);
    named(out, "data no model explains", &coverage.unexplainable_rows);
    if coverage.repeated_rows > 0 {
        let text =
            format!("{}, {} with their data", count(coverage.repeated_rows), coverage.copied_rows);
        line(out, "rows that repeat another", &text);
    }
    if coverage.equal_columns > 0 {
        line(out, "columns not told apart", &count(coverage.equal_columns));
    }
}

fn named(out: &mut String, label: &str, named: &Named) {
    if named.count == 0 {
        return;
    }
    let names = listed(&named.first, NOTE_PLACES);
    let more = if named.count > named.first.len().min(NOTE_PLACES) && !names.ends_with('…') {
        "; …"
    } else {
        ""
    };
    line(out, label, &format!("{}: {names}{more}", count(named.count)));
}

/// The first few places, and a mark where there are more.
fn listed(places: &[String], most: usize) -> String {
    let shown = places.len().min(most);
    let more = if shown < places.len() { "; …" } else { "" };
    format!("{}{more}", places[..shown].join("; "))
}

fn scaling(out: &mut String, inspection: &Inspection) {
    let scaling = &inspection.scaling;
    let units = &inspection.units;
    let unit = match (units.data.is_empty(), units.model.is_empty()) {
        (true, true) => String::new(),
        (data, model) => format!(
            ", {} per {}",
            if data { "1".into() } else { escape(&units.data) },
            if model { "model unit".into() } else { escape(&units.model) }
        ),
    };
    heading(out, &format!("Scaling{unit}"));
    spread(out, "|entry|", &scaling.entry);
    spread(out, "row, sum of |entries|", &scaling.row);
    spread(out, "column, sum of |entries|", &scaling.column);
    spread(out, "column norm, weighted", &scaling.weighted_column_norm);
}

fn data_set(out: &mut String, inspection: &Inspection, place: usize, set: &SetSummary) {
    let units = &inspection.units;
    if inspection.data_sets.len() == 1 {
        heading(out, "Data and the one value that fits them best");
    } else {
        heading(out, &format!("Data set {} and the one value that fits it best", place + 1));
    }
    let left_out = match set.left_out {
        0 => String::new(),
        left => format!(", {} left out", count(left)),
    };
    line(out, "data that count", &format!("{}{left_out}", count(set.data)));
    let (least, median, most) = set.values;
    let text =
        format!("{} to {}, median {}", number(least), number(most), with_unit(median, &units.data));
    line(out, "data", &text);
    match &set.uncertainty {
        None => line(out, "uncertainty", "not stated"),
        Some(sigma) => {
            let text = format!(
                "{} to {}, median {}",
                number(sigma.min),
                number(sigma.max),
                with_unit(sigma.median, &units.data)
            );
            line(out, "uncertainty", &text);
        }
    }
    match &set.constant {
        None => line(out, "one value", "every value fits equally well"),
        Some(fit) => {
            let value = with_unit(fit.value, &units.model);
            line(out, "one value", format!("{} {value}", escape(&units.model_quantity)).trim());
            line(out, "its reciprocal", &with_unit(fit.reciprocal, &reciprocal(&units.model)));
            let share = format!("{} % of the weighted data's square", number(100.0 * fit.share));
            line(out, "it explains", &share);
        }
    }
    if let Some((low, high)) = units.plausible {
        let text = format!("{} to {}", number(low), with_unit(high, &units.model));
        line(out, "plausible values", &text);
    }
    if set.unexplainable_share > 0.0 {
        let share = number(100.0 * set.unexplainable_share);
        line(out, "no model explains", &format!("{share} % of the weighted data's square"));
    }
}

fn quick_fit(out: &mut String, fit: &FitSummary) {
    heading(out, &format!("A first model of data set {}", fit.data_set));
    let tried = format!("{}, of {} tried", number(fit.strength), fit.strengths_tried);
    line(out, "strength", &tried);
    line(out, "effective parameters", &number(fit.effective_parameters));
    let (low, high) = fit.noise_range;
    let text = format!(
        "{} (between {} and {}), in units of the uncertainty; of the data where none is stated",
        number(fit.noise),
        number(low),
        number(high)
    );
    line(out, "noise", &text);
}

fn extremes(out: &mut String, title: &str, extremes: &Extremes) {
    if extremes.lightest.is_empty() {
        return;
    }
    heading(out, title);
    for (label, list) in [("smallest", &extremes.lightest), ("largest", &extremes.heaviest)] {
        for (place, (name, size)) in list.iter().enumerate() {
            let label = if place == 0 { label } else { "" };
            wrap(out, &format!("  {label:<9} {:>12}  ", number(*size)), name);
        }
    }
}

fn forecast(out: &mut String, forecast: &Forecast) {
    heading(out, "Forecast");
    line(out, "memory of a solve", &format!("{} at the peak", bytes(forecast.peak_bytes)));
    line(out, "memory of a sweep", &format!("{} at the peak", bytes(forecast.sweep_peak_bytes)));
    let seconds = format!("{} s", number(forecast.seconds_per_iteration));
    line(out, "one iteration", &seconds);
    line(out, "memory traffic", &format!("{} a pass", bytes(forecast.bytes_per_pass)));
    let bandwidth = forecast.bandwidth_bytes_per_second;
    line(out, "memory bandwidth", &format!("{} GB/s measured", number(bandwidth / 1e9)));
}

/// Three aligned numbers under the heading of the coverage table.
fn spread(out: &mut String, label: &str, spread: &Spread) {
    let _ = writeln!(
        out,
        "  {label:<width$} {:>9} {:>12} {:>12}",
        number(spread.min),
        number(spread.median),
        number(spread.max),
        width = LABEL
    );
}

fn with_unit(value: f64, unit: &str) -> String {
    if unit.is_empty() { number(value) } else { format!("{} {}", number(value), escape(unit)) }
}

/// Unit of one over a quantity: `m/s` for `s/m`, `m` for `1/m`, `1/(…)` for all else.
fn reciprocal(unit: &str) -> String {
    match unit.split('/').collect::<Vec<_>>().as_slice() {
        [""] => String::new(),
        ["1", below] => (*below).to_string(),
        [above, below] if !above.contains([' ', '·', '*', '(']) => format!("{below}/{above}"),
        [plain] if !plain.contains([' ', '·', '*', '(']) => format!("1/{plain}"),
        _ => format!("1/({unit})"),
    }
}

/// Thousands apart, e.g. `1,234,567`.
fn count(value: usize) -> String {
    let digits = value.to_string();
    let mut out = String::new();
    for (place, digit) in digits.chars().enumerate() {
        if place > 0 && (digits.len() - place).is_multiple_of(3) {
            out.push(',');
        }
        out.push(digit);
    }
    out
}

fn bytes(value: u64) -> String {
    let value = value as f64;
    match value {
        v if v < 1e4 => format!("{v} B"),
        v if v < 1e6 => format!("{:.1} kB", v / 1e3),
        v if v < 1e9 => format!("{:.1} MB", v / 1e6),
        v => format!("{:.2} GB", v / 1e9),
    }
}

#[cfg(test)]
#[path = "inspect_tests.rs"]
mod tests;
