//! Molecules and closed-form force fields that the tests of this module share.

use super::coordinates::InternalSet;
use super::primitive::Primitive;
use crate::molecule::internal::Coordinate;
use crate::molecule::{Molecule, zmatrix};
use crate::surface::model::{Form, ModelSurface};
use crate::units::LengthUnit;

/// Idealised geometries; the force fields below have their minima exactly there.
pub(super) const ZMATRICES: &[(&str, &str)] = &[
    ("water", "O\nH1 O 0.958\nH2 O 0.958 H1 104.5"),
    ("hydrogen cyanide", "C\nN C 1.15\nH C 1.06 N 180"),
    ("carbon dioxide", "C\nO1 C 1.16\nO2 C 1.16 O1 180"),
    (
        "ammonia",
        "N\nH1 N 1.01\nH2 N 1.01 H1 107\nH3 N 1.01 H1 107 H2 114",
    ),
    (
        "formaldehyde",
        "C\nO C 1.20\nH1 C 1.10 O 121.5\nH2 C 1.10 O 121.5 H1 180",
    ),
    (
        "peroxide",
        "O1\nO2 O1 1.45\nH1 O1 0.97 O2 100\nH2 O2 0.97 O1 100 H1 115",
    ),
    (
        "ethyne",
        "C1\nC2 C1 1.20\nH1 C1 1.06 C2 180\nH2 C2 1.06 C1 180 H1 0",
    ),
    (
        "methane",
        "C\nH1 C 1.09\nH2 C 1.09 H1 109.47\nH3 C 1.09 H1 109.47 H2 120\nH4 C 1.09 H1 109.47 H2 -120",
    ),
    (
        "fluoromethane",
        "C\nF C 1.38\nH1 C 1.09 F 109\nH2 C 1.09 F 109 H1 120\nH3 C 1.09 F 109 H1 -120",
    ),
    (
        "formic acid",
        "C\nO1 C 1.20\nO2 C 1.34 O1 125\nH1 C 1.09 O1 124 O2 180\nH2 O2 0.97 C 107 O1 0",
    ),
    (
        "ethene",
        "C1\nC2 C1 1.33\nH1 C1 1.08 C2 121.5\nH2 C1 1.08 C2 121.5 H1 180\nH3 C2 1.08 C1 121.5 H1 0\nH4 C2 1.08 C1 121.5 H1 180",
    ),
    (
        "hydrazine",
        "N1\nN2 N1 1.45\nH1 N1 1.02 N2 108\nH2 N1 1.02 N2 108 H1 110\nH3 N2 1.02 N1 108 H1 90\nH4 N2 1.02 N1 108 H1 -160",
    ),
    (
        "methanol",
        "C\nO C 1.42\nH1 O 0.96 C 108\nH2 C 1.09 O 107 H1 180\nH3 C 1.09 O 112 H1 61\nH4 C 1.09 O 112 H1 -61",
    ),
    (
        "acetonitrile",
        "C1\nC2 C1 1.46\nN C2 1.16 C1 180\nH1 C1 1.09 C2 110 N 0\nH2 C1 1.09 C2 110 H1 120\nH3 C1 1.09 C2 110 H1 -120",
    ),
    (
        "formamide",
        "C\nO C 1.21\nN C 1.36 O 125\nH1 C 1.10 O 122 N 180\nH2 N 1.00 C 119 O 0\nH3 N 1.00 C 121 O 180",
    ),
    (
        "methylamine",
        "C\nN C 1.47\nH1 N 1.01 C 110\nH2 N 1.01 C 110 H1 116\nH3 C 1.09 N 114 H1 -58\nH4 C 1.09 N 109 H1 62\nH5 C 1.09 N 109 H1 180",
    ),
    (
        "propyne",
        "C1\nC2 C1 1.46\nC3 C2 1.20 C1 180\nH1 C1 1.09 C2 110.5 C3 0\nH2 C1 1.09 C2 110.5 H1 120\nH3 C1 1.09 C2 110.5 H1 -120\nH4 C3 1.06 C2 180 C1 0",
    ),
    (
        "allene",
        "C1\nC2 C1 1.31\nC3 C1 1.31 C2 180\nH1 C2 1.08 C1 121 C3 0\nH2 C2 1.08 C1 121 H1 180\nH3 C3 1.08 C1 121 H1 90\nH4 C3 1.08 C1 121 H1 -90",
    ),
    (
        "ethane",
        "C1\nC2 C1 1.53\nH1 C1 1.09 C2 111\nH2 C1 1.09 C2 111 H1 120\nH3 C1 1.09 C2 111 H1 -120\nH4 C2 1.09 C1 111 H1 180\nH5 C2 1.09 C1 111 H1 60\nH6 C2 1.09 C1 111 H1 -60",
    ),
    (
        "acetaldehyde",
        "C1\nC2 C1 1.50\nO C1 1.21 C2 124\nH1 C1 1.11 C2 115 O 180\nH2 C2 1.09 C1 110.5 O 0\nH3 C2 1.09 C1 110 O 121\nH4 C2 1.09 C1 110 O -121",
    ),
    (
        "dimethyl ether",
        "O\nC1 O 1.41\nC2 O 1.41 C1 112\nH1 C1 1.09 O 107 C2 180\nH2 C1 1.09 O 111 C2 60\nH3 C1 1.09 O 111 C2 -60\nH4 C2 1.09 O 107 C1 180\nH5 C2 1.09 O 111 C1 60\nH6 C2 1.09 O 111 C1 -60",
    ),
    (
        "ethanol",
        "C1\nC2 C1 1.52\nO C2 1.42 C1 108\nH1 O 0.96 C2 108 C1 180\nH2 C2 1.09 C1 110 O 120\nH3 C2 1.09 C1 110 O -120\nH4 C1 1.09 C2 110.5 O 180\nH5 C1 1.09 C2 110.5 O 60\nH6 C1 1.09 C2 110.5 O -60",
    ),
    (
        "propene",
        "C1\nC2 C1 1.33\nC3 C2 1.50 C1 125\nH1 C1 1.08 C2 121.5 C3 0\nH2 C1 1.08 C2 121.5 C3 180\nH3 C2 1.08 C1 119 C3 180\nH4 C3 1.09 C2 111 C1 0\nH5 C3 1.09 C2 111 C1 121\nH6 C3 1.09 C2 111 C1 -121",
    ),
    (
        "propane",
        "C1\nC2 C1 1.53\nC3 C1 1.53 C2 112.5\nH1 C1 1.09 C2 109.5 C3 121\nH2 C1 1.09 C2 109.5 C3 -121\nH3 C2 1.09 C1 111 C3 180\nH4 C2 1.09 C1 111 C3 60\nH5 C2 1.09 C1 111 C3 -60\nH6 C3 1.09 C1 111 C2 180\nH7 C3 1.09 C1 111 C2 60\nH8 C3 1.09 C1 111 C2 -60",
    ),
    (
        "benzene",
        "C1\nC2 C1 1.39\nC3 C2 1.39 C1 120\nC4 C3 1.39 C2 120 C1 0\nC5 C4 1.39 C3 120 C2 0\nC6 C5 1.39 C4 120 C3 0\nH1 C1 1.08 C2 120 C3 180\nH2 C2 1.08 C3 120 C4 180\nH3 C3 1.08 C4 120 C5 180\nH4 C4 1.08 C5 120 C6 180\nH5 C5 1.08 C6 120 C1 180\nH6 C6 1.08 C1 120 C2 180",
    ),
    (
        "cyclopropane",
        "C1\nC2 C1 1.51\nC3 C1 1.51 C2 60\nH1 C1 1.08 C2 118 C3 108\nH2 C1 1.08 C2 118 C3 -108\nH3 C2 1.08 C1 118 C3 108\nH4 C2 1.08 C1 118 C3 -108\nH5 C3 1.08 C1 118 C2 108\nH6 C3 1.08 C1 118 C2 -108",
    ),
];

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

pub(super) fn named(name: &str) -> Molecule {
    let (_, text) = ZMATRICES
        .iter()
        .find(|(n, _)| *n == name)
        .expect("a molecule of the list");
    from_zmatrix(text)
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
