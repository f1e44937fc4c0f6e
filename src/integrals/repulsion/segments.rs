//! Shells cut into the smallest pieces that share no primitive.
//!
//! Sets of the correlation-consistent kind state several functions as columns over one list of exponents
//! even where each column has exponents of its own, such as three uncontracted d shells. To contract such
//! columns together is to multiply by zeros, and unlike pieces fill fewer lanes; as shells of their own
//! they cost no primitive more.

use crate::basis::{Basis, Contraction, Shell};

/// The same functions in the same order, in shells whose contractions hang together by their primitives.
pub(super) fn segmented(basis: &Basis) -> Basis {
    let shells = basis.shells().iter().flat_map(pieces).collect();
    Basis::new(shells, basis.centres().to_vec())
}

/// The shell cut wherever no primitive is used on both sides of the cut.
fn pieces(shell: &Shell) -> Vec<Shell> {
    let uses = |k: usize, contractions: &[Contraction]| {
        contractions
            .iter()
            .any(|c| c.coefficients[k].abs() > 0.0 || c.coefficients[k].is_nan())
    };
    let mut ends: Vec<usize> = (1..shell.contractions.len())
        .filter(|&cut| {
            let (before, after) = shell.contractions.split_at(cut);
            (0..shell.exponents.len()).all(|k| !(uses(k, before) && uses(k, after)))
        })
        .collect();
    ends.push(shell.contractions.len());
    let mut start = 0;
    ends.into_iter()
        .map(|end| {
            let part = &shell.contractions[start..end];
            start = end;
            let kept: Vec<usize> = (0..shell.exponents.len())
                .filter(|&k| uses(k, part))
                .collect();
            Shell {
                exponents: kept.iter().map(|&k| shell.exponents[k]).collect(),
                contractions: part
                    .iter()
                    .map(|c| Contraction {
                        l: c.l,
                        coefficients: kept.iter().map(|&k| c.coefficients[k]).collect(),
                    })
                    .collect(),
                ..shell.clone()
            }
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::basis::FunctionKind;
    use nalgebra::Vector3;

    fn shell(columns: &[&[f64]]) -> Shell {
        Shell {
            atom: 0,
            exponents: vec![9.0, 3.0, 1.0, 0.3],
            contractions: columns
                .iter()
                .map(|c| Contraction {
                    l: 2,
                    coefficients: c.to_vec(),
                })
                .collect(),
            kind: FunctionKind::Spherical,
        }
    }

    #[test]
    fn columns_that_share_nothing_part() {
        let whole = shell(&[
            &[0.2, 0.7, 0.0, 0.0],
            &[0.0, 0.5, 0.1, 0.0],
            &[0.0, 0.0, 0.0, 1.0],
        ]);
        let basis = Basis::new(vec![whole], vec![Vector3::zeros()]);
        let cut = segmented(&basis);
        assert_eq!(cut.len(), basis.len());
        let [first, second] = cut.shells() else {
            panic!("{:?}", cut.shells());
        };
        assert_eq!(first.exponents, [9.0, 3.0, 1.0]);
        assert_eq!(first.contractions[1].coefficients, [0.0, 0.5, 0.1]);
        assert_eq!(second.exponents, [0.3]);
        assert_eq!(second.contractions.len(), 1);
    }

    #[test]
    fn columns_that_share_a_primitive_stay_together() {
        let whole = shell(&[&[0.2, 0.7, 0.1, 0.4], &[0.0, 0.0, 0.0, 1.0]]);
        let basis = Basis::new(vec![whole], vec![Vector3::zeros()]);
        assert_eq!(segmented(&basis), basis);
    }
}
