//! An invented survey before it becomes a system: plain lists, so that a fault is easy to plant.

use ellbow::base::random::Stream;
use ellbow::base::{Axis, Grid};
use ellbow::operator::CompressedRows;
use ellbow::system::findings::Trial;
use ellbow::system::*;
use ndarray::{Array2, Axis as Along};

#[derive(Clone)]
pub struct World {
    pub name: &'static str,
    pub n: usize,
    pub rows: Vec<Vec<(usize, f64)>>,
    pub data: Vec<f64>,
    pub sigma: Sigma,
    /// Axes and name of the fastest.
    pub grid: Option<(Vec<Axis>, String)>,
    pub units: Units,
    pub ids: Vec<String>,
    pub groups: Vec<u32>,
    pub group_names: Vec<String>,
    pub detectors: Option<Vec<String>>,
    pub columns: ColumnTable,
    pub reference: Option<Vec<f64>>,
}

#[derive(Clone)]
pub enum Sigma {
    Formula { absolute: f64, percent: f64 },
    Values(Vec<f64>),
}

impl World {
    pub fn sigma_values(&self) -> Vec<f64> {
        match &self.sigma {
            Sigma::Values(values) => values.clone(),
            Sigma::Formula { absolute, percent } => {
                let relative = |b: &f64| percent / 100.0 * b.abs();
                self.data.iter().map(|b| absolute.hypot(relative(b))).collect()
            }
        }
    }

    /// Data of a model with noise of the world's σ (of the noise-free data).
    pub fn measure(&mut self, truth: &[f64], seed: u64) {
        let noise = Stream::new(seed, 77);
        let product = |row: &Vec<(usize, f64)>| row.iter().map(|&(j, a)| a * truth[j]).sum();
        self.data = self.rows.iter().map(product).collect();
        let sigma = self.sigma_values();
        for (i, (datum, sigma)) in self.data.iter_mut().zip(sigma).enumerate() {
            *datum += sigma * noise.normal(i as u64);
        }
    }

    pub fn parts(&self) -> Parts {
        let mut pointers = vec![0];
        let (mut indices, mut values) = (Vec::new(), Vec::new());
        for row in &self.rows {
            let mut row = row.clone();
            row.sort_unstable_by_key(|entry| entry.0);
            indices.extend(row.iter().map(|entry| entry.0 as u32));
            values.extend(row.iter().map(|entry| entry.1));
            pointers.push(indices.len());
        }
        let m = self.rows.len();
        let column = |list: &[f64]| Array2::from_shape_vec((list.len(), 1), list.to_vec()).unwrap();
        let uncertainty = match &self.sigma {
            Sigma::Formula { absolute, percent } => {
                Uncertainty::Formula { absolute: *absolute, percent: *percent }
            }
            Sigma::Values(values) => {
                Uncertainty::Values { values: column(values), path: "sigma.npy".into() }
            }
        };
        let block = BlockPart {
            name: String::new(),
            matrix: CompressedRows::from_compressed(m, self.n, pointers, indices, values),
            matrix_path: "matrix.mtx".into(),
            data: column(&self.data),
            data_path: "data.npy".into(),
            uncertainty: Some(uncertainty),
            weight: 1.0,
        };
        let table = RowTable {
            ids: Some(self.ids.clone()),
            groups: Some(self.groups.clone()),
            group_names: self.group_names.clone(),
            others: self.detectors.iter().map(|list| ("detector".into(), list.clone())).collect(),
            ..RowTable::default()
        };
        let grid = self.grid.as_ref().map(|(axes, fastest)| {
            Grid::new(axes.clone(), "m".into(), fastest, None).expect("a sound grid")
        });
        Parts {
            blocks: vec![block],
            rows: Some((table, "rows.csv".into())),
            columns: Some((self.columns.clone(), "columns.csv".into())),
            reference: self.reference.as_ref().map(|values| Reference::Values {
                values: Array2::from_shape_vec((self.n, 1), values.clone()).unwrap(),
                path: "reference.npy".into(),
            }),
            missing_nan: false,
            linearisation: None,
            grid,
            units: self.units.clone(),
        }
    }
}

pub fn axis(name: &str, cells: usize, spacing: f64) -> Axis {
    Axis { name: name.into(), cells, spacing, origin: 0.0 }
}

/// Cells (first axis fastest) and lengths of the straight line from `a` to `b` in a box of
/// `cells` cells of size `spacing`: all crossings of cell borders, sorted along the line.
pub fn line(cells: [usize; 3], spacing: [f64; 3], a: [f64; 3], b: [f64; 3]) -> Vec<(usize, f64)> {
    let mut at = vec![0.0, 1.0];
    for d in 0..3 {
        for border in 0..=cells[d] {
            let t = (border as f64 * spacing[d] - a[d]) / (b[d] - a[d]);
            if t > 0.0 && t < 1.0 {
                at.push(t);
            }
        }
    }
    at.sort_unstable_by(f64::total_cmp);
    let length = (0..3).map(|d| (b[d] - a[d]).powi(2)).sum::<f64>().sqrt();
    let mut entries: Vec<(usize, f64)> = Vec::new();
    for pair in at.windows(2) {
        let middle = 0.5 * (pair[0] + pair[1]);
        let index: [f64; 3] =
            std::array::from_fn(|d| ((a[d] + middle * (b[d] - a[d])) / spacing[d]).floor());
        let inside = (0..3).all(|d| index[d] >= 0.0 && index[d] < cells[d] as f64);
        let piece = (pair[1] - pair[0]) * length;
        if inside && piece > 1e-9 {
            let index = index.map(|i| i as usize);
            let cell = index[0] + cells[0] * (index[1] + cells[1] * index[2]);
            match entries.iter_mut().find(|entry| entry.0 == cell) {
                Some(entry) => entry.1 += piece,
                None => entries.push((cell, piece)),
            }
        }
    }
    entries
}

/// The short solve by dense algebra: eigenvalues of (WA)(WA)ᵀ over the free unknowns, robust GCV
/// with γ = 0.1 over forty strengths. An independent stand-in for the tool's own.
pub fn quick_fit(system: &System, facts: &Facts) -> QuickFit {
    let (m, n) = (facts.rows, facts.columns);
    let fixed = system.columns.fixed.clone().unwrap_or_else(|| vec![f64::NAN; n]);
    let reference: Vec<f64> = match (&system.reference, facts.sets[0].constant) {
        (Some(reference), _) => reference.index_axis(Along(1), 0).to_vec(),
        (None, Some(constant)) if constant.share > 0.5 => vec![constant.value; n],
        _ => vec![0.0; n],
    };
    let mut a = nalgebra::DMatrix::<f64>::zeros(m, n);
    let mut r = nalgebra::DVector::<f64>::zeros(m);
    for i in 0..m {
        let w = system.weights.at(i, 0);
        r[i] = w * system.data[[i, 0]];
        for (j, value) in system.matrix.row(i).entries() {
            r[i] -= w * value * reference[j];
            if fixed[j].is_nan() {
                a[(i, j)] = w * value;
            }
        }
    }
    let eigen = (&a * a.transpose()).symmetric_eigen();
    let squares: Vec<f64> = eigen.eigenvalues.iter().map(|s| s.max(0.0)).collect();
    let coefficients = eigen.eigenvectors.transpose() * &r;
    let top = squares.iter().copied().fold(0.0, f64::max).sqrt();
    let data = facts.sets[0].data as f64;
    let (mut trials, mut chosen, mut least) = (Vec::new(), 0, f64::INFINITY);
    for step in 0..40 {
        let strength = top * 10f64.powf(-5.0 * f64::from(step) / 39.0);
        let filter = |s: &f64| s / (s + strength * strength);
        let trace: f64 = squares.iter().map(filter).sum();
        let trace_square: f64 = squares.iter().map(|s| filter(s).powi(2)).sum();
        let rho: f64 =
            squares.iter().zip(&coefficients).map(|(s, c)| ((1.0 - filter(s)) * c).powi(2)).sum();
        let trial = Trial { strength, residual_norm: rho.sqrt(), effective_parameters: trace };
        let robust = trial.gcv(facts.sets[0].data) * (0.1 + 0.9 * trace_square / data);
        if robust < least {
            (least, chosen) = (robust, trials.len());
        }
        trials.push(trial);
    }
    let strength = trials[chosen].strength;
    let scaled = nalgebra::DVector::from_iterator(
        m,
        squares.iter().zip(&coefficients).map(|(s, c)| c / (s + strength * strength)),
    );
    let change = a.transpose() * (&eigen.eigenvectors * scaled);
    let model: Vec<f64> = (0..n).map(|j| reference[j] + change[j]).collect();
    let residual = (0..m)
        .map(|i| {
            let entries = system.matrix.row(i).entries();
            system.data[[i, 0]] - entries.map(|(j, value)| value * model[j]).sum::<f64>()
        })
        .collect();
    QuickFit { data_set: 0, trials, chosen, model, residual }
}
