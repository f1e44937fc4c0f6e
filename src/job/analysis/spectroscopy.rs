//! Vibrational states on a curve and the constants that belong to them.

use super::lines::Line;
use super::{LevelAnalysis, Material, MinimumResult, PathKind};
use crate::fit::Fit;
use crate::scan::Sweep;
use crate::scan::sweep::tangents;
use crate::units::{ANGSTROM_PER_BOHR, ELECTRON_MASSES_PER_U, PER_CM_PER_HARTREE};
use crate::vibration::diatomic::{
    DunhamConstants, MinimumDerivatives, StateConstants, dunham, from_states,
};
use crate::vibration::states::Multiplet;
use crate::vibration::{
    Potential, States, StatesSettings, VibrationError, states, wavenumber_per_cm,
};
use nalgebra::{Matrix3, Vector3};
use std::f64::consts::PI;

/// The inverse mass that a coordinate vibrates with.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct VibratingMass {
    /// g in 1/mₑ for a length, 1/(mₑ bohr²) for an angle.
    pub inverse: f64,
    /// True for a molecule of two atoms; otherwise g is the G element of the coordinate at the minimum.
    pub exact: bool,
    /// Whether the coordinate is a length.
    pub is_length: bool,
}

impl VibratingMass {
    /// Reduced mass 1/g in u, or moment of inertia in u Å².
    #[must_use]
    pub fn reduced(&self) -> f64 {
        let reduced = 1.0 / (self.inverse * ELECTRON_MASSES_PER_U);
        if self.is_length {
            reduced
        } else {
            reduced * ANGSTROM_PER_BOHR * ANGSTROM_PER_BOHR
        }
    }
}

/// One vibrational state.
#[derive(Debug, Clone, PartialEq)]
pub struct StateResult {
    /// Energy above the minimum, hartree.
    pub energy: f64,
    /// Change from the next coarser grid, hartree.
    pub convergence: f64,
    /// How much what lies beyond the ends of the curve can matter, hartree.
    pub edge_uncertainty: f64,
    /// Mean of the coordinate, ångström or degree.
    pub mean: f64,
    /// Probability density over the coordinate (per ångström or degree), where it is worth drawing.
    pub density: Vec<(f64, f64)>,
}

/// Vibrations of one coordinate at one level.
#[derive(Debug, Clone, PartialEq)]
pub struct Spectroscopy {
    /// Which sweep.
    pub sweep: usize,
    /// Value of the sweep at the minimum that energies count from, ångström or degree.
    pub minimum: f64,
    /// Energy of that minimum, hartree.
    pub minimum_energy: f64,
    /// What vibrates.
    pub mass: VibratingMass,
    /// Harmonic wavenumber, cm⁻¹, from gradients at the minimum, or without them from the fitted curve.
    pub omega_e_cm1: Option<f64>,
    /// Dunham's constants of the fitted curve, for a molecule of two atoms.
    pub dunham: Option<DunhamConstants>,
    /// The same from the states.
    pub from_states: Option<StateConstants>,
    /// The states, lowest first.
    pub states: Vec<StateResult>,
    /// Energy of the lowest state above the minimum, hartree; without states, Dunham's.
    pub zero_point: Option<f64>,
    /// Number of equal wells.
    pub wells: usize,
    /// States that tunnelling between equal wells has split, with the width in hartree.
    pub multiplets: Vec<Multiplet>,
    /// What a reader must know.
    pub notes: Vec<String>,
}

/// Share by which the two masses of a coordinate may differ before both are told.
const UNLIKE_MASSES: f64 = 0.1;

/// Energies (hartree) of wells that count as equal.
const EQUAL_WELLS: f64 = 1e-6;

/// States on the piece of a curve that holds its lowest minimum.
pub(super) fn of_curve(material: &Material<'_>, lines: &[Line], analysis: &mut LevelAnalysis) {
    let lowest = analysis
        .minima
        .iter()
        .filter(|m| m.interior)
        .min_by(|a, b| a.energy.total_cmp(&b.energy));
    let Some(minimum) = lowest else {
        return;
    };
    let sweep = &material.spec.sweeps[0];
    let place = sweep.motion.coordinate.from_reported(minimum.values[0]);
    if place > PI - material.half_step(0) && material.path().bends_straight_molecule() {
        analysis.notes.push(
            "no vibrational states: a straight molecule bends in two directions at once, and its states are not those of \
             one coordinate"
                .to_owned(),
        );
        return;
    }
    let holds = |line: &&Line| {
        let (first, last) = (line.x[0], line.x[line.x.len() - 1]);
        line.settings.period.is_some() || (first..=last).contains(&place)
    };
    let Some(line) = lines.iter().find(holds) else {
        return;
    };
    let Some(positions) = &minimum.positions else {
        return;
    };
    let Some(mass) = mass_of(material, sweep, positions) else {
        return;
    };
    let fit = best_fit(material, minimum, analysis);
    match spectroscopy(material, line, minimum, mass, fit) {
        Ok(found) => analysis.spectroscopy = Some(found),
        Err(error) => analysis
            .notes
            .push(format!("no vibrational states: {error}")),
    }
}

/// The fit at a minimum that knows most derivatives, and of those the one whose force constant depends least on the
/// choices made.
fn best_fit<'a>(
    material: &Material<'_>,
    minimum: &MinimumResult,
    analysis: &'a LevelAnalysis,
) -> Option<&'a Fit> {
    analysis
        .fits
        .iter()
        .filter(|f| f.sweep == 0 && material.is_same_place(&f.values, &minimum.values))
        .map(|f| &f.fit)
        .min_by(|a, b| {
            let unknown = |fit: &Fit| fit.fourth_derivative.is_none();
            let order = unknown(a).cmp(&unknown(b));
            order.then(a.spread.total_cmp(&b.spread))
        })
}

/// Inverse mass of a sweep's common coordinate. Of tied coordinates it is the G element of their mean, which they all
/// equal (E. B. Wilson, J. C. Decius, P. C. Cross, Molecular Vibrations, 1955, chapter 4: g = Σ |∂q/∂x|²/m).
fn mass_of(
    material: &Material<'_>,
    sweep: &Sweep,
    positions: &[Vector3<f64>],
) -> Option<VibratingMass> {
    let count = sweep.motions().count() as f64;
    let mut rows = vec![Vector3::zeros(); positions.len()];
    for motion in sweep.motions() {
        for (atom, d) in motion.coordinate.derivative(positions) {
            rows[atom] += d / count;
        }
    }
    let inverse: f64 = rows
        .iter()
        .zip(&material.spec.masses_u)
        .map(|(row, mass)| row.norm_squared() / (mass * ELECTRON_MASSES_PER_U))
        .sum();
    let atoms = material.spec.molecule.atoms.iter();
    (inverse.is_finite() && inverse > 0.0).then(|| VibratingMass {
        inverse,
        exact: atoms.filter(|a| !a.ghost).count() == 2 && sweep.kind() == "bond",
        is_length: sweep.unit() == "angstrom",
    })
}

/// The mass of the motion along the path itself, all other coordinates rigid: Σ m |dx/dq|² less what translation and rotation
/// of the whole take (E. B. Wilson, J. C. Decius, P. C. Cross, Molecular Vibrations, 1955, chapter 11), in electron masses
/// (times bohr² for an angle).
fn path_mass(material: &Material<'_>, positions: &[Vector3<f64>]) -> Option<f64> {
    let tangent = tangents(&material.spec.sweeps, positions).swap_remove(0);
    let masses = &material.spec.masses_u;
    let total: f64 = masses.iter().sum();
    let mean = |of: &dyn Fn(usize) -> Vector3<f64>| -> Vector3<f64> {
        (0..positions.len())
            .map(|i| of(i) * masses[i])
            .sum::<Vector3<f64>>()
            / total
    };
    let centre = mean(&|i| positions[i]);
    let drift = mean(&|i| tangent[i]);
    let mut inertia = Matrix3::zeros();
    let mut angular = Vector3::zeros();
    let mut along = 0.0;
    for ((position, step), &mass) in positions.iter().zip(&tangent).zip(masses) {
        let (r, t) = (position - centre, step - drift);
        inertia += (Matrix3::identity() * r.norm_squared() - r * r.transpose()) * mass;
        angular += r.cross(&t) * mass;
        along += mass * t.norm_squared();
    }
    // A straight molecule has no inertia about its axis, and no angular momentum there either.
    let turned = inertia.pseudo_inverse(1e-8 * inertia.amax()).ok()?;
    let mass = (along - angular.dot(&(turned * angular))) * ELECTRON_MASSES_PER_U;
    (mass.is_finite() && mass > 0.0).then_some(mass)
}

/// The potential of a line, and how often each of its wells stands on the whole circle.
fn potential<'a>(
    sweep: &Sweep,
    line: &Line,
    notes: &mut Vec<String>,
) -> Result<Potential<'a>, VibrationError> {
    let (x, e) = (&line.x, &line.energies);
    match sweep.kind() {
        "bond" => Potential::of_length(x, e),
        "dihedral" if line.settings.period.is_some() => Potential::of_torsion(x, e),
        "dihedral" => match Potential::of_even_torsion(x, e) {
            Ok(potential) => {
                notes.push(
                    "the torsion is taken to be even in the angle, which its points over half a turn cannot show"
                        .to_owned(),
                );
                Ok(potential)
            }
            Err(_) => {
                notes.push(
                    "the points do not go round: states are those of the part that was scanned"
                        .to_owned(),
                );
                Potential::of_line(x, e)
            }
        },
        _ => Potential::of_line(x, e),
    }
}

fn spectroscopy(
    material: &Material<'_>,
    line: &Line,
    minimum: &MinimumResult,
    mass: VibratingMass,
    fit: Option<&Fit>,
) -> Result<Spectroscopy, VibrationError> {
    let sweep = &material.spec.sweeps[0];
    let mut notes = Vec::new();
    if !mass.exact {
        notes.push(match material.path_kind() {
            PathKind::Rigid => {
                "states of this one coordinate with its G element at the minimum as inverse mass: an approximation \
                 that leaves out its coupling to the others"
                    .to_owned()
            }
            PathKind::Relaxed => {
                "states of this one coordinate with its G element at the minimum as inverse mass: an approximation \
                 that leaves out what the atoms that follow do to the mass"
                    .to_owned()
            }
        });
    }
    if !mass.exact
        && material.path_kind() == PathKind::Rigid
        && let Some(rigid) = minimum
            .positions
            .as_ref()
            .and_then(|p| path_mass(material, p))
        && (rigid * mass.inverse - 1.0).abs() > UNLIKE_MASSES
    {
        let other = VibratingMass {
            inverse: 1.0 / rigid,
            ..mass
        };
        notes.push(format!(
            "moving along the path with all else rigid has the mass {:.4} {} instead, and wavenumbers {:.2} times as high: \
             where whole groups move, that is the better of the two",
            other.reduced(),
            if mass.is_length { "u" } else { "u Å²" },
            (other.inverse / mass.inverse).sqrt()
        ));
    }
    let potential = potential(sweep, line, &mut notes)?;
    let settings = StatesSettings {
        count: material.spec.vibration.states,
        ..StatesSettings::default()
    };
    let found = states(&potential, mass.inverse, &settings)?;
    if found.cut_by_edge {
        notes.push(format!(
            "{} of {} states lie below the ends of the curve; a longer sweep would hold more",
            found.states.len(),
            settings.count
        ));
    }
    let floor = minimum.energy;
    // Gradients know the bottom of the well better than any fit.
    let curvature = minimum
        .second_derivatives
        .first()
        .copied()
        .or_else(|| fit.map(|f| f.force_constant));
    let omega = curvature.and_then(|k| wavenumber_per_cm(k, mass.inverse).ok());
    let dunham = fit.filter(|_| mass.exact).and_then(|fit| {
        let at = MinimumDerivatives {
            equilibrium: fit.equilibrium,
            second: fit.force_constant,
            third: fit.third_derivative?,
            fourth: fit.fourth_derivative?,
        };
        dunham(&at, 1.0 / mass.inverse).ok()
    });
    let from_states = if mass.exact {
        from_states(&found, 1.0 / mass.inverse, floor)
    } else {
        None
    };
    notes.extend(
        dunham
            .as_ref()
            .zip(from_states.as_ref())
            .and_then(|(d, s)| differing(d, s)),
    );
    let (wells, multiplets) = multiplets(&potential, &found);
    let zero_point = found.states.first().map(|s| s.energy - floor).or_else(|| {
        Some(dunham.as_ref().filter(|d| holds(d))?.zero_point_cm1 / PER_CM_PER_HARTREE)
    });
    if let Some(check) = fit.and_then(|f| f.derivative_check.as_ref())
        && !check.verdict.agrees
    {
        notes.push(
            "the fit disagrees with the gradients at the minimum, and the constants from it with the wavenumber ω"
                .to_owned(),
        );
    }
    Ok(Spectroscopy {
        sweep: 0,
        minimum: minimum.values[0],
        minimum_energy: floor,
        omega_e_cm1: omega,
        from_states,
        dunham,
        states: results(sweep, &found, floor),
        zero_point,
        wells,
        multiplets,
        mass,
        notes,
    })
}

/// Whether Dunham's constants belong to a well with bound states: its levels G(v) turn back at v + ½ = ωe/(2 ωexe), which
/// must leave room for a few.
fn holds(constants: &DunhamConstants) -> bool {
    constants.zero_point_cm1 > 0.0 && constants.omega_e_x_e_cm1 < 0.1 * constants.omega_e_cm1
}

/// Relative differences of ωe, and of the smaller constants, above which the two roads to them are told apart.
const SAME_OMEGA: f64 = 5e-3;
const SAME_SMALL: f64 = 0.2;

/// What to know where the constants of the fitted bottom and those of the states are not the same.
fn differing(fit: &DunhamConstants, states: &StateConstants) -> Option<String> {
    let off = |a: f64, b: f64| (a - b).abs() / b.abs();
    let omega = off(states.omega_e_cm1, fit.omega_e_cm1);
    let small = off(states.omega_e_x_e_cm1, fit.omega_e_x_e_cm1)
        .max(off(states.alpha_e_cm1, fit.alpha_e_cm1));
    (omega > SAME_OMEGA || small > SAME_SMALL).then(|| {
        format!(
            "the two sets differ by {:.1} % in ωe and up to {:.0} % in the smaller constants: those from the fit describe the \
             bottom of the well, those from the states the curve as far up as the lowest states reach",
            100.0 * omega,
            100.0 * small
        )
    })
}

fn results(sweep: &Sweep, found: &States, floor: f64) -> Vec<StateResult> {
    let coordinate = &sweep.motion.coordinate;
    let unit = coordinate.to_reported(1.0);
    found
        .states
        .iter()
        .map(|state| StateResult {
            energy: state.energy - floor,
            convergence: state.convergence,
            edge_uncertainty: state.edge_uncertainty,
            mean: state.mean * unit,
            density: found
                .grid
                .iter()
                .zip(&state.wavefunction)
                .map(|(q, psi)| (q * unit, psi * psi / unit))
                .collect(),
        })
        .collect()
}

/// Equal wells of a potential, and the states below the lowest barrier between them taken that many at a time.
fn multiplets(potential: &Potential<'_>, states: &States) -> (usize, Vec<Multiplet>) {
    const PLACES: usize = 2000;
    let (lower, upper) = potential.range();
    let round = potential.edges().is_none();
    let at = |i: usize| lower + (upper - lower) * i as f64 / PLACES as f64;
    let energies: Vec<f64> = (0..=PLACES).map(|i| potential.energy(at(i))).collect();
    let before = |i: usize| match i {
        0 if round => Some(PLACES - 1),
        0 => None,
        i => Some(i - 1),
    };
    let after = |i: usize| match i {
        PLACES if round => Some(1),
        PLACES => None,
        i => Some(i + 1),
    };
    let last = if round { PLACES - 1 } else { PLACES };
    let minima: Vec<usize> = (0..=last)
        .filter(|&i| match (before(i), after(i)) {
            (Some(b), Some(a)) => energies[i] < energies[b] && energies[i] <= energies[a],
            _ => false,
        })
        .collect();
    let lowest = minima
        .iter()
        .map(|&i| energies[i])
        .fold(f64::INFINITY, f64::min);
    // Places on a raster miss a bottom by half a step's rise at most, alike in equal wells to second order only.
    let slack = EQUAL_WELLS
        + minima
            .iter()
            .filter_map(|&i| Some(0.5 * (energies[after(i)?] - energies[i]).abs()))
            .fold(0.0, f64::max);
    let wells: Vec<usize> = minima
        .into_iter()
        .filter(|&i| energies[i] - lowest < slack)
        .collect();
    if wells.len() < 2 {
        return (wells.len(), Vec::new());
    }
    let top = |from: usize, to: usize| {
        let range: Box<dyn Iterator<Item = usize>> = if from < to {
            Box::new(from..=to)
        } else {
            Box::new((from..=PLACES).chain(0..=to))
        };
        range.map(|i| energies[i]).fold(f64::NEG_INFINITY, f64::max)
    };
    let mut barriers: Vec<f64> = wells.windows(2).map(|w| top(w[0], w[1])).collect();
    if round {
        barriers.push(top(wells[wells.len() - 1], wells[0]));
    }
    let barrier = barriers.into_iter().fold(f64::INFINITY, f64::min);
    (wells.len(), states.multiplets(wells.len(), barrier))
}
