//! A regular grid of cells in one to three dimensions, as the job file states it.
//!
//! Cells are numbered from 0 along the fastest axis first. With axes listed `x, y, z` the
//! fastest is either the first (order x, y, z) or the last (order z, y, x); a middle one would
//! leave the order of the others open and is refused. An unknown is one *active* cell; without
//! a list every cell is active and unknown j is cell j.

use crate::base::Complaint;

/// One axis: `cells` cells of width `spacing`, the outer border of the first at `origin`.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Axis {
    /// e.g. `x`; not empty, and no other axis has it.
    pub name: String,
    /// At least 1.
    pub cells: usize,
    /// Cell width in the grid's unit; positive.
    pub spacing: f64,
    /// Coordinate of the outer border of cell 0, in the grid's unit.
    pub origin: f64,
}

/// A rectangular grid of cells, some of them unknowns.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Grid {
    /// As listed by the user, one to three.
    pub axes: Vec<Axis>,
    /// Unit of all lengths, e.g. `m`.
    pub unit: String,
    /// Place in `axes` of the axis along which the cell number runs fastest: first or last.
    pub fastest: usize,
    /// Cell number of each unknown; `None` when unknown j is cell j.
    pub active: Option<Vec<u32>>,
}

impl Grid {
    /// Checks what the user stated. `active` holds cell numbers, each at most once.
    ///
    /// # Errors
    /// No or more than three axes, an axis without cells, a spacing that is not positive and
    /// finite, an origin that is not finite, axis names that are empty or repeat, a middle axis as
    /// the fastest, a cell number out of range or repeated.
    pub fn new(
        axes: Vec<Axis>,
        unit: String,
        fastest: &str,
        active: Option<Vec<u32>>,
    ) -> Result<Self, Complaint> {
        let count = axes.len();
        if !(1..=3).contains(&count) {
            return Err(Complaint::new(
                format!("the grid has {count} axes"),
                "state one, two or three axes",
            ));
        }
        for (place, axis) in axes.iter().enumerate() {
            check_axis(axis)?;
            if axes[..place].iter().any(|other| other.name == axis.name) {
                return Err(Complaint::new(
                    format!("two grid axes are called {:?}", axis.name),
                    "give each axis its own name",
                ));
            }
        }
        let fastest = place_of_fastest(&axes, fastest)?;
        let grid = Self { axes, unit, fastest, active: None };
        let cells = grid.cell_count_checked()?;
        if let Some(list) = &active {
            check_active(list, cells)?;
        }
        Ok(Self { active, ..grid })
    }

    /// Number of cells, active or not.
    pub fn cell_count(&self) -> usize {
        self.axes.iter().map(|axis| axis.cells).product()
    }

    fn cell_count_checked(&self) -> Result<usize, Complaint> {
        self.axes
            .iter()
            .try_fold(1usize, |cells, axis| cells.checked_mul(axis.cells))
            .filter(|&cells| cells <= u32::MAX as usize)
            .ok_or_else(|| {
                Complaint::new("the grid has more than 4,294,967,295 cells", "state fewer cells")
            })
    }

    /// Number of unknowns: active cells.
    pub fn unknowns(&self) -> usize {
        self.active.as_ref().map_or_else(|| self.cell_count(), Vec::len)
    }

    /// Cell number of unknown `j`.
    pub fn cell(&self, j: usize) -> usize {
        self.active.as_ref().map_or(j, |list| list[j] as usize)
    }

    /// Places in `axes` from the fastest to the slowest.
    pub fn order(&self) -> Vec<usize> {
        if self.fastest == 0 {
            (0..self.axes.len()).collect()
        } else {
            (0..self.axes.len()).rev().collect()
        }
    }

    /// Index along each listed axis of a cell number.
    pub fn indices(&self, cell: usize) -> Vec<usize> {
        let mut rest = cell;
        let mut indices = vec![0; self.axes.len()];
        for place in self.order() {
            indices[place] = rest % self.axes[place].cells;
            rest /= self.axes[place].cells;
        }
        indices
    }

    /// Cell number of indices along the listed axes.
    pub fn cell_at(&self, indices: &[usize]) -> usize {
        self.order()
            .iter()
            .rev()
            .fold(0, |cell, &place| cell * self.axes[place].cells + indices[place])
    }

    /// Centre of a cell, in the grid's unit.
    pub fn centre(&self, cell: usize) -> Vec<f64> {
        self.indices(cell)
            .iter()
            .zip(&self.axes)
            .map(|(&i, axis)| axis.origin + (i as f64 + 0.5) * axis.spacing)
            .collect()
    }

    /// A cell's place for a message, e.g. `cell (x 3, z 17) at (2.5, 8.5) m`; indices from 1.
    pub fn describe(&self, cell: usize) -> String {
        let indices: Vec<String> = self
            .indices(cell)
            .iter()
            .zip(&self.axes)
            .map(|(i, axis)| format!("{} {}", axis.name, i + 1))
            .collect();
        let centre: Vec<String> =
            self.centre(cell).iter().map(|c| format!("{c:.6}")).map(trim).collect();
        let unit = if self.unit.is_empty() { String::new() } else { format!(" {}", self.unit) };
        format!("cell ({}) at ({}){unit}", indices.join(", "), centre.join(", "))
    }

    /// `values` of the unknowns laid out as an array with the first listed axis fastest
    /// (C order (nz, ny, nx) for axes x, y, z); NaN where there is no unknown.
    ///
    /// Panics if `values` does not hold one value per unknown.
    pub fn spread(&self, values: &[f64]) -> (Vec<usize>, Vec<f64>) {
        assert_eq!(values.len(), self.unknowns(), "one value per unknown");
        let shape: Vec<usize> = self.axes.iter().rev().map(|axis| axis.cells).collect();
        let mut array = vec![f64::NAN; self.cell_count()];
        for (j, &value) in values.iter().enumerate() {
            let indices = self.indices(self.cell(j));
            let place = (0..self.axes.len())
                .rev()
                .fold(0, |place, axis| place * self.axes[axis].cells + indices[axis]);
            array[place] = value;
        }
        (shape, array)
    }
}

fn trim(number: String) -> String {
    if number.contains('.') {
        number.trim_end_matches('0').trim_end_matches('.').to_string()
    } else {
        number
    }
}

fn check_axis(axis: &Axis) -> Result<(), Complaint> {
    let fault = |cause: String, remedy: &str| Err(Complaint::new(cause, remedy));
    if axis.name.is_empty() {
        return fault(
            "a grid axis has no name".into(),
            "name every axis, e.g. axes = [\"x\", \"z\"]",
        );
    }
    if axis.cells == 0 {
        return fault(format!("axis {:?} has no cells", axis.name), "state at least one cell");
    }
    if !(axis.spacing > 0.0 && axis.spacing.is_finite()) {
        return fault(
            format!("axis {:?} has spacing {}", axis.name, axis.spacing),
            "state a positive cell width in the grid's unit",
        );
    }
    if !axis.origin.is_finite() {
        return fault(
            format!("axis {:?} has origin {}", axis.name, axis.origin),
            "state a finite origin",
        );
    }
    Ok(())
}

fn place_of_fastest(axes: &[Axis], fastest: &str) -> Result<usize, Complaint> {
    let names = || axes.iter().map(|axis| axis.name.as_str()).collect::<Vec<_>>().join(", ");
    let Some(place) = axes.iter().position(|axis| axis.name == fastest) else {
        return Err(Complaint::new(
            format!("the fastest axis {fastest:?} is not one of the axes {}", names()),
            "name the axis along which the cell number grows by one",
        ));
    };
    if place != 0 && place + 1 != axes.len() {
        return Err(Complaint::new(
            format!("the fastest axis {fastest:?} is in the middle of {}", names()),
            "list the axes so that the fastest comes first or last; the others follow in that order",
        ));
    }
    Ok(place)
}

fn check_active(list: &[u32], cells: usize) -> Result<(), Complaint> {
    let mut seen = vec![false; cells];
    for &cell in list {
        let Some(mark) = seen.get_mut(cell as usize) else {
            return Err(Complaint::new(
                format!("active cell {cell} is outside the grid of {cells} cells"),
                format!("cell numbers run from 0 to {}", cells - 1),
            ));
        };
        if std::mem::replace(mark, true) {
            return Err(Complaint::new(
                format!("active cell {cell} is listed twice"),
                "list each active cell once",
            ));
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn axis(name: &str, cells: usize) -> Axis {
        Axis { name: name.into(), cells, spacing: 0.5, origin: 1.0 }
    }

    #[test]
    fn numbering_follows_the_fastest_axis() {
        let axes = vec![axis("x", 3), axis("z", 4)];
        let first = Grid::new(axes.clone(), "m".into(), "x", None).unwrap();
        assert_eq!(first.indices(4), [1, 1]);
        assert_eq!(first.cell_at(&[1, 1]), 4);
        let last = Grid::new(axes, "m".into(), "z", None).unwrap();
        assert_eq!(last.indices(4), [1, 0]);
        assert_eq!(last.centre(4), [1.75, 1.25]);
        assert_eq!(last.describe(4), "cell (x 2, z 1) at (1.75, 1.25) m");
    }

    #[test]
    fn spread_puts_the_first_axis_fastest_and_nan_in_the_gaps() {
        let axes = vec![axis("x", 2), axis("z", 3)];
        let grid = Grid::new(axes, "m".into(), "z", Some(vec![0, 4])).unwrap();
        let (shape, values) = grid.spread(&[7.0, 8.0]);
        assert_eq!(shape, [3, 2]);
        // Cell 4 is x 1, z 1: second row, second column.
        assert_eq!((values[0], values[3]), (7.0, 8.0));
        assert_eq!(values.iter().filter(|v| v.is_nan()).count(), 4);
    }

    #[test]
    fn faults_are_refused_with_their_remedy() {
        let three = || vec![axis("x", 2), axis("y", 2), axis("z", 2)];
        let cause = |r: Result<Grid, Complaint>| r.unwrap_err().cause;
        assert!(cause(Grid::new(three(), "m".into(), "y", None)).contains("in the middle"));
        assert!(cause(Grid::new(three(), "m".into(), "w", None)).contains("not one of the axes"));
        assert!(cause(Grid::new(vec![], "m".into(), "x", None)).contains("0 axes"));
        assert!(cause(Grid::new(three(), "m".into(), "x", Some(vec![8]))).contains("outside"));
        assert!(cause(Grid::new(three(), "m".into(), "x", Some(vec![1, 1]))).contains("twice"));
        let mut flat = three();
        flat[1].cells = 0;
        assert!(cause(Grid::new(flat, "m".into(), "x", None)).contains("no cells"));
    }
}
