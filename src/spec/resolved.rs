//! The resolved text of a spec: every default filled in, the geometry written out, and what reads back to the same
//! run bit by bit; and the fingerprint of what decides a point.

use super::not_yet::Feature;
use super::read::{Choice, word_of};
use super::{FitWindow, Level, Spec, Sweep, SweepValues};
use crate::basis::Shell;
use crate::molecule::Molecule;
use crate::molecule::motion::Motion;
use crate::units::LengthUnit;
use std::fmt::Write as _;

/// Fills in the resolved text and the fingerprint.
pub(super) fn resolve(mut spec: Spec) -> Spec {
    spec.fingerprint = fingerprint(&spec);
    spec.text = text(&spec);
    spec
}

/// The position (bohr) nearest to `x` that a decimal in `unit` can stand for.
///
/// Bohr → ångström → bohr need not end where it began. What was read from text in `unit` is kept as it is; what was
/// computed moves by at most one unit in the last place. So a resolved spec reads back to the same bits.
pub(super) fn writable(x: f64, unit: LengthUnit) -> f64 {
    match written(x, unit) {
        Some(_) => x,
        None => unit.to_bohr(unit.from_bohr(x)),
    }
}

/// The number in `unit` that reads back to exactly `x` bohr, if there is one.
fn written(x: f64, unit: LengthUnit) -> Option<f64> {
    let near = unit.from_bohr(x);
    [
        near,
        near.next_up(),
        near.next_down(),
        near.next_up().next_up(),
        near.next_down().next_down(),
    ]
    .into_iter()
    .find(|length| unit.to_bohr(*length).to_bits() == x.to_bits())
}

pub(super) fn text(spec: &Spec) -> String {
    let mut out = String::new();
    // Writing to a string cannot fail.
    let _ = write_all(spec, &mut out);
    out
}

fn write_all(spec: &Spec, out: &mut String) -> std::fmt::Result {
    writeln!(out, "title = {}", string(&spec.title))?;
    molecule(spec, out)?;
    for level in &spec.levels {
        self::level(level, out)?;
    }
    for sweep in &spec.sweeps {
        self::sweep(sweep, &spec.molecule, out)?;
    }
    let walk = &spec.walk;
    writeln!(out, "\n[walk]")?;
    writeln!(out, "start = {}", word(walk.start))?;
    writeln!(out, "seed = {}", word(walk.seed))?;
    writeln!(out, "passes = {}", word(walk.passes))?;
    writeln!(out, "others = {}", word(walk.others))?;
    writeln!(out, "state = {}", word(walk.state))?;
    writeln!(out, "stability = {}", walk.stability)?;
    let scf = &spec.scf;
    writeln!(out, "\n[scf]")?;
    writeln!(out, "energy = {:?}", scf.energy)?;
    writeln!(out, "commutator = {:?}", scf.commutator)?;
    writeln!(out, "iterations = {}", scf.iterations)?;
    writeln!(out, "dependence = {:?}", scf.dependence)?;
    writeln!(out, "memory_mib = {}", scf.memory_mib)?;
    writeln!(out, "first_density = {}", word(scf.first_density))?;
    dissociation(spec, out)?;
    fits(spec, out)?;
    if Feature::Vibration.is_built() {
        writeln!(out, "\n[vibration]")?;
        writeln!(out, "states = {}", spec.vibration.states)?;
    }
    let output = &spec.output;
    writeln!(out, "\n[output]")?;
    writeln!(out, "folder = {}", string(&output.folder.to_string_lossy()))?;
    writeln!(out, "energy = {}", word(output.energy))?;
    let figures: Vec<String> = output.figures.iter().map(|f| word(*f)).collect();
    writeln!(out, "figures = [{}]", figures.join(", "))?;
    writeln!(out, "gradients = {}", output.gradients)
}

fn molecule(spec: &Spec, out: &mut String) -> std::fmt::Result {
    let molecule = &spec.molecule;
    writeln!(out, "\n[molecule]")?;
    writeln!(out, "charge = {}", molecule.charge)?;
    writeln!(out, "multiplicity = {}", molecule.multiplicity)?;
    writeln!(out, "unit = {}", word(spec.unit))?;
    writeln!(out, "cartesian = \"\"\"")?;
    for (atom, position) in molecule.atoms.iter().zip(&molecule.positions) {
        write!(out, "{}", atom.label)?;
        for &x in position {
            let length = written(x, spec.unit).unwrap_or_else(|| spec.unit.from_bohr(x));
            write!(out, " {length:?}")?;
        }
        writeln!(out)?;
    }
    writeln!(out, "\"\"\"")?;
    let masses: Vec<String> = molecule
        .atoms
        .iter()
        .zip(&spec.masses_u)
        .map(|(atom, mass)| format!("{} = {mass:?}", atom.label))
        .collect();
    writeln!(out, "isotopes = {{ {} }}", masses.join(", "))
}

fn level(level: &Level, out: &mut String) -> std::fmt::Result {
    writeln!(out, "\n[[level]]")?;
    writeln!(out, "name = {}", string(&level.name))?;
    writeln!(out, "method = {}", word(level.method))?;
    match &level.basis_file {
        None => writeln!(out, "basis = {}", string(&level.basis_name))?,
        Some(file) => writeln!(
            out,
            "basis = {{ file = {} }}",
            string(&file.to_string_lossy())
        )?,
    }
    // Without the key each shell is of the kind that the set defines, which may be mixed.
    if let Some(kind) = level.functions {
        writeln!(out, "functions = {}", word(kind))?;
    }
    writeln!(out, "charge = {}", level.charge)?;
    writeln!(out, "multiplicity = {}", level.multiplicity)
}

fn sweep(sweep: &Sweep, molecule: &Molecule, out: &mut String) -> std::fmt::Result {
    writeln!(out, "\n[[sweep]]")?;
    writeln!(out, "{}", coordinate(&sweep.motion, molecule))?;
    writeln!(out, "moves = {}", labels(&sweep.motion.moves, molecule))?;
    match &sweep.written {
        SweepValues::Step { from, to, step } => {
            writeln!(out, "from = {from:?}\nto = {to:?}\nstep = {step:?}")?;
        }
        SweepValues::Points { from, to, points } => {
            writeln!(out, "from = {from:?}\nto = {to:?}\npoints = {points}")?;
        }
        SweepValues::List(values) => writeln!(out, "values = {values:?}")?,
    }
    if sweep.also.is_empty() {
        return Ok(());
    }
    writeln!(out, "also = [")?;
    for motion in &sweep.also {
        writeln!(
            out,
            "    {{ {}, moves = {} }},",
            coordinate(motion, molecule),
            labels(&motion.moves, molecule)
        )?;
    }
    writeln!(out, "]")
}

fn dissociation(spec: &Spec, out: &mut String) -> std::fmt::Result {
    let Some(dissociation) = &spec.dissociation else {
        return Ok(());
    };
    writeln!(out, "\n[dissociation]")?;
    writeln!(out, "counterpoise = {}", dissociation.counterpoise)?;
    if dissociation.parts.is_empty() {
        return Ok(());
    }
    writeln!(out, "parts = [")?;
    for part in &dissociation.parts {
        writeln!(
            out,
            "    {{ atoms = {}, charge = {}, multiplicity = {} }},",
            labels(&part.atoms, &spec.molecule),
            part.charge,
            part.multiplicity
        )?;
    }
    writeln!(out, "]")
}

fn fits(spec: &Spec, out: &mut String) -> std::fmt::Result {
    if !Feature::Fit.is_built() {
        return Ok(());
    }
    for fit in &spec.fits {
        writeln!(out, "\n[[fit]]")?;
        writeln!(out, "form = {}", word(fit.form))?;
        if let Some((low, high)) = fit.orders {
            writeln!(out, "orders = [{low}, {high}]")?;
        }
        match fit.window {
            FitWindow::Below { energy, unit } => writeln!(
                out,
                "window = {{ below = {energy:?}, unit = {} }}",
                word(unit)
            )?,
            FitWindow::Within(width) => writeln!(out, "window = {{ within = {width:?} }}")?,
        }
    }
    Ok(())
}

fn coordinate(motion: &Motion, molecule: &Molecule) -> String {
    format!(
        "{} = {}",
        motion.coordinate.kind_word(),
        labels(motion.coordinate.atoms(), molecule)
    )
}

fn labels(atoms: &[usize], molecule: &Molecule) -> String {
    let labels: Vec<String> = crate::scan::sweep::labels(atoms, molecule)
        .into_iter()
        .map(string)
        .collect();
    format!("[{}]", labels.join(", "))
}

fn string(text: &str) -> String {
    toml::Value::from(text).to_string()
}

fn word<T: Choice + PartialEq>(choice: T) -> String {
    format!("\"{}\"", word_of(choice))
}

/// FNV-1a with 64 bits (G. Fowler, L. C. Noll, K.-P. Vo; IETF draft-eastlake-fnv) over what decides a point. It guards a run
/// folder against a changed spec, not against an adversary, so that speed and a cryptographic hash do not matter, but 32
/// bits would be too few for peace of mind.
fn fingerprint(spec: &Spec) -> String {
    let mut out = String::new();
    // Writing to a string cannot fail.
    let _ = decisive(spec, &mut out);
    let hash = out.bytes().fold(0xcbf2_9ce4_8422_2325_u64, |hash, byte| {
        (hash ^ u64::from(byte)).wrapping_mul(0x0000_0100_0000_01b3)
    });
    format!("{hash:016x}")
}

fn decisive(spec: &Spec, out: &mut String) -> std::fmt::Result {
    for ((atom, position), mass) in spec
        .molecule
        .atoms
        .iter()
        .zip(&spec.molecule.positions)
        .zip(&spec.masses_u)
    {
        let [x, y, z] = [position.x, position.y, position.z];
        writeln!(out, "{} {x:?} {y:?} {z:?} {mass:?}", atom.label)?;
    }
    for level in &spec.levels {
        writeln!(
            out,
            "{:?} {:?} {} {}",
            level.name, level.method, level.charge, level.multiplicity
        )?;
        // The functions themselves: a basis file may have changed under its name.
        for shell in level.shells_of_atom.iter().flatten() {
            let Shell {
                exponents,
                contractions,
                kind,
                ..
            } = shell;
            writeln!(out, "{kind:?} {exponents:?} {contractions:?}")?;
        }
    }
    writeln!(out, "{:?}", spec.dissociation)?;
    for sweep in &spec.sweeps {
        writeln!(
            out,
            "{:?} {:?}",
            sweep.values,
            sweep.motions().collect::<Vec<_>>()
        )?;
    }
    writeln!(
        out,
        "{:?} {:?} {}",
        spec.walk, spec.scf, spec.output.gradients
    )
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn a_writable_position_reads_back_to_the_same_bits(x in -1e3..1e3f64) {
            let unit = LengthUnit::Angstrom;
            let kept = writable(x, unit);
            prop_assert!((kept - x).abs() <= x.abs() * f64::EPSILON);
            let text = format!("{:?}", written(kept, unit).expect("there is one"));
            let read: f64 = text.parse().expect("a number");
            prop_assert_eq!(unit.to_bohr(read).to_bits(), kept.to_bits());
            prop_assert_eq!(writable(kept, unit).to_bits(), kept.to_bits());
        }

        #[test]
        fn what_was_read_is_kept(length in -1e3..1e3f64) {
            let unit = LengthUnit::Angstrom;
            let x = unit.to_bohr(length);
            prop_assert_eq!(writable(x, unit).to_bits(), x.to_bits());
        }
    }

    #[test]
    fn zero_of_either_sign_is_written() {
        for zero in [0.0, -0.0] {
            assert!(written(zero, LengthUnit::Angstrom).is_some());
            assert!(written(zero, LengthUnit::Bohr).is_some());
        }
    }
}
