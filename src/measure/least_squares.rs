//! Non-linear least squares by Levenberg (1944) and Marquardt (1963), dense, for fits of a few dozen numbers.

use nalgebra::{Cholesky, DMatrix, DVector, Dyn};

/// Steps after which a fit is given up; good starts take about ten.
const MOST_STEPS: usize = 100;

/// Where a fit ended.
#[derive(Debug, Clone)]
pub struct Fitted {
    /// The numbers fitted.
    pub parameters: DVector<f64>,
    /// Derivatives of the model by them, there.
    pub jacobian: DMatrix<f64>,
    /// Sum of squared residuals.
    pub cost: f64,
    /// Steps taken.
    pub steps: usize,
}

/// Minimises |model(p) − data|² from `start`. `model` returns values and derivatives (rows: data, columns: parameters), or
/// `None` where it is not defined: such steps are shortened.
///
/// `None` when the model is not defined at the start, holds no number, or does not settle.
pub fn fit(
    start: DVector<f64>,
    data: &DVector<f64>,
    model: impl Fn(&DVector<f64>) -> Option<(DVector<f64>, DMatrix<f64>)>,
) -> Option<Fitted> {
    let evaluate = |p: &DVector<f64>| {
        let (values, jacobian) = model(p)?;
        let residual = data - values;
        let cost = residual.norm_squared();
        cost.is_finite().then_some((residual, jacobian, cost))
    };
    let mut parameters = start;
    let (mut residual, mut jacobian, mut cost) = evaluate(&parameters)?;
    let mut damping = 1e-3;
    for steps in 1..=MOST_STEPS {
        let normal = jacobian.tr_mul(&jacobian);
        let gradient = jacobian.tr_mul(&residual);
        let mut damped = normal.clone();
        for i in 0..damped.nrows() {
            damped[(i, i)] += damping * normal[(i, i)].max(f64::MIN_POSITIVE);
        }
        let Some(step) = Cholesky::<f64, Dyn>::new(damped).map(|c| c.solve(&gradient)) else {
            damping *= 10.0;
            if damping > 1e12 {
                return None;
            }
            continue;
        };
        // the decrease a quadratic promises; below rounding of the cost there is nothing left to gain
        let promised = step.dot(&gradient);
        if promised <= 1e-14 * cost || promised <= 1e-28 * data.norm_squared() {
            return Some(Fitted { parameters, jacobian, cost, steps });
        }
        let trial = &parameters + &step;
        match evaluate(&trial) {
            Some((r, j, c)) if c < cost => {
                (parameters, residual, jacobian, cost) = (trial, r, j, c);
                damping = (damping * 0.1).max(1e-12);
            }
            _ => {
                damping *= 10.0;
                if damping > 1e12 {
                    // no step however small makes it better: this is the bottom, as far as rounding lets it be seen
                    let settled = promised <= 1e-9 * cost;
                    return settled.then_some(Fitted { parameters, jacobian, cost, steps });
                }
            }
        }
    }
    None
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Rosenbrock's valley (1960), residuals (1 − x, 10 (y − x²)): minimum at (1, 1) by definition.
    #[test]
    fn rosenbrock() {
        let model = |p: &DVector<f64>| {
            let (x, y) = (p[0], p[1]);
            let values = DVector::from_vec(vec![x - 1.0, 10.0 * (y - x * x)]);
            Some((values, DMatrix::from_row_slice(2, 2, &[1.0, 0.0, -20.0 * x, 10.0])))
        };
        let data = DVector::zeros(2);
        let fitted = fit(DVector::from_vec(vec![-1.2, 1.0]), &data, model).unwrap();
        assert!((fitted.parameters[0] - 1.0).abs() < 1e-7 && (fitted.parameters[1] - 1.0).abs() < 1e-7);
    }

    #[test]
    fn what_is_not_defined_is_not_fitted() {
        let data = DVector::from_vec(vec![1.0]);
        assert!(fit(DVector::zeros(1), &data, |_| None).is_none());
        let nan = |_: &DVector<f64>| Some((DVector::from_vec(vec![f64::NAN]), DMatrix::zeros(1, 1)));
        assert!(fit(DVector::zeros(1), &data, nan).is_none());
        // a step out of the domain is shortened: for √p = ½ from p = 25 the first full one leads to −20
        let root = |p: &DVector<f64>| {
            (p[0] > 0.0).then(|| {
                let r = p[0].sqrt();
                (DVector::from_vec(vec![r]), DMatrix::from_element(1, 1, 0.5 / r))
            })
        };
        let fitted = fit(DVector::from_vec(vec![25.0]), &DVector::from_vec(vec![0.5]), root).unwrap();
        assert!((fitted.parameters[0] - 0.25).abs() < 1e-6, "{}", fitted.parameters[0]);
    }
}
