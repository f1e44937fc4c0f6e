//! The surface of a relaxed scan: at every point all coordinates but the swept ones are optimised.

use super::{Curvature, Held, MinimiseError, MinimiseSettings, Minimum, Task, minimise};
use crate::molecule::Molecule;
use crate::molecule::internal::Coordinate;
use crate::surface::{
    PointOutcome, PointRecord, PointRequest, RelaxationRecord, SeedPoint, Start, Surface,
    SurfaceError,
};
use nalgebra::{DMatrix, DVector, Vector3};

/// A surface on which each evaluation relaxes everything but the swept coordinates.
///
/// The swept coordinates keep the values that they have at the positions asked for; the record says where the atoms went.
/// A point is begun at the geometry that its neighbours' relaxed geometries extrapolate to, with their Hessian.
#[derive(Debug, Clone)]
pub struct Relaxed<S> {
    inner: S,
    molecule: Molecule,
    swept: Vec<Coordinate>,
    settings: MinimiseSettings,
}

/// What a relaxed point leaves for its neighbours.
#[derive(Debug, Clone)]
pub struct RelaxedSeed<T> {
    /// What the surface itself starts from.
    pub inner: T,
    /// Relaxed positions, bohr.
    pub positions: Vec<Vector3<f64>>,
    /// The Hessian as learnt so far.
    pub curvature: Curvature,
}

/// Points of a line that a geometry is extrapolated through: a parabola follows a path, more points amplify what the
/// optimisation left.
const POINTS_OF_A_LINE: usize = 3;
/// A predicted change of a coordinate (bohr or radian) beyond this is not trusted.
const LARGEST_CHANGE: f64 = 0.7;

impl<S: Surface> Relaxed<S> {
    /// Relaxes `inner` with the coordinates `swept` held, tied ones among them.
    #[must_use]
    pub fn new(
        inner: S,
        molecule: &Molecule,
        swept: Vec<Coordinate>,
        settings: MinimiseSettings,
    ) -> Self {
        Self {
            inner,
            molecule: molecule.clone(),
            swept,
            settings,
        }
    }

    /// The surface without relaxation.
    #[must_use]
    pub fn inner(&self) -> &S {
        &self.inner
    }

    fn relax(
        &self,
        request: &PointRequest<'_, RelaxedSeed<S::Seed>>,
        begin: Option<&Begin<'_>>,
        workspace: &mut S::Workspace,
    ) -> Result<Minimum<S::Seed>, MinimiseError> {
        let held: Vec<Held> = self
            .swept
            .iter()
            .map(|&coordinate| Held {
                coordinate,
                value: coordinate.value(request.positions),
            })
            .collect();
        let positions = begin.map_or(request.positions, |b| &b.positions);
        let molecule = self.molecule.at(positions);
        let task = Task {
            molecule: &molecule,
            held: &held,
            coordinates: request.coordinates,
            start: inner_start(&request.start),
            curvature: begin.map(|b| b.curvature),
            stability: request.stability,
            follow: request.follow.map(|seed| &seed.inner),
        };
        minimise(&self.inner, task, &self.settings, workspace)
    }

    /// What is said of a point whose relaxation could not even be set up: the energy of nothing.
    fn refused(
        &self,
        request: &PointRequest<'_, RelaxedSeed<S::Seed>>,
        workspace: &mut S::Workspace,
    ) -> Result<PointOutcome<RelaxedSeed<S::Seed>>, SurfaceError> {
        let rigid = PointRequest {
            positions: request.positions,
            coordinates: request.coordinates,
            start: inner_start(&request.start),
            gradient: false,
            stability: request.stability,
            follow: request.follow.map(|seed| &seed.inner),
        };
        let record = self.inner.evaluate(&rigid, workspace)?.record;
        Ok(PointOutcome {
            record: PointRecord {
                energy: None,
                relaxation: Some(RelaxationRecord {
                    gradient_calls: 0,
                    converged: false,
                    gradient_max: None,
                }),
                ..record
            },
            seed: None,
        })
    }
}

/// Where an optimisation begins, and with which Hessian.
struct Begin<'a> {
    positions: Vec<Vector3<f64>>,
    curvature: &'a Curvature,
}

fn inner_start<'a, T>(start: &Start<'a, RelaxedSeed<T>>) -> Start<'a, T> {
    let inner = |point: &SeedPoint<'a, RelaxedSeed<T>>| SeedPoint {
        coordinates: point.coordinates,
        seed: &point.seed.inner,
    };
    match start {
        Start::Fresh => Start::Fresh,
        Start::Plain => Start::Plain,
        Start::Previous(point) => Start::Previous(inner(point)),
        Start::Extrapolated(points) => Start::Extrapolated(points.iter().map(inner).collect()),
    }
}

/// The geometry that the seeds' geometries lead to at `coordinates`.
fn begin<'a, T>(start: &Start<'a, RelaxedSeed<T>>, coordinates: &[f64]) -> Option<Begin<'a>> {
    let points: Vec<(&'a [f64], &'a RelaxedSeed<T>)> = match start {
        Start::Fresh | Start::Plain => Vec::new(),
        Start::Previous(point) => vec![(point.coordinates, point.seed)],
        Start::Extrapolated(points) => points.iter().map(|p| (p.coordinates, p.seed)).collect(),
    };
    let &(_, nearest) = points.last()?;
    let set = &nearest.curvature.set;
    let here = set.values(&nearest.positions);
    // Only the differences between geometries are extrapolated, so that dihedrals take the short way round.
    let changes: Vec<DVector<f64>> = points
        .iter()
        .map(|(_, seed)| set.differences(&set.values(&seed.positions), &here))
        .collect();
    let places: Vec<&[f64]> = points.iter().map(|(q, _)| *q).collect();
    let positions = weights(&places, coordinates)
        .map(|weights| {
            changes
                .iter()
                .zip(&weights)
                .fold(DVector::zeros(here.len()), |sum, (change, w)| {
                    sum + change * *w
                })
        })
        .filter(|change| change.amax() < LARGEST_CHANGE)
        .and_then(|change| set.displaced(&nearest.positions, &change).ok())
        .unwrap_or_else(|| nearest.positions.clone());
    Some(Begin {
        positions,
        curvature: &nearest.curvature,
    })
}

/// Weights of points (nearest last) in the prediction at `target`: a Lagrange polynomial through the last points on one
/// line with it, otherwise a plane through the last points by least squares. None where one point is all there is.
fn weights(places: &[&[f64]], target: &[f64]) -> Option<Vec<f64>> {
    let &nearest = places.last()?;
    if nearest.len() != target.len() || places.iter().any(|p| p.len() != target.len()) {
        return None;
    }
    let moving: Vec<usize> = (0..target.len())
        .filter(|&k| (target[k] - nearest[k]).abs() > 1e-9)
        .collect();
    if let [along] = *moving.as_slice() {
        let mut line: Vec<usize> = Vec::new();
        for i in (0..places.len()).rev() {
            let same =
                (0..target.len()).all(|k| k == along || (places[i][k] - target[k]).abs() < 1e-9);
            let new = line
                .iter()
                .all(|&j| (places[i][along] - places[j][along]).abs() > 1e-9);
            if same && new && line.len() < POINTS_OF_A_LINE {
                line.push(i);
            }
        }
        if line.len() > 1 {
            let mut weights = vec![0.0; places.len()];
            for &i in &line {
                weights[i] = line
                    .iter()
                    .filter(|&&j| j != i)
                    .map(|&j| {
                        (target[along] - places[j][along]) / (places[i][along] - places[j][along])
                    })
                    .product();
            }
            return Some(weights);
        }
    }
    plane(places, target)
}

/// Weights of a linear least-squares prediction through the last six points.
fn plane(places: &[&[f64]], target: &[f64]) -> Option<Vec<f64>> {
    const POINTS: usize = 6;
    let from = places.len().saturating_sub(POINTS);
    let used = &places[from..];
    let nearest = *used.last()?;
    if used.len() < 2 {
        return None;
    }
    // Steps relative to the nearest point, which the plane passes through.
    let steps = DMatrix::from_fn(used.len(), target.len(), |i, k| used[i][k] - nearest[k]);
    let towards = DVector::from_fn(target.len(), |k, _| target[k] - nearest[k]);
    // change(target) = towardsᵀ steps⁺ changes
    let inverse = steps.clone().pseudo_inverse(1e-9).ok()?;
    let spanned = &inverse * &steps * &towards;
    if (spanned - &towards).amax() > 1e-6 * towards.amax().max(1e-12) {
        return None;
    }
    let shares = inverse.transpose() * towards;
    let mut weights = vec![0.0; places.len()];
    for (i, share) in shares.iter().enumerate() {
        weights[from + i] = *share;
    }
    Some(weights)
}

impl<S: Surface> Surface for Relaxed<S> {
    type Seed = RelaxedSeed<S::Seed>;
    type Workspace = S::Workspace;

    fn workspace(&self) -> Self::Workspace {
        self.inner.workspace()
    }

    fn workspace_bytes(&self) -> u64 {
        self.inner.workspace_bytes()
    }

    fn evaluate(
        &self,
        request: &PointRequest<'_, Self::Seed>,
        workspace: &mut Self::Workspace,
    ) -> Result<PointOutcome<Self::Seed>, SurfaceError> {
        let seeded = begin(&request.start, request.coordinates);
        let mut spent = (0, 0, 0.0, 0.0);
        let mut found = self.relax(request, seeded.as_ref(), workspace);
        let reached = |found: &Result<Minimum<S::Seed>, MinimiseError>| {
            found.as_ref().is_ok_and(Minimum::converged)
        };
        // What a neighbour's geometry leads to is not always a way: then from the input's other coordinates.
        if seeded.is_some() && !reached(&found) {
            if let Ok(first) = &found {
                let record = &first.record;
                spent = (
                    first.calls.len(),
                    record.all_builds,
                    record.seconds,
                    record.scf_seconds,
                );
            }
            found = self.relax(request, None, workspace);
        }
        let minimum = match found {
            Ok(minimum) => minimum,
            Err(MinimiseError::Surface(error)) => return Err(error),
            Err(_) => return self.refused(request, workspace),
        };
        let converged = minimum.converged();
        let gradient_max = minimum.last().map(|call| call.gradient_max);
        let mut record = minimum.record;
        record.all_builds += spent.1;
        record.seconds += spent.2;
        record.scf_seconds += spent.3;
        record.positions = Some(minimum.positions.iter().map(|p| [p.x, p.y, p.z]).collect());
        record.relaxation = Some(RelaxationRecord {
            gradient_calls: minimum.calls.len() + spent.0,
            converged,
            gradient_max,
        });
        if !request.gradient {
            record.gradient = None;
        }
        if !converged {
            record.energy = None;
        }
        let seed = minimum.seed.filter(|_| converged).map(|inner| RelaxedSeed {
            inner,
            positions: minimum.positions,
            curvature: minimum.curvature,
        });
        Ok(PointOutcome { record, seed })
    }

    fn likeness(&self, one: &Self::Seed, other: &Self::Seed) -> [f64; 2] {
        self.inner.likeness(&one.inner, &other.inner)
    }

    /// Nothing: where the pieces relax to is not known beforehand.
    fn apart(&self, _: &[Vector3<f64>]) -> Vec<Self::Seed> {
        Vec::new()
    }

    fn has_plain_start(&self) -> bool {
        self.inner.has_plain_start()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn predicted(places: &[&[f64]], target: &[f64], f: impl Fn(&[f64]) -> f64) -> f64 {
        let weights = weights(places, target).expect("enough points");
        // Weights are those of changes from the last point.
        let here = f(places[places.len() - 1]);
        let changes = places.iter().map(|p| f(p) - here);
        here + changes.zip(&weights).map(|(c, w)| c * w).sum::<f64>()
    }

    #[test]
    fn a_parabola_along_a_line_is_followed() {
        let f = |q: &[f64]| 1.0 + 0.3 * q[0] - 0.2 * q[0] * q[0];
        let places: [&[f64]; 5] = [&[9.0], &[1.0], &[1.5], &[1.5], &[2.5]];
        assert!((predicted(&places, &[3.0], f) - f(&[3.0])).abs() < 1e-12);
        // Along the second of two coordinates, with points off the line left out.
        let f = |q: &[f64]| q[0] + 0.3 * q[1] - 0.2 * q[1] * q[1];
        let places: [&[f64]; 4] = [&[1.0, 7.0], &[2.0, 0.0], &[2.0, 1.0], &[2.0, 2.0]];
        assert!((predicted(&places, &[2.0, 3.0], f) - f(&[2.0, 3.0])).abs() < 1e-12);
    }

    #[test]
    fn a_plane_is_followed_across() {
        let f = |q: &[f64]| 1.0 + 0.3 * q[0] - 0.2 * q[1];
        let places: [&[f64]; 3] = [&[0.0, 0.0], &[0.0, 1.0], &[1.0, 0.0]];
        assert!((predicted(&places, &[1.0, 1.0], f) - 1.1).abs() < 1e-12);
    }

    #[test]
    fn one_point_predicts_nothing() {
        assert_eq!(weights(&[&[1.0]], &[2.0]), None);
        assert_eq!(weights(&[], &[2.0]), None);
        // Nor do two points on a line that does not lead there.
        assert_eq!(weights(&[&[0.0, 0.0], &[1.0, 0.0]], &[1.0, 2.0]), None);
    }
}
