//! Boys functions F_m(x) = ∫₀¹ t^(2m) exp(−x t²) dt, the radial part of every Coulomb integral.
//!
//! Three regimes, after the usual practice (e.g. Helgaker, Jørgensen, Olsen, *Molecular
//! Electronic-Structure Theory*, 2000, §9.8):
//! - below [`BoysTable::limit`] the highest order comes from a table of polynomials of degree 7 on
//!   cells of width 1/8, and the lower orders from the downward recursion
//!   F_m = (2x F_(m+1) + e^(−x)) / (2m + 1), in which every term is positive, so that relative
//!   errors shrink;
//! - above it from the asymptotic form F_m ≈ Γ(m + ½) / (2 x^(m+½)). The limit belongs to the highest
//!   order in use: what the form leaves out is there below 3e-16 of the value, and less for lower orders.
//!
//! Relative error below 5e-15 for all orders up to [`MAX_ORDER`] and all x ≥ 0.

use std::sync::OnceLock;

/// Highest order m offered.
pub const MAX_ORDER: usize = 24;

/// Cells per unit of x.
pub(crate) const CELLS_PER_UNIT: f64 = 8.0;

/// Polynomial of degree 7 in d on |d| ≤ 1/16, lowest power first, interpolated at Chebyshev nodes
/// (error below 5e-17 of the value).
pub(crate) type CellPolynomial = [f64; 8];

/// The table for one highest order: polynomials in d = x − x_cell for the top order, and e^(−x_cell).
#[derive(Debug)]
pub(crate) struct BoysTable {
    /// The asymptotic form is used for x at and above this value.
    pub(crate) limit: f64,
    /// Polynomial of the cell centred on i / 8, lowest power first.
    pub(crate) cells: Vec<CellPolynomial>,
    /// e^(−i/8).
    pub(crate) exponentials: Vec<f64>,
    /// Polynomial for e^(−d), |d| ≤ 1/16.
    pub(crate) exponential: CellPolynomial,
}

/// The table whose highest order is `order`, built on first use.
///
/// # Panics
/// If `order` exceeds [`MAX_ORDER`].
pub(crate) fn table(order: usize) -> &'static BoysTable {
    static TABLES: [OnceLock<BoysTable>; MAX_ORDER + 1] =
        [const { OnceLock::new() }; MAX_ORDER + 1];
    TABLES[order].get_or_init(|| BoysTable::build(order))
}

/// F_0(x) … F_`order`(x) into `out[0..=order]`, for x ≥ 0.
///
/// # Panics
/// If `order` exceeds [`MAX_ORDER`] or `out` is shorter than `order + 1`.
pub fn boys(order: usize, x: f64, out: &mut [f64]) {
    let table = table(order);
    let out = &mut out[..=order];
    if x >= table.limit {
        out[0] = (std::f64::consts::FRAC_PI_4 / x).sqrt();
        for m in 0..order {
            out[m + 1] = out[m] * ((2 * m + 1) as f64 / (2.0 * x));
        }
        return;
    }
    let cell = (x * CELLS_PER_UNIT + 0.5) as usize;
    let d = x - cell as f64 / CELLS_PER_UNIT;
    let horner = |p: &CellPolynomial| p.iter().rev().fold(0.0, |sum, c| sum * d + c);
    let exponential = table.exponentials[cell] * horner(&table.exponential);
    out[order] = horner(&table.cells[cell]);
    for m in (0..order).rev() {
        out[m] = (2.0 * x * out[m + 1] + exponential) / (2 * m + 1) as f64;
    }
}

/// F_m(x) by the series e^(−x) Σ (2x)^i (2m − 1)!! / (2m + 2i + 1)!!, summed from its far end.
///
/// All terms are positive; relative error about √x · 1e-16. Slow: it fills the tables.
fn series(m: usize, x: f64) -> f64 {
    let terms = 40 + (3.0 * x) as usize;
    let mut sum = 1.0;
    for i in (1..=terms).rev() {
        sum = 1.0 + 2.0 * x / (2 * m + 2 * i + 1) as f64 * sum;
    }
    (-x).exp() * sum / (2 * m + 1) as f64
}

/// Polynomial in d, |d| ≤ `half_width`, through the values of `f` at the eight Chebyshev nodes.
fn interpolate(half_width: f64, f: impl Fn(f64) -> f64) -> CellPolynomial {
    const N: usize = 8;
    let angle = |k: usize| std::f64::consts::PI * (k as f64 + 0.5) / N as f64;
    let values: [f64; N] = std::array::from_fn(|k| f(half_width * angle(k).cos()));
    let chebyshev: [f64; N] = std::array::from_fn(|j| {
        let sum: f64 = (0..N)
            .map(|k| values[k] * (j as f64 * angle(k)).cos())
            .sum();
        sum * if j == 0 { 1.0 } else { 2.0 } / N as f64
    });
    // T_j as powers of t = d / half_width, by T_(j+1) = 2 t T_j − T_(j−1).
    let mut previous = [0.0; N];
    let mut current = [0.0; N];
    previous[1] = 1.0; // T_(−1) = T_1
    current[0] = 1.0;
    let mut powers = [0.0; N];
    for c in chebyshev {
        let mut next = [0.0; N];
        for k in 0..N {
            powers[k] += c * current[k];
            next[k] = -previous[k] + if k > 0 { 2.0 * current[k - 1] } else { 0.0 };
        }
        previous = current;
        current = next;
    }
    std::array::from_fn(|k| powers[k] / half_width.powi(k as i32))
}

impl BoysTable {
    fn build(order: usize) -> Self {
        let limit = asymptotic_limit(order);
        let half_width = 0.5 / CELLS_PER_UNIT;
        let count = (limit * CELLS_PER_UNIT) as usize + 1;
        let centre = |i: usize| i as f64 / CELLS_PER_UNIT;
        Self {
            limit,
            cells: (0..count)
                .map(|i| {
                    // The first cell reaches to d < 0: the series holds there as well.
                    interpolate(half_width, |d| series(order, centre(i) + d))
                })
                .collect(),
            exponentials: (0..count).map(|i| (-centre(i)).exp()).collect(),
            exponential: interpolate(half_width, |d| (-d).exp()),
        }
    }
}

/// Smallest multiple of the cell width from where Γ(m + ½, x) / Γ(m + ½) stays below 3e-16.
///
/// Γ(a, x) ≤ x^(a−1) e^(−x) / (1 − (a − 1)/x) for x > a − 1.
fn asymptotic_limit(m: usize) -> f64 {
    let a = m as f64 + 0.5;
    let ln_gamma =
        0.5 * std::f64::consts::PI.ln() + (0..m).map(|i| (i as f64 + 0.5).ln()).sum::<f64>();
    let mut x = a + 10.0;
    while (a - 1.0) * x.ln() - x - ln_gamma - (1.0 - (a - 1.0) / x).ln() > (3e-16f64).ln() {
        x += 1.0 / CELLS_PER_UNIT;
    }
    (x * CELLS_PER_UNIT).ceil() / CELLS_PER_UNIT
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    /// ∫ by the composite Gauss–Legendre rule, five points on each of many panels: shares nothing
    /// with the code above. Nodes and weights: Abramowitz and Stegun, table 25.4, n = 5.
    fn quadrature(m: usize, x: f64) -> f64 {
        let half = [
            (0.0, 0.568_888_888_888_888_9),
            (0.538_469_310_105_683_1, 0.478_628_670_499_366_47),
            (0.906_179_845_938_664, 0.236_926_885_056_189_08),
        ];
        let panels = 400;
        let width = 1.0 / f64::from(panels);
        let (mut sum, mut lost) = (0.0, 0.0);
        for i in 0..panels {
            let mid = (f64::from(i) + 0.5) * width;
            for (node, weight) in half {
                let f = |t: f64| t.powi(2 * m as i32) * (-x * t * t).exp();
                let pair = if node > 0.0 {
                    f(mid + 0.5 * width * node) + f(mid - 0.5 * width * node)
                } else {
                    f(mid)
                };
                // Compensated summation (Kahan): two thousand terms would cost two digits.
                let term = 0.5 * width * weight * pair - lost;
                let next: f64 = sum + term;
                lost = (next - sum) - term;
                sum = next;
            }
        }
        sum
    }

    fn worst_relative(order: usize, x: f64) -> f64 {
        let mut out = [0.0; MAX_ORDER + 1];
        boys(order, x, &mut out);
        (0..=order)
            .map(|m| {
                let exact = quadrature(m, x);
                (out[m] / exact - 1.0).abs()
            })
            .fold(0.0, f64::max)
    }

    #[test]
    fn agrees_with_quadrature_over_all_regimes() {
        for order in [0, 1, 2, 5, 8, 12, 16, 19, 24] {
            for i in 0..260 {
                let x = 0.4637 * f64::from(i) * (1.0 + 0.001 * order as f64);
                let error = worst_relative(order, x);
                assert!(error < 1e-14, "order {order}, x {x}: {error:e}");
            }
        }
    }

    #[test]
    fn no_step_at_the_limit_of_the_table() {
        for order in 0..=MAX_ORDER {
            let limit = table(order).limit;
            for x in [limit - 1e-9, limit, limit + 1e-9] {
                let error = worst_relative(order, x);
                assert!(error < 1e-14, "order {order}, x {x}: {error:e}");
            }
        }
    }

    #[test]
    fn at_zero_it_is_one_over_the_odd_numbers() {
        let mut out = [0.0; MAX_ORDER + 1];
        boys(MAX_ORDER, 0.0, &mut out);
        for (m, f) in out.iter().enumerate() {
            let error = (f * (2 * m + 1) as f64 - 1.0).abs();
            assert!(error < 2e-15, "order {m}: {error:e}");
        }
    }

    proptest! {
        #[test]
        fn derivative_is_minus_the_next_order(x in 0.01f64..60.0) {
            let h = 1e-4;
            let (mut below, mut at, mut above) = ([0.0; 9], [0.0; 9], [0.0; 9]);
            boys(8, x - h, &mut below);
            boys(8, x, &mut at);
            boys(8, x + h, &mut above);
            for m in 0..8 {
                let slope = (above[m] - below[m]) / (2.0 * h);
                prop_assert!((slope + at[m + 1]).abs() < 1e-8);
            }
        }
    }
}
