//! Attraction of electrons by point charges.

use super::one_electron::{Operator, symmetric_matrices};
use super::recurrence::{HermiteCoulomb, PrimitivePair, hermite_count, hermite_index};
use crate::basis::Basis;
use crate::basis::shell::cartesian_powers;
use nalgebra::{DMatrix, Vector3};
use std::f64::consts::PI;

/// One matrix per charge.
pub(super) struct Attraction<'a> {
    /// Charges in units of e, and where they are, bohr.
    pub(super) charges: &'a [(f64, Vector3<f64>)],
}

/// Potentials of the charges in the Hermite functions of one primitive pair, one charge after another.
#[derive(Default)]
pub(super) struct Potentials {
    values: Vec<f64>,
    work: HermiteCoulomb,
}

impl Operator for Attraction<'_> {
    type Prepared = Potentials;
    const KET_RAISE: usize = 0;

    fn components(&self) -> usize {
        self.charges.len()
    }

    fn prepare(&self, pair: &PrimitivePair, degree: usize, potentials: &mut Potentials) {
        let p = pair.exponent();
        potentials.values.clear();
        for (charge, position) in self.charges {
            let factor = -2.0 * PI / p * charge;
            let r = potentials
                .work
                .compute(degree, p, &(pair.centre - position));
            potentials
                .values
                .extend(r[..hermite_count(degree)].iter().map(|r| factor * r));
        }
    }

    fn add(
        &self,
        pair: &PrimitivePair,
        potentials: &Potentials,
        bra_l: usize,
        ket_l: usize,
        coefficient: f64,
        out: &mut [f64],
    ) {
        let each = potentials.values.len() / self.charges.len().max(1);
        let mut out = out.iter_mut();
        for potential in potentials.values.chunks_exact(each.max(1)) {
            for a in cartesian_powers(bra_l) {
                for (b, out) in cartesian_powers(ket_l).zip(&mut out) {
                    let [x, y, z] = std::array::from_fn(|i| pair.hermite[i].row(a[i], b[i]));
                    let mut sum = 0.0;
                    for (t, ex) in x.iter().enumerate() {
                        for (u, ey) in y.iter().enumerate() {
                            let mut inner = 0.0;
                            for (v, ez) in z.iter().enumerate() {
                                inner += ez * potential[hermite_index(t, u, v)];
                            }
                            sum += ex * ey * inner;
                        }
                    }
                    *out += coefficient * sum;
                }
            }
        }
    }
}

/// Matrix ⟨a|−Σ Z/|r − R||b⟩ in hartree for charges (Z in units of e, R in bohr); symmetric and
/// negative for positive charges. Zero charges cost nothing.
#[must_use]
pub fn attraction(basis: &Basis, charges: &[(f64, Vector3<f64>)]) -> DMatrix<f64> {
    let charges = charged(charges);
    let potentials = symmetric_matrices(&Attraction { charges: &charges }, basis);
    sum(&potentials, basis.len())
}

/// Those that attract or repel at all.
pub(super) fn charged(charges: &[(f64, Vector3<f64>)]) -> Vec<(f64, Vector3<f64>)> {
    let is_charged = |(z, _): &&(f64, Vector3<f64>)| z.abs() > 0.0;
    charges.iter().filter(is_charged).copied().collect()
}

/// The sum of potentials, in their order.
pub(super) fn sum(potentials: &[DMatrix<f64>], order: usize) -> DMatrix<f64> {
    potentials
        .iter()
        .fold(DMatrix::zeros(order, order), |sum, potential| {
            sum + potential
        })
}

#[cfg(test)]
mod tests {
    use super::super::one_electron::samples;
    use super::super::values::basis_values;
    use super::*;
    use crate::basis::FunctionKind;

    /// ∫ f over space for f with a 1/|r − origin| pole: radial midpoint in r = s³ times a product
    /// angular rule (Gauss–Legendre by Newton iteration × trapezoid).
    fn spherical_integral(origin: &Vector3<f64>, mut f: impl FnMut(&Vector3<f64>, f64)) {
        let polar = 40;
        let mut nodes = Vec::new();
        for i in 0..polar {
            let mut x = (PI * (i as f64 + 0.75) / (polar as f64 + 0.5)).cos();
            let mut slope = 1.0;
            for _ in 0..30 {
                let (mut low, mut high) = (1.0, x);
                for k in 2..=polar {
                    let next = ((2 * k - 1) as f64 * x * high - (k - 1) as f64 * low) / k as f64;
                    (low, high) = (high, next);
                }
                slope = polar as f64 * (x * high - low) / (x * x - 1.0);
                x -= high / slope;
            }
            nodes.push((x, 2.0 / ((1.0 - x * x) * slope * slope)));
        }
        // Tanh-like map: r = e^{s − e^{−s}} makes the trapezoid converge exponentially.
        let step = 0.05;
        for i in 0..=140 {
            let s = -4.5 + f64::from(i) * step;
            let r = (s - (-s).exp()).exp();
            let radial = step * r * (1.0 + (-s).exp()) * r * r;
            if radial < 1e-18 || r > 11.0 {
                continue;
            }
            for (z, wz) in &nodes {
                let rho = (1.0 - z * z).sqrt();
                for k in 0..40 {
                    let phi = 2.0 * PI * f64::from(k) / 40.0;
                    let direction = Vector3::new(rho * phi.cos(), rho * phi.sin(), *z);
                    let weight = radial * wz * 2.0 * PI / 40.0;
                    f(&(origin + direction * r), weight);
                }
            }
        }
    }

    #[test]
    fn matches_integration_around_a_charge() {
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            let basis = samples::mixed_basis(kind, 2);
            let charge = Vector3::new(-0.1, 0.3, 0.6);
            let mut sum = DMatrix::zeros(basis.len(), basis.len());
            spherical_integral(&charge, |point, weight| {
                let values = basis_values(&basis, point);
                let factor = -1.7 * weight / (point - charge).norm();
                sum.ger(factor, &values, &values, 1.0);
            });
            let error = (attraction(&basis, &[(1.7, charge)]) - sum).abs().max();
            assert!(error < 1e-9, "{kind:?}: {error}");
        }
    }

    #[test]
    fn charges_add_up_and_look_like_points_from_far_away() {
        let basis = samples::mixed_basis(FunctionKind::Spherical, 4);
        let (near, far) = (Vector3::new(0.3, 0.2, 0.1), Vector3::new(0.0, 0.0, 3e4));
        let both = attraction(&basis, &[(1.0, near), (0.0, far), (-2.0, far)]);
        let one = attraction(&basis, &[(1.0, near)]);
        let rest = both - one;
        let s = super::super::overlap::overlap(&basis);
        assert!((rest - s * (2.0 / 3e4)).abs().max() < 1e-8);
    }
}
