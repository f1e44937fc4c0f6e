//! `thalweg check`: what a spec asks for, and about how long it will take.

use super::args::CheckArgs;
use super::{Failure, Status, Streams, load};
use crate::integrals::repulsion::RepulsionList;
use crate::job;
use crate::scan::{Others, SeedKind};
use crate::spec::{Level, Spec};
use std::io::Write;

/// Unique repulsion integrals that one core computes in a second, and takes over from a stored list in a Fock
/// build: round figures for a processor of the 2020s, good to a factor of about three.
const COMPUTED_PER_SECOND: f64 = 5e7;
const DIGESTED_PER_SECOND: f64 = 5e8;
/// Floating-point operations per second of dense linear algebra on one core, and such operations per
/// (basis functions)³ and iteration.
const DENSE_PER_SECOND: f64 = 1e10;
const DENSE_PER_ITERATION: f64 = 40.0;
/// Fock builds of a point without a seed, from its predecessor's density and from an extrapolation (common practice for
/// DIIS on well-behaved molecules; the last as measured on this program's own chains).
const FRESH_BUILDS: f64 = 12.0;
const PREVIOUS_BUILDS: f64 = 9.0;
const EXTRAPOLATED_BUILDS: f64 = 4.0;
/// Gradient calls that relax one point of a scan, with a neighbour's curvature to start from, and those that refine a
/// stationary point and its second derivatives along the sweep.
const RELAXATION_CALLS: f64 = 4.0;
const REFINEMENT_CALLS: f64 = 10.0;
/// A gradient in terms of the whole list of integrals (measured: 1.4 to 2.5).
const GRADIENT_LISTS: f64 = 2.0;

pub(super) fn run(args: &CheckArgs, streams: &mut Streams<'_>) -> Result<Status, Failure> {
    let spec = load(&args.spec, streams)?;
    let scan = job::scan_of(&spec)?;
    let out = &mut streams.out;
    writeln!(out, "{}", spec.title)?;
    let shape: Vec<String> = scan.grid.shape().iter().map(ToString::to_string).collect();
    let points = scan.grid.len();
    let grid = match shape.len() {
        0 => "the input geometry".to_owned(),
        1 => format!("{points} points per level"),
        _ => format!("{}: {points} points per level", shape.join(" × ")),
    };
    writeln!(out, "grid             {grid}")?;
    let labels: Vec<String> = spec
        .molecule
        .atoms
        .iter()
        .map(|a| a.label.clone())
        .collect();
    for sweep in &spec.sweeps {
        let (first, last) = (sweep.values.first(), sweep.values.last());
        let moving: Vec<&str> = sweep
            .motion
            .moves
            .iter()
            .map(|&a| labels[a].as_str())
            .collect();
        writeln!(
            out,
            "  {}: {} to {}, moving {}",
            sweep.column_name(&spec.molecule),
            first.copied().unwrap_or_default(),
            last.copied().unwrap_or_default(),
            moving.join(", ")
        )?;
    }
    let evaluations = scan.plan().len() as f64;
    let mut total = 0.0;
    for level in &spec.levels {
        let seconds = estimate(&spec, level, evaluations);
        total += seconds;
        describe(out, &spec, level, seconds)?;
    }
    writeln!(
        out,
        "time in all      about {} on one core, good to a factor of three",
        duration(total)
    )?;
    Ok(Status::Done)
}

fn functions(level: &Level) -> usize {
    level
        .shells_of_atom
        .iter()
        .flatten()
        .map(|s| s.functions())
        .sum()
}

fn describe(out: &mut dyn Write, spec: &Spec, level: &Level, seconds: f64) -> Result<(), Failure> {
    let n = functions(level);
    let molecule = level.molecule(&spec.molecule);
    let (alpha, beta) = molecule.electrons().map_err(Failure::usage)?;
    writeln!(out, "\n{}", level.name)?;
    writeln!(out, "  electrons        {alpha} α, {beta} β")?;
    writeln!(out, "  basis functions  {n}")?;
    let bytes = RepulsionList::bytes_needed(n);
    let budget = spec.scf.memory_mib << 20;
    let integrals = if bytes <= budget {
        "stored"
    } else {
        "recomputed in every Fock build"
    };
    writeln!(
        out,
        "  integrals        {:.1} MiB, {integrals}",
        bytes as f64 / f64::from(1 << 20)
    )?;
    writeln!(out, "  time             about {}", duration(seconds))?;
    Ok(())
}

/// A rough time for a level on one core, s.
fn estimate(spec: &Spec, level: &Level, evaluations: f64) -> f64 {
    let n = functions(level) as f64;
    let unique = n.powi(4) / 8.0;
    let stored = RepulsionList::bytes_needed(functions(level)) <= spec.scf.memory_mib << 20;
    let builds = match spec.walk.seed {
        SeedKind::Fresh => FRESH_BUILDS,
        SeedKind::Previous => PREVIOUS_BUILDS,
        SeedKind::Extrapolated => EXTRAPOLATED_BUILDS,
    };
    // Quartets that touch no moved atom are taken over from the point before.
    let moved: f64 = spec
        .sweeps
        .iter()
        .flat_map(|s| std::iter::once(&s.motion).chain(&s.also))
        .flat_map(|m| &m.moves)
        .map(|&a| {
            level.shells_of_atom[a]
                .iter()
                .map(|s| s.functions())
                .sum::<usize>() as f64
        })
        .sum::<f64>()
        .min(n);
    let share = if stored {
        1.0 - (1.0 - moved / n).powi(4)
    } else {
        builds
    };
    let per_build = if stored {
        unique / DIGESTED_PER_SECOND
    } else {
        0.0
    };
    let dense = DENSE_PER_ITERATION * n.powi(3) / DENSE_PER_SECOND;
    let list = unique / COMPUTED_PER_SECOND;
    let scf = |share: f64, builds: f64| share * list + builds * (per_build + dense);
    // Relaxations and displaced atoms move everything, and start from a density near by.
    let all = if stored { 1.0 } else { PREVIOUS_BUILDS };
    let gradient_call = scf(all, PREVIOUS_BUILDS) + GRADIENT_LISTS * list;
    let relaxed = spec.walk.others == Others::Optimised;
    let walk = if relaxed {
        evaluations * RELAXATION_CALLS * gradient_call
    } else {
        evaluations * scf(share, builds)
    };
    let atoms = spec.molecule.atoms.len() as f64;
    let after = match spec.sweeps.len() {
        0 => 0.0,
        // Forces are left on the minimum of a rigid path of more than two atoms: no Hessian follows.
        n if relaxed || atoms < 3.0 => n as f64 * REFINEMENT_CALLS + 6.0 * atoms,
        n => n as f64 * REFINEMENT_CALLS,
    };
    scf(all, FRESH_BUILDS) + walk + after * gradient_call
}

fn duration(seconds: f64) -> String {
    match seconds {
        s if s < 1.0 => "a second".to_owned(),
        s if s < 120.0 => format!("{s:.0} s"),
        s if s < 7200.0 => format!("{:.0} min", s / 60.0),
        s => format!("{:.1} h", s / 3600.0),
    }
}
