//! The result as a short table per level, for people.

use super::text_fits;
use crate::job::pieces;
use crate::job::{JobResult, LevelResult, PointResult};
use crate::units::{EnergyUnit, short};
use std::fmt::Write;

/// Longest curve that is printed point by point.
const LONGEST_TABLE: usize = 60;

/// A short table per level: the points of a curve, or the lowest point of every row of a surface.
#[must_use]
pub fn render(result: &JobResult, unit: EnergyUnit) -> String {
    let mut text = format!("{}\n", result.title);
    for level in &result.levels {
        let _ = writeln!(
            text,
            "\n{}   {} basis functions, {} electrons",
            level.name, level.basis_functions, level.electrons
        );
        table(&mut text, result, level, unit);
        summary(&mut text, result, level, unit);
        text_fits::write(&mut text, result, &level.analysis, unit);
    }
    cost(&mut text, result);
    text
}

fn table(text: &mut String, result: &JobResult, level: &LevelResult, unit: EnergyUnit) {
    let rows = shown(result, level);
    let zero = result.zero_of(level);
    for sweep in &result.sweeps {
        let _ = write!(
            text,
            "{:>18}",
            format!("{} {}", sweep.kind, sweep.atoms.join("–"))
        );
    }
    let _ = writeln!(
        text,
        "{:>19}{:>14}{:>10}{:>8}",
        "energy", "relative", "⟨S²⟩", "builds"
    );
    for sweep in &result.sweeps {
        let _ = write!(
            text,
            "{:>18}",
            if sweep.unit == "angstrom" {
                "Å"
            } else {
                "degree"
            }
        );
    }
    let _ = writeln!(text, "{:>19}{:>14}", "hartree", unit.symbol());
    for point in rows {
        for value in &point.values {
            let _ = write!(text, "{value:>18.4}");
        }
        let builds = point.record.fock_builds;
        match (point.record.energy, zero) {
            (Some(energy), Some(zero)) => {
                let relative = (energy - zero) * unit.per_hartree();
                let decimals = if unit == EnergyUnit::Hartree { 6 } else { 3 };
                let _ = write!(text, "{energy:>19.9}{relative:>14.decimals$}");
                let _ = write!(
                    text,
                    "{:>10.4}{builds:>8}",
                    without_negative_zero(point.record.s_squared)
                );
            }
            _ => {
                let _ = write!(
                    text,
                    "{:>19}{:>14}{:>10}{builds:>8}",
                    "not converged", "", ""
                );
            }
        }
        let words: Vec<&str> = point.findings.iter().map(|f| f.word()).collect();
        let _ = writeln!(text, "  {}", words.join(" "));
    }
    trim_line_ends(text);
}

/// All points of a short curve, every so-many-th of a long one, the lowest of each row of a surface.
fn shown<'a>(result: &JobResult, level: &'a LevelResult) -> Vec<&'a PointResult> {
    match *result.grid.shape() {
        [rows, _] => (0..rows)
            .filter_map(|i| {
                let row = || {
                    level
                        .points
                        .iter()
                        .filter(move |p| p.index.first() == Some(&i))
                };
                row()
                    .filter(|p| p.record.energy.is_some())
                    .min_by(|a, b| {
                        a.record
                            .energy
                            .partial_cmp(&b.record.energy)
                            .unwrap_or(std::cmp::Ordering::Equal)
                    })
                    .or_else(|| row().next())
            })
            .collect(),
        _ => {
            let stride = level.points.len().div_ceil(LONGEST_TABLE).max(1);
            level.points.iter().step_by(stride).collect()
        }
    }
}

fn summary(text: &mut String, result: &JobResult, level: &LevelResult, unit: EnergyUnit) {
    if let Some(lowest) = level.lowest() {
        let energy = lowest.record.energy.unwrap_or(f64::NAN);
        let place: Vec<String> = result
            .sweeps
            .iter()
            .zip(&lowest.values)
            .map(|(s, v)| {
                format!(
                    "{} {}",
                    short(*v),
                    if s.unit == "angstrom" { "Å" } else { "°" }
                )
            })
            .collect();
        if place.is_empty() {
            let _ = writeln!(text, "energy {energy:.9} hartree");
        } else {
            let _ = writeln!(
                text,
                "lowest point {energy:.9} hartree at {}",
                place.join(", ")
            );
        }
    }
    if let Some(mean) = level.mean_fock_builds {
        let _ = writeln!(text, "{mean:.2} Fock builds per point after the first");
    }
    dissociation(text, result, level, unit);
    for finding in &level.findings {
        let _ = writeln!(text, "{}: {}", finding.kind.word(), finding.text);
    }
}

fn dissociation(text: &mut String, result: &JobResult, level: &LevelResult, unit: EnergyUnit) {
    if let (Some(onset), Some(sweep)) = (level.onset, result.sweeps.first()) {
        let sign = if sweep.unit == "angstrom" { "Å" } else { "°" };
        let _ = writeln!(
            text,
            "unrestricted orbitals become lower from {:.4} {sign} on",
            onset.value
        );
    }
    let Some(limit) = &level.limit else { return };
    let parts: Vec<String> = limit
        .parts
        .iter()
        .map(|p| {
            let atoms: Vec<&str> = p.atoms.iter().map(|&a| &*result.labels[a]).collect();
            let charge = if p.charge == 0 {
                String::new()
            } else {
                format!(", charge {:+}", p.charge)
            };
            format!(
                "{} ({} multiplicity {}{charge})",
                atoms.join("+"),
                p.method.name(),
                p.multiplicity
            )
        })
        .collect();
    let origin = if limit.proposed {
        "parts proposed"
    } else {
        "parts"
    };
    let energy = limit
        .energy
        .map_or_else(|| "not converged".to_owned(), |e| format!("{e:.9} hartree"));
    let _ = writeln!(text, "{origin}: {}, together {energy}", parts.join(", "));
    if let Some(de) = level.dissociation_energy() {
        let (value, word) = (de * unit.per_hartree(), unit.symbol());
        let corrected = if limit.counterpoise.is_some() {
            ", counterpoise-corrected"
        } else {
            ""
        };
        let _ = writeln!(text, "De {value:.3} {word}{corrected}");
        if let Some(d0) = level.dissociation_energy_from_zero_point() {
            let value = d0 * unit.per_hartree();
            let _ = writeln!(text, "D0 {value:.3} {word}{corrected}");
        }
    }
    if let Some(sentence) = pieces::sentence(level, &result.labels) {
        let _ = writeln!(text, "{sentence}");
    }
}

fn cost(text: &mut String, result: &JobResult) {
    let cost = &result.cost;
    let all = cost.integrals_computed + cost.integrals_reused;
    let share = if all == 0 {
        0.0
    } else {
        100.0 * cost.integrals_reused as f64 / all as f64
    };
    let memory = cost.peak_memory_mib.map_or_else(String::new, |mib| {
        format!(", {mib:.0} MiB of memory at most")
    });
    let _ = writeln!(
        text,
        "\n{:.2} s, {} threads{memory}, {} Fock builds, {:.3e} repulsion integrals computed, {share:.0} % of all taken over",
        cost.wall_s, cost.threads, cost.fock_builds, cost.integrals_computed as f64
    );
}

fn trim_line_ends(text: &mut String) {
    let trimmed: Vec<&str> = text.split('\n').map(str::trim_end).collect();
    *text = trimmed.join("\n");
}

/// A number that would be printed as −0.0000 as plain zero.
fn without_negative_zero(value: f64) -> f64 {
    if value.abs() < 5e-5 { 0.0 } else { value }
}
