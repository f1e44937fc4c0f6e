//! Molecules that the tests of this module share.

use super::{Atom, Molecule, cartesian, zmatrix};
use crate::units::LengthUnit;
use nalgebra::Vector3;
use proptest::prelude::*;

pub(super) fn from_zmatrix(text: &str) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    neutral(
        rows.atoms(),
        rows.positions(LengthUnit::Angstrom)
            .expect("a defined geometry"),
    )
}

pub(super) fn from_cartesian(text: &str) -> Molecule {
    let entries = cartesian::parse_cartesian(text).expect("a valid block");
    neutral(
        cartesian::atoms_of(&entries),
        cartesian::positions_of(&entries, LengthUnit::Angstrom),
    )
}

fn neutral(atoms: Vec<Atom>, positions: Vec<Vector3<f64>>) -> Molecule {
    Molecule {
        atoms,
        positions,
        charge: 0,
        multiplicity: 1,
    }
}

pub(super) fn indices<const N: usize>(molecule: &Molecule, labels: [&str; N]) -> [usize; N] {
    labels.map(|label| molecule.index_of(label).expect("a label of the molecule"))
}

pub(super) fn labels<'a>(molecule: &'a Molecule, atoms: &[usize]) -> Vec<&'a str> {
    atoms
        .iter()
        .map(|&i| molecule.atoms[i].label.as_str())
        .collect()
}

pub(super) fn water() -> Molecule {
    from_zmatrix("O\nH1 O 0.958\nH2 O 0.958 H1 104.5")
}

pub(super) fn peroxide() -> Molecule {
    from_zmatrix("O1\nO2 O1 1.45\nH1 O1 0.97 O2 100\nH2 O2 0.97 O1 100 H1 115")
}

pub(super) fn ethane() -> Molecule {
    from_zmatrix(
        "C1\nC2 C1 1.53\nH1 C1 1.09 C2 111\nH2 C1 1.09 C2 111 H1 120\nH3 C1 1.09 C2 111 H1 -120\n\
         H4 C2 1.09 C1 111 H1 180\nH5 C2 1.09 C1 111 H1 60\nH6 C2 1.09 C1 111 H1 -60",
    )
}

pub(super) fn hydrogen_cyanide() -> Molecule {
    from_zmatrix("H\nC H 1.066\nN C 1.153 H 180")
}

/// A flat ring of `carbons` CH or CH₂ groups.
pub(super) fn ring(carbons: usize, bond: f64, hydrogens_per_carbon: usize) -> Molecule {
    let turn = std::f64::consts::TAU / carbons as f64;
    let radius = bond / (2.0 * (0.5 * turn).sin());
    let mut text = String::new();
    for i in 0..carbons {
        let (sine, cosine) = (turn * i as f64).sin_cos();
        text += &format!("C{} {} {} 0\n", i + 1, radius * cosine, radius * sine);
        let out = radius
            + if hydrogens_per_carbon == 1 {
                1.08
            } else {
                0.63
            };
        let heights: &[f64] = if hydrogens_per_carbon == 1 {
            &[0.0]
        } else {
            &[0.91, -0.91]
        };
        for height in heights {
            text += &format!("H {} {} {height}\n", out * cosine, out * sine);
        }
    }
    from_cartesian(&text)
}

/// A z-matrix whose first references make a random tree: parent of each atom, length, angle, dihedral.
#[derive(Debug, Clone)]
pub(super) struct Tree {
    pub(super) molecule: Molecule,
    pub(super) text: String,
    /// The atom each atom after the first hangs on.
    pub(super) parents: Vec<usize>,
}

/// Random trees of `atoms` carbon atoms with angles in `angles` degree.
pub(super) fn trees(
    atoms: std::ops::Range<usize>,
    angles: std::ops::Range<f64>,
) -> impl Strategy<Value = Tree> {
    let row = (
        any::<[prop::sample::Index; 3]>(),
        0.7..2.5,
        angles,
        -180.0..180.0,
    );
    prop::collection::vec(row, atoms).prop_filter_map("references on one line", |rows| {
        let mut text = String::from("C0\n");
        let mut parents = Vec::new();
        for (place, (picks, length, angle, dihedral)) in rows.iter().enumerate() {
            let mut free: Vec<usize> = (0..=place).collect();
            let references: Vec<usize> = picks
                .iter()
                .take(place + 1)
                .map(|pick| free.swap_remove(pick.index(free.len())))
                .collect();
            parents.push(references[0]);
            text += &format!("C{}", place + 1);
            for (reference, value) in references.iter().zip([length, angle, dihedral]) {
                text += &format!(" C{reference} {value}");
            }
            text += "\n";
        }
        let parsed = zmatrix::parse(&text).expect("valid by construction");
        let positions = parsed.positions(LengthUnit::Angstrom).ok()?;
        let apart = (0..positions.len())
            .all(|j| (0..j).all(|i| (positions[i] - positions[j]).norm() > 0.3));
        apart.then(|| Tree {
            molecule: neutral(parsed.atoms(), positions),
            text,
            parents,
        })
    })
}

/// Random positions of `atoms` atoms (bohr), none nearer than half a bohr.
pub(super) fn clouds(atoms: usize) -> impl Strategy<Value = Vec<Vector3<f64>>> {
    prop::collection::vec(prop::array::uniform3(-3.0..3.0_f64), atoms).prop_filter_map(
        "atoms too near",
        |points| {
            let points: Vec<Vector3<f64>> = points.into_iter().map(Vector3::from).collect();
            let apart =
                (0..points.len()).all(|j| (0..j).all(|i| (points[i] - points[j]).norm() > 0.5));
            apart.then_some(points)
        },
    )
}
