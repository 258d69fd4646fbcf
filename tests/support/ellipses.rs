//! Ellipses of constant value and their line integrals, known in closed form.

/// Value κ inside an ellipse with half axes a, b, centre (x₀, y₀), turned by `angle` (radians).
#[derive(Debug, Clone, Copy)]
pub struct Ellipse {
    pub value: f64,
    pub a: f64,
    pub b: f64,
    pub x: f64,
    pub y: f64,
    pub angle: f64,
}

impl Ellipse {
    pub fn at(&self, x: f64, y: f64) -> f64 {
        let (sin, cos) = self.angle.sin_cos();
        let (dx, dy) = (x - self.x, y - self.y);
        let (u, v) = (cos * dx + sin * dy, cos * dy - sin * dx);
        if (u / self.a).powi(2) + (v / self.b).powi(2) <= 1.0 { self.value } else { 0.0 }
    }
}

/// The head phantom of Shepp & Logan (IEEE Trans. Nucl. Sci. 21:21, 1974) with the contrasts of
/// Toft (thesis, Technical University of Denmark, 1996), on [−1, 1]².
pub fn head() -> Vec<Ellipse> {
    let tilt = 18f64.to_radians();
    [
        (1.0, 0.69, 0.92, 0.0, 0.0, 0.0),
        (-0.8, 0.6624, 0.874, 0.0, -0.0184, 0.0),
        (-0.2, 0.11, 0.31, 0.22, 0.0, -tilt),
        (-0.2, 0.16, 0.41, -0.22, 0.0, tilt),
        (0.1, 0.21, 0.25, 0.0, 0.35, 0.0),
        (0.1, 0.046, 0.046, 0.0, 0.1, 0.0),
        (0.1, 0.046, 0.046, 0.0, -0.1, 0.0),
        (0.1, 0.046, 0.023, -0.08, -0.605, 0.0),
        (0.1, 0.023, 0.023, 0.0, -0.605, 0.0),
        (0.1, 0.023, 0.046, 0.06, -0.605, 0.0),
    ]
    .map(|(value, a, b, x, y, angle)| Ellipse { value, a, b, x, y, angle })
    .to_vec()
}
