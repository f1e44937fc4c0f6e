//! Specs: the TOML file that describes a run, read into a validated [`Spec`] or into everything that is wrong
//! with it at once.
//!
//! Text → spanned TOML tree → raw tables (`raw`, close to the file) → [`Spec`] (`validate`, close to the run).
//! A problem anywhere is recorded with its place and reading goes on, so that one run shows all of them.

mod diagnostic;
mod load;
mod not_yet;
mod raw;
mod read;
mod resolved;
mod schema;
mod validate;

pub(crate) use diagnostic::counted;
pub use diagnostic::{Diagnostic, SpecErrors};
pub use load::{MAX_BASIS_BYTES, MAX_SPEC_BYTES, load, load_reporting, parse};
pub use schema::schema;

use crate::basis::{Basis, FunctionKind, Shell};
use crate::molecule::Molecule;
use crate::molecule::motion::MotionError;
use crate::scan::WalkSettings;
use crate::scan::sweep::positions_at;
pub use crate::scan::sweep::{Sweep, SweepValues};
use crate::scf::{Method, ScfSettings};
use crate::units::{EnergyUnit, LengthUnit};
use nalgebra::Vector3;
use std::path::PathBuf;

/// Most points of a grid.
pub const MAX_POINTS: usize = 100_000;
/// Most atoms of a molecule.
pub const MAX_ATOMS: usize = 500;

/// A run as the user wants it: everything checked, every default filled in.
#[derive(Debug, Clone, PartialEq)]
pub struct Spec {
    /// Title, for figures and reports.
    pub title: String,
    /// The molecule in its input geometry, bohr.
    pub molecule: Molecule,
    /// Masses in u, one per atom.
    pub masses_u: Vec<f64>,
    /// Levels of theory, at least one, names unique.
    pub levels: Vec<Level>,
    /// Swept coordinates: none, one or two.
    pub sweeps: Vec<Sweep>,
    /// How the grid is walked.
    pub walk: WalkSettings,
    /// Thresholds and limits of the SCF.
    pub scf: ScfSettings,
    /// Separated parts, where they are wanted.
    pub dissociation: Option<DissociationSpec>,
    /// Forms to be fitted, each to the sweeps it suits.
    pub fits: Vec<FitSpec>,
    /// One-dimensional vibrational states.
    pub vibration: VibrationSpec,
    /// What is written and where.
    pub output: OutputSpec,
    /// Unit of the lengths in the spec's text.
    pub unit: LengthUnit,
    /// The spec with every default filled in and the geometry written out, as TOML; parsed again it gives the
    /// same run and the same text.
    pub text: String,
    /// What is allowed but may surprise.
    pub notes: Vec<Diagnostic>,
    fingerprint: String,
}

impl Spec {
    /// Takes title, fits, vibrational states and output from another spec: what a report may change without a
    /// calculation. Whether gradients are computed stays as it is.
    pub fn take_reporting_from(&mut self, other: Self) {
        self.title = other.title;
        self.fits = other.fits;
        self.vibration = other.vibration;
        self.output = OutputSpec {
            gradients: self.output.gradients,
            ..other.output
        };
        self.text = resolved::text(self);
    }

    /// Sixteen hexadecimal digits that differ between specs whose points differ: geometry, masses, basis functions, levels,
    /// sweeps, walk, SCF settings, separated parts and whether gradients are computed. Title, fits, vibrational states and
    /// output do not change a calculation and do not count.
    #[must_use]
    pub fn fingerprint(&self) -> &str {
        &self.fingerprint
    }

    /// Number of values of each sweep.
    #[must_use]
    pub fn shape(&self) -> Vec<usize> {
        self.sweeps.iter().map(|s| s.values.len()).collect()
    }

    /// Positions (bohr) at values of the swept coordinates (ångström or degree, one per sweep); without sweeps,
    /// the input geometry.
    ///
    /// # Errors
    /// Values that the coordinates cannot take; never for values of the grid.
    pub fn positions_at(&self, values: &[f64]) -> Result<Vec<Vector3<f64>>, MotionError> {
        positions_at(&self.molecule.positions, &self.sweeps, values)
    }
}

/// A level of theory: method, basis, charge and multiplicity.
#[derive(Debug, Clone, PartialEq)]
pub struct Level {
    /// Name in legends and tables, unique in the spec.
    pub name: String,
    /// Restricted or unrestricted.
    pub method: Method,
    /// Name of the basis set in its usual spelling.
    pub basis_name: String,
    /// Absolute path of the basis file, if the set is the user's own.
    pub basis_file: Option<PathBuf>,
    /// Kind of functions asked for; none: as the set defines.
    pub functions: Option<FunctionKind>,
    /// Charge in units of e.
    pub charge: i32,
    /// Multiplicity 2S + 1.
    pub multiplicity: u32,
    /// Shells of each atom.
    pub shells_of_atom: Vec<Vec<Shell>>,
}

impl Level {
    /// A molecule with this level's charge and multiplicity.
    #[must_use]
    pub fn molecule(&self, molecule: &Molecule) -> Molecule {
        Molecule {
            charge: self.charge,
            multiplicity: self.multiplicity,
            ..molecule.clone()
        }
    }

    /// This level's shells on the atoms of a molecule.
    #[must_use]
    pub fn basis(&self, molecule: &Molecule) -> Basis {
        Basis::of_molecule(&self.shells_of_atom, molecule)
    }
}

/// Parts into which the molecule dissociates.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct DissociationSpec {
    /// The parts; each atom belongs to exactly one. Empty: those that the swept bond cuts.
    pub parts: Vec<Part>,
    /// Whether each part is computed in the basis of the whole as well.
    pub counterpoise: bool,
}

/// One part of a dissociated molecule.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Part {
    /// Indices of its atoms, ascending.
    pub atoms: Vec<usize>,
    /// Charge in units of e.
    pub charge: i32,
    /// Multiplicity 2S + 1.
    pub multiplicity: u32,
}

/// A model fitted to a curve.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum FitForm {
    /// powers of the displacement
    Polynomial,
    /// Morse potential, for bonds
    Morse,
    /// cosines and sines, for dihedrals
    Fourier,
}

impl FitForm {
    /// Whether the form describes a sweep of this kind (`bond`, `angle` or `dihedral`).
    #[must_use]
    pub fn suits(self, kind: &str) -> bool {
        match self {
            Self::Polynomial => true,
            Self::Morse => kind == "bond",
            Self::Fourier => kind == "dihedral",
        }
    }

    /// The word used in the spec.
    #[must_use]
    pub fn word(self) -> &'static str {
        read::word_of(self)
    }

    /// The orders that the choice and the spread run over if the spec names none; a Morse potential has none.
    #[must_use]
    pub fn default_orders(self) -> Option<(usize, usize)> {
        match self {
            Self::Polynomial => Some((2, 8)),
            Self::Morse => None,
            Self::Fourier => Some((1, 6)),
        }
    }
}

/// The points that a fit uses.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum FitWindow {
    /// those less than this above the minimum
    Below {
        /// energy in `unit` (> 0)
        energy: f64,
        /// its unit
        unit: EnergyUnit,
    },
    /// those within this distance of the minimum, in the spec's length unit or degrees (> 0)
    Within(f64),
}

impl FitWindow {
    /// Half width about the minimum in ångström or degree for a sweep of this kind, where the window has one.
    #[must_use]
    pub fn half_width(self, kind: &str, unit: LengthUnit) -> Option<f64> {
        match self {
            Self::Below { .. } => None,
            Self::Within(length) if kind == "bond" && unit == LengthUnit::Bohr => {
                Some(LengthUnit::Angstrom.from_bohr(length))
            }
            Self::Within(width) => Some(width),
        }
    }
}

impl Default for FitWindow {
    fn default() -> Self {
        Self::Below {
            energy: 250.0,
            unit: EnergyUnit::KiloJoulePerMol,
        }
    }
}

/// One form to be fitted to every sweep that it suits.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FitSpec {
    /// The model.
    pub form: FitForm,
    /// Lowest and highest order, inclusive; none for a form without orders.
    pub orders: Option<(usize, usize)>,
    /// The points used.
    pub window: FitWindow,
}

/// One-dimensional vibrational states on the curve.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct VibrationSpec {
    /// Number of states (≥ 1).
    pub states: usize,
}

impl Default for VibrationSpec {
    fn default() -> Self {
        Self { states: 6 }
    }
}

/// File format of figures.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum FigureFormat {
    /// pixels
    Png,
    /// vectors
    Svg,
}

impl FigureFormat {
    /// The word used in the spec, and the ending of the file.
    #[must_use]
    pub fn word(self) -> &'static str {
        read::word_of(self)
    }
}

/// What is written and where.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct OutputSpec {
    /// Folder of the run, relative to the current directory.
    pub folder: PathBuf,
    /// Energy unit of figures and tables.
    pub energy: EnergyUnit,
    /// Formats of the figures, each once.
    pub figures: Vec<FigureFormat>,
    /// Whether derivatives along the sweeps are computed and written.
    pub gradients: bool,
}
