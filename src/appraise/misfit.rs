//! Misfit against the stated uncertainty.

/// χ²/(m − tr H) = ‖W(b − Ax)‖²/(m − tr H), with m data of positive weight.
///
/// `None` where no degree of freedom is left: the model has as many parameters as there are data,
/// to rounding.
pub fn chi_square_per_dof(
    residual_norm: f64,
    data: usize,
    effective_parameters: f64,
) -> Option<f64> {
    let freedom = data as f64 - effective_parameters;
    // tr H is a sum of up to m shares in [0, 1]: its rounding is below m·ε times a few.
    (freedom > 16.0 * data as f64 * f64::EPSILON).then(|| residual_norm * residual_norm / freedom)
}

/// GCV(λ) = m ‖r‖²/(m − tr H)². Source: Golub, Heath & Wahba, Technometrics 21:215, 1979.
pub fn gcv(residual_norm: f64, data: usize, effective_parameters: f64) -> Option<f64> {
    let m = data as f64;
    let freedom = m - effective_parameters;
    (freedom > 16.0 * m * f64::EPSILON).then(|| m * (residual_norm / freedom).powi(2))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn no_freedom_gives_no_value() {
        assert_eq!(chi_square_per_dof(2.0, 5, 3.0), Some(2.0));
        assert_eq!(chi_square_per_dof(2.0, 5, 5.0 - 1e-15), None);
        assert_eq!(gcv(2.0, 4, 2.0), Some(4.0));
    }
}
