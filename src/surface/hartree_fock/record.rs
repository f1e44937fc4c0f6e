//! What is recorded of a settled solution.

use super::{Geometry, Settled};
use crate::gradient::{GradientSettings, hartree_fock_gradient};
use crate::integrals;
use crate::scf::canonical::Canonical;
use crate::scf::fock::{Evaluation, Field};
use crate::scf::{StopReason, properties};
use crate::surface::{IntegralCounts, PointRecord, SurfaceError};
use nalgebra::DMatrix;

/// Everything that is kept of a settled solution; times and integral counts are left to the caller.
pub(super) fn point_record(
    geometry: &Geometry,
    field: &Field<'_>,
    settled: &Settled,
) -> Result<PointRecord, SurfaceError> {
    let evaluation = &settled.solution.evaluation;
    let finite = settled.solution.stop != StopReason::NotFinite;
    let mut densities = field.densities(&evaluation.occupied);
    if !finite {
        // Numbers that are none have no place in a record.
        densities.iter_mut().for_each(|p| p.fill(0.0));
    }
    let total = densities.iter().fold(
        DMatrix::zeros(geometry.basis.len(), geometry.basis.len()),
        |sum, p| sum + p,
    ) * field.occupation().weight();
    let atoms = geometry.molecule.atoms.len();
    let places = geometry.basis.function_atoms();
    let charges = |populations: Vec<f64>| -> Vec<f64> {
        geometry
            .molecule
            .atoms
            .iter()
            .zip(populations)
            .map(|(atom, population)| atom.charge() - population)
            .collect()
    };
    let mulliken = properties::mulliken_populations(&total, &geometry.overlap, &places, atoms);
    let electrons = mulliken.iter().sum();
    let spins = match densities.as_slice() {
        [alpha, beta] => {
            properties::loewdin_populations(&(alpha - beta), &geometry.frame, &places, atoms)
        }
        _ => vec![0.0; atoms],
    };
    let s_squared = match evaluation.occupied.as_slice() {
        [alpha, beta] if finite => properties::s_squared(alpha, beta),
        _ => 0.0,
    };
    let (mut homo, mut lumo): (Option<f64>, Option<f64>) = (None, None);
    if finite {
        for block in Canonical::of(field, evaluation)? {
            if let Some(&top) = block.occupied_energies.iter().next_back() {
                homo = Some(homo.map_or(top, |h| h.max(top)));
            }
            if let Some(&bottom) = block.empty_energies.iter().next() {
                lumo = Some(lumo.map_or(bottom, |l| l.min(bottom)));
            }
        }
    }
    let origin = properties::charge_centre(&geometry.molecule);
    let moments = integrals::dipole(&geometry.basis, &origin);
    let dipole = properties::dipole(&geometry.molecule, &origin, &total, &moments);
    let converged = settled.solution.stop.is_converged();
    Ok(PointRecord {
        energy: converged.then_some(evaluation.energy),
        stop: settled.solution.stop,
        fock_builds: settled.fock_builds,
        all_builds: field.builds() + field.products(),
        s_squared,
        homo,
        lumo,
        dipole: dipole.into(),
        charges_loewdin: charges(properties::loewdin_populations(
            &total,
            &geometry.frame,
            &places,
            atoms,
        )),
        charges_mulliken: charges(mulliken),
        spins_loewdin: spins,
        bond_orders: properties::bond_orders(&densities, &geometry.overlap, &places, atoms),
        electrons,
        commutator: if finite {
            evaluation.commutator
        } else {
            f64::MAX
        },
        kinetic: total.dot(&geometry.kinetic),
        functions_kept: geometry.frame.kept(),
        overlap_smallest: geometry.frame.smallest(),
        gradient: None,
        positions: None,
        relaxation: None,
        stability: settled.stability,
        integrals: IntegralCounts::default(),
        seconds: 0.0,
        scf_seconds: 0.0,
    })
}

/// Energy gradient of a converged solution, hartree/bohr, one per atom.
pub(super) fn gradient(
    geometry: &Geometry,
    field: &Field<'_>,
    evaluation: &Evaluation,
) -> Vec<[f64; 3]> {
    let densities = field.densities(&evaluation.occupied);
    let mut weighted = DMatrix::zeros(geometry.basis.len(), geometry.basis.len());
    for (y, fock) in evaluation.occupied.iter().zip(&evaluation.focks) {
        // tr over occupied orbitals, in whatever combination they are: Y (YᵀFY) Yᵀ.
        let energies = y.transpose() * (fock * y);
        weighted +=
            geometry.frame.transform(&(y * energies * y.transpose())) * field.occupation().weight();
    }
    // A single block stands for both spins.
    let (Some(alpha), Some(beta)) = (densities.first(), densities.last()) else {
        return Vec::new();
    };
    hartree_fock_gradient(
        &geometry.molecule,
        &geometry.basis,
        alpha,
        beta,
        &weighted,
        &GradientSettings::default(),
    )
    .into_iter()
    .map(Into::into)
    .collect()
}
