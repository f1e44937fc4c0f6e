//! Which atoms are bonded, and what hangs together when a bond or an atom is taken out.

use super::Molecule;
use crate::units::ANGSTROM_PER_BOHR;

/// Two atoms count as bonded when nearer than this times the sum of their covalent radii.
///
/// Common practice: bonded pairs lie at 0.9–1.1 times the sum of the radii of B. Cordero et al., Dalton Trans. 2008,
/// 2832, and the nearest pairs that are not bonded (the hydrogen atoms of one methyl group, hydrogen bonds) beyond
/// 1.8 times it, so that anything from 1.2 to 1.4 draws the same bonds in an ordinary molecule.
pub const BONDED_WITHIN: f64 = 1.3;

/// The bonds of a molecule, found from distances. Ghost atoms are treated like the atoms they stand for, so that a
/// counterpoise calculation moves the same atoms as the one it corrects.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Connectivity {
    neighbours: Vec<Vec<usize>>,
}

/// What is taken out of a molecule before looking at what hangs together.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Cut {
    /// nothing
    Nothing,
    /// the bond between two atoms (no difference if there is none)
    Bond(usize, usize),
    /// an atom with all its bonds
    Atom(usize),
}

impl Cut {
    fn allows(self, from: usize, to: usize) -> bool {
        match self {
            Self::Nothing => true,
            Self::Bond(i, j) => (from, to) != (i, j) && (from, to) != (j, i),
            Self::Atom(i) => from != i && to != i,
        }
    }
}

impl Connectivity {
    /// Bonds between atoms nearer than [`BONDED_WITHIN`] × the sum of their covalent radii.
    #[must_use]
    pub fn of(molecule: &Molecule) -> Self {
        let radius_bohr =
            |i: usize| molecule.atoms[i].element.covalent_radius_angstrom() / ANGSTROM_PER_BOHR;
        let atoms = molecule.atoms.len();
        let mut bonds = Vec::new();
        for j in 0..atoms {
            for i in 0..j {
                let distance = (molecule.positions[j] - molecule.positions[i]).norm();
                if distance < BONDED_WITHIN * (radius_bohr(i) + radius_bohr(j)) {
                    bonds.push([i, j]);
                }
            }
        }
        Self::from_bonds(atoms, &bonds)
    }

    /// Given bonds between `atoms` atoms; pairs that name an atom that does not exist, or one atom twice, are left out.
    #[must_use]
    pub fn from_bonds(atoms: usize, bonds: &[[usize; 2]]) -> Self {
        let mut neighbours = vec![Vec::new(); atoms];
        for &[i, j] in bonds {
            if i != j && i < atoms && j < atoms {
                neighbours[i].push(j);
                neighbours[j].push(i);
            }
        }
        for list in &mut neighbours {
            list.sort_unstable();
            list.dedup();
        }
        Self { neighbours }
    }

    /// How many atoms there are.
    #[must_use]
    pub fn atoms(&self) -> usize {
        self.neighbours.len()
    }

    /// Whether two atoms are bonded.
    #[must_use]
    pub fn bonded(&self, i: usize, j: usize) -> bool {
        self.neighbours(i).binary_search(&j).is_ok()
    }

    /// Atoms bonded to one atom, ascending; none for an atom that does not exist.
    #[must_use]
    pub fn neighbours(&self, atom: usize) -> &[usize] {
        self.neighbours.get(atom).map_or(&[], Vec::as_slice)
    }

    /// All bonds as pairs i < j, ascending.
    #[must_use]
    pub fn bonds(&self) -> Vec<[usize; 2]> {
        self.neighbours
            .iter()
            .enumerate()
            .flat_map(|(i, list)| list.iter().filter(move |&&j| j > i).map(move |&j| [i, j]))
            .collect()
    }

    /// The atoms that hang together with `atom` after a cut, `atom` among them, ascending.
    #[must_use]
    pub fn component(&self, atom: usize, cut: Cut) -> Vec<usize> {
        let steps = self.steps_from(atom, cut);
        (0..self.atoms()).filter(|&i| steps[i].is_some()).collect()
    }

    /// All components, each ascending, in the order of their first atoms.
    #[must_use]
    pub fn components(&self) -> Vec<Vec<usize>> {
        let mut components: Vec<Vec<usize>> = Vec::new();
        for atom in 0..self.atoms() {
            if !components.iter().any(|c| c.binary_search(&atom).is_ok()) {
                components.push(self.component(atom, Cut::Nothing));
            }
        }
        components
    }

    /// A shortest way from one atom to another along bonds after a cut, both ends among it; none if they do not hang
    /// together.
    #[must_use]
    pub fn path(&self, from: usize, to: usize, cut: Cut) -> Option<Vec<usize>> {
        let steps = self.steps_from(from, cut);
        let mut path = vec![to];
        let mut atom = to;
        while atom != from {
            atom = steps.get(atom).copied().flatten()?;
            path.push(atom);
        }
        path.reverse();
        Some(path)
    }

    /// For each atom reached from `start`, breadth first, the atom it was reached from (`start` from itself).
    fn steps_from(&self, start: usize, cut: Cut) -> Vec<Option<usize>> {
        let mut reached_from = vec![None; self.atoms()];
        if start >= self.atoms() {
            return reached_from;
        }
        reached_from[start] = Some(start);
        let mut queue = vec![start];
        let mut next = 0;
        while next < queue.len() {
            let atom = queue[next];
            next += 1;
            for &neighbour in self.neighbours(atom) {
                if reached_from[neighbour].is_none() && cut.allows(atom, neighbour) {
                    reached_from[neighbour] = Some(atom);
                    queue.push(neighbour);
                }
            }
        }
        reached_from
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::molecule::test_molecules::{ethane, peroxide, ring, water};
    use proptest::prelude::*;

    #[test]
    fn ordinary_molecules_have_their_bonds() {
        assert_eq!(Connectivity::of(&water()).bonds(), [[0, 1], [0, 2]]);
        assert_eq!(
            Connectivity::of(&peroxide()).bonds(),
            [[0, 1], [0, 2], [1, 3]]
        );
        let ethane = Connectivity::of(&ethane());
        assert_eq!(ethane.bonds().len(), 7);
        assert_eq!(ethane.neighbours(0), [1, 2, 3, 4]);
        assert!(ethane.bonded(5, 1) && !ethane.bonded(5, 0) && !ethane.bonded(5, 6));
        let cyclopropane = Connectivity::of(&ring(3, 1.51, 2));
        assert_eq!(cyclopropane.bonds().len(), 9);
    }

    #[test]
    fn ghosts_are_bonded_like_atoms() {
        let mut molecule = water();
        molecule.atoms[1].ghost = true;
        assert!(Connectivity::of(&molecule).bonded(0, 1));
    }

    #[test]
    fn paths_avoid_what_is_taken_out() {
        let ring = Connectivity::from_bonds(5, &[[0, 1], [1, 2], [2, 3], [3, 0], [3, 4]]);
        assert_eq!(ring.path(0, 1, Cut::Nothing), Some(vec![0, 1]));
        assert_eq!(ring.path(0, 1, Cut::Bond(1, 0)), Some(vec![0, 3, 2, 1]));
        assert_eq!(ring.path(0, 4, Cut::Atom(3)), None);
        assert_eq!(ring.component(4, Cut::Bond(3, 4)), [4]);
        assert_eq!(ring.component(0, Cut::Atom(3)), [0, 1, 2]);
        assert_eq!(ring.path(0, 9, Cut::Nothing), None);
        assert_eq!(ring.path(9, 0, Cut::Nothing), None);
    }

    proptest! {
        #[test]
        fn components_part_the_atoms(pairs in prop::collection::vec([0..9_usize, 0..9_usize], 0..12)) {
            let bonds: Vec<[usize; 2]> = pairs.into_iter().map(|pair: [usize; 2]| pair).collect();
            let connectivity = Connectivity::from_bonds(9, &bonds);
            let components = connectivity.components();
            let mut all: Vec<usize> = components.iter().flatten().copied().collect();
            all.sort_unstable();
            prop_assert_eq!(all, (0..9).collect::<Vec<_>>());
            for (place, component) in components.iter().enumerate() {
                for &i in component {
                    for &j in connectivity.neighbours(i) {
                        prop_assert!(components[place].contains(&j));
                    }
                    prop_assert!(connectivity.path(component[0], i, Cut::Nothing).is_some());
                }
            }
        }
    }
}
