//! The tables of a spec as they stand in the file: typed, placed, but not yet checked for sense.

use super::diagnostic::{Problems, all_of};
use super::read::{
    Choice, Entries, Field, Given, Read, Word, missing_key, read_field, table, table_of,
    unknown_key,
};
use super::{FigureFormat, FitForm};
use crate::basis::FunctionKind;
use crate::scan::{Others, Passes, SeedKind, StateChoice, WalkStart};
use crate::scf::{FirstDensity, Method};
use crate::units::{EnergyUnit, LengthUnit};
use schemars::{JsonSchema, Schema, SchemaGenerator, json_schema};
use std::borrow::Cow;
use std::ops::Range;
use toml::de::DeValue;

impl Choice for LengthUnit {
    const WORDS: &'static [(&'static str, Self)] =
        &[("angstrom", Self::Angstrom), ("bohr", Self::Bohr)];
}

impl Choice for EnergyUnit {
    const WORDS: &'static [(&'static str, Self)] = &[
        ("hartree", Self::Hartree),
        ("eV", Self::ElectronVolt),
        ("kJ/mol", Self::KiloJoulePerMol),
        ("kcal/mol", Self::KiloCaloriePerMol),
        ("cm-1", Self::PerCm),
    ];
}

impl Choice for Method {
    const WORDS: &'static [(&'static str, Self)] = &[("rhf", Self::Rhf), ("uhf", Self::Uhf)];
}

impl Choice for FunctionKind {
    const WORDS: &'static [(&'static str, Self)] = &[
        ("cartesian", Self::Cartesian),
        ("spherical", Self::Spherical),
    ];
}

impl Choice for WalkStart {
    const WORDS: &'static [(&'static str, Self)] = &[
        ("geometry", Self::Geometry),
        ("first", Self::First),
        ("last", Self::Last),
    ];
}

impl Choice for SeedKind {
    const WORDS: &'static [(&'static str, Self)] = &[
        ("extrapolated", Self::Extrapolated),
        ("previous", Self::Previous),
        ("fresh", Self::Fresh),
    ];
}

impl Choice for Passes {
    const WORDS: &'static [(&'static str, Self)] = &[("both", Self::Both), ("one", Self::One)];
}

impl Choice for Others {
    const WORDS: &'static [(&'static str, Self)] =
        &[("fixed", Self::Fixed), ("optimised", Self::Optimised)];
}

impl Choice for StateChoice {
    const WORDS: &'static [(&'static str, Self)] =
        &[("lowest", Self::Lowest), ("follow", Self::Follow)];
}

impl Choice for FirstDensity {
    const WORDS: &'static [(&'static str, Self)] = &[
        ("atoms", Self::Atoms),
        ("core-hamiltonian", Self::CoreHamiltonian),
    ];
}

impl Choice for FitForm {
    const WORDS: &'static [(&'static str, Self)] = &[
        ("polynomial", Self::Polynomial),
        ("morse", Self::Morse),
        ("fourier", Self::Fourier),
    ];
}

impl Choice for FigureFormat {
    const WORDS: &'static [(&'static str, Self)] = &[("png", Self::Png), ("svg", Self::Svg)];
}

/// Labels of atoms, in order.
pub(super) type RawLabels = Vec<Given<String>>;

table! {
    /// A scan of a molecular potential-energy surface.
    RawSpec ("the spec") {
        /// Title of the run, for figures and reports; default: the name of the spec file.
        title: String,
        /// The molecule and its geometry.
        molecule (required ()): RawMolecule,
        /// Levels of theory, one or more; each gives a curve.
        level (required ()): Vec<Given<RawLevel>>,
        /// Swept coordinates: one gives a curve, two a surface, none the one point of the input geometry.
        sweep: Vec<Given<RawSweep>>,
        /// How the grid is walked.
        walk: RawWalk,
        /// Thresholds and limits of the self-consistent field calculations.
        scf: RawScf,
        /// Separated parts, for dissociation energies and asymptotes.
        dissociation: RawDissociation,
        /// Forms fitted to each sweep; default: polynomial, with morse for a bond and fourier for a dihedral.
        fit: Vec<Given<RawFit>>,
        /// One-dimensional vibrational states on the curve.
        vibration: RawVibration,
        /// What is written and where.
        output: RawOutput,
    }
}

table! {
    /// The molecule: one of zmatrix, cartesian and file gives its geometry.
    RawMolecule ("[molecule]") {
        /// Total charge in units of e; default 0.
        charge: i64,
        /// Spin multiplicity 2S+1; default 1, or 2 for an odd number of electrons.
        multiplicity: i64,
        /// Unit of every length of the spec, sweeps too; default "angstrom". Angles are always in degrees.
        unit: Word<LengthUnit>,
        /// Geometry as a z-matrix, one atom a line: label, bonded atom, length, angle atom, angle, dihedral atom, dihedral.
        zmatrix: String,
        /// Geometry as one atom a line: label, x, y, z.
        cartesian: String,
        /// Geometry from an XYZ file; a relative path starts at the spec's folder.
        file: String,
        /// Isotope masses in u by atom label, or by element symbol for all atoms of an element that have no mass of their own; default: the most abundant isotope.
        isotopes: Entries<f64>,
    }
}

table! {
    /// A level of theory: a method and a basis.
    RawLevel ("[[level]]") {
        /// Hartree–Fock, restricted or unrestricted.
        method (required ()): Word<Method>,
        /// Name of a built-in basis set, or { file = "set.json" } for a file in the open BSE JSON schema.
        basis (required ()): RawBasis,
        /// Charge at this level; default: the molecule's.
        charge: i64,
        /// Multiplicity at this level; default: the molecule's.
        multiplicity: i64,
        /// Cartesian or spherical functions for d and higher; default: as the set defines.
        functions: Word<FunctionKind>,
        /// Name in legends; default: made from method and basis.
        name: String,
    }
}

table! {
    /// One swept internal coordinate: one of bond, angle and dihedral, and its values.
    RawSweep ("[[sweep]]") {
        /// The two atoms of a bond length.
        bond: RawLabels,
        /// The three atoms of an angle, the vertex second.
        angle: RawLabels,
        /// The four atoms of a dihedral angle.
        dihedral: RawLabels,
        /// First value.
        from: f64,
        /// Last value.
        to: f64,
        /// Step from value to value.
        step: f64,
        /// Number of values, instead of a step.
        points: i64,
        /// The values themselves, instead of from, to and step.
        values: Vec<Given<f64>>,
        /// Coordinates of the same kind that are moved in step, to the same value.
        also: Vec<Given<RawTied>>,
        /// Labels of the atoms that move; default: the side with fewer basis functions.
        moves: RawLabels,
    }
}

table! {
    /// A coordinate moved in step with a sweep: one of bond, angle and dihedral.
    RawTied ("also") {
        /// The two atoms of a bond length.
        bond: RawLabels,
        /// The three atoms of an angle, the vertex second.
        angle: RawLabels,
        /// The four atoms of a dihedral angle.
        dihedral: RawLabels,
        /// Labels of the atoms that move; default: the side with fewer basis functions.
        moves: RawLabels,
    }
}

table! {
    /// How the grid is walked.
    RawWalk ("[walk]") {
        /// The point that is computed first.
        start: Word<WalkStart>,
        /// What each point's calculation starts from.
        seed: Word<SeedKind>,
        /// Out only, or out and back, keeping the lower solution.
        passes: Word<Passes>,
        /// Whether the other internal coordinates keep their values or are optimised at each point.
        others: Word<Others>,
        /// The state kept at each point.
        state: Word<StateChoice>,
        /// Whether solutions are tested for stability, and unstable ones left downhill.
        stability: bool,
    }
}

table! {
    /// Thresholds and limits of the self-consistent field calculations.
    RawScf ("[scf]") {
        /// Largest energy change of the last iteration, hartree.
        energy: f64,
        /// Largest element of |FPS - SPF| in an orthonormal basis, hartree.
        commutator: f64,
        /// Most Fock builds of one calculation.
        iterations: i64,
        /// Overlap eigenvalues below this are dropped.
        dependence: f64,
        /// Memory for stored repulsion integrals, MiB.
        memory_mib: i64,
        /// Where a calculation without a seed starts from.
        first_density: Word<FirstDensity>,
    }
}

table! {
    /// Separated parts of the molecule.
    RawDissociation ("[dissociation]") {
        /// The parts; each atom belongs to one. Default: those that the swept bond cuts.
        parts: Vec<Given<RawPart>>,
        /// Whether each part is computed in the basis of the whole as well (counterpoise correction); default false.
        counterpoise: bool,
    }
}

table! {
    /// One separated part.
    RawPart ("a part") {
        /// Labels of its atoms.
        atoms (required ()): RawLabels,
        /// Charge; default 0.
        charge: i64,
        /// Multiplicity; default 1, or 2 for an odd number of electrons.
        multiplicity: i64,
    }
}

table! {
    /// A form fitted to each sweep it suits.
    RawFit ("[[fit]]") {
        /// The form.
        form (required ()): Word<FitForm>,
        /// Lowest and highest order, inclusive; the choice and the spread run over them.
        orders: Vec<Given<i64>>,
        /// The points that are fitted.
        window: RawWindow,
    }
}

table! {
    /// The points that are fitted: those below an energy, or those within a distance of the minimum.
    RawWindow ("window") {
        /// Energy above the minimum.
        below: f64,
        /// Unit of below; default "kJ/mol".
        unit: Word<EnergyUnit>,
        /// Distance from the minimum in the sweep's unit.
        within: f64,
    }
}

table! {
    /// One-dimensional vibrational states.
    RawVibration ("[vibration]") {
        /// Number of states.
        states: i64,
    }
}

table! {
    /// What is written and where.
    RawOutput ("[output]") {
        /// Folder of the run; default: runs/ and the name of the spec file.
        folder: String,
        /// Energy unit of figures and tables.
        energy: Word<EnergyUnit>,
        /// Formats of the figures.
        figures: Vec<Given<Word<FigureFormat>>>,
        /// Whether derivatives along the sweeps are computed and written.
        gradients: bool,
    }
}

/// A basis set by name or from a file.
#[derive(Debug, Clone, PartialEq)]
pub(super) enum RawBasis {
    /// Name of a built-in set.
    Name(String),
    /// Path of a file in the open BSE JSON schema.
    File(Given<String>),
}

impl Read for RawBasis {
    fn expected() -> Cow<'static, str> {
        "the name of a basis set, or { file = \"…\" }".into()
    }

    fn read(value: &DeValue<'_>, span: &Range<usize>, problems: &mut Problems<'_>) -> Option<Self> {
        if let Some(name) = value.as_str() {
            return Some(Self::Name(name.to_owned()));
        }
        let mut file = Field::Absent;
        for (key, value) in table_of::<Self>(value, span, problems)? {
            match key.get_ref().as_ref() {
                "file" => file = read_field(value, problems),
                _ => unknown_key(key, "basis", &["file"], problems),
            }
        }
        if file.is_absent() {
            problems
                .at(span, "basis lacks the key \"file\"")
                .expected(format!("expected {}", Self::expected()));
        }
        file.get().cloned().map(Self::File)
    }
}

impl JsonSchema for RawBasis {
    fn schema_name() -> Cow<'static, str> {
        "Basis".into()
    }

    fn json_schema(_: &mut SchemaGenerator) -> Schema {
        json_schema!({
            "oneOf": [
                { "type": "string" },
                {
                    "type": "object",
                    "properties": { "file": { "type": "string" } },
                    "required": ["file"],
                    "additionalProperties": false,
                },
            ],
        })
    }
}
