//! Quadratic force field of two coordinates from a surface near its minimum.
//!
//! Polynomials of total degree n in both coordinates (in a Chebyshev product basis) are fitted to
//! windows grown around the lowest point; order and window are chosen as for curves: by the
//! leave-one-out error of the force constants.

use super::choice::{Trial, choose};
use super::least_squares::LinearFit;
use super::polynomial::chebyshev;
use crate::units::KJ_PER_MOL_PER_HARTREE;
use nalgebra::{DMatrix, DVector, Matrix2, Vector2};

/// What a surface fit runs over.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SurfaceSettings {
    /// Total degrees tried, inclusive, from 2.
    pub orders: (usize, usize),
    /// Points no higher above the lowest one than this (hartree) may be used; the window is grown
    /// until it holds three points more than there are terms, and two more values of each coordinate than the
    /// order.
    pub below_hartree: f64,
    /// Convergence error of each energy, hartree.
    pub noise_hartree: f64,
}

impl Default for SurfaceSettings {
    fn default() -> Self {
        Self {
            orders: (2, 6),
            below_hartree: 250.0 / KJ_PER_MOL_PER_HARTREE,
            noise_hartree: 1e-9,
        }
    }
}

/// Why a surface has no quadratic force field.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SurfaceError {
    /// The array of energies does not belong to the axes.
    #[error("{energies} energies do not fill a grid of {rows} by {columns}")]
    SizesDiffer {
        /// values of the first coordinate
        rows: usize,
        /// values of the second coordinate
        columns: usize,
        /// energies given
        energies: usize,
    },
    /// A coordinate that does not increase, or a number that is not finite.
    #[error("the axes must increase and all numbers must be finite")]
    Malformed,
    /// The lowest point lies on the border of the grid.
    #[error("the lowest point ({first}, {second}) lies on the border: there is no minimum to fit")]
    NoMinimum {
        /// its first coordinate (bohr or radian)
        first: f64,
        /// its second coordinate
        second: f64,
    },
    /// No order and window gives a minimum.
    #[error(
        "no order and window gives a minimum; {points} points are there, {needed} are needed at least"
    )]
    NoFit {
        /// points with energies
        points: usize,
        /// points needed for the lowest order
        needed: usize,
    },
}

/// Quadratic force field E = E₀ + ½k₁₁d₁² + k₁₂d₁d₂ + ½k₂₂d₂² at the minimum of a surface.
///
/// Atomic units: hartree per bohr or radian of each coordinate.
#[derive(Debug, Clone, PartialEq)]
pub struct QuadraticField {
    /// Total degree of the polynomial chosen.
    pub order: usize,
    /// Points used.
    pub points: usize,
    /// Place of the minimum (bohr or radian).
    pub equilibrium: [f64; 2],
    /// Energy at the minimum, hartree.
    pub energy: f64,
    /// ∂²E/∂q₁².
    pub k11: f64,
    /// ∂²E/∂q₁∂q₂.
    pub k12: f64,
    /// ∂²E/∂q₂².
    pub k22: f64,
    /// Half range of k₁₁, k₁₂, k₂₂ over the acceptable orders and windows (at least the predicted
    /// model error), in their units.
    pub half_ranges: [f64; 3],
    /// The largest of these, each divided by √(kᵢᵢkⱼⱼ).
    pub spread: f64,
    /// Orders and windows tried.
    pub trials: usize,
    /// Those whose leave-one-out error is acceptable.
    pub trials_accepted: usize,
    /// Root mean square of the leave-one-out residuals, hartree.
    pub leave_one_out_hartree: f64,
    /// Root mean square of the residuals, hartree.
    pub rms_residual_hartree: f64,
}

/// Points in the order in which a window takes them up.
struct Points {
    /// Coordinates and energies above the lowest.
    list: Vec<([f64; 2], f64)>,
    /// How many of them the window asked for holds.
    nominal: usize,
}

impl Points {
    /// The smallest window for an order: three points more than terms, and of each coordinate two
    /// values more than the order, without which what the polynomial lacks along one axis could not show
    /// in any residual.
    fn least(&self, order: usize) -> Option<usize> {
        let terms = Basis::terms(order);
        let mut values: [Vec<f64>; 2] = [Vec::new(), Vec::new()];
        for (taken, (at, _)) in self.list.iter().enumerate() {
            for c in 0..2 {
                if let Err(place) = values[c].binary_search_by(|v| v.total_cmp(&at[c])) {
                    values[c].insert(place, at[c]);
                }
            }
            if taken + 1 >= terms + 3 && values.iter().all(|v| v.len() >= order + 2) {
                return Some(taken + 1);
            }
        }
        None
    }
}

/// Takes up points by energy, each next to one taken before, so that another valley is reached only
/// over its pass.
fn flood(
    first: &[f64],
    second: &[f64],
    energies: &[Option<f64>],
    start: (usize, usize),
    below: f64,
) -> Points {
    let columns = second.len();
    let at = |i: usize, j: usize| energies[i * columns + j];
    let floor = at(start.0, start.1).unwrap_or(0.0);
    let mut seen = vec![false; energies.len()];
    seen[start.0 * columns + start.1] = true;
    let mut border = vec![start];
    let mut list = Vec::new();
    let mut nominal = 0;
    let height = |&(i, j): &(usize, usize)| at(i, j).map_or(f64::INFINITY, |e| e - floor);
    while let Some(place) = border
        .iter()
        .enumerate()
        .min_by(|a, b| height(a.1).total_cmp(&height(b.1)))
        .map(|(place, _)| place)
    {
        let (i, j) = border.swap_remove(place);
        let Some(energy) = at(i, j) else { continue };
        list.push(([first[i], second[j]], energy - floor));
        if energy - floor <= below {
            nominal = list.len();
        }
        let (rows, columns) = (i.saturating_sub(1)..=i + 1, j.saturating_sub(1)..=j + 1);
        for (a, b) in rows.flat_map(|a| columns.clone().map(move |b| (a, b))) {
            let inside = a < first.len() && b < second.len();
            if inside && !seen[a * second.len() + b] {
                seen[a * second.len() + b] = true;
                border.push((a, b));
            }
        }
    }
    Points { list, nominal }
}

/// The product basis T_a(u) T_b(v), a + b ≤ order, on the box of the points.
struct Basis {
    order: usize,
    centre: [f64; 2],
    half: [f64; 2],
}

impl Basis {
    fn terms(order: usize) -> usize {
        (order + 1) * (order + 2) / 2
    }

    fn around(points: &[([f64; 2], f64)], order: usize) -> Self {
        let mut centre = [0.0; 2];
        let mut half = [0.0; 2];
        for c in 0..2 {
            let values = points.iter().map(|p| p.0[c]);
            let (low, high) = values.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), v| {
                (l.min(v), h.max(v))
            });
            centre[c] = 0.5 * (low + high);
            half[c] = 0.5 * (high - low);
        }
        Self {
            order,
            centre,
            half,
        }
    }

    /// ∂^(m₁+m₂)/∂q₁^m₁∂q₂^m₂ of every basis function at a place.
    fn row(&self, at: [f64; 2], m: [usize; 2]) -> DVector<f64> {
        let table = |c: usize| {
            let t = (at[c] - self.centre[c]) / self.half[c];
            let scale = self.half[c].powi(m[c] as i32);
            let row = chebyshev(t, self.order, m[c]).swap_remove(m[c]);
            row.into_iter().map(move |v| v / scale).collect::<Vec<_>>()
        };
        let (u, v) = (table(0), table(1));
        let pairs = (0..=self.order).flat_map(|a| (0..=self.order - a).map(move |b| (a, b)));
        DVector::from_iterator(Self::terms(self.order), pairs.map(|(a, b)| u[a] * v[b]))
    }
}

/// A minimum of one fitted polynomial.
struct Solved {
    linear: LinearFit,
    equilibrium: [f64; 2],
    energy: f64,
    constants: [f64; 3],
    errors: [f64; 3],
}

/// Orders of differentiation of k₁₁, k₁₂, k₂₂.
const SECOND: [[usize; 2]; 3] = [[2, 0], [1, 1], [0, 2]];

fn attempt(
    points: &[([f64; 2], f64)],
    order: usize,
    reach: [f64; 2],
    noise: f64,
) -> Option<Trial<Solved>> {
    let basis = Basis::around(points, order);
    if basis.half.iter().any(|&h| h <= 0.0) {
        return None;
    }
    let rows: Vec<_> = points
        .iter()
        .map(|p| basis.row(p.0, [0, 0]).transpose())
        .collect();
    let values = DVector::from_iterator(points.len(), points.iter().map(|p| p.1));
    let linear = LinearFit::new(DMatrix::from_rows(&rows), &values).ok()?;
    let value = |at: [f64; 2], m: [usize; 2]| basis.row(at, m).dot(&linear.coefficients);
    let start = points[0].0;
    let mut at = start;
    let mut inverse = Matrix2::zeros();
    let mut settled = false;
    for _ in 0..50 {
        let [a, b, c] = SECOND.map(|m| value(at, m));
        inverse = Matrix2::new(a, b, b, c).try_inverse()?;
        let step = -inverse * Vector2::new(value(at, [1, 0]), value(at, [0, 1]));
        at = [at[0] + step[0], at[1] + step[1]];
        if (0..2).any(|c| (at[c] - start[c]).abs() > reach[c] || at[c].is_nan()) {
            return None;
        }
        if (0..2).all(|c| step[c].abs() < 1e-12 * basis.half[c]) {
            settled = true;
            break;
        }
    }
    let constants = SECOND.map(|m| value(at, m));
    let [k11, k12, k22] = constants;
    if !settled || k11 <= 0.0 || k22 <= 0.0 || k11 * k22 <= k12 * k12 {
        return None;
    }
    // The minimum moves with the data by −H⁻¹δg, and the constants with it.
    let slopes = [basis.row(at, [1, 0]), basis.row(at, [0, 1])];
    let errors = SECOND.map(|m| {
        let mut gradient = basis.row(at, m);
        for l in 0..2 {
            let mut third = m;
            third[l] += 1;
            let f3 = value(at, third);
            for (n, slope) in slopes.iter().enumerate() {
                gradient.axpy(-f3 * inverse[(l, n)], slope, 1.0);
            }
        }
        linear.model_error(&gradient, noise)
    });
    let scales = scales(&constants);
    let worst = (0..3).map(|c| errors[c] / scales[c]).fold(0.0, f64::max);
    let energy = value(at, [0, 0]);
    Some(Trial {
        order,
        range: 0..points.len(),
        // Errors are relative already.
        force_constant: 1.0,
        error: worst,
        model: Solved {
            linear,
            equilibrium: at,
            energy,
            constants,
            errors,
        },
    })
}

/// What the errors of k₁₁, k₁₂, k₂₂ are measured by: √(kᵢᵢkⱼⱼ), since k₁₂ may vanish.
fn scales([k11, _, k22]: &[f64; 3]) -> [f64; 3] {
    [*k11, (k11 * k22).sqrt(), *k22]
}

/// The quadratic force field at the lowest minimum of a grid.
///
/// `first` and `second` are the values of the two coordinates (bohr or radian, increasing);
/// `energies` in hartree in grid order, the second coordinate fastest, `None` where a point did not
/// converge.
///
/// # Errors
/// Arrays that make no grid, a lowest point on the border, or too few points.
pub fn quadratic_field(
    first: &[f64],
    second: &[f64],
    energies: &[Option<f64>],
    settings: &SurfaceSettings,
) -> Result<QuadraticField, SurfaceError> {
    let (rows, columns) = (first.len(), second.len());
    if energies.len() != rows * columns || energies.is_empty() {
        return Err(SurfaceError::SizesDiffer {
            rows,
            columns,
            energies: energies.len(),
        });
    }
    let increasing =
        |x: &[f64]| x.windows(2).all(|w| w[1] > w[0]) && x.iter().all(|v| v.is_finite());
    let finite = energies.iter().flatten().all(|e| e.is_finite());
    if !increasing(first) || !increasing(second) || !finite {
        return Err(SurfaceError::Malformed);
    }
    let lowest = (0..energies.len())
        .filter_map(|i| energies[i].map(|e| (i, e)))
        .min_by(|a, b| a.1.total_cmp(&b.1))
        .map_or(0, |(i, _)| i);
    let (i, j) = (lowest / columns, lowest % columns);
    let floor = energies[lowest].unwrap_or(0.0);
    let least = Basis::terms(settings.orders.0.max(2)) + 3;
    let no_fit = SurfaceError::NoFit {
        points: energies.iter().flatten().count(),
        needed: least,
    };
    if energies[lowest].is_none() {
        return Err(no_fit);
    }
    if i == 0 || j == 0 || i + 1 == rows || j + 1 == columns {
        return Err(SurfaceError::NoMinimum {
            first: first[i],
            second: second[j],
        });
    }
    let reach = [
        1.5 * (first[i + 1] - first[i]).max(first[i] - first[i - 1]),
        1.5 * (second[j + 1] - second[j]).max(second[j] - second[j - 1]),
    ];
    let points = flood(first, second, energies, (i, j), settings.below_hartree);
    let mut trials = Vec::new();
    for order in settings.orders.0.max(2)..=settings.orders.1 {
        let Some(mut size) = points.least(order) else {
            continue;
        };
        let most = points.nominal.max(size);
        while size <= most {
            trials.extend(attempt(
                &points.list[..size],
                order,
                reach,
                settings.noise_hartree,
            ));
            size = if size == most {
                most + 1
            } else {
                (size + 1 + size / 8).min(most)
            };
        }
    }
    let choice = choose(&trials).ok_or(no_fit)?;
    let trial = &trials[choice.best];
    let best = &trial.model;
    let half_ranges = [0, 1, 2].map(|c| {
        let values = choice
            .acceptable
            .iter()
            .map(|&t| trials[t].model.constants[c]);
        let (low, high) = values.fold((f64::INFINITY, f64::NEG_INFINITY), |(l, h), v| {
            (l.min(v), h.max(v))
        });
        (0.5 * (high - low)).max(best.errors[c])
    });
    let scales = scales(&best.constants);
    Ok(QuadraticField {
        order: trial.order,
        points: trial.range.len(),
        equilibrium: best.equilibrium,
        energy: best.energy + floor,
        k11: best.constants[0],
        k12: best.constants[1],
        k22: best.constants[2],
        half_ranges,
        spread: (0..3)
            .map(|c| half_ranges[c] / scales[c])
            .fold(0.0, f64::max),
        trials: trials.len(),
        trials_accepted: choice.acceptable.len(),
        leave_one_out_hartree: best.linear.leave_one_out_rms(),
        rms_residual_hartree: best.linear.rms(),
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn grid(from: f64, step: f64, n: usize) -> Vec<f64> {
        (0..n).map(|i| from + step * i as f64).collect()
    }

    fn sample(x: &[f64], y: &[f64], f: impl Fn(f64, f64) -> f64) -> Vec<Option<f64>> {
        let pairs = x.iter().flat_map(|&a| y.iter().map(move |&b| (a, b)));
        pairs.map(|(a, b)| Some(f(a, b))).collect()
    }

    /// Two coupled Morse bonds, as in a triatomic: k₁₁ = k₂₂ = 2Da², k₁₂ = c a².
    fn bonds(r: f64, s: f64) -> f64 {
        let (d, a, c) = (0.18, 1.21, -0.02);
        let y = |r: f64| 1.0 - (-a * (r - 1.81_f64)).exp();
        d * (y(r).powi(2) + y(s).powi(2)) + c * y(r) * y(s) - 76.0
    }

    #[test]
    fn coupled_bonds_are_found_within_the_spread() {
        let a2 = 1.21 * 1.21;
        let exact = [2.0 * 0.18 * a2, -0.02 * a2, 2.0 * 0.18 * a2];
        for shift in [0.0, 0.03, 0.05] {
            let x = grid(1.3 + shift, 0.1, 16);
            let y = grid(1.4 - shift, 0.1, 14);
            let field =
                quadratic_field(&x, &y, &sample(&x, &y, bonds), &SurfaceSettings::default());
            let field = field.unwrap();
            for (c, (found, exact)) in [field.k11, field.k12, field.k22]
                .iter()
                .zip(exact)
                .enumerate()
            {
                assert!(
                    (found - exact).abs() <= field.half_ranges[c],
                    "{c} {field:?}"
                );
                assert!((found - exact).abs() < 3e-3 * 0.53, "{c} {field:?}");
            }
            assert!(field.spread < 0.01, "{field:?}");
            assert!(field.equilibrium.iter().all(|q| (q - 1.81).abs() < 1e-3));
            assert!((field.energy + 76.0).abs() < 1e-5);
        }
    }

    #[test]
    fn a_quadratic_surface_is_exact_and_missing_points_do_no_harm() {
        let f = |x: f64, y: f64| {
            let (a, b) = (x - 0.11, y + 0.07);
            0.2 * a * a + 0.05 * a * b + 0.1 * b * b - 1.0
        };
        let (x, y) = (grid(-0.5, 0.1, 11), grid(-0.6, 0.12, 10));
        let mut e = sample(&x, &y, f);
        e[57] = None;
        e[3] = None;
        let field = quadratic_field(&x, &y, &e, &SurfaceSettings::default()).unwrap();
        assert!((field.k11 - 0.4).abs() < 1e-9);
        assert!((field.k12 - 0.05).abs() < 1e-9);
        assert!((field.k22 - 0.2).abs() < 1e-9);
        assert!((field.equilibrium[0] - 0.11).abs() < 1e-9);
    }

    #[test]
    fn surfaces_without_a_minimum_say_so() {
        let (x, y) = (grid(1.0, 0.1, 6), grid(1.0, 0.1, 6));
        let slope = sample(&x, &y, |a, b| a + b);
        let s = SurfaceSettings::default();
        assert!(matches!(
            quadratic_field(&x, &y, &slope, &s),
            Err(SurfaceError::NoMinimum { .. })
        ));
        assert!(quadratic_field(&x, &y, &slope[1..], &s).is_err());
        assert!(quadratic_field(&x, &y, &vec![None; 36], &s).is_err());
        let small = grid(-0.11, 0.1, 4);
        let bowl = sample(&small, &small, |a, b| a * a + b * b);
        assert!(quadratic_field(&small, &small, &bowl, &s).is_ok_and(|f| f.order == 2));
    }
}
