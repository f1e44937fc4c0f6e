//! One-electron operators whose integrals over primitives are products of one-dimensional ones.

use super::one_electron::Operator;
use super::recurrence::PrimitivePair;
use crate::basis::shell::cartesian_powers;
use std::f64::consts::PI;

/// An operator that does not mix the axes, or sums of such operators.
pub(crate) trait Separable: Sync {
    /// Number of matrices.
    const COMPONENTS: usize;
    /// How much higher than the ket's angular momentum the expansion must reach.
    const KET_RAISE: usize;

    /// One component's integral between the monomials with powers `a` and `b`, in units of (π/p)^³⁄².
    fn integral(&self, component: usize, pair: &PrimitivePair, a: [usize; 3], b: [usize; 3])
    -> f64;
}

impl<S: Separable> Operator for S {
    /// (π/p)^³⁄², the integral of the product of two s primitives but for its prefactor.
    type Prepared = f64;
    const KET_RAISE: usize = <S as Separable>::KET_RAISE;

    fn components(&self) -> usize {
        S::COMPONENTS
    }

    fn prepare(&self, pair: &PrimitivePair, _degree: usize, volume: &mut f64) {
        *volume = (PI / pair.exponent()).powf(1.5);
    }

    fn add(
        &self,
        pair: &PrimitivePair,
        volume: &f64,
        bra_l: usize,
        ket_l: usize,
        coefficient: f64,
        out: &mut [f64],
    ) {
        let factor = coefficient * volume;
        let mut out = out.iter_mut();
        for component in 0..S::COMPONENTS {
            for a in cartesian_powers(bra_l) {
                for (b, out) in cartesian_powers(ket_l).zip(&mut out) {
                    *out += factor * self.integral(component, pair, a, b);
                }
            }
        }
    }
}
