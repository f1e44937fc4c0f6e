//! Stationary points along the swept coordinates, located on the points of a walk and refined with gradients.
//!
//! A curve's minima and maxima come from its interpolation, a surface's minima from its grid; Newton's method on
//! dE/dq goes on from there, and second derivatives at the end come from central differences of dE/dq. They are
//! an independent check of every fitted force constant.

use super::path::{ScanPath, is_before_straight};
use crate::fit::{ExtremaSettings, Kind, Place, dihedral_period, extrema};
use crate::minimise::MinimiseError;
use crate::minimise::landscape::{GridAxis, Landscape};
use crate::minimise::settle::{SettleSettings, settle};
use crate::minimise::valley::{PointKind, stationary_points};
use crate::molecule::Molecule;
use crate::molecule::motion::Motion;
use crate::scan::kept::{Kept, keep};
use crate::scan::sweep::{positions_at, slopes};
use crate::scan::{
    Entry, Harmonic, Scan, ScanError, StateChoice, Stationary, StationaryKind, Sweep, WalkSettings,
};
use crate::surface::{
    PointRecord, PointRequest, SeedPoint, StabilityDemand, Start, Surface, SurfaceError,
};
use nalgebra::{DMatrix, DVector, Vector3};
use rayon::ThreadPool;
use rayon::prelude::*;

/// Steps of Newton's method at most.
const MOST_STEPS: usize = 12;
/// A step below this (bohr or radian) ends the search: a hundredth of what is asked of a fitted geometry.
const SMALL_STEP: f64 = 1e-6;
/// A slope below this (hartree per bohr or radian) cannot be told from the convergence error of the gradient.
const SMALL_SLOPE: f64 = 1e-7;
/// Displacement (bohr or radian) of the central differences: with the five-point formula its fourth power times the sixth
/// derivative of a stretch (a few hundred times the second) leaves 1e-6 of the force constant, and the noise of
/// gradients (1e-7 hartree/bohr) over it 1e-5.
const DISPLACEMENT: f64 = 0.02;
/// Stationary points of a surface that are refined, minima first; an interpolation of a wild surface may have any number.
const MOST_CANDIDATES: usize = 24;

/// Where a stationary point is presumed.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Candidate {
    pub(super) kind: StationaryKind,
    /// Bohr or radian.
    pub(super) place: Vec<f64>,
    /// Second derivatives there as the points have them.
    curvature: DMatrix<f64>,
    /// Farthest that a search may go from the place, bohr or radian of each sweep.
    reach: Vec<f64>,
}

/// Extrema of a curve's converged points in bohr or radian, with the period of a dihedral that goes round.
pub(super) fn curve_settings(sweep: &Sweep, x: &[f64], energy_threshold: f64) -> ExtremaSettings {
    let default = ExtremaSettings::default();
    ExtremaSettings {
        period: (sweep.kind() == "dihedral")
            .then(|| dihedral_period(x))
            .flatten(),
        prominence: default.prominence.max(100.0 * energy_threshold),
    }
}

/// Everything that looks like a stationary point inside the grid.
pub(super) fn candidates(
    path: &ScanPath<'_>,
    energies: &[Option<f64>],
    energy_threshold: f64,
) -> Vec<Candidate> {
    match path.sweeps {
        [sweep] => on_curve(path, sweep, energies, energy_threshold),
        [_, _] => on_surface(path, energies),
        _ => Vec::new(),
    }
}

fn on_curve(
    path: &ScanPath<'_>,
    sweep: &Sweep,
    energies: &[Option<f64>],
    energy_threshold: f64,
) -> Vec<Candidate> {
    let (mut x, mut e): (Vec<f64>, Vec<f64>) = path
        .axis(0)
        .into_iter()
        .zip(energies)
        .filter_map(|(x, e)| Some((x, (*e)?)))
        .unzip();
    let continued = path.continue_straight(&mut x, &mut e);
    let settings = curve_settings(sweep, &x, energy_threshold);
    // Points that make no curve have no extrema.
    let found = extrema(&x, &e, &settings).unwrap_or_default();
    let widest = x.windows(2).map(|w| w[1] - w[0]).fold(0.0, f64::max);
    found
        .into_iter()
        .filter(|f| f.place == Place::Interior && f.derivatives[1] != 0.0)
        .filter(|f| !continued || is_before_straight(f.x))
        .map(|f| Candidate {
            kind: match f.kind {
                Kind::Minimum => StationaryKind::Minimum,
                Kind::Maximum => StationaryKind::Maximum,
            },
            place: vec![f.x],
            curvature: DMatrix::from_element(1, 1, f.derivatives[1]),
            reach: vec![widest],
        })
        .collect()
}

/// The interpolated surface of a grid of two sweeps; none where the points make none.
pub(super) fn landscape(path: &ScanPath<'_>, energies: &[Option<f64>]) -> Option<Landscape> {
    let axis = |sweep: usize| {
        let values = path.axis(sweep);
        let is_dihedral = path.sweeps[sweep].kind() == "dihedral";
        GridAxis {
            period: is_dihedral.then(|| dihedral_period(&values)).flatten(),
            values,
        }
    };
    Landscape::new(&[axis(0), axis(1)], energies).ok()
}

fn on_surface(path: &ScanPath<'_>, energies: &[Option<f64>]) -> Vec<Candidate> {
    let Some(landscape) = landscape(path, energies) else {
        return Vec::new();
    };
    let spacing = landscape.spacing();
    stationary_points(&landscape)
        .into_iter()
        .take(MOST_CANDIDATES)
        .map(|point| Candidate {
            kind: match point.kind {
                PointKind::Minimum => StationaryKind::Minimum,
                PointKind::Saddle => StationaryKind::Saddle,
                PointKind::Maximum => StationaryKind::Maximum,
            },
            place: vec![point.at[0], point.at[1]],
            curvature: DMatrix::from_fn(2, 2, |i, j| point.curvature[(i, j)]),
            reach: vec![spacing[0], spacing[1]],
        })
        .collect()
}

/// What a search needs to ask a surface.
pub(super) struct Search<'a, S: Surface> {
    pub(super) surface: &'a S,
    pub(super) scan: &'a Scan,
    pub(super) path: ScanPath<'a>,
    pub(super) pool: &'a ThreadPool,
    pub(super) seeds: &'a [Option<S::Seed>],
}

/// One gradient call.
struct Answer<T> {
    record: PointRecord,
    positions: Vec<Vector3<f64>>,
    slopes: DVector<f64>,
    seed: Option<T>,
}

impl<S: Surface> Search<'_, S>
where
    S::Seed: Send + Sync,
{
    /// Refines every candidate on the curve or surface of the kept solutions. What cannot be refined, because a
    /// calculation does not converge or the surface has no gradient, is left out.
    ///
    /// # Errors
    /// [`ScanError::Point`] when a geometry cannot be treated.
    pub(super) fn run(
        &self,
        entries: &[Entry],
        energy_threshold: f64,
    ) -> Result<Vec<Stationary>, ScanError> {
        let kept = keep(entries, self.scan.grid.len(), self.scan.settings.state);
        let energies = energies(&kept);
        let mut found = Vec::new();
        for candidate in candidates(&self.path, &energies, energy_threshold) {
            let near = self.nearest(&candidate.place, &energies);
            let refined = self
                .refine(&candidate, near)
                .map_err(|source| ScanError::at(near.unwrap_or(0), source))?;
            found.extend(refined);
        }
        Ok(found)
    }

    /// The converged grid point nearest to a place, distances in steps of each sweep.
    fn nearest(&self, place: &[f64], energies: &[Option<f64>]) -> Option<usize> {
        let away = |point: usize| -> f64 {
            self.path
                .sweeps
                .iter()
                .zip(&self.scan.coordinates[point])
                .zip(place)
                .map(|((sweep, &value), &q)| {
                    let coordinate = &sweep.motion.coordinate;
                    let values = &sweep.values;
                    let step = (values[values.len() - 1] - values[0]) / values.len() as f64;
                    let off = coordinate.difference(coordinate.from_reported(value), q);
                    (coordinate.to_reported(off) / step).powi(2)
                })
                .sum()
        };
        (0..energies.len())
            .filter(|&p| energies[p].is_some() && self.seeds.get(p).is_some_and(Option::is_some))
            .min_by(|&a, &b| away(a).total_cmp(&away(b)))
    }

    /// One calculation at a place (bohr or radian); none if it does not converge or gives no gradient, or if the
    /// coordinates cannot take these values.
    fn ask(
        &self,
        place: &[f64],
        near: Option<(&[f64], &S::Seed)>,
        workspace: &mut S::Workspace,
    ) -> Result<Option<Answer<S::Seed>>, SurfaceError> {
        let (values, sign) = self.path.unfolded(place);
        let Ok(positions) = positions_at(self.path.input, self.path.sweeps, &values) else {
            return Ok(None);
        };
        let follow = match self.scan.settings.state {
            StateChoice::Follow => near.map(|(_, seed)| seed),
            StateChoice::Lowest => None,
        };
        let request = PointRequest {
            positions: &positions,
            coordinates: &values,
            start: near.map_or(Start::Fresh, |(coordinates, seed)| {
                Start::Previous(SeedPoint { coordinates, seed })
            }),
            gradient: true,
            stability: fresh_demand(&self.scan.settings, near.is_some()),
            follow,
        };
        let outcome = self.surface.evaluate(&request, workspace)?;
        let record = outcome.record;
        let (Some(_), Some(gradient)) = (record.energy, &record.gradient) else {
            return Ok(None);
        };
        let positions = match &record.positions {
            Some(relaxed) => relaxed.iter().map(|&p| Vector3::from(p)).collect(),
            None => positions,
        };
        let slopes = DVector::from_vec(slopes(self.path.sweeps, &positions, gradient)) * sign;
        if slopes.iter().any(|s| !s.is_finite()) {
            return Ok(None);
        }
        Ok(Some(Answer {
            slopes,
            positions,
            seed: outcome.seed,
            record,
        }))
    }

    fn refine(
        &self,
        candidate: &Candidate,
        near: Option<usize>,
    ) -> Result<Option<Stationary>, SurfaceError> {
        let mut workspace = self.surface.workspace();
        let seed_of = |p: usize| Some((&self.scan.coordinates[p][..], self.seeds[p].as_ref()?));
        let mut place = candidate.place.clone();
        let mut curvature = candidate.curvature.clone();
        let Some(mut here) = self.ask(&place, near.and_then(seed_of), &mut workspace)? else {
            return Ok(None);
        };
        let mut calls = 1;
        let mut builds = here.record.all_builds;
        let mut converged = false;
        for _ in 0..MOST_STEPS {
            let Some(step) = curvature.clone().lu().solve(&-&here.slopes) else {
                break;
            };
            if step.amax() < SMALL_STEP || here.slopes.amax() < SMALL_SLOPE {
                converged = true;
                break;
            }
            let next: Vec<f64> = place.iter().zip(&step).map(|(q, s)| q + s).collect();
            let strayed = next
                .iter()
                .zip(&candidate.place)
                .zip(&candidate.reach)
                .any(|((q, from), reach)| (q - from).abs() > *reach);
            if strayed {
                break;
            }
            let values = self.path.reported(&place);
            let seed = here.seed.as_ref().map(|seed| (&values[..], seed));
            let Some(there) = self.ask(&next, seed, &mut workspace)? else {
                break;
            };
            calls += 1;
            builds += there.record.all_builds;
            learn(&mut curvature, &step, &(&there.slopes - &here.slopes));
            (place, here) = (next, there);
        }
        if !converged && here.slopes.amax() > 1e-4 {
            // Where Newton's method went nowhere there is nothing to report.
            return Ok(None);
        }
        let Some((second, more_calls, more_builds)) = self.curvature(&place, &here, &workspace)?
        else {
            return Ok(None);
        };
        Ok(Some(Stationary {
            kind: kind_of(&second, candidate.kind),
            values: self.path.unfolded(&place).0,
            positions: here.positions.iter().map(|p| [p.x, p.y, p.z]).collect(),
            slopes: here.slopes.iter().copied().collect(),
            curvature: second
                .row_iter()
                .map(|row| row.iter().copied().collect())
                .collect(),
            record: here.record,
            converged,
            gradient_calls: calls + more_calls,
            fock_builds: builds + more_builds,
            harmonic: None,
        }))
    }

    /// Second derivatives by the five-point formula for first derivatives of slopes (M. Abramowitz, I. A. Stegun,
    /// Handbook of Mathematical Functions, 1964, 25.3.6), with the number of calls and Fock builds.
    fn curvature(
        &self,
        place: &[f64],
        here: &Answer<S::Seed>,
        workspace: &S::Workspace,
    ) -> Result<Option<(DMatrix<f64>, usize, usize)>, SurfaceError> {
        let size = place.len();
        let values = self.path.reported(place);
        let near = here.seed.as_ref().map(|seed| (&values[..], seed));
        let wanted: Vec<(usize, f64)> = (0..size)
            .flat_map(|k| [-2.0, -1.0, 1.0, 2.0].map(|m| (k, m)))
            .collect();
        let ask = |own: &mut S::Workspace, &(k, multiple): &(usize, f64)| {
            let mut moved = place.to_vec();
            moved[k] += multiple * DISPLACEMENT;
            self.ask(&moved, near, own)
        };
        let copies = self.pool.current_num_threads() as u64 + 1;
        let fits = self.surface.workspace_bytes().saturating_mul(copies) <= self.scan.memory_bytes;
        let answers: Vec<Result<Option<Answer<S::Seed>>, SurfaceError>> = if fits {
            // Cloned before the threads start: a workspace need not be shareable.
            let owned: Vec<(S::Workspace, (usize, f64))> =
                wanted.iter().map(|w| (workspace.clone(), *w)).collect();
            self.pool.install(|| {
                owned
                    .into_par_iter()
                    .map(|(mut own, w)| ask(&mut own, &w))
                    .collect()
            })
        } else {
            let mut own = workspace.clone();
            wanted.iter().map(|w| ask(&mut own, w)).collect()
        };
        let mut second = DMatrix::zeros(size, size);
        let mut builds = 0;
        for (answer, (k, multiple)) in answers.into_iter().zip(&wanted) {
            let Some(answer) = answer? else {
                return Ok(None);
            };
            builds += answer.record.all_builds;
            let weight = match multiple.abs() {
                m if m < 1.5 => 8.0 * multiple.signum(),
                _ => -multiple.signum(),
            } / (12.0 * DISPLACEMENT);
            for row in 0..size {
                second[(row, *k)] += weight * answer.slopes[row];
            }
        }
        let symmetric = (&second + second.transpose()) * 0.5;
        Ok(Some((symmetric, wanted.len(), builds)))
    }
}

/// Largest component of the gradient (hartree/bohr) with which a point of the path counts as a minimum of all
/// coordinates: what is left shifts a bond by 0.0002 bohr.
const STATIONARY: f64 = 1e-4;
/// Energies (hartree) that differ by more belong to different solutions.
const SAME_ENERGY: f64 = 1e-5;

/// Adds harmonic vibrations to a minimum on which no force is left, by settling it once more on the surface without
/// relaxation; on a relaxed scan the settled point takes the place of the one found on the curve. Left as it is where
/// that leads elsewhere.
///
/// # Errors
/// [`SurfaceError`] when a geometry cannot be treated.
pub(super) fn vibrate<S: Surface>(
    surface: &S,
    molecule: &Molecule,
    masses_u: &[f64],
    path: &ScanPath<'_>,
    settings: &SettleSettings,
    stationary: &mut Stationary,
) -> Result<(), SurfaceError> {
    let forces = stationary.record.gradient.iter().flatten().flatten();
    let force = forces.fold(0.0, |most: f64, g| most.max(g.abs()));
    let relaxed = stationary.record.relaxation.is_some();
    if stationary.kind != StationaryKind::Minimum || !(relaxed || force < STATIONARY) {
        return Ok(());
    }
    let positions: Vec<Vector3<f64>> = stationary
        .positions
        .iter()
        .map(|&p| Vector3::from(p))
        .collect();
    let swept: Vec<Vec<Motion>> = path
        .sweeps
        .iter()
        .map(|s| s.motions().cloned().collect())
        .collect();
    let settled = match settle(
        surface,
        &molecule.at(&positions),
        masses_u,
        &swept,
        settings,
        &mut surface.workspace(),
    ) {
        Ok(settled) => settled,
        Err(MinimiseError::Surface(error)) => return Err(error),
        // The point on the curve stands without its vibrations.
        Err(_) => return Ok(()),
    };
    stationary.gradient_calls += settled.gradient_calls;
    stationary.fock_builds += settled.minimum.all_builds + settled.hessian.fock_builds;
    let same = settled
        .minimum
        .record
        .energy
        .zip(stationary.record.energy)
        .is_some_and(|(a, b)| (a - b).abs() < SAME_ENERGY);
    if !(settled.minimum.converged() && same) {
        return Ok(());
    }
    stationary.harmonic = Some(Harmonic {
        wavenumbers_cm1: settled
            .analysis
            .modes
            .iter()
            .map(|m| m.wavenumber_cm1)
            .collect(),
        intensities_km_per_mol: settled
            .analysis
            .modes
            .iter()
            .map(|m| m.intensity_km_per_mol.unwrap_or(0.0))
            .collect(),
        zero_point_hartree: settled.analysis.zero_point_hartree,
        relaxed: settled.swept.iter().map(|c| c.relaxed).collect(),
        rigid: settled.swept.iter().map(|c| c.rigid).collect(),
    });
    if relaxed {
        let places = &settled.minimum.positions;
        stationary.values = path
            .sweeps
            .iter()
            .zip(&stationary.values)
            .map(|(sweep, &before)| {
                let coordinate = &sweep.motion.coordinate;
                let from = coordinate.from_reported(before);
                let change = coordinate.difference(coordinate.value(places), from);
                coordinate.to_reported(from + change)
            })
            .collect();
        stationary.positions = places.iter().map(|p| [p.x, p.y, p.z]).collect();
        if let Some(gradient) = &settled.minimum.record.gradient {
            stationary.slopes = slopes(path.sweeps, places, gradient);
        }
        let relaxation = stationary.record.relaxation;
        stationary.record = settled.minimum.record;
        stationary.record.relaxation = relaxation;
    }
    Ok(())
}

/// Energies of the kept solutions.
pub(super) fn energies(kept: &[Option<Kept<'_>>]) -> Vec<Option<f64>> {
    kept.iter()
        .map(|k| k.as_ref().and_then(|k| k.entry.record.energy))
        .collect()
}

/// Without a neighbour's solution to start from, an unstable one is left as the walk would.
fn fresh_demand(settings: &WalkSettings, seeded: bool) -> StabilityDemand {
    if settings.stability && !seeded {
        StabilityDemand::Leave
    } else {
        StabilityDemand::None
    }
}

/// Improves second derivatives by the symmetric rank-one formula from a step and the change of the slopes along it.
fn learn(curvature: &mut DMatrix<f64>, step: &DVector<f64>, change: &DVector<f64>) {
    let rest = change - &*curvature * step;
    let scale = rest.dot(step);
    // The usual safeguard against a small denominator (J. Nocedal, S. J. Wright, Numerical Optimization, 2006, eq. 6.26).
    if scale.abs() > 1e-8 * rest.norm() * step.norm() {
        *curvature += &rest * rest.transpose() / scale;
    }
}

fn kind_of(second: &DMatrix<f64>, presumed: StationaryKind) -> StationaryKind {
    let Some(eigen) = nalgebra::SymmetricEigen::try_new(second.clone(), f64::EPSILON, 1000) else {
        return presumed;
    };
    let negative = eigen.eigenvalues.iter().filter(|&&v| v < 0.0).count();
    match negative {
        0 => StationaryKind::Minimum,
        n if n == second.nrows() => StationaryKind::Maximum,
        _ => StationaryKind::Saddle,
    }
}
