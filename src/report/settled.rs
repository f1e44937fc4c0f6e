//! Files and text of settled molecules.

use super::csv::dipole_debye;
use super::folder::{FolderError, RunFolder};
use crate::fit::{Convention, Coordinate as Kind, ForceConstant};
use crate::job::settle::{InternalRow, SettledLevel, basis_functions};
use crate::minimise::MinimiseStop;
use crate::minimise::settle::Character;
use crate::molecule::inertia::Inertia;
use crate::spec::counted;
use crate::spec::{Level, Spec};
use crate::units::ANGSTROM_PER_BOHR;
use nalgebra::Vector3;
use serde::Serialize;
use std::collections::BTreeMap;
use std::fmt::Write;

type Units = BTreeMap<&'static str, f64>;

/// Writes `spec.toml`, `summary.json`, `parameters.csv` and `settled.xyz`, each whole or not at all.
///
/// # Errors
/// [`FolderError`] if one cannot be written.
pub fn write_all(
    folder: &RunFolder,
    spec: &Spec,
    settled: &[SettledLevel],
) -> Result<(), FolderError> {
    folder.write("spec.toml", spec.text.as_bytes())?;
    folder.write("settled.xyz", geometries(spec, settled).as_bytes())?;
    folder.write("parameters.csv", &parameters(spec, settled))?;
    folder.write("summary.json", summary(spec, settled).as_bytes())
}

#[derive(Serialize)]
struct Summary<'a> {
    thalweg: &'static str,
    title: &'a str,
    sweeps: [(); 0],
    levels: Vec<LevelEntry<'a>>,
    cost: Cost,
}

#[derive(Serialize)]
struct Cost {
    wall_s: f64,
    fock_builds: usize,
    gradient_calls: usize,
    threads: usize,
}

#[derive(Serialize)]
struct LevelEntry<'a> {
    name: &'a str,
    method: String,
    basis: &'a str,
    basis_functions: usize,
    electrons: f64,
    minima: [Minimum<'a>; 1],
    internal: Vec<Internal<'a>>,
    swept: Vec<Internal<'a>>,
}

#[derive(Serialize)]
struct Minimum<'a> {
    values: Vec<f64>,
    energy_hartree: Option<f64>,
    geometry_angstrom: Vec<(&'a str, f64, f64, f64)>,
    converged: bool,
    stop: MinimiseStop,
    gradient_max_hartree_per_bohr: f64,
    displacement_left_bohr: f64,
    energy_left_hartree: f64,
    character: Character,
    pushes: usize,
    frequencies_cm1: Vec<f64>,
    reduced_masses_u: Vec<f64>,
    intensities_km_per_mol: Vec<f64>,
    displacements: Vec<&'a [[f64; 3]]>,
    zero_point_hartree: f64,
    external_cm1: f64,
    hessian_asymmetry_hartree_per_bohr2: f64,
    rotational_constants_cm1: Vec<f64>,
    dipole_debye: f64,
    s_squared: f64,
    gradient_calls: usize,
}

#[derive(Serialize)]
struct Internal<'a> {
    kind: &'static str,
    coordinates: Vec<Vec<&'a str>>,
    equilibrium: f64,
    unit: &'static str,
    convention: &'static str,
    relaxed: Units,
    rigid: Option<Units>,
}

/// The summary as indented JSON: `minima` as in a scan's summary, one per level, and force constants of all internal
/// coordinates.
#[must_use]
pub fn summary(spec: &Spec, settled: &[SettledLevel]) -> String {
    let summary = Summary {
        thalweg: env!("CARGO_PKG_VERSION"),
        title: &spec.title,
        sweeps: [],
        levels: settled
            .iter()
            .filter_map(|s| Some(entry(spec, spec.levels.get(s.level)?, s)))
            .collect(),
        cost: Cost {
            wall_s: settled.iter().map(|s| s.wall_seconds).sum(),
            fock_builds: settled.iter().map(|s| s.fock_builds).sum(),
            gradient_calls: settled.iter().map(|s| s.gradient_calls).sum(),
            threads: settled.iter().map(|s| s.threads).max().unwrap_or(1),
        },
    };
    // Plain structs of numbers and strings: serialisation has no way to fail.
    serde_json::to_string_pretty(&summary).unwrap_or_default() + "\n"
}

fn entry<'a>(spec: &'a Spec, level: &'a Level, settled: &'a SettledLevel) -> LevelEntry<'a> {
    let list = |rows: &'a [InternalRow]| rows.iter().map(|r| internal(spec, r)).collect();
    LevelEntry {
        name: &level.name,
        method: level.method.name().to_lowercase(),
        basis: &level.basis_name,
        basis_functions: basis_functions(level),
        electrons: settled.record.electrons.round(),
        minima: [minimum(spec, settled)],
        internal: list(&settled.internal),
        swept: list(&settled.swept),
    }
}

fn minimum<'a>(spec: &'a Spec, settled: &'a SettledLevel) -> Minimum<'a> {
    let positions = positions(settled);
    Minimum {
        values: spec
            .sweeps
            .iter()
            .map(|s| s.motion.coordinate.reported_value(&positions))
            .collect(),
        energy_hartree: settled.record.energy,
        geometry_angstrom: spec
            .molecule
            .atoms
            .iter()
            .zip(&positions)
            .map(|(atom, p)| {
                let [x, y, z] = [p.x, p.y, p.z].map(|v| v * ANGSTROM_PER_BOHR);
                (atom.element.symbol(), x, y, z)
            })
            .collect(),
        converged: settled.stop == MinimiseStop::Converged,
        stop: settled.stop,
        gradient_max_hartree_per_bohr: settled.left[0],
        displacement_left_bohr: settled.left[1],
        energy_left_hartree: settled.left[2],
        character: settled.character,
        pushes: settled.pushes,
        frequencies_cm1: settled.modes.iter().map(|m| m.wavenumber_cm1).collect(),
        reduced_masses_u: settled.modes.iter().map(|m| m.reduced_mass_u).collect(),
        intensities_km_per_mol: settled
            .modes
            .iter()
            .map(|m| m.intensity_km_per_mol)
            .collect(),
        displacements: settled.modes.iter().map(|m| &m.displacements[..]).collect(),
        zero_point_hartree: settled.zero_point_hartree,
        external_cm1: settled.external_cm1,
        hessian_asymmetry_hartree_per_bohr2: settled.asymmetry,
        rotational_constants_cm1: rotational_constants(spec, &positions),
        dipole_debye: dipole_debye(settled.record.dipole),
        s_squared: settled.record.s_squared,
        gradient_calls: settled.gradient_calls,
    }
}

fn positions(settled: &SettledLevel) -> Vec<Vector3<f64>> {
    settled
        .positions
        .iter()
        .map(|&p| Vector3::from(p))
        .collect()
}

/// None where moments of inertia cannot be: for a single atom.
fn rotational_constants(spec: &Spec, positions: &[Vector3<f64>]) -> Vec<f64> {
    Inertia::of(&spec.masses_u, positions)
        .map(|i| i.rotational_constants_per_cm())
        .unwrap_or_default()
}

fn constant(row: &InternalRow, second_derivative: f64) -> ForceConstant {
    let is_length = row
        .coordinates
        .first()
        .is_some_and(|c| c.unit_word() == "angstrom");
    ForceConstant {
        second_derivative,
        coordinate: if is_length { Kind::Length } else { Kind::Angle },
    }
}

fn internal<'a>(spec: &'a Spec, row: &InternalRow) -> Internal<'a> {
    let first = row.coordinates.first();
    Internal {
        kind: first.map_or("", |c| c.kind_word()),
        coordinates: row
            .coordinates
            .iter()
            .map(|c| crate::scan::sweep::labels(c.atoms(), &spec.molecule))
            .collect(),
        equilibrium: first.map_or(row.equilibrium, |c| c.to_reported(row.equilibrium)),
        unit: first.map_or("", |c| c.unit_word()),
        convention: Convention::HalfK.formula(),
        relaxed: constant(row, row.relaxed).in_units(Convention::HalfK),
        rigid: row
            .rigid
            .map(|k| constant(row, k).in_units(Convention::HalfK)),
    }
}

/// One frame per level.
fn geometries(spec: &Spec, settled: &[SettledLevel]) -> String {
    let mut text = String::new();
    for level in settled {
        let name = spec.levels.get(level.level).map_or("", |l| &l.name);
        let energy = level.record.energy.map_or_else(
            || "not converged".to_owned(),
            |e| format!("energy_hartree={e}"),
        );
        let _ = writeln!(text, "{}\n{name} {energy}", level.positions.len());
        for (atom, p) in spec.molecule.atoms.iter().zip(&level.positions) {
            let [x, y, z] = p.map(|v| v * ANGSTROM_PER_BOHR);
            let _ = writeln!(
                text,
                "{:<2} {x:18.12} {y:18.12} {z:18.12}",
                atom.element.symbol()
            );
        }
    }
    text
}

/// Rows as in a scan's table, the relaxed and the rigid constant of each coordinate.
fn parameters(spec: &Spec, settled: &[SettledLevel]) -> Vec<u8> {
    let mut writer = ::csv::Writer::from_writer(Vec::new());
    // Writing to memory cannot fail, and every row has as many fields as the header.
    let _ = writer.write_record(super::parameters::HEADER);
    for level in settled {
        let name = spec.levels.get(level.level).map_or("", |l| &l.name);
        for row in &level.internal {
            let entry = internal(spec, row);
            let atoms: Vec<String> = entry.coordinates.iter().map(|c| c.join(" ")).collect();
            let paths = [("relaxed", Some(row.relaxed)), ("rigid", row.rigid)];
            for (path, second) in paths.into_iter().filter_map(|(p, k)| Some((p, k?))) {
                for convention in [Convention::HalfK, Convention::FullK] {
                    for (unit, k) in constant(row, second).in_units(convention) {
                        let _ = writer.write_record([
                            entry.kind,
                            &atoms.join(" = "),
                            &entry.equilibrium.to_string(),
                            &k.to_string(),
                            unit,
                            convention.formula(),
                            name,
                            "",
                            entry.unit,
                            "second derivative from gradients",
                            path,
                            "",
                        ]);
                    }
                }
            }
        }
    }
    writer.into_inner().unwrap_or_default()
}

/// A short account per level.
#[must_use]
pub fn text(spec: &Spec, settled: &[SettledLevel]) -> String {
    let mut text = format!("{}\n", spec.title);
    for found in settled {
        let Some(level) = spec.levels.get(found.level) else {
            continue;
        };
        let _ = writeln!(
            text,
            "\n{}   {}, {}",
            level.name,
            counted(basis_functions(level), "basis function"),
            counted(found.record.electrons.round() as usize, "electron")
        );
        write_level(&mut text, spec, found);
    }
    let calls: usize = settled.iter().map(|s| s.gradient_calls).sum();
    let builds: usize = settled.iter().map(|s| s.fock_builds).sum();
    let seconds: f64 = settled.iter().map(|s| s.wall_seconds).sum();
    let _ = writeln!(
        text,
        "\n{seconds:.2} s, {calls} gradient calls, {builds} Fock builds"
    );
    text
}

fn write_level(text: &mut String, spec: &Spec, found: &SettledLevel) {
    let energy = found.record.energy.unwrap_or(f64::NAN);
    let [force, displacement, fall] = found.left;
    let end = match found.stop {
        MinimiseStop::Converged => "converged",
        MinimiseStop::CallLimit => "NOT CONVERGED: out of gradient calls",
        MinimiseStop::NoEnergy => "NOT CONVERGED: a calculation gave no energy",
        MinimiseStop::NoDescent => "NOT CONVERGED: no step goes downhill",
    };
    let _ = writeln!(
        text,
        "energy {energy:.9} hartree; {end}: force {force:.1e} hartree/bohr, step {displacement:.1e} bohr, \
         energy {fall:.1e} hartree are left"
    );
    let kind = match found.character {
        Character::Minimum => "a minimum: all vibrations are real".to_owned(),
        Character::Saddle { imaginary } => format!(
            "a saddle point, no minimum: {imaginary} imaginary vibration(s). --push goes on downhill from it"
        ),
        Character::Flat { modes } => {
            format!("flat: {modes} vibration(s) below 30 cm⁻¹, along which the geometry is loose")
        }
    };
    let _ = writeln!(text, "{kind}");
    if found.pushes > 0 {
        let _ = writeln!(text, "{} saddle point(s) left on the way", found.pushes);
    }
    for (atom, p) in spec.molecule.atoms.iter().zip(&found.positions) {
        let [x, y, z] = p.map(|v| v * ANGSTROM_PER_BOHR);
        let _ = writeln!(text, "  {:<6}{x:12.6}{y:12.6}{z:12.6}  Å", atom.label);
    }
    if !found.internal.is_empty() {
        let _ = writeln!(
            text,
            "{:<34}{:>14}{:>16}{:>16}",
            "coordinate", "equilibrium", "relaxed k", "rigid k"
        );
    }
    for row in &found.internal {
        internal_line(text, spec, row);
    }
    if !found.modes.is_empty() {
        let _ = writeln!(
            text,
            "{:>8}{:>14}{:>14}{:>16}",
            "mode", "cm⁻¹", "u", "km/mol"
        );
    }
    for (k, mode) in found.modes.iter().enumerate() {
        let _ = writeln!(
            text,
            "{:>8}{:>14.2}{:>14.4}{:>16.3}",
            k + 1,
            mode.wavenumber_cm1,
            mode.reduced_mass_u,
            mode.intensity_km_per_mol
        );
    }
    let _ = writeln!(
        text,
        "zero-point energy {:.6} hartree; dipole {:.4} debye",
        found.zero_point_hartree,
        dipole_debye(found.record.dipole)
    );
    let rotations: Vec<String> = rotational_constants(spec, &positions(found))
        .iter()
        .map(|b| format!("{b:.5}"))
        .collect();
    if !rotations.is_empty() {
        let _ = writeln!(text, "rotational constants {} cm⁻¹", rotations.join(" "));
    }
}

fn internal_line(text: &mut String, spec: &Spec, row: &InternalRow) {
    let entry = internal(spec, row);
    let (key, symbol, decimals, sign) = if entry.unit == "angstrom" {
        ("mdyne_per_angstrom", "mdyn/Å", 5, " Å")
    } else {
        ("mdyne_angstrom_per_rad2", "mdyn Å/rad²", 3, "°")
    };
    let names: Vec<String> = entry.coordinates.iter().map(|c| c.join("–")).collect();
    let rigid = entry
        .rigid
        .as_ref()
        .and_then(|units| units.get(key))
        .map_or_else(|| "–".to_owned(), |k| format!("{k:.4}"));
    let _ = writeln!(
        text,
        "{:<34}{:>14}{:>16}{rigid:>16}  {symbol}",
        format!("{} {}", entry.kind, names.join(" = ")),
        format!("{:.decimals$}{sign}", entry.equilibrium),
        entry
            .relaxed
            .get(key)
            .map_or_else(String::new, |k| format!("{k:.4}")),
    );
}
