//! The audit: is each point on the same electronic state as its neighbours, and on the right one?
//!
//! Everything is read off the finished evaluations; the thresholds below say what counts.

use super::event::Likeness;
use super::finding::{Finding, FindingKind};
use super::grid::Grid;
use super::kept::Kept;
use super::smooth;
use crate::scf::iteration::FLAT_ENERGY;
use crate::surface::{PointRecord, StopReason};
use crate::units::short;

/// Smallest cosine between occupied spaces below which neighbours are not on one state, whatever the energy does: an
/// electron has moved to an orbital at more than 60° from its own.
const UNLIKE: f64 = 0.5;
/// Smallest cosine below which a kink in the energy is taken for a change of state.
const DOUBTFUL: f64 = 0.9;
/// ⟨S²⟩ above that of the pure state by more than this is spin contamination (common practice: a tenth).
const CONTAMINATION: f64 = 0.1;
/// Change of ⟨S²⟩ between neighbours that the onset of a broken symmetry does not explain.
const SPIN_STEP: f64 = 0.5;
/// Gap between highest occupied and lowest empty orbital, hartree, below which states come close in Hartree–Fock, where
/// gaps of closed shells are some 0.4 hartree or more.
const SMALL_GAP: f64 = 0.1;
/// Eigenvalue of an orbital Hessian, hartree, below which a solution counts as unstable.
const UNSTABLE: f64 = -1e-4;

/// What the audit looks at.
#[derive(Debug)]
pub struct Audited<'a> {
    /// The grid.
    pub grid: &'a Grid,
    /// Values of the swept coordinates at every point, ångström or degree.
    pub coordinates: &'a [Vec<f64>],
    /// The kept solution of every point; none where nothing was evaluated yet.
    pub kept: &'a [Option<Kept<'a>>],
    /// How alike neighbours are.
    pub likeness: &'a [Likeness],
    /// S(S + 1) of the spin state asked for.
    pub pure_s_squared: f64,
    /// Number of basis functions.
    pub functions: usize,
    /// Whether the method ties α and β orbitals together.
    pub restricted: bool,
}

impl Audited<'_> {
    fn record(&self, point: usize) -> Option<&PointRecord> {
        Some(&self.kept[point].as_ref()?.entry.record)
    }

    /// Numbers of the points whose record passes a test.
    fn points(&self, test: impl Fn(&PointRecord) -> bool) -> Vec<usize> {
        (0..self.kept.len())
            .filter(|&p| self.record(p).is_some_and(&test))
            .collect()
    }

    fn converged(&self, test: impl Fn(&PointRecord) -> bool) -> Vec<usize> {
        self.points(|r| r.energy.is_some() && test(r))
    }

    /// Whether unrestricted orbitals lie lower at a point: by its own test, or by the last one on the way to it, which
    /// vouches for it.
    fn is_triplet_unstable(&self, point: usize) -> bool {
        let mut here = point;
        // Ways back may lead in a circle.
        for _ in 0..self.kept.len() {
            let Some(kept) = &self.kept[here] else {
                return false;
            };
            if let Some(stability) = kept.entry.record.stability {
                return stability.triplet.is_some_and(|t| t < UNSTABLE);
            }
            match kept.entry.seeded_from.last() {
                Some(&behind) => here = behind,
                None => return false,
            }
        }
        false
    }

    /// Points in words: how many, and from where to where if they are few.
    fn places(&self, points: &[usize]) -> String {
        let place = |p: usize| {
            self.coordinates[p]
                .iter()
                .map(|&v| short(v))
                .collect::<Vec<_>>()
                .join(", ")
        };
        match points {
            [] => String::new(),
            [one] => format!("at {}", place(*one)),
            [one, two] => format!("at {} and {}", place(*one), place(*two)),
            [first, .., last] => {
                format!(
                    "at {} points from {} to {}",
                    points.len(),
                    place(*first),
                    place(*last)
                )
            }
        }
    }
}

/// All findings, the gravest kinds first.
#[must_use]
pub fn audit(audited: &Audited<'_>) -> Vec<Finding> {
    let mut findings = Vec::new();
    let mut add = |kind, points: Vec<usize>, text: &dyn Fn(&str) -> String| {
        if !points.is_empty() {
            let text = text(&audited.places(&points));
            findings.push(Finding { kind, points, text });
        }
    };
    add(
        FindingKind::NotConverged,
        audited.points(|r| r.energy.is_none()),
        &|places| {
            format!(
                "no converged solution {places}; there is no energy and the points are left out of everything else. \
             A smaller step, another start of the walk or more [scf] iterations may help"
            )
        },
    );
    for [one, two] in state_jumps(audited) {
        add(FindingKind::StateJump, vec![one, two], &|places| {
            format!(
                "the electronic state changes between the points {places}: energies on the two sides belong to \
                 different solutions. Fit each side by itself, or sweep this region again with a smaller step"
            )
        });
    }
    let disputed: Vec<usize> = (0..audited.kept.len())
        .filter(|&p| {
            audited.kept[p]
                .as_ref()
                .is_some_and(|k| k.second_energy.is_some())
        })
        .collect();
    add(FindingKind::Hysteresis, disputed, &|places| {
        format!(
            "different ways led to different solutions {places}; the lower one is kept and the other drawn as a \
             thin line. Two states come close here"
        )
    });
    let internal = |r: &PointRecord| r.stability.is_some_and(|s| s.internal < UNSTABLE);
    add(
        FindingKind::Unstable,
        audited.converged(internal),
        &|places| {
            format!(
                "a lower solution of the same method exists {places} that was not reached; the energies are too high"
            )
        },
    );
    if audited.restricted {
        let unstable = audited
            .converged(|_| true)
            .into_iter()
            .filter(|&p| audited.is_triplet_unstable(p))
            .collect();
        add(FindingKind::Unstable, unstable, &|places| {
            format!(
                "unrestricted orbitals give a lower energy {places}: restricted Hartree–Fock is not to be trusted \
                 there. A uhf level shows by how much"
            )
        });
    }
    let contaminated = |r: &PointRecord| r.s_squared - audited.pure_s_squared > CONTAMINATION;
    add(
        FindingKind::SpinContaminated,
        audited.converged(contaminated),
        &|places| {
            format!(
                "⟨S²⟩ is more than {CONTAMINATION} above {:.2} {places}: the determinant mixes spin states, and its \
             energy lies between theirs",
                audited.pure_s_squared
            )
        },
    );
    let close =
        |r: &PointRecord| matches!((r.homo, r.lumo), (Some(h), Some(l)) if l - h < SMALL_GAP);
    add(FindingKind::SmallGap, audited.converged(close), &|places| {
        format!(
            "the gap between occupied and empty orbitals is below {SMALL_GAP} hartree {places}: another state is \
             near, and one determinant may describe neither"
        )
    });
    let soft = |r: &PointRecord| r.stop == StopReason::SoftMode;
    add(FindingKind::SoftMode, audited.converged(soft), &|places| {
        format!(
            "the energy hardly changes along a rotation of orbitals {places}, and the iteration was ended before all \
             thresholds were met: energies there are right to {FLAT_ENERGY:e} hartree, other properties less well"
        )
    });
    let dependent = audited.points(|r| r.functions_kept < audited.functions);
    let kept = dependent
        .iter()
        .filter_map(|&p| Some(audited.record(p)?.functions_kept))
        .min();
    add(FindingKind::NearDependentBasis, dependent, &|places| {
        format!(
            "basis functions are nearly dependent {places}: {} of {} combinations are kept. Energies may step where \
             that number changes",
            kept.unwrap_or(audited.functions),
            audited.functions
        )
    });
    findings
}

/// Pairs of neighbouring points between which the state changes.
fn state_jumps(audited: &Audited<'_>) -> Vec<[usize; 2]> {
    let kinks = smooth::kinks(audited.grid, audited.coordinates, &|p| {
        audited.record(p)?.energy
    });
    audited
        .likeness
        .iter()
        .filter(|pair| {
            let cosine = pair.cosines[0].min(pair.cosines[1]);
            let spin = |p: usize| audited.record(p).map_or(0.0, |r| r.s_squared);
            let spin_step = (spin(pair.points[0]) - spin(pair.points[1])).abs() > SPIN_STEP;
            cosine < UNLIKE || ((cosine < DOUBTFUL || spin_step) && kinks.contains(&pair.points))
        })
        .map(|pair| pair.points)
        .collect()
}
