//! Energies of the separated parts of a molecule: which parts, in which spin states, and what they add up to.

use crate::molecule::Molecule;
use crate::molecule::connectivity::{Connectivity, Cut};
use crate::molecule::internal::Coordinate;
use crate::scan::Sweep;
use crate::scf::{Method, ScfSettings};
use crate::spec::{Level, Part};
use crate::surface::{
    HartreeFock, PointRecord, PointRequest, StabilityDemand, Start, Surface, SurfaceError,
};
use nalgebra::Vector3;
use serde::{Deserialize, Serialize};

/// Highest number of unpaired electrons tried for a single atom (chromium has six) and for a larger part.
const UNPAIRED_OF_ATOM: u32 = 6;
const UNPAIRED_OF_LARGER: u32 = 3;

/// Energy of the separated parts of a molecule at one level.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Limit {
    /// The parts.
    pub parts: Vec<LimitPart>,
    /// Sum of their energies, hartree; none if one did not converge.
    pub energy: Option<f64>,
    /// Sum over the parts of the energy that the other parts' basis functions lend each at the lowest
    /// geometry, hartree (≥ 0; S. F. Boys, F. Bernardi, Mol. Phys. 19, 553 (1970)), where it was asked for.
    pub counterpoise: Option<f64>,
    /// Whether the spin states were proposed here, not given by the spec.
    pub proposed: bool,
    /// Sum of the energies of the parts in their lowest states, hartree, where those cannot be reached because their
    /// spin projections do not add up to the whole's.
    pub unreachable: Option<f64>,
    /// States of parts that did not converge and might have been lower than those proposed; the limit then has no energy.
    #[serde(default, skip_serializing_if = "Vec::is_empty")]
    pub missing: Vec<LimitPart>,
}

/// One separated part.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct LimitPart {
    /// Indices of its atoms.
    pub atoms: Vec<usize>,
    /// Charge in units of e.
    pub charge: i32,
    /// Multiplicity 2S + 1.
    pub multiplicity: u32,
    /// Method it was computed with: open-shell parts of a restricted level are unrestricted.
    pub method: Method,
    /// Energy, hartree.
    pub energy: Option<f64>,
    /// ⟨S²⟩.
    pub s_squared: f64,
}

/// The parts that the bonds of some sweeps cut: connected components without them. None if no bond is swept, or if
/// cutting does not separate anything.
#[must_use]
pub fn parts_cut(molecule: &Molecule, sweeps: &[Sweep]) -> Option<Vec<Vec<usize>>> {
    let connectivity = Connectivity::of(molecule);
    let [sweep] = sweeps else { return None };
    let cut: Vec<[usize; 2]> = sweep
        .motions()
        .filter_map(|m| match m.coordinate {
            Coordinate::Bond([a, b]) => Some([a.min(b), a.max(b)]),
            _ => None,
        })
        .collect();
    let kept: Vec<[usize; 2]> = connectivity
        .bonds()
        .into_iter()
        .filter(|&[a, b]| !cut.contains(&[a.min(b), a.max(b)]))
        .collect();
    let without = Connectivity::from_bonds(molecule.atoms.len(), &kept);
    let parts = without.components();
    let separates = cut
        .iter()
        .all(|&[a, b]| !without.component(a, Cut::Nothing).contains(&b));
    (!cut.is_empty() && separates && parts.len() > 1).then_some(parts)
}

/// Everything that the energies of parts depend on.
struct Whole<'a> {
    molecule: &'a Molecule,
    level: &'a Level,
    settings: &'a ScfSettings,
}

/// Computes given parts at a level.
///
/// # Errors
/// [`SurfaceError`] if a part cannot be set up.
pub fn given(
    molecule: &Molecule,
    level: &Level,
    settings: &ScfSettings,
    parts: &[Part],
) -> Result<Limit, SurfaceError> {
    let whole = Whole {
        molecule,
        level,
        settings,
    };
    let parts = parts
        .iter()
        .map(|p| whole.part(&p.atoms, p.charge, p.multiplicity, level.method))
        .collect::<Result<Vec<_>, _>>()?;
    let energy = parts.iter().map(|p| p.energy).sum();
    Ok(Limit {
        parts,
        energy,
        counterpoise: None,
        proposed: false,
        unreachable: None,
        missing: Vec::new(),
    })
}

/// Computes parts in the spin states and charges of lowest UHF energy whose spin projections can add up to that
/// of the whole molecule.
///
/// # Errors
/// [`SurfaceError`] if a part cannot be set up.
pub fn proposed(
    molecule: &Molecule,
    level: &Level,
    settings: &ScfSettings,
    parts: &[Vec<usize>],
) -> Result<Option<Limit>, SurfaceError> {
    let whole = Whole {
        molecule,
        level,
        settings,
    };
    let unpaired_of_whole = level.multiplicity as i32 - 1;
    let mut best: Option<(f64, Vec<LimitPart>)> = None;
    let mut lowest = f64::INFINITY;
    let mut failed: Vec<LimitPart> = Vec::new();
    for charges in charge_patterns(parts.len(), level.charge) {
        let mut candidates = Vec::with_capacity(parts.len());
        for (atoms, &charge) in parts.iter().zip(&charges) {
            let mut states = Vec::new();
            for multiplicity in multiplicities(molecule, atoms, charge) {
                match whole.part(atoms, charge, multiplicity, Method::Uhf) {
                    Ok(part) => states.push(part),
                    // A minimal basis has no room for the highest spins.
                    Err(SurfaceError::TooFewFunctions { .. }) => {}
                    Err(error) => return Err(error),
                }
            }
            let (found, without): (Vec<_>, Vec<_>) =
                states.into_iter().partition(|s| s.energy.is_some());
            failed.extend(without);
            candidates.push(found);
        }
        for choice in products(&candidates) {
            let energy: f64 = choice.iter().filter_map(|p| p.energy).sum();
            lowest = lowest.min(energy);
            let unpaired: Vec<i32> = choice.iter().map(|p| p.multiplicity as i32 - 1).collect();
            if adds_up(&unpaired, unpaired_of_whole)
                && best
                    .as_ref()
                    .is_none_or(|(known, _)| energy < *known - 1e-9)
            {
                best = Some((energy, choice.into_iter().cloned().collect()));
            }
        }
    }
    let Some((energy, parts)) = best else {
        return Ok(None);
    };
    let unreachable = (lowest < energy - 1e-6).then_some(lowest);
    // States of higher spin than the next are hardly ever the lowest (Hund's rules, common practice).
    failed.retain(|state| {
        parts
            .iter()
            .any(|p| p.atoms == state.atoms && state.multiplicity <= p.multiplicity + 2)
    });
    // A restricted level keeps its own closed-shell parts restricted.
    let parts = if level.method == Method::Rhf {
        parts
            .iter()
            .map(|p| whole.part(&p.atoms, p.charge, p.multiplicity, Method::Rhf))
            .collect::<Result<Vec<_>, _>>()?
    } else {
        parts
    };
    let energy = if failed.is_empty() {
        parts.iter().map(|p| p.energy).sum()
    } else {
        None
    };
    Ok(Some(Limit {
        parts,
        energy,
        counterpoise: None,
        proposed: true,
        unreachable,
        missing: failed,
    }))
}

/// The energy that the whole basis at `positions` (bohr) lends the parts, hartree.
///
/// # Errors
/// [`SurfaceError`] if a part cannot be set up.
pub fn counterpoise(
    molecule: &Molecule,
    level: &Level,
    settings: &ScfSettings,
    limit: &Limit,
    positions: &[Vector3<f64>],
) -> Result<Option<f64>, SurfaceError> {
    let molecule = molecule.at(positions);
    let whole = Whole {
        molecule: &molecule,
        level,
        settings,
    };
    let mut sum = 0.0;
    for part in &limit.parts {
        let own = whole.energy(&part.atoms, part, false)?;
        let lent = whole.energy(&part.atoms, part, true)?;
        match own.energy.zip(lent.energy) {
            Some((own, lent)) => sum += own - lent,
            None => return Ok(None),
        }
    }
    Ok(Some(sum))
}

impl Whole<'_> {
    /// A part in one state; closed shells with `method`, open ones always unrestricted.
    fn part(
        &self,
        atoms: &[usize],
        charge: i32,
        multiplicity: u32,
        method: Method,
    ) -> Result<LimitPart, SurfaceError> {
        let method = if multiplicity == 1 {
            method
        } else {
            Method::Uhf
        };
        let mut part = LimitPart {
            atoms: atoms.to_vec(),
            charge,
            multiplicity,
            method,
            energy: None,
            s_squared: 0.0,
        };
        let record = self.energy(atoms, &part, false)?;
        part.energy = record.energy;
        part.s_squared = record.s_squared;
        Ok(part)
    }

    /// The part by itself, or with the basis functions of all other atoms as ghosts.
    fn energy(
        &self,
        atoms: &[usize],
        part: &LimitPart,
        ghosts: bool,
    ) -> Result<PointRecord, SurfaceError> {
        let chosen: Vec<usize> = if ghosts {
            (0..self.molecule.atoms.len()).collect()
        } else {
            atoms.to_vec()
        };
        let molecule = Molecule {
            atoms: chosen
                .iter()
                .map(|&i| {
                    let mut atom = self.molecule.atoms[i].clone();
                    atom.ghost |= !atoms.contains(&i);
                    atom
                })
                .collect(),
            positions: chosen.iter().map(|&i| self.molecule.positions[i]).collect(),
            charge: part.charge,
            multiplicity: part.multiplicity,
        };
        let shells = chosen
            .iter()
            .map(|&i| self.level.shells_of_atom[i].clone())
            .collect();
        let surface = HartreeFock::new(&molecule, shells, part.method, self.settings.clone())?;
        let request = PointRequest {
            positions: &molecule.positions,
            coordinates: &[],
            start: Start::Fresh,
            gradient: false,
            stability: StabilityDemand::Leave,
            follow: None,
        };
        Ok(surface.evaluate(&request, &mut surface.workspace())?.record)
    }
}

/// The ways to give one part the whole charge (a neutral whole has neutral parts).
fn charge_patterns(parts: usize, charge: i32) -> Vec<Vec<i32>> {
    if charge == 0 {
        return vec![vec![0; parts]];
    }
    (0..parts)
        .map(|holder| {
            (0..parts)
                .map(|k| if k == holder { charge } else { 0 })
                .collect()
        })
        .collect()
}

/// Multiplicities worth trying for a part.
fn multiplicities(molecule: &Molecule, atoms: &[usize], charge: i32) -> Vec<u32> {
    let nuclear: i64 = atoms
        .iter()
        .filter(|&&i| !molecule.atoms[i].ghost)
        .map(|&i| i64::from(molecule.atoms[i].element.atomic_number()))
        .sum();
    let Ok(electrons) = u32::try_from(nuclear - i64::from(charge)) else {
        return Vec::new();
    };
    let most = if atoms.len() == 1 {
        UNPAIRED_OF_ATOM
    } else {
        UNPAIRED_OF_LARGER
    };
    (0..=most.min(electrons))
        .filter(|n| n % 2 == electrons % 2)
        .map(|n| n + 1)
        .collect()
}

/// Every way to take one of each list.
fn products<T>(lists: &[Vec<T>]) -> Vec<Vec<&T>> {
    lists.iter().fold(vec![Vec::new()], |all, list| {
        all.iter()
            .flat_map(|head: &Vec<&T>| {
                list.iter().map(move |item| {
                    let mut next = head.clone();
                    next.push(item);
                    next
                })
            })
            .collect()
    })
}

/// Whether the projections ±n₁ ± n₂ … of unpaired electrons can give the whole's.
fn adds_up(unpaired: &[i32], whole: i32) -> bool {
    let mut sums = vec![0];
    for &n in unpaired {
        sums = sums.iter().flat_map(|s| [s + n, s - n]).collect();
    }
    sums.contains(&whole)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spin_projections_of_parts_add_up_or_do_not() {
        assert!(adds_up(&[3, 3], 0));
        assert!(adds_up(&[1, 1], 2));
        // Two triplet atoms give a singlet or a quintet determinant, never a triplet.
        assert!(!adds_up(&[2, 2], 2));
        assert!(adds_up(&[2, 0], 2));
        assert!(adds_up(&[1, 1, 0], 0));
    }

    #[test]
    fn a_charge_sits_on_one_part() {
        assert_eq!(charge_patterns(2, 0), [vec![0, 0]]);
        assert_eq!(charge_patterns(2, -1), [vec![-1, 0], vec![0, -1]]);
    }
}
