//! Swept coordinates and the geometries they lead to.

use crate::molecule::Molecule;
use crate::molecule::motion::{Motion, MotionError, set_all};
use nalgebra::{DMatrix, DVector, Vector3};

/// How the values of a sweep were written, in the spec's unit or degrees.
#[derive(Debug, Clone, PartialEq)]
pub enum SweepValues {
    /// from, from + step, …, `to` included
    Step {
        /// first value
        from: f64,
        /// last value
        to: f64,
        /// difference of neighbours
        step: f64,
    },
    /// evenly spaced, both ends included
    Points {
        /// first value
        from: f64,
        /// last value
        to: f64,
        /// number of values
        points: usize,
    },
    /// one by one
    List(Vec<f64>),
}

/// One swept internal coordinate and its values.
#[derive(Debug, Clone, PartialEq)]
pub struct Sweep {
    /// The coordinate and the atoms that move.
    pub motion: Motion,
    /// Coordinates of the same kind moved in step, to the same value.
    pub also: Vec<Motion>,
    /// Values in ångström or degree, ascending, at least one.
    pub values: Vec<f64>,
    /// The values as they were written.
    pub written: SweepValues,
}

impl Sweep {
    /// Number of the value nearest the coordinate's value at `positions` (bohr).
    #[must_use]
    pub fn nearest(&self, positions: &[Vector3<f64>]) -> usize {
        let coordinate = &self.motion.coordinate;
        let here = coordinate.value(positions);
        let away = |value: f64| {
            coordinate
                .difference(coordinate.from_reported(value), here)
                .abs()
        };
        (0..self.values.len())
            .min_by(|&a, &b| away(self.values[a]).total_cmp(&away(self.values[b])))
            .unwrap_or(0)
    }

    /// `bond`, `angle` or `dihedral`.
    #[must_use]
    pub fn kind(&self) -> &'static str {
        self.motion.coordinate.kind_word()
    }

    /// `angstrom` or `degree`.
    #[must_use]
    pub fn unit(&self) -> &'static str {
        self.motion.coordinate.unit_word()
    }

    /// The coordinate itself and those moved in step.
    pub fn motions(&self) -> impl Iterator<Item = &Motion> {
        std::iter::once(&self.motion).chain(&self.also)
    }

    /// Labels of the coordinate's atoms.
    #[must_use]
    pub fn labels<'m>(&self, molecule: &'m Molecule) -> Vec<&'m str> {
        labels(self.motion.coordinate.atoms(), molecule)
    }

    /// Name of the column of its values, such as `bond_O_H1_angstrom`.
    #[must_use]
    pub fn column_name(&self, molecule: &Molecule) -> String {
        format!(
            "{}_{}_{}",
            self.kind(),
            self.labels(molecule).join("_"),
            self.unit()
        )
    }

    /// Text for an axis, such as `O–H1 = O–H2 / Å`.
    #[must_use]
    pub fn axis_label(&self, molecule: &Molecule) -> String {
        let names: Vec<String> = self
            .motions()
            .map(|m| labels(m.coordinate.atoms(), molecule).join("–"))
            .collect();
        let unit = if self.unit() == "degree" { "°" } else { "Å" };
        format!("{} / {unit}", names.join(" = "))
    }
}

/// Labels of some atoms.
pub(crate) fn labels<'m>(atoms: &[usize], molecule: &'m Molecule) -> Vec<&'m str> {
    atoms
        .iter()
        .map(|&i| molecule.atoms.get(i).map_or("?", |a| a.label.as_str()))
        .collect()
}

/// Positions (bohr) at values of the swept coordinates (ångström or degree, one per sweep): the input geometry with
/// every swept coordinate, and those tied to it, set by rigid motions. Atoms that no sweep moves keep
/// their positions bit for bit; without sweeps the input geometry itself.
///
/// # Errors
/// [`MotionError`] if the coordinates cannot take these values together.
pub fn positions_at(
    input: &[Vector3<f64>],
    sweeps: &[Sweep],
    values: &[f64],
) -> Result<Vec<Vector3<f64>>, MotionError> {
    let mut positions = input.to_vec();
    let targets: Vec<(Motion, f64)> = sweeps
        .iter()
        .zip(values)
        .flat_map(|(sweep, &value)| {
            sweep
                .motions()
                .map(move |m| (m.clone(), m.coordinate.from_reported(value)))
        })
        .collect();
    set_all(&targets, &mut positions)?;
    Ok(positions)
}

/// Displacements of all atoms (bohr) per unit of each sweep (bohr or radian) while the other sweeps stay, one list per
/// sweep: dE/dq is their scalar product with the Cartesian gradient, also on a relaxed scan, where the coordinates
/// that are not swept exert no force.
///
/// The rigid motions of the sweeps and of what is tied to them are combined so that each swept coordinate changes as
/// it should, whatever the motions do to each other's coordinates.
#[must_use]
pub fn tangents(sweeps: &[Sweep], positions: &[Vector3<f64>]) -> Vec<Vec<Vector3<f64>>> {
    let motions: Vec<(usize, &Motion)> = sweeps
        .iter()
        .enumerate()
        .flat_map(|(k, sweep)| sweep.motions().map(move |m| (k, m)))
        .collect();
    let displacements: Vec<Vec<Vector3<f64>>> = motions
        .iter()
        .map(|(_, m)| m.displacement(positions))
        .collect();
    let order = motions.len();
    // Change of coordinate i in motion j. A motion changes its own coordinate by definition, also where the coordinate
    // has no derivative (a straight angle).
    let changes = DMatrix::from_fn(order, order, |i, j| {
        if i == j {
            return 1.0;
        }
        let change: f64 = motions[i]
            .1
            .coordinate
            .derivative(positions)
            .iter()
            .map(|(atom, d)| d.dot(&displacements[j][*atom]))
            .sum();
        if change.is_finite() { change } else { 0.0 }
    });
    let solver = changes.lu();
    (0..sweeps.len())
        .map(|k| {
            let wanted = DVector::from_fn(order, |i, _| if motions[i].0 == k { 1.0 } else { 0.0 });
            let shares = solver.solve(&wanted).unwrap_or(wanted);
            let mut tangent = vec![Vector3::zeros(); positions.len()];
            for (share, displacement) in shares.iter().zip(&displacements) {
                for (sum, d) in tangent.iter_mut().zip(displacement) {
                    *sum += d * *share;
                }
            }
            tangent
        })
        .collect()
}

/// dE/dq of every sweep, hartree per bohr or radian, from the Cartesian gradient (hartree/bohr).
#[must_use]
pub fn slopes(sweeps: &[Sweep], positions: &[Vector3<f64>], gradient: &[[f64; 3]]) -> Vec<f64> {
    tangents(sweeps, positions)
        .iter()
        .map(|tangent| {
            tangent
                .iter()
                .zip(gradient)
                .map(|(t, g)| t.dot(&Vector3::from(*g)))
                .sum()
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::molecule::internal::Coordinate;

    /// Water with its bonds tied, and the angle as a second sweep.
    fn sweeps() -> (Vec<Vector3<f64>>, Vec<Sweep>) {
        let positions = vec![
            Vector3::new(0.1, -0.2, 0.3),
            Vector3::new(1.9, 0.1, 0.2),
            Vector3::new(-0.4, 1.5, 0.6),
        ];
        let motion = |coordinate, moves: &[usize]| Motion {
            coordinate,
            moves: moves.to_vec(),
        };
        let sweep = |motion, also| Sweep {
            motion,
            also,
            values: vec![1.0],
            written: SweepValues::List(vec![1.0]),
        };
        let stretch = sweep(
            motion(Coordinate::Bond([0, 1]), &[1]),
            vec![motion(Coordinate::Bond([0, 2]), &[2])],
        );
        let bend = sweep(motion(Coordinate::Angle([1, 0, 2]), &[2]), Vec::new());
        (positions, vec![stretch, bend])
    }

    #[test]
    fn tangents_are_the_derivatives_of_the_path() {
        let (input, sweeps) = sweeps();
        let at = |values: [f64; 2]| positions_at(&input, &sweeps, &values).expect("a geometry");
        let here = [0.97, 101.0];
        let positions = at(here);
        let found = tangents(&sweeps, &positions);
        for k in 0..2 {
            let h = 1e-4;
            let mut values = [here, here];
            let step = sweeps[k].motion.coordinate.to_reported(h);
            values[0][k] += step;
            values[1][k] -= step;
            let (above, below) = (at(values[0]), at(values[1]));
            for atom in 0..3 {
                let exact = (above[atom] - below[atom]) / (2.0 * h);
                assert!((found[k][atom] - exact).norm() < 1e-7, "{k} {atom}");
            }
        }
    }

    #[test]
    fn slopes_follow_the_energy() {
        let (input, sweeps) = sweeps();
        // The H–H distance as an energy: it depends on all that is swept.
        let energy = |p: &[Vector3<f64>]| (p[1] - p[2]).norm();
        let here = [0.97, 101.0];
        let positions = positions_at(&input, &sweeps, &here).expect("a geometry");
        let along = (positions[1] - positions[2]).normalize();
        let gradient = [[0.0; 3], along.into(), (-along).into()];
        for (k, slope) in slopes(&sweeps, &positions, &gradient).iter().enumerate() {
            let at = |h: f64| {
                let mut values = here;
                values[k] += sweeps[k].motion.coordinate.to_reported(h);
                energy(&positions_at(&input, &sweeps, &values).expect("a geometry"))
            };
            let exact = (at(1e-4) - at(-1e-4)) / 2e-4;
            assert!((slope - exact).abs() < 1e-7, "{slope} {exact}");
        }
    }
}
