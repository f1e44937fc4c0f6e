//! Values of basis functions at points in space.

use crate::basis::Basis;
use crate::basis::shell::cartesian_powers;
use crate::integrals::harmonics::function_transform;
use nalgebra::{DVector, Vector3};

/// Values of all functions at `point` (bohr), in bohr^(−3/2).
#[must_use]
pub fn basis_values(basis: &Basis, point: &Vector3<f64>) -> DVector<f64> {
    let mut values = Vec::with_capacity(basis.len());
    for (s, shell) in basis.shells().iter().enumerate() {
        let r = point - basis.centre(s);
        let square = r.norm_squared();
        let gaussians: Vec<f64> = shell
            .exponents
            .iter()
            .map(|a| (-a * square).exp())
            .collect();
        for contraction in &shell.contractions {
            let terms = contraction.coefficients.iter().zip(&gaussians);
            let radial: f64 = terms.map(|(c, g)| c * g).sum();
            let transform = function_transform(contraction.l, shell.kind);
            for f in 0..transform.functions() {
                let mut angular = 0.0;
                for (powers, c) in cartesian_powers(contraction.l).zip(transform.row(f)) {
                    let monomial: f64 = (0..3).map(|i| r[i].powi(powers[i] as i32)).product();
                    angular += c * monomial;
                }
                values.push(angular * radial);
            }
        }
    }
    DVector::from_vec(values)
}
