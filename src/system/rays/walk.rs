//! One ray's walk through the cells, in cell units: plane k of an axis is the number k.

use super::{RayFlaw, Segment};
use crate::base::Grid;

/// Planes crossed closer together than this share of a cell may be crossed at once, if rounding
/// could have parted them; never more, so that no length that means anything is moved.
const JOINED_MAX: f64 = 1e-9;

/// A grid made ready for tracing many rays.
pub(super) struct Tracer {
    axes: Vec<AxisPlan>,
    /// The smallest cell width.
    width_min: f64,
}

struct AxisPlan {
    cells: u32,
    spacing: f64,
    origin: f64,
    /// By how much the cell number grows along this axis.
    stride: u32,
}

impl Tracer {
    pub(super) fn new(grid: &Grid) -> Self {
        let mut axes: Vec<AxisPlan> = grid
            .axes
            .iter()
            .map(|axis| AxisPlan {
                // Grids have fewer than 2³² cells.
                cells: axis.cells as u32,
                spacing: axis.spacing,
                origin: axis.origin,
                stride: 1,
            })
            .collect();
        let mut stride = 1;
        for place in grid.order() {
            axes[place].stride = stride;
            stride *= axes[place].cells;
        }
        let width_min = grid.axes.iter().map(|axis| axis.spacing).fold(f64::INFINITY, f64::min);
        Self { axes, width_min }
    }

    /// See [`super::trace`].
    pub(super) fn trace(
        &self,
        segment: &Segment,
        out: &mut Vec<(u32, f64)>,
    ) -> Result<f64, RayFlaw> {
        out.clear();
        let length = self.check(segment)?;
        // Always walked from the end with the smaller first differing coordinate, so that a ray
        // and its reverse have the same bits.
        let reversed = segment.from > segment.to;
        let (from, to) =
            if reversed { (&segment.to, &segment.from) } else { (&segment.from, &segment.to) };
        let Some(walk) = Walk::enter(self, from, to, length)? else { return Ok(0.0) };
        let chord = walk.chord();
        walk.collect(out);
        if reversed {
            out.reverse();
        }
        Ok(chord)
    }

    /// The ray's length, if it is one that can be traced.
    fn check(&self, segment: &Segment) -> Result<f64, RayFlaw> {
        let coordinates = || segment.from.iter().chain(&segment.to);
        if coordinates().any(|c| !c.is_finite()) {
            return Err(RayFlaw::NotFinite);
        }
        let beyond = |point: &[f64; 3]| point[self.axes.len()..].iter().any(|&c| c != 0.0);
        if beyond(&segment.from) || beyond(&segment.to) {
            return Err(RayFlaw::BeyondAxes);
        }
        let squared = segment.squared_length();
        if squared.is_infinite() {
            return Err(RayFlaw::TooLarge);
        }
        // Below the normal numbers (1e-154 long) a length has lost its digits.
        if !squared.is_normal() {
            return Err(RayFlaw::ZeroLength);
        }
        Ok(squared.sqrt())
    }
}

impl AxisPlan {
    /// A coordinate in cell units, and how far rounding of coordinate, origin and spacing may
    /// have moved it: each is good to ε/2 of itself, and so are difference and quotient. Within
    /// that distance of a plane it is put on the plane.
    fn place(&self, coordinate: f64) -> (f64, f64) {
        let place = (coordinate - self.origin) / self.spacing;
        let scale = (coordinate.abs() + self.origin.abs()) / self.spacing;
        let rounding = f64::EPSILON * (0.5 * scale + 1.5 * place.abs());
        let plane = place.round();
        (if (place - plane).abs() <= rounding { plane } else { place }, rounding)
    }
}

/// The planes of one axis as the ray meets them: crossing k of 0..=cells, in order of α.
#[derive(Clone, Copy, Default)]
struct March {
    from: f64,
    run: f64,
    cells: u32,
    stride: u32,
    /// The next crossing ahead, from 1, and its α.
    next: u32,
    alpha: f64,
}

impl March {
    /// α of crossing k. Grows with k, and never NaN: `run` is finite and not 0.
    fn crossing(&self, k: u32) -> f64 {
        let plane = if self.run > 0.0 { k } else { self.cells - k };
        (f64::from(plane) - self.from) / self.run
    }

    /// Sets `next` to the first crossing beyond `alpha` by bisection, and returns this axis'
    /// share of the cell number there. Crossing 0 is not beyond `alpha`, the last one is.
    fn start(&mut self, alpha: f64) -> u32 {
        let (mut behind, mut ahead) = (0, self.cells);
        while ahead - behind > 1 {
            let middle = behind + (ahead - behind) / 2;
            if self.crossing(middle) > alpha { ahead = middle } else { behind = middle }
        }
        (self.next, self.alpha) = (ahead, self.crossing(ahead));
        let index = if self.run > 0.0 { behind } else { self.cells - ahead };
        index * self.stride
    }
}

/// A ray that has entered the grid.
struct Walk {
    /// The axes along which the ray moves: the first `moving`.
    marches: [March; 3],
    moving: usize,
    cell: u32,
    /// α of entry and of leaving; 0 and 1 for end points inside.
    enter: f64,
    leave: f64,
    /// Differences of α that are rounding.
    tolerance: f64,
    length: f64,
}

impl Walk {
    /// `None` if the ray misses the grid or has no length in it.
    fn enter(
        tracer: &Tracer,
        from: &[f64; 3],
        to: &[f64; 3],
        length: f64,
    ) -> Result<Option<Self>, RayFlaw> {
        let mut walk = Self {
            marches: [March::default(); 3],
            moving: 0,
            cell: 0,
            enter: 0.0,
            leave: 1.0,
            tolerance: 0.0,
            length,
        };
        // An α between 0 and 1 carries the rounding of both ends, over the run, and three
        // rounding errors of its own; two α are compared.
        let mut doubt: f64 = 0.0;
        let mut misses = false;
        for (axis, (&from, &to)) in tracer.axes.iter().zip(from.iter().zip(to)) {
            let ((from, from_doubt), (to, to_doubt)) = (axis.place(from), axis.place(to));
            let run = to - from;
            if !(from.is_finite() && run.is_finite()) {
                return Err(RayFlaw::TooLarge);
            }
            if run == 0.0 {
                // A cell owns its lower border; the last one the outer border too.
                misses |= !(0.0..=f64::from(axis.cells)).contains(&from);
                walk.cell += (from as u32).min(axis.cells - 1) * axis.stride;
                continue;
            }
            let march =
                March { from, run, cells: axis.cells, stride: axis.stride, next: 0, alpha: 0.0 };
            doubt = doubt.max((from_doubt + to_doubt) / run.abs());
            walk.enter = walk.enter.max(march.crossing(0));
            walk.leave = walk.leave.min(march.crossing(axis.cells));
            walk.marches[walk.moving] = march;
            walk.moving += 1;
        }
        walk.tolerance = (2.0 * doubt + 6.0 * f64::EPSILON)
            .min(JOINED_MAX * (tracer.width_min / length).min(1.0));
        if misses || walk.leave - walk.enter <= walk.tolerance {
            return Ok(None);
        }
        for march in &mut walk.marches[..walk.moving] {
            walk.cell += march.start(walk.enter);
        }
        Ok(Some(walk))
    }

    fn chord(&self) -> f64 {
        (self.leave - self.enter) * self.length
    }

    /// Visits the crossings in order. Where two are the same but for rounding the cell between
    /// them is passed over and `behind` stays, so its length goes to the cell that follows.
    fn collect(mut self, out: &mut Vec<(u32, f64)>) {
        let last = self.leave - self.tolerance;
        let mut behind = self.enter;
        // Every axis' last crossing is at or beyond `leave`, so no march passes its end.
        while let Some(march) = nearest(&mut self.marches[..self.moving], last) {
            if march.alpha - behind > self.tolerance {
                out.push((self.cell, (march.alpha - behind) * self.length));
                behind = march.alpha;
            }
            if march.run > 0.0 {
                self.cell += march.stride
            } else {
                self.cell -= march.stride
            }
            march.next += 1;
            march.alpha = march.crossing(march.next);
        }
        out.push((self.cell, (self.leave - behind) * self.length));
    }
}

/// The march with the smallest α, if that is before `last`.
fn nearest(marches: &mut [March], last: f64) -> Option<&mut March> {
    let mut best: Option<&mut March> = None;
    for march in marches {
        if march.alpha < best.as_ref().map_or(last, |best| best.alpha) {
            best = Some(march);
        }
    }
    best
}
