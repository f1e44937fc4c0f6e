//! Finished points → what a practitioner asks of them: minima, force constants, vibrational states.
//!
//! Everything here is made from the points and stationary points of a run, so that changed `[[fit]]` and
//! `[vibration]` tables need no further calculation.

mod fits;
mod lines;
mod spectroscopy;
mod surface;

pub use fits::{FitResult, PathKind};
pub use spectroscopy::{Spectroscopy, StateResult, VibratingMass};
pub use surface::{ForceField, Valley};

use super::assemble::PointResult;
use crate::fit::{Kind, Place, extrema};
use crate::scan::{Finding, Grid, Stationary, StationaryKind};
use crate::spec::Spec;
use crate::units::short;
use nalgebra::Vector3;

/// Everything made from one level's points.
#[derive(Debug, Clone, Default)]
pub struct LevelAnalysis {
    /// Minima in the order of energy, those at the ends of the sweep among them.
    pub minima: Vec<MinimumResult>,
    /// Maxima of a curve and saddle points of a surface, in the order of energy; not the ends of the sweep.
    pub barriers: Vec<MinimumResult>,
    /// One fit per `[[fit]]`, sweep and minimum.
    pub fits: Vec<FitResult>,
    /// Quadratic force field of two sweeps.
    pub force_field: Option<ForceField>,
    /// Paths of least energy between neighbouring minima of a surface.
    pub valleys: Vec<Valley>,
    /// Vibrational states of a curve.
    pub spectroscopy: Option<Spectroscopy>,
    /// What a reader must know, in sentences: fits that could not be made and why.
    pub notes: Vec<String>,
}

/// A stationary point of a curve or surface, or a minimum at the end of a sweep.
#[derive(Debug, Clone, PartialEq)]
pub struct MinimumResult {
    /// Minimum, maximum or saddle point.
    pub kind: StationaryKind,
    /// Whether it lies inside the sweeps; at an end the energy goes on falling beyond, and there is no stationary point.
    pub interior: bool,
    /// Values of the sweeps, ångström or degree.
    pub values: Vec<f64>,
    /// Energy, hartree.
    pub energy: f64,
    /// Positions, bohr; none where the swept coordinates cannot be set there.
    pub positions: Option<Vec<Vector3<f64>>>,
    /// What gradients say about it; none where it comes from the interpolated points alone.
    pub refined: Option<Stationary>,
    /// Second derivatives along the sweeps from gradients, hartree per bohr² or radian², on the scan's own kind of path;
    /// empty where gradients were not asked.
    pub second_derivatives: Vec<f64>,
}

impl MinimumResult {
    /// Largest component of the Cartesian gradient, hartree/bohr: what pulls on the coordinates that are not swept.
    #[must_use]
    pub fn gradient_max(&self) -> Option<f64> {
        let gradient = self.refined.as_ref()?.record.gradient.as_ref()?;
        Some(
            gradient
                .iter()
                .flatten()
                .fold(0.0, |most: f64, g| most.max(g.abs())),
        )
    }

    fn of(stationary: &Stationary, path: PathKind) -> Option<Self> {
        let sweeps = 0..stationary.values.len();
        Some(Self {
            second_derivatives: sweeps
                .filter_map(|k| fits::second_derivative(stationary, k, path))
                .collect(),
            kind: stationary.kind,
            interior: true,
            values: stationary.values.clone(),
            energy: stationary.record.energy?,
            positions: Some(
                stationary
                    .positions
                    .iter()
                    .map(|&p| Vector3::from(p))
                    .collect(),
            ),
            refined: Some(stationary.clone()),
        })
    }
}

/// What the analysis of a level is made from.
pub(super) struct Material<'a> {
    pub(super) spec: &'a Spec,
    pub(super) grid: &'a Grid,
    pub(super) points: &'a [PointResult],
    pub(super) findings: &'a [Finding],
    /// ⟨S²⟩ of the pure spin state.
    pub(super) pure_s_squared: f64,
    pub(super) stationary: Vec<&'a Stationary>,
}

impl Material<'_> {
    /// Energies of all points of the grid.
    fn energies(&self) -> Vec<Option<f64>> {
        let mut energies = vec![None; self.grid.len()];
        for point in self.points {
            energies[point.point] = point.record.energy;
        }
        energies
    }

    fn path(&self) -> super::path::ScanPath<'_> {
        super::path::ScanPath {
            sweeps: &self.spec.sweeps,
            input: &self.spec.molecule.positions,
        }
    }

    fn path_kind(&self) -> PathKind {
        PathKind::of(self.spec.walk.others)
    }

    /// How far two values of a sweep are apart, bohr or radian.
    fn apart(&self, sweep: usize, one: f64, other: f64) -> f64 {
        let coordinate = &self.spec.sweeps[sweep].motion.coordinate;
        coordinate
            .difference(
                coordinate.from_reported(one),
                coordinate.from_reported(other),
            )
            .abs()
    }

    /// Half the widest step of a sweep, bohr or radian: nearer than this, two minima are one.
    fn half_step(&self, sweep: usize) -> f64 {
        let axis = self.path().axis(sweep);
        0.5 * axis.windows(2).map(|w| w[1] - w[0]).fold(0.0, f64::max)
    }

    /// Whether two places (ångström or degree) are one.
    fn is_same_place(&self, one: &[f64], other: &[f64]) -> bool {
        one.iter()
            .zip(other)
            .enumerate()
            .all(|(k, (&a, &b))| self.apart(k, a, b) <= self.half_step(k))
    }

    /// The minimum at a place.
    fn minimum_at<'m>(
        &self,
        minima: &'m [MinimumResult],
        values: &[f64],
    ) -> Option<&'m MinimumResult> {
        minima
            .iter()
            .filter(|m| m.interior && self.is_same_place(&m.values, values))
            .min_by(|a, b| a.energy.total_cmp(&b.energy))
    }
}

/// Analyses the points of a level.
pub(super) fn analyse(material: &Material<'_>) -> LevelAnalysis {
    let mut analysis = LevelAnalysis::default();
    let (mut minima, barriers): (Vec<_>, Vec<_>) = material
        .stationary
        .iter()
        .filter_map(|s| MinimumResult::of(s, material.path_kind()))
        .partition(|m| m.kind == StationaryKind::Minimum);
    analysis.barriers = barriers;
    match material.spec.sweeps.len() {
        1 => {
            add_unrefined(material, &mut minima, &mut analysis.barriers);
            analysis.minima = minima;
            let kinks = lines::kinks(material);
            let whole = lines::of_curve(material, &[]);
            let to_fit = |lines: Vec<lines::Line>| -> Vec<lines::Line> {
                lines.into_iter().map(|l| l.continued(material)).collect()
            };
            let smooth = to_fit(lines::of_curve(material, &kinks));
            // Where a minimum is too close to a kink for a fit of its side, one across it still tells its wide spread.
            fits::fit_lines(material, &smooth, &to_fit(whole.clone()), &mut analysis);
            spectroscopy::of_curve(material, &whole, &mut analysis);
            let sweep = &material.spec.sweeps[0];
            let unit = if sweep.unit() == "degree" {
                "°"
            } else {
                " Å"
            };
            for point in kinks {
                analysis.notes.push(format!(
                    "unrestricted orbitals set in or cease just before {}{unit}: the second derivative of the curve jumps \
                     there, so each side is fitted by itself where it holds enough points, and states that reach it are those of both sides",
                    short(sweep.values[point])
                ));
            }
        }
        2 => {
            surface::add_edge(material, &mut minima);
            analysis.minima = minima;
            surface::analyse(material, &mut analysis);
        }
        _ => {}
    }
    let by_energy = |a: &MinimumResult, b: &MinimumResult| a.energy.total_cmp(&b.energy);
    analysis.minima.sort_by(by_energy);
    analysis.barriers.sort_by(by_energy);
    analysis
}

/// Adds the extrema of a curve that gradients were not asked about: minima at its ends, and what could not be refined.
fn add_unrefined(
    material: &Material<'_>,
    minima: &mut Vec<MinimumResult>,
    barriers: &mut Vec<MinimumResult>,
) {
    let sweep = &material.spec.sweeps[0];
    let pieces: Vec<lines::Line> = lines::of_curve(material, &[])
        .into_iter()
        .map(|l| l.continued(material))
        .collect();
    let last = pieces.len().saturating_sub(1);
    let found = pieces.iter().enumerate().flat_map(|(k, piece)| {
        let all = extrema(&piece.x, &piece.energies, &piece.settings).unwrap_or_default();
        // Where another state goes on, a curve has no end that would mean anything.
        all.into_iter().filter(move |found| match found.place {
            _ if !piece.owns(found.x) => false,
            Place::Interior => true,
            Place::Start => k == 0,
            Place::End => k == last,
        })
    });
    for found in found {
        let interior = found.place == Place::Interior;
        let values = vec![sweep.motion.coordinate.to_reported(found.x)];
        let kind = match found.kind {
            Kind::Minimum => StationaryKind::Minimum,
            Kind::Maximum => StationaryKind::Maximum,
        };
        let list = match found.kind {
            Kind::Minimum => &mut *minima,
            Kind::Maximum if interior => &mut *barriers,
            Kind::Maximum => continue,
        };
        let known = list
            .iter()
            .any(|m| m.interior == interior && material.is_same_place(&m.values, &values));
        if !known {
            list.push(MinimumResult {
                kind,
                interior,
                positions: positions_near(material, &values),
                values,
                energy: found.energy,
                refined: None,
                second_derivatives: Vec::new(),
            });
        }
    }
}

/// Positions at values: those of the grid point, of the rigid path, or nothing on a relaxed scan between its points.
fn positions_near(material: &Material<'_>, values: &[f64]) -> Option<Vec<Vector3<f64>>> {
    let here = material.points.iter().find(|p| {
        p.values
            .iter()
            .zip(values)
            .all(|(a, b)| (a - b).abs() < 1e-9)
    });
    match here {
        Some(point) => Some(point.positions.clone()),
        None if material.path_kind() == PathKind::Rigid => material.spec.positions_at(values).ok(),
        None => None,
    }
}
