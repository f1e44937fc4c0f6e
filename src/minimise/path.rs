//! Stationary points along rigid paths: places found between the points of a scan are made exact with gradients.
//!
//! A path gives positions for values of one swept coordinate or two, all else held. The derivative of the energy along it
//! is the gradient projected on the motion of the atoms.

use super::MinimiseError;
use crate::molecule::motion::MotionError;
use crate::surface::{PointRecord, PointRequest, SeedPoint, StabilityDemand, Start, Surface};
use nalgebra::{DMatrix, DVector, SymmetricEigen, Vector3};

/// Positions (bohr) at values of the swept coordinates (bohr or radian).
pub type Positions<'a> = dyn Fn(&[f64]) -> Result<Vec<Vector3<f64>>, MotionError> + Sync + 'a;

/// What kind of stationary point is looked for.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Target {
    /// no downhill direction
    Minimum,
    /// one downhill direction (the maximum of a curve)
    Saddle,
}

/// A path and where on it a stationary point is to be found.
pub struct PathTask<'a, T> {
    /// Positions along the path.
    pub positions: &'a Positions<'a>,
    /// Where it is expected, bohr or radian.
    pub start: &'a [f64],
    /// Second derivatives expected there, n × n; without them they are made from differences of gradients.
    pub curvature: Option<DMatrix<f64>>,
    /// How far a step may go in each coordinate, bohr or radian: the spacing of the scan.
    pub reach: &'a [f64],
    /// From bohr or radian to the values that the surface is told (ångström or degree), per coordinate.
    pub reported: &'a [f64],
    /// Minimum or saddle point.
    pub target: Target,
    /// A solution nearby to start from, with its coordinates (ångström or degree).
    pub seed: Option<SeedPoint<'a, T>>,
}

/// When a point of a path counts as stationary.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PathSettings {
    /// Largest |dE/dq|, hartree per bohr or radian.
    pub slope: f64,
    /// Gradient calls before giving up, the second derivatives apart.
    pub calls: usize,
    /// Displacement for second derivatives from gradients, bohr or radian; none are made where it is zero.
    pub displacement: f64,
}

impl Default for PathSettings {
    fn default() -> Self {
        Self {
            slope: 1e-6,
            calls: 25,
            displacement: 0.01,
        }
    }
}

/// A stationary point on a rigid path.
#[derive(Debug, Clone)]
pub struct PathPoint<T> {
    /// Where it is, bohr or radian.
    pub coordinates: Vec<f64>,
    /// Positions there, bohr.
    pub positions: Vec<Vector3<f64>>,
    /// dE/dq there.
    pub slopes: Vec<f64>,
    /// d²E/dqdq by central differences of dE/dq: hartree per bohr² or radian², from analytic gradients
    /// alone and so independent of any fit.
    pub curvature: Option<DMatrix<f64>>,
    /// What the surface says there, with the gradient.
    pub record: PointRecord,
    /// What a neighbour may start from.
    pub seed: Option<T>,
    /// Whether the slopes are below the threshold.
    pub converged: bool,
    /// Gradient calls of everything.
    pub gradient_calls: usize,
}

/// Derivatives of all positions (3N) by one coordinate of a path, by differences of fourth order: good to 10⁻¹¹.
fn motion(
    positions: &Positions<'_>,
    at: &[f64],
    along: usize,
) -> Result<DVector<f64>, MinimiseError> {
    const STEP: f64 = 1e-3;
    let flat = |steps: f64| -> Result<DVector<f64>, MinimiseError> {
        let mut moved = at.to_vec();
        moved[along] += steps * STEP;
        let placed = place(positions, &moved)?;
        Ok(DVector::from_iterator(
            3 * placed.len(),
            placed.iter().flat_map(|p| [p.x, p.y, p.z]),
        ))
    };
    Ok(((flat(1.0)? - flat(-1.0)?) * 8.0 - (flat(2.0)? - flat(-2.0)?)) / (12.0 * STEP))
}

fn place(positions: &Positions<'_>, at: &[f64]) -> Result<Vec<Vector3<f64>>, MinimiseError> {
    positions(at).map_err(|reason| MinimiseError::Path {
        coordinates: at.to_vec(),
        reason: Box::new(reason),
    })
}

/// Solutions that the next one is extrapolated from.
const REMEMBERED: usize = 6;

/// Calls the surface along a path and remembers the last solutions.
struct Walker<'a, 'b, S: Surface> {
    surface: &'a S,
    task: &'a PathTask<'b, S::Seed>,
    workspace: &'a mut S::Workspace,
    /// Solutions so far, the last one last.
    known: Vec<(Vec<f64>, S::Seed)>,
    calls: usize,
}

struct Visit<T> {
    positions: Vec<Vector3<f64>>,
    slopes: DVector<f64>,
    record: PointRecord,
    seed: Option<T>,
}

impl<S: Surface> Walker<'_, '_, S> {
    fn visit(&mut self, at: &DVector<f64>) -> Result<Visit<S::Seed>, MinimiseError> {
        let positions = place(self.task.positions, at.as_slice())?;
        let told: Vec<f64> = at
            .iter()
            .zip(self.task.reported)
            .map(|(q, unit)| q * unit)
            .collect();
        let given = self.task.seed.as_ref().map(|point| SeedPoint {
            coordinates: point.coordinates,
            seed: point.seed,
        });
        let found = self
            .known
            .iter()
            .map(|(coordinates, seed)| SeedPoint { coordinates, seed });
        let points: Vec<SeedPoint<'_, S::Seed>> = given.into_iter().chain(found).collect();
        let start = if points.is_empty() {
            Start::Fresh
        } else {
            Start::Extrapolated(points)
        };
        let request = PointRequest {
            positions: &positions,
            coordinates: &told,
            start,
            gradient: true,
            stability: StabilityDemand::None,
            follow: None,
        };
        self.calls += 1;
        let outcome = self.surface.evaluate(&request, self.workspace)?;
        if outcome.record.energy.is_none() {
            return Err(MinimiseError::NotConvergedOnPath {
                coordinates: at.as_slice().to_vec(),
            });
        }
        let rows = outcome
            .record
            .gradient
            .as_ref()
            .ok_or(MinimiseError::NoGradient)?;
        let gradient = DVector::from_iterator(3 * rows.len(), rows.iter().flatten().copied());
        let slopes = (0..at.len())
            .map(|k| Ok(motion(self.task.positions, at.as_slice(), k)?.dot(&gradient)))
            .collect::<Result<Vec<f64>, MinimiseError>>()?;
        if let Some(seed) = &outcome.seed {
            self.known.push((told, seed.clone()));
            if self.known.len() > REMEMBERED {
                self.known.remove(0);
            }
        }
        Ok(Visit {
            positions,
            slopes: DVector::from_vec(slopes),
            record: outcome.record,
            seed: outcome.seed,
        })
    }

    /// Second derivatives by central differences of slopes.
    fn curvature(
        &mut self,
        at: &DVector<f64>,
        displacement: f64,
    ) -> Result<DMatrix<f64>, MinimiseError> {
        let n = at.len();
        let mut curvature = DMatrix::zeros(n, n);
        for k in 0..n {
            let mut moved = at.clone();
            moved[k] += displacement;
            let above = self.visit(&moved)?.slopes;
            moved[k] -= 2.0 * displacement;
            let below = self.visit(&moved)?.slopes;
            curvature.set_column(k, &((above - below) / (2.0 * displacement)));
        }
        Ok((&curvature + curvature.transpose()) * 0.5)
    }
}

/// The quasi-Newton step towards a point with the downhill directions asked for: eigenvalues of the wrong sign are turned
/// round (C. J. Cerjan, W. H. Miller, J. Chem. Phys. 75, 2800 (1981), in its simplest form), and the step is kept within
/// reach.
fn step(
    curvature: &DMatrix<f64>,
    slopes: &DVector<f64>,
    target: Target,
    reach: &[f64],
) -> Result<DVector<f64>, MinimiseError> {
    let n = slopes.len();
    let eigen = SymmetricEigen::try_new(curvature.clone(), f64::EPSILON, 1000)
        .ok_or(MinimiseError::Eigenproblem { order: n })?;
    let lowest = eigen.eigenvalues.imin();
    let mut step = DVector::zeros(n);
    for (i, vector) in eigen.eigenvectors.column_iter().enumerate() {
        let size = eigen.eigenvalues[i].abs().max(1e-6);
        let sign = if target == Target::Saddle && i == lowest {
            -1.0
        } else {
            1.0
        };
        step -= vector * (vector.dot(slopes) * sign / size);
    }
    let excess = step
        .iter()
        .zip(reach)
        .map(|(s, r)| s.abs() / r)
        .fold(1.0, f64::max);
    Ok(step / excess)
}

/// Makes a stationary point on a rigid path exact: dE/dq = 0 for one swept coordinate or several, everything else as the
/// path has it. A full relaxation may follow with [`minimise`](super::minimise()) from its positions.
///
/// The second derivatives are improved by the symmetric rank-one formula (for example R. Fletcher, *Practical Methods of
/// Optimization*, Wiley, 1987, §3.2), which does not force them to be positive.
///
/// # Errors
/// A geometry without an energy or without a gradient; a path that does not lead there.
pub fn refine_on_path<S: Surface>(
    surface: &S,
    task: &PathTask<'_, S::Seed>,
    settings: &PathSettings,
    workspace: &mut S::Workspace,
) -> Result<PathPoint<S::Seed>, MinimiseError> {
    let n = task.start.len();
    for given in [task.reach.len(), task.reported.len()] {
        if given != n {
            return Err(MinimiseError::Counts { expected: n, given });
        }
    }
    let mut walker = Walker {
        surface,
        task,
        workspace,
        known: Vec::new(),
        calls: 0,
    };
    let mut at = DVector::from_column_slice(task.start);
    let mut here = walker.visit(&at)?;
    let displacement = if settings.displacement > 0.0 {
        settings.displacement
    } else {
        PathSettings::default().displacement
    };
    let mut curvature = match &task.curvature {
        Some(curvature) if curvature.shape() == (n, n) && curvature.amax().is_finite() => {
            curvature.clone()
        }
        _ => walker.curvature(&at, displacement)?,
    };
    let mut steps = 1;
    while here.slopes.amax() > settings.slope && steps < settings.calls {
        let change = step(&curvature, &here.slopes, task.target, task.reach)?;
        if change.amax() < 1e-13 {
            break;
        }
        let next = &at + &change;
        let there = walker.visit(&next)?;
        let miss = &there.slopes - &here.slopes - &curvature * &change;
        let scale = miss.dot(&change);
        if scale.abs() > 1e-8 * miss.norm() * change.norm() && scale.is_finite() {
            curvature += &miss * miss.transpose() / scale;
        }
        at = next;
        here = there;
        steps += 1;
    }
    let exact = if settings.displacement > 0.0 {
        Some(walker.curvature(&at, settings.displacement)?)
    } else {
        None
    };
    Ok(PathPoint {
        coordinates: at.as_slice().to_vec(),
        converged: here.slopes.amax() <= settings.slope,
        slopes: here.slopes.as_slice().to_vec(),
        positions: here.positions,
        curvature: exact,
        record: here.record,
        seed: here.seed,
        gradient_calls: walker.calls,
    })
}
