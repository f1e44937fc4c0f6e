//! Hermite expansion of products of two Gaussians, and Hermite Coulomb integrals.
//!
//! L. E. McMurchie and E. R. Davidson, J. Comput. Phys. 26, 218 (1978): a product of two primitives
//! is Σ_tuv E_tuv Λ_tuv, with Λ_tuv = ∂_Px^t ∂_Py^u ∂_Pz^v exp(−p |r − P|²); integrals over the Λ are
//! derivatives of the Boys function, R_tuv.

use crate::basis::shell::MAX_ANGULAR_MOMENTUM;
use crate::integrals::boys;
use nalgebra::Vector3;
use std::sync::OnceLock;

/// Highest power of one factor: g, raised twice by the kinetic energy.
const MAX_POWER: usize = MAX_ANGULAR_MOMENTUM + 2;
/// Highest Hermite degree in one direction.
const MAX_DEGREE: usize = 2 * MAX_POWER;
/// Highest degree of a Hermite Coulomb integral: a derivative of (gg|gg).
pub const MAX_COULOMB_DEGREE: usize = 4 * MAX_ANGULAR_MOMENTUM + 1;

/// Gaussian pairs with exp(−μ R²) below e^(−60) = 1e-26 cannot be seen in any integral.
pub(crate) const NEGLIGIBLE_EXPONENT: f64 = 60.0;

/// Number of Hermite functions of degree up to `degree`.
#[must_use]
pub const fn hermite_count(degree: usize) -> usize {
    (degree + 1) * (degree + 2) * (degree + 3) / 6
}

/// Place of Λ_tuv in lists ordered by degree, and within a degree like the Cartesian monomials.
#[must_use]
pub const fn hermite_index(t: usize, u: usize, v: usize) -> usize {
    let degree = t + u + v;
    let rest = u + v;
    degree * (degree + 1) * (degree + 2) / 6 + rest * (rest + 1) / 2 + v
}

/// (t, u, v) of all Hermite functions up to [`MAX_COULOMB_DEGREE`], in order.
pub fn hermite_powers() -> &'static [[usize; 3]] {
    static POWERS: OnceLock<Vec<[usize; 3]>> = OnceLock::new();
    POWERS.get_or_init(|| {
        (0..=MAX_COULOMB_DEGREE)
            .flat_map(crate::basis::shell::cartesian_powers)
            .collect()
    })
}

/// Expansion coefficients E_t^{ij} in one direction.
#[derive(Debug, Clone)]
pub struct Hermite1d {
    e: Box<[f64; (MAX_POWER + 1) * (MAX_POWER + 1) * (MAX_DEGREE + 1)]>,
}

impl Default for Hermite1d {
    fn default() -> Self {
        Self {
            e: Box::new([0.0; _]),
        }
    }
}

impl Hermite1d {
    const fn place(i: usize, j: usize) -> usize {
        (i * (MAX_POWER + 1) + j) * (MAX_DEGREE + 1)
    }

    /// E_t^{ij} for t = 0 … i + j.
    #[must_use]
    pub fn row(&self, i: usize, j: usize) -> &[f64] {
        let start = Self::place(i, j);
        &self.e[start..=start + i + j]
    }

    /// Fills i ≤ `i_max`, j ≤ `j_max`: p total exponent, pa = P − A, pb = P − B, `e000` = E_0^{00}.
    ///
    /// E_t^{i+1,j} = E_{t−1}^{ij}/(2p) + (P−A) E_t^{ij} + (t+1) E_{t+1}^{ij}, and likewise in j.
    fn fill(&mut self, i_max: usize, j_max: usize, p: f64, pa: f64, pb: f64, e000: f64) {
        let half = 0.5 / p;
        self.e[0] = e000;
        for i in 0..=i_max {
            for j in 0..=j_max {
                if i + j == 0 {
                    continue;
                }
                let (source, shift) = if i > 0 {
                    (Self::place(i - 1, j), pa)
                } else {
                    (Self::place(i, j - 1), pb)
                };
                let target = Self::place(i, j);
                let top = i + j - 1;
                for t in 0..=i + j {
                    let mut value = 0.0;
                    if t > 0 {
                        value += half * self.e[source + t - 1];
                    }
                    if t <= top {
                        value += shift * self.e[source + t];
                    }
                    if t < top {
                        value += (t + 1) as f64 * self.e[source + t + 1];
                    }
                    self.e[target + t] = value;
                }
            }
        }
    }
}

/// Product of two primitive Gaussians on their centres.
#[derive(Debug, Clone, Default)]
pub struct PrimitivePair {
    /// exponent of the first factor
    pub a: f64,
    /// exponent of the second factor
    pub b: f64,
    /// centre of the product
    pub centre: Vector3<f64>,
    /// expansion in x, y, z; the factor exp(−μ R²) is split over the three
    pub hermite: [Hermite1d; 3],
}

impl PrimitivePair {
    /// Total exponent p = a + b.
    #[must_use]
    pub fn exponent(&self) -> f64 {
        self.a + self.b
    }

    /// Sets the pair up for powers up to `bra_power` and `ket_power`; `false` (and nothing usable)
    /// when the product is negligible.
    pub fn set(
        &mut self,
        (a, bra): (f64, &Vector3<f64>),
        (b, ket): (f64, &Vector3<f64>),
        bra_power: usize,
        ket_power: usize,
    ) -> bool {
        let p = a + b;
        let reduced = a * b / p;
        let apart = bra - ket;
        if reduced * apart.norm_squared() > NEGLIGIBLE_EXPONENT {
            return false;
        }
        self.a = a;
        self.b = b;
        self.centre = (bra * a + ket * b) / p;
        for axis in 0..3 {
            self.hermite[axis].fill(
                bra_power,
                ket_power,
                p,
                -b / p * apart[axis],
                a / p * apart[axis],
                (-reduced * apart[axis] * apart[axis]).exp(),
            );
        }
        true
    }
}

/// Work space for the Hermite Coulomb integrals R_tuv.
#[derive(Debug, Clone)]
pub struct HermiteCoulomb {
    current: Vec<f64>,
    previous: Vec<f64>,
}

impl Default for HermiteCoulomb {
    fn default() -> Self {
        Self {
            current: vec![0.0; hermite_count(MAX_COULOMB_DEGREE)],
            previous: vec![0.0; hermite_count(MAX_COULOMB_DEGREE)],
        }
    }
}

/// How R_tuv follows from lower ones: R^n_tuv = r_axis R^{n+1}_first + factor · R^{n+1}_second.
struct Step {
    axis: usize,
    first: usize,
    second: usize,
    factor: f64,
}

fn steps() -> &'static [Step] {
    static STEPS: OnceLock<Vec<Step>> = OnceLock::new();
    STEPS.get_or_init(|| {
        hermite_powers()
            .iter()
            .map(|powers| {
                let axis = (0..3).find(|&i| powers[i] > 0).unwrap_or(0);
                let mut once = *powers;
                once[axis] = once[axis].saturating_sub(1);
                let mut twice = once;
                twice[axis] = twice[axis].saturating_sub(1);
                Step {
                    axis,
                    first: hermite_index(once[0], once[1], once[2]),
                    second: hermite_index(twice[0], twice[1], twice[2]),
                    factor: once[axis] as f64,
                }
            })
            .collect()
    })
}

impl HermiteCoulomb {
    /// R_tuv = ∂_x^t ∂_y^u ∂_z^v F_0(α r²) for all degrees up to `degree`, in Hermite order.
    ///
    /// # Panics
    /// If `degree` exceeds [`MAX_COULOMB_DEGREE`].
    pub fn compute(&mut self, degree: usize, alpha: f64, r: &Vector3<f64>) -> &[f64] {
        let mut f = [0.0; MAX_COULOMB_DEGREE + 1];
        boys::boys(degree, alpha * r.norm_squared(), &mut f);
        let mut power = 1.0;
        for value in &mut f[..=degree] {
            *value *= power;
            power *= -2.0 * alpha;
        }
        let steps = steps();
        for n in (0..=degree).rev() {
            std::mem::swap(&mut self.current, &mut self.previous);
            self.current[0] = f[n];
            let count = hermite_count(degree - n);
            for (value, step) in self.current[1..count].iter_mut().zip(&steps[1..count]) {
                *value = r[step.axis] * self.previous[step.first]
                    + step.factor * self.previous[step.second];
            }
        }
        &self.current[..hermite_count(degree)]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn hermite_order_is_a_bijection() {
        for (place, &[t, u, v]) in hermite_powers().iter().enumerate() {
            assert_eq!(place, hermite_index(t, u, v));
        }
        assert_eq!(hermite_powers().len(), hermite_count(MAX_COULOMB_DEGREE));
    }

    #[test]
    fn expansion_reproduces_the_product() {
        let (a, b) = (0.7, 1.3);
        let (bra, ket) = (Vector3::new(0.2, 0.0, -0.4), Vector3::new(-0.5, 0.3, 0.1));
        let mut pair = PrimitivePair::default();
        assert!(pair.set((a, &bra), (b, &ket), 4, 6));
        let p = pair.exponent();
        for axis in 0..3 {
            for x in [-0.9, 0.05, 1.1] {
                let (xa, xb, xp) = (x - bra[axis], x - ket[axis], x - pair.centre[axis]);
                let gaussians = (-a * xa * xa - b * xb * xb).exp();
                for i in 0..=4 {
                    for j in 0..=6 {
                        // Λ_t by Λ_{t+1} = 2p (x Λ_t − t Λ_{t−1}).
                        let mut lambda = vec![(-p * xp * xp).exp()];
                        for t in 0..i + j {
                            let lower = if t > 0 { t as f64 * lambda[t - 1] } else { 0.0 };
                            lambda.push(2.0 * p * (xp * lambda[t] - lower));
                        }
                        let row = pair.hermite[axis].row(i, j);
                        let sum: f64 = row.iter().zip(&lambda).map(|(e, l)| e * l).sum();
                        let exact = xa.powi(i as i32) * xb.powi(j as i32) * gaussians;
                        assert!((sum - exact).abs() < 1e-13, "{i} {j}: {sum} {exact}");
                    }
                }
            }
        }
    }

    #[test]
    fn coulomb_integrals_are_derivatives_and_harmonic_far_away() {
        let alpha = 0.8;
        let r = Vector3::new(0.5, -0.7, 0.3);
        let mut work = HermiteCoulomb::default();
        let mut at = |r: Vector3<f64>| work.compute(5, alpha, &r).to_vec();
        let exact = at(r);
        let h = 2e-3;
        for axis in 0..3 {
            let step = Vector3::ith(axis, h);
            let (up, down) = (at(r + step), at(r - step));
            let (up2, down2) = (at(r + step * 2.0), at(r - step * 2.0));
            for (i, powers) in hermite_powers()[..hermite_count(4)].iter().enumerate() {
                let mut higher = *powers;
                higher[axis] += 1;
                let slope = (8.0 * (up[i] - down[i]) - (up2[i] - down2[i])) / (12.0 * h);
                let value = exact[hermite_index(higher[0], higher[1], higher[2])];
                assert!((slope - value).abs() < 1e-8 * (1.0 + value.abs()));
            }
        }
        // Far out F_0 ~ 1/r, whose Laplacian vanishes.
        let far = at(Vector3::new(9.0, 4.0, -6.0));
        let sum =
            far[hermite_index(2, 0, 0)] + far[hermite_index(0, 2, 0)] + far[hermite_index(0, 0, 2)];
        assert!(sum.abs() < 1e-14);
    }
}
