//! Molecules and closed-form force fields that the tests of this module share; the fields have their minima exactly at the
//! molecules' geometries.

use super::coordinates::InternalSet;
use super::primitive::Primitive;
use crate::molecule::internal::Coordinate;
use crate::molecule::{Molecule, zmatrix};
use crate::surface::model::{Form, ModelSurface};
use crate::units::LengthUnit;

/// Idealised geometries; the force fields below have their minima exactly there.
/// Names and z-matrices, in the order of the file.
pub(super) fn zmatrices() -> Vec<(&'static str, &'static str)> {
    include_str!("../../tests/data/molecules.txt")
        .split("\n[")
        .skip(1)
        .map(|entry| entry.split_once("]\n").expect("a name in brackets"))
        .collect()
}

pub(super) fn from_zmatrix(text: &str) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    Molecule {
        atoms: rows.atoms(),
        positions: rows
            .positions(LengthUnit::Angstrom)
            .expect("a defined geometry"),
        charge: 0,
        multiplicity: 1,
    }
}

pub(super) fn text_of(name: &str) -> &'static str {
    let found = zmatrices().into_iter().find(|(n, _)| *n == name);
    found.expect("a molecule of the list").1
}

pub(super) fn named(name: &str) -> Molecule {
    from_zmatrix(text_of(name))
}

/// Numbers between −1 and 1 that are the same everywhere (Knuth's MMIX generator).
pub(super) struct Random(pub(super) u64);

impl Random {
    pub(super) fn next(&mut self) -> f64 {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1_u64 << 52) as f64 - 1.0
    }

    /// ± a number between the two.
    pub(super) fn between(&mut self, from: f64, to: f64) -> f64 {
        let x = self.next();
        x.signum() * (from + x.abs() * (to - from))
    }
}

/// A force field whose minimum, at energy −1, is the molecule's geometry: Morse bonds, harmonic angles, cosines along
/// dihedrals; constants scattered by ±40 % so that no model Hessian fits.
pub(super) fn field(molecule: &Molecule) -> ModelSurface {
    let set = InternalSet::of(molecule, &[]);
    let mut random = Random(7);
    let terms = set
        .primitives
        .iter()
        .filter_map(|primitive| {
            let scatter = 1.0 + 0.4 * random.next();
            let equilibrium = primitive.value(&molecule.positions);
            match *primitive {
                Primitive::Internal(bond @ Coordinate::Bond(_)) => Some((
                    bond,
                    Form::Morse {
                        depth: 0.17 * scatter,
                        steepness: 1.15,
                        equilibrium,
                    },
                )),
                Primitive::Internal(angle @ Coordinate::Angle(_)) => Some((
                    angle,
                    Form::Harmonic {
                        force_constant: 0.15 * scatter,
                        equilibrium,
                    },
                )),
                Primitive::LinearBend { atoms, .. } => Some((
                    Coordinate::Angle(atoms),
                    Form::Harmonic {
                        force_constant: 0.05 * scatter,
                        equilibrium: std::f64::consts::PI,
                    },
                )),
                Primitive::Internal(dihedral @ Coordinate::Dihedral(_)) => Some((
                    dihedral,
                    Form::Cosine {
                        barrier: 0.004 * scatter,
                        fold: 1,
                        equilibrium,
                    },
                )),
                Primitive::Improper(atoms) => Some((
                    Coordinate::Dihedral(atoms),
                    Form::Cosine {
                        barrier: 0.03 * scatter,
                        fold: 1,
                        equilibrium,
                    },
                )),
                Primitive::Position { .. } => None,
            }
        })
        .collect();
    ModelSurface::simple(-1.0, terms)
}

/// The z-matrix with every bond off by 0.1–0.2 Å and every angle by 5–15°.
pub(super) fn distorted(text: &str, seed: u64) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    let mut random = Random(seed);
    let mut distorted = String::new();
    for row in rows.rows() {
        distorted.push_str(&row.label);
        for (place, reference) in row.references.iter().enumerate() {
            let value = reference.value
                + match place {
                    0 => random.between(0.1, 0.2),
                    1 => random.between(5.0, 15.0),
                    _ => 0.0,
                };
            let value = if place == 1 && value > 180.0 {
                360.0 - value
            } else {
                value
            };
            let to = &rows.rows()[reference.row].label;
            distorted.push_str(&format!(" {to} {value}"));
        }
        distorted.push('\n');
    }
    from_zmatrix(&distorted)
}
