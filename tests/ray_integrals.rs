//! Line integrals through cells against those of ellipses, which are known in closed form.

use std::f64::consts::PI;

use ellbow::base::Grid;
use ellbow::system::rays::{Segment, trace};

#[path = "support/ellipses.rs"]
mod ellipses;
#[path = "support/grids.rs"]
mod grids;

use ellipses::{Ellipse, head};
use grids::grid;

/// Line integral of an ellipse along the line x cosθ + y sinθ = t:
/// 2κab√(A²−τ²)/A², A² = a²cos²(θ−α) + b²sin²(θ−α), τ = t − x₀cosθ − y₀sinθ.
fn line_integral(ellipse: &Ellipse, theta: f64, t: f64) -> f64 {
    let turned = theta - ellipse.angle;
    let a2 = (ellipse.a * turned.cos()).powi(2) + (ellipse.b * turned.sin()).powi(2);
    let tau = t - ellipse.x * theta.cos() - ellipse.y * theta.sin();
    2.0 * ellipse.value * ellipse.a * ellipse.b * (a2 - tau * tau).max(0.0).sqrt() / a2
}

/// The line x cosθ + y sinθ = t across [−1, 1]².
fn line(theta: f64, t: f64) -> Segment {
    let (sin, cos) = theta.sin_cos();
    Segment::new(
        &[t * cos + 2.0 * sin, t * sin - 2.0 * cos],
        &[t * cos - 2.0 * sin, t * sin + 2.0 * cos],
    )
}

/// N×N cells over [−1, 1]², with the values of `f` at their centres.
fn sampled(n: usize, f: impl Fn(f64, f64) -> f64) -> (Grid, Vec<f64>) {
    let spacing = 2.0 / n as f64;
    let grid = grid(&[(n, spacing, -1.0), (n, spacing, -1.0)]);
    let values = (0..grid.cell_count())
        .map(|cell| {
            let centre = grid.centre(cell);
            f(centre[0], centre[1])
        })
        .collect();
    (grid, values)
}

fn integral_on_cells(grid: &Grid, values: &[f64], ray: &Segment) -> f64 {
    let mut out = Vec::new();
    trace(grid, ray, &mut out).unwrap();
    out.iter().map(|&(cell, length)| length * values[cell as usize]).sum()
}

/// Published closed-form values of the head phantom, and the traced ones within what the cells
/// at the rims can change: cell values differ from the phantom only within half a cell diagonal
/// δ of an ellipse's rim, and the band of that width lies between the ellipse shrunk and grown by
/// the factors 1 ∓ δ/min(a, b), whose line integrals are known.
#[test]
fn head_phantom_on_cells_meets_its_closed_form() {
    let n = 512;
    let (grid, values) = sampled(n, |x, y| head().iter().map(|e| e.at(x, y)).sum());
    let delta = 2f64.sqrt() / n as f64;
    for (degrees, t, published) in
        [(0.0, 0.0, 0.5146), (90.0, 0.0, 0.2076759576), (45.0, 0.1, 0.3621154147)]
    {
        let theta = f64::to_radians(degrees);
        let exact: f64 = head().iter().map(|e| line_integral(e, theta, t)).sum();
        assert!((exact - published).abs() < 1e-10, "{degrees}°: {exact}");
        let band: f64 = head()
            .iter()
            .map(|e| {
                let share = delta / e.a.min(e.b);
                let scaled =
                    |s: f64| line_integral(&Ellipse { a: s * e.a, b: s * e.b, ..*e }, theta, t);
                (scaled(1.0 + share) - scaled(1.0 - share)).abs()
            })
            .sum();
        let found = integral_on_cells(&grid, &values, &line(theta, t));
        assert!((found - exact).abs() < band, "{degrees}°: {found} against {exact} ± {band}");
    }
}

/// Second order, with its constant. The dome κ(1 − r²)² over an ellipse is a pile of ellipses
/// scaled by √s with weights 2(1 − s) ds, s from 0 to 1; integrating their line integrals over s
/// gives p(τ) = (16/15)(κab/A)(1 − τ²/A²)^{5/2}. Cells holding the values at their centres are,
/// on the average over the rays of a beam, the function averaged over a cell: f + (h²/24)Δf. The
/// integral of Δf along a line is p″(t), so the beam's mean error is (h²/24)·mean p″. The next
/// order is h²/80·p⁗/p″ of it, with p⁗/p″ = −9/A² at the centre under 0.1 % for the coarsest
/// grid. A fixed grid adds at the rim, where f″ jumps by 8κ/A² ≈ 16: about 0.01·16h² in each of
/// some 28 rim cells of area h², at random over a beam 0.45 wide, so 16·0.01·h⁴·√28/0.45 = 3e-5
/// or 3 % of the predicted 8.6e-4 on the coarsest grid, and less on the finer ones.
#[test]
fn line_integrals_converge_at_second_order_with_the_known_constant() {
    let e = Ellipse { value: 1.0, a: 0.8, b: 0.6, x: 0.03, y: -0.05, angle: 0.3 };
    let dome = |x: f64, y: f64| {
        let (sin, cos) = e.angle.sin_cos();
        let (dx, dy) = (x - e.x, y - e.y);
        let (u, v) = (cos * dx + sin * dy, cos * dy - sin * dx);
        (1.0 - (u / e.a).powi(2) - (v / e.b).powi(2)).max(0.0).powi(2)
    };
    // An irrational slope, so that the rays of the beam meet the cells everywhere alike.
    let theta = 1f64;
    let turned = theta - e.angle;
    let a2 = (e.a * turned.cos()).powi(2) + (e.b * turned.sin()).powi(2);
    let centre = e.x * theta.cos() + e.y * theta.sin();
    let scale = 16.0 / 15.0 * e.a * e.b / a2.sqrt();
    let share = |t: f64| (t - centre).powi(2) / a2;
    let exact = |t: f64| scale * (1.0 - share(t)).powf(2.5);
    let bend = |t: f64| {
        let (c, rest) = (share(t), 1.0 - share(t));
        5.0 * scale / a2 * (3.0 * c * rest.sqrt() - rest.powf(1.5))
    };
    // A smooth window: a beam with sharp edges would cut cells there and add their first order.
    let half_width = 0.45;
    let beam: Vec<(f64, f64)> = (0..4000)
        .map(|i| (i as f64 + 0.5) / 2000.0 - 1.0)
        .map(|u| (centre + half_width * u, (0.5 * PI * u).cos().powi(2)))
        .collect();
    let mean = |f: &dyn Fn(f64) -> f64| {
        beam.iter().map(|&(t, weight)| weight * f(t)).sum::<f64>()
            / beam.iter().map(|&(_, weight)| weight).sum::<f64>()
    };
    let mean_bend = mean(&bend);
    for n in [32, 64, 128, 256] {
        let (grid, values) = sampled(n, dome);
        let h = 2.0 / n as f64;
        let error = mean(&|t| integral_on_cells(&grid, &values, &line(theta, t)) - exact(t));
        let predicted = h * h / 24.0 * mean_bend;
        assert!((error / predicted - 1.0).abs() < 0.1, "{n}: {error} against {predicted}");
    }
}
