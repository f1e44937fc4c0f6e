//! Stand-in for the repulsion kernel.
use nalgebra::DMatrix;
/// Coulomb and exchange matrices.
pub struct CoulombExchangePair {
    /// J
    pub coulomb: DMatrix<f64>,
    /// K
    pub exchange: DMatrix<f64>,
}
/// Two-electron contraction.
pub trait CoulombExchange {
    /// J and K of each density.
    fn coulomb_exchange(&self, densities: &[DMatrix<f64>]) -> Vec<CoulombExchangePair>;
}
/// Slow list.
#[derive(Debug, Clone)]
pub struct RepulsionList {
    n: usize,
    list: Vec<f64>,
}
impl RepulsionList {
    /// All integrals.
    pub fn compute(basis: &crate::basis::Basis) -> Self {
        Self {
            n: basis.len(),
            list: crate::integrals::reference::repulsion_list(basis),
        }
    }
}
impl CoulombExchange for RepulsionList {
    fn coulomb_exchange(&self, densities: &[DMatrix<f64>]) -> Vec<CoulombExchangePair> {
        let n = self.n;
        let mut out: Vec<CoulombExchangePair> = densities
            .iter()
            .map(|_| CoulombExchangePair {
                coulomb: DMatrix::zeros(n, n),
                exchange: DMatrix::zeros(n, n),
            })
            .collect();
        let mut at = 0;
        for a in 0..n {
            for b in 0..=a {
                let ab = a * (a + 1) / 2 + b;
                for c in 0..=a {
                    for d in 0..=c {
                        let cd = c * (c + 1) / 2 + d;
                        if cd > ab {
                            continue;
                        }
                        let mut v = self.list[at];
                        at += 1;
                        if a == b {
                            v *= 0.5;
                        }
                        if c == d {
                            v *= 0.5;
                        }
                        if ab == cd {
                            v *= 0.5;
                        }
                        for (o, p) in out.iter_mut().zip(densities) {
                            let j = &mut o.coulomb;
                            let k = &mut o.exchange;
                            j[(a, b)] += 4.0 * v * p[(c, d)];
                            j[(c, d)] += 4.0 * v * p[(a, b)];
                            for (i, jj, kk, l) in
                                [(a, b, c, d), (b, a, c, d), (a, b, d, c), (b, a, d, c)]
                            {
                                k[(i, kk)] += v * p[(jj, l)];
                                k[(kk, i)] += v * p[(l, jj)];
                            }
                        }
                    }
                }
            }
        }
        for o in &mut out {
            let t = o.coulomb.transpose();
            o.coulomb = (&o.coulomb + t) * 0.5;
        }
        out
    }
}
impl RepulsionList {
    /// Bytes.
    pub fn bytes_needed(n: usize) -> u64 {
        let p = (n * (n + 1) / 2) as u64;
        p * (p + 1) * 4
    }
}
