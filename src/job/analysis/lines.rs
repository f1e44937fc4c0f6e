//! Curves to be fitted: the whole of a sweep, or its pieces between changes of the electronic state.

use super::super::path::is_before_straight;
use super::Material;
use crate::fit::ExtremaSettings;
use crate::scan::FindingKind;

/// Points that belong on one smooth curve.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Line {
    /// Which sweep.
    pub(super) sweep: usize,
    /// Bohr or radian, rising.
    pub(super) x: Vec<f64>,
    /// Hartree.
    pub(super) energies: Vec<f64>,
    /// How its extrema are told.
    pub(super) settings: ExtremaSettings,
    /// Values of all sweeps along it, ångström or degree; the swept one's entry is of no meaning.
    pub(super) others: Vec<f64>,
    /// Whether its mirror image beyond a straight angle has been added.
    pub(super) continued: bool,
}

impl Line {
    /// The line with its mirror image, where it ends at the straight angle of a straight molecule.
    pub(super) fn continued(mut self, material: &Material<'_>) -> Self {
        let path = material.path();
        self.continued = path.continue_straight(&mut self.x, &mut self.energies);
        self
    }

    /// Whether a place (bohr or radian) lies on the line itself and not on its mirror image.
    pub(super) fn owns(&self, x: f64) -> bool {
        !self.continued || is_before_straight(x)
    }
}

/// An excess of ⟨S²⟩ over that of the pure spin state below which orbitals count as not broken.
const UNBROKEN: f64 = 1e-3;

/// First points of the sides on which unrestricted orbitals have just become lower, or are so no more: energy and slope
/// go on smoothly there, but the second derivative jumps (C. A. Coulson, I. Fischer, Phil. Mag. 40, 386 (1949)).
pub(super) fn kinks(material: &Material<'_>) -> Vec<usize> {
    let broken: Vec<(usize, bool)> = material
        .points
        .iter()
        .filter(|p| p.record.energy.is_some())
        .map(|p| {
            let excess = p.record.s_squared - material.pure_s_squared;
            (p.point, excess > UNBROKEN)
        })
        .collect();
    broken
        .windows(2)
        .filter(|w| w[0].1 != w[1].1)
        .map(|w| w[1].0)
        .collect()
}

/// The pieces of a scan of one sweep: a curve is cut where the electronic state changes and before the points in
/// `further`, because no smooth function runs through both sides.
pub(super) fn of_curve(material: &Material<'_>, further: &[usize]) -> Vec<Line> {
    let axis = material.path().axis(0);
    let energies = material.energies();
    let jumps: Vec<usize> = material
        .findings
        .iter()
        .filter(|f| f.kind == FindingKind::StateJump)
        .filter_map(|f| f.points.iter().max().copied())
        .chain(further.iter().copied())
        .collect();
    let mut pieces: Vec<(Vec<f64>, Vec<f64>)> = vec![Default::default()];
    for (point, (&x, energy)) in axis.iter().zip(&energies).enumerate() {
        if jumps.contains(&point) {
            pieces.push(Default::default());
        }
        if let (Some(energy), Some(piece)) = (energy, pieces.last_mut()) {
            piece.0.push(x);
            piece.1.push(*energy);
        }
    }
    let sweep = &material.spec.sweeps[0];
    pieces
        .into_iter()
        .filter(|(x, _)| !x.is_empty())
        .map(|(x, energies)| Line {
            sweep: 0,
            settings: super::super::stationary::curve_settings(sweep, &x, material.spec.scf.energy),
            x,
            energies,
            others: vec![0.0],
            continued: false,
        })
        .collect()
}
