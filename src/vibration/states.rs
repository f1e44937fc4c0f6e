//! One-dimensional vibrational states by a discrete variable representation.
//!
//! D. T. Colbert, W. H. Miller, J. Chem. Phys. 96, 1982 (1992): equal steps, a potential that is
//! diagonal, and kinetic-energy matrices known in closed form for the line (eq. 2.11 there), the half line and
//! the circle (appendix A there); equation numbers from memory, the matrices are checked against closed-form levels.

use super::potential::{Beyond, Domain, Potential};
use super::{VibrationError, check_mass};
use nalgebra::{DMatrix, SymmetricEigen};
use std::f64::consts::PI;

/// How many states, how well.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct StatesSettings {
    /// States wanted; fewer come back when fewer lie below the ends of the curve.
    pub count: usize,
    /// Energies must change by less than this (hartree) from one grid to the next finer one.
    pub tolerance_hartree: f64,
    /// Grid points at most; the convergence reached then stands with each state.
    pub most_points: usize,
}

impl Default for StatesSettings {
    fn default() -> Self {
        Self {
            count: 6,
            tolerance_hartree: 1e-11,
            most_points: 700,
        }
    }
}

/// One vibrational state.
#[derive(Debug, Clone, PartialEq)]
pub struct State {
    /// Energy in hartree, on the scale of the potential.
    pub energy: f64,
    /// Change of the energy from the next coarser grid, hartree.
    pub convergence: f64,
    /// How much what lies beyond the ends of the curve can matter: the energy with walls at the ends minus
    /// that with the curve going on level, hartree; 0 on a circle.
    pub edge_uncertainty: f64,
    /// ⟨q⟩ in bohr or radian (on a circle, in the range the potential was given).
    pub mean: f64,
    /// ⟨q²⟩ in bohr² or radian².
    pub mean_square: f64,
    /// ψ at each grid point, normalised to ∫ψ²dq = 1 (bohr^-½ or radian^-½); the outermost large lobe
    /// is positive.
    pub wavefunction: Vec<f64>,
}

/// Vibrational states of a curve.
#[derive(Debug, Clone, PartialEq)]
pub struct States {
    /// Grid points (bohr or radian), equally spaced.
    pub grid: Vec<f64>,
    /// Step of the grid.
    pub step: f64,
    /// The states in the order of energy.
    pub states: Vec<State>,
    /// Lowest energy of the ends of the curve, hartree: no state above it is listed. Infinite on a circle.
    pub lowest_edge: f64,
    /// True when fewer states than wanted lie below the ends of the curve.
    pub cut_by_edge: bool,
}

impl States {
    /// Expectation value of a function of the coordinate in state `v`.
    #[must_use]
    pub fn expectation(&self, v: usize, f: impl Fn(f64) -> f64) -> Option<f64> {
        let state = self.states.get(v)?;
        let sum = self.grid.iter().zip(&state.wavefunction);
        Some(self.step * sum.map(|(&q, psi)| psi * psi * f(q)).sum::<f64>())
    }

    /// Tunnelling multiplets: states below `barrier` (hartree) taken `wells` at a time, each with the
    /// energy from its lowest to its highest member.
    ///
    /// For a symmetric double well `wells` is 2 and the width is the splitting. A last, incomplete set is left out.
    #[must_use]
    pub fn multiplets(&self, wells: usize, barrier: f64) -> Vec<Multiplet> {
        if wells < 2 {
            return Vec::new();
        }
        let below = self.states.iter().take_while(|s| s.energy < barrier);
        let energies: Vec<f64> = below.map(|s| s.energy).collect();
        energies
            .chunks_exact(wells)
            .enumerate()
            .map(|(i, set)| Multiplet {
                lowest: i * wells,
                width: set[wells - 1] - set[0],
            })
            .collect()
    }
}

/// States that tunnelling has split.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Multiplet {
    /// Number of its lowest state.
    pub lowest: usize,
    /// Energy from the lowest to the highest member, hartree.
    pub width: f64,
}

/// A grid and the potential on it (hartree above the floor).
struct Grid {
    points: Vec<f64>,
    step: f64,
    /// Index of each point in the numbering of the kinetic-energy formulas.
    numbers: Vec<f64>,
    potential: Vec<f64>,
    /// Points of the full circle; 0 elsewhere.
    circle: usize,
    half_line: bool,
}

impl Grid {
    /// Kinetic energy plus potential, hartree; `g` is the inverse mass.
    fn hamiltonian(&self, g: f64) -> DMatrix<f64> {
        let n = self.points.len();
        let scale = 0.5 * g / (self.step * self.step);
        // Points are dropped where the potential is too high, so numbers, not rows, decide the sign.
        let sign = |d: f64| if d.rem_euclid(2.0) > 0.5 { -1.0 } else { 1.0 };
        let mut h = DMatrix::zeros(n, n);
        for i in 0..n {
            for j in 0..=i {
                let (a, b) = (self.numbers[i], self.numbers[j]);
                let distance = (a - b).abs();
                let t = if self.circle > 0 {
                    // On N = 2m + 1 points, in units of (2π/N)² /step²: diagonal m(m+1)/3,
                    // off-diagonal cos(πd/N) / (2 sin²(πd/N)).
                    let all = self.circle as f64;
                    let m = 0.5 * (all - 1.0);
                    let unit = (2.0 * PI / all).powi(2);
                    let angle = PI * distance / all;
                    unit * if i == j {
                        m * (m + 1.0) / 3.0
                    } else {
                        angle.cos() / (2.0 * angle.sin().powi(2))
                    }
                } else {
                    let direct = if i == j {
                        PI * PI / 3.0
                    } else {
                        2.0 / (distance * distance)
                    };
                    // The half line subtracts the image at −q.
                    let image = match (self.half_line, i == j) {
                        (false, _) => 0.0,
                        (true, true) => 1.0 / (2.0 * a * a),
                        (true, false) => 2.0 / ((a + b) * (a + b)),
                    };
                    direct - image
                };
                h[(i, j)] = scale * sign(distance) * t;
                h[(j, i)] = h[(i, j)];
            }
            h[(i, i)] += self.potential[i];
        }
        h
    }
}

/// The region a grid must cover and what is assumed beyond the ends.
#[derive(Clone, Copy)]
struct Region {
    lower: f64,
    upper: f64,
    beyond: Beyond,
}

fn grid(potential: &Potential<'_>, region: Region, step: f64, floor: f64, g: f64) -> Grid {
    let value = potential.extended(region.beyond);
    if let Domain::Circle { from, period } = potential.domain() {
        let odd = ((period / step).ceil() as usize) | 1;
        let step = period / odd as f64;
        let points: Vec<f64> = (0..odd).map(|i| from + step * i as f64).collect();
        return Grid {
            potential: points.iter().map(|&q| value(q) - floor).collect(),
            numbers: (0..odd).map(|i| i as f64).collect(),
            points,
            step,
            circle: odd,
            half_line: false,
        };
    }
    let half_line = matches!(potential.domain(), Domain::HalfLine { .. });
    // The numbering of the half line starts at 0, that of the line anywhere.
    let first = (region.lower / step)
        .ceil()
        .max(if half_line { 1.0 } else { f64::MIN });
    let last = (region.upper / step).floor();
    // Plane waves of this step reach this kinetic energy: where the potential is higher no
    // wavefunction of interest lives.
    let highest = 0.5 * g * (PI / step).powi(2);
    let mut out = Grid {
        points: Vec::new(),
        step,
        numbers: Vec::new(),
        potential: Vec::new(),
        circle: 0,
        half_line,
    };
    let mut number = first;
    while number <= last {
        let q = number * step;
        let v = value(q) - floor;
        if v.is_finite() && v <= highest {
            out.points.push(q);
            out.numbers.push(number);
            out.potential.push(v);
        }
        number += 1.0;
    }
    out
}

/// Eigenvalues (ascending, hartree above the floor) and eigenvectors of a grid.
fn solve(grid: &Grid, g: f64) -> Result<(Vec<f64>, DMatrix<f64>), VibrationError> {
    sorted_eigen(grid.hamiltonian(g))
}

/// Symmetric eigenvalues in ascending order with their vectors as columns.
pub(super) fn sorted_eigen(
    matrix: DMatrix<f64>,
) -> Result<(Vec<f64>, DMatrix<f64>), VibrationError> {
    let size = matrix.nrows();
    if size == 0 {
        return Ok((Vec::new(), matrix));
    }
    let eigen = SymmetricEigen::try_new(matrix, f64::EPSILON, 100 * size.max(10))
        .ok_or(VibrationError::Eigenvalues { size })?;
    let mut order: Vec<usize> = (0..size).collect();
    order.sort_by(|&a, &b| eigen.eigenvalues[a].total_cmp(&eigen.eigenvalues[b]));
    let values = order.iter().map(|&i| eigen.eigenvalues[i]).collect();
    Ok((values, eigen.eigenvectors.select_columns(&order)))
}

/// Energies of the lowest states below `limit`, at most `count`.
fn bound(values: &[f64], limit: f64, count: usize) -> &[f64] {
    let below = values.partition_point(|&e| e < limit);
    &values[..below.min(count)]
}

/// How far the grid must reach beyond each end for a tail to fall to e⁻¹⁶, given the states with
/// walls at the ends.
fn reach(potential: &Potential<'_>, energies: &[f64], floor: f64, g: f64) -> (f64, f64) {
    let (lower, upper) = potential.range();
    let (Some((left, right)), Some(&top)) = (potential.edges(), energies.last()) else {
        return (0.0, 0.0);
    };
    let tail = |edge: f64| {
        let kappa = (2.0 * (edge - floor - top).max(0.0) / g).sqrt();
        (16.0 / kappa).min(1.5 * (upper - lower))
    };
    (tail(left), tail(right))
}

/// The lowest vibrational states of a potential.
///
/// `inverse_mass` is 1/μ in 1/mₑ for a length, or the G element in 1/(mₑ bohr²) for an angle, the same
/// everywhere on the curve. The grid is refined until all energies asked for change by less than the
/// tolerance. Only states below the lowest end of the curve are listed; beyond the ends the curve is
/// continued along its tangent where that rises, and how much that matters stands with each state. A curve
/// that binds nothing gives an empty list.
///
/// # Errors
/// A mass that is not positive, energies that are not finite, or eigenvalues that do not converge.
pub fn states(
    potential: &Potential<'_>,
    inverse_mass: f64,
    settings: &StatesSettings,
) -> Result<States, VibrationError> {
    let g = inverse_mass;
    check_mass(g)?;
    let (lower, upper) = potential.range();
    let floor = potential.floor();
    let lowest_edge = potential.lowest_edge();
    if !floor.is_finite() || lowest_edge.is_nan() {
        return Err(VibrationError::NotFinite { what: "potential" });
    }
    let limit = lowest_edge - floor;
    let inside = Region {
        lower,
        upper,
        beyond: Beyond::Wall,
    };
    let (walled, _) = solve(
        &grid(potential, inside, (upper - lower) / 120.0, floor, g),
        g,
    )?;
    let (left, right) = reach(potential, bound(&walled, limit, settings.count), floor, g);
    let open = |beyond| Region {
        lower: lower - left,
        upper: upper + right,
        beyond,
    };

    let span = upper - lower + left + right;
    let mut step = span / 48.0;
    let mut before: Vec<f64> = Vec::new();
    let (last, values, vectors) = loop {
        let now = grid(potential, open(Beyond::Tangent), step, floor, g);
        let (values, vectors) = solve(&now, g)?;
        let found = bound(&values, limit, settings.count);
        let settled = found.len() == before.len().min(settings.count)
            && !before.is_empty()
            && found
                .iter()
                .zip(&before)
                .all(|(a, b)| (a - b).abs() < settings.tolerance_hartree);
        let next = step / 1.4;
        // A curve that binds nothing must be looked at on a fine grid too before that is believed.
        let nothing = found.is_empty() && now.points.len() > 200;
        if settled || nothing || span / next > settings.most_points as f64 {
            break (now, values, vectors);
        }
        before = found.to_vec();
        step = next;
    };
    let energies = bound(&values, limit, settings.count).to_vec();

    let (walls, level) = if potential.edges().is_some() && !energies.is_empty() {
        let edge_energies = |region| -> Result<Vec<f64>, VibrationError> {
            Ok(solve(&grid(potential, region, last.step, floor, g), g)?.0)
        };
        (edge_energies(inside)?, edge_energies(open(Beyond::Level))?)
    } else {
        (energies.clone(), energies.clone())
    };

    let states: Vec<State> = energies
        .iter()
        .enumerate()
        .map(|(v, &energy)| {
            let column = vectors.column(v);
            let largest = column.amax();
            // The last lobe of at least half the largest amplitude is made positive.
            let lead = column.iter().rev().find(|c| c.abs() > 0.5 * largest);
            let sign = lead.map_or(1.0, |c| c.signum());
            let mean = |power: i32| {
                let terms = last.points.iter().zip(column.iter());
                terms.map(|(q, c)| c * c * q.powi(power)).sum::<f64>()
            };
            let at = |list: &[f64]| list.get(v).copied().unwrap_or(f64::INFINITY);
            State {
                energy: energy + floor,
                convergence: (energy - at(&before)).abs(),
                edge_uncertainty: (at(&walls) - at(&level)).max(0.0),
                mean: mean(1),
                mean_square: mean(2),
                wavefunction: column.iter().map(|c| sign * c / last.step.sqrt()).collect(),
            }
        })
        .collect();
    Ok(States {
        cut_by_edge: states.len() < settings.count,
        grid: last.points,
        step: last.step,
        states,
        lowest_edge,
    })
}
