//! Which system a bench measures: a file, or a scenario at some scale.

use std::error::Error;
use std::path::PathBuf;

use ellbow::base::Grid;
use ellbow::files::matrix::{self, ReadOptions};
use ellbow::operator::{CompressedRows, Precision};

use super::scenarios::{self, Made};

pub struct Source {
    system: Option<PathBuf>,
    scenario: String,
    scale: f64,
    /// Cells along each axis, fastest first.
    grid: Option<Vec<usize>>,
}

impl Source {
    /// 1.2 million entries: a plain `cargo bench` takes seconds.
    pub fn small() -> Self {
        Self { system: None, scenario: "parallel-512".into(), scale: 0.01, grid: None }
    }

    /// Takes an option if it is one of `--system`, `--scenario`, `--scale`, `--grid`.
    pub fn take(&mut self, name: &str, value: &str) -> Result<bool, Box<dyn Error>> {
        match name {
            "--system" => self.system = Some(value.into()),
            "--scenario" => self.scenario = value.into(),
            "--scale" => self.scale = value.parse()?,
            "--grid" => {
                self.grid = Some(value.split(',').map(str::parse).collect::<Result<_, _>>()?);
            }
            _ => return Ok(false),
        }
        Ok(true)
    }

    /// The matrix, and its grid where the scenario or `--grid` tells.
    pub fn load(
        &self,
        precision: Precision,
    ) -> Result<(CompressedRows, Option<Grid>), Box<dyn Error>> {
        let rows = match &self.system {
            Some(path) => {
                let options = ReadOptions { precision, ..ReadOptions::default() };
                matrix::read(path, &options)?.value
            }
            None => self.made()?.matrix,
        };
        let cells = self.grid.clone().or_else(|| self.scenario_grid());
        Ok((rows, cells.map(|cells| scenarios::grid(&cells))))
    }

    fn made(&self) -> Result<Made, Box<dyn Error>> {
        match self.scenario.as_str() {
            "parallel-512" => Ok(scenarios::parallel(self.scale)),
            "crosswell-3d" => Ok(scenarios::crosswell(self.scale)),
            "hostile" => Ok(scenarios::hostile(self.scale)),
            other => Err(format!("no scenario {other:?}").into()),
        }
    }

    fn scenario_grid(&self) -> Option<Vec<usize>> {
        match (&self.system, self.scenario.as_str()) {
            (None, "parallel-512") => Some(scenarios::parallel_sides(self.scale).to_vec()),
            (None, "crosswell-3d") => Some(scenarios::crosswell_sides(self.scale).to_vec()),
            _ => None,
        }
    }
}
