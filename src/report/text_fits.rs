//! The analysed part of the table on stdout.

use super::fitted::{constant, coupling_units, reported};
use crate::fit::{Convention, Fit, Form, Model};
use crate::job::analysis::{
    FitResult, ForceField, LevelAnalysis, MinimumResult, PathKind, Spectroscopy,
};
use crate::job::{JobResult, SweepResult};
use crate::scan::StationaryKind;
use crate::units::{EnergyUnit, PER_CM_PER_HARTREE};
use std::fmt::Write;

/// Form and order of a fit in words.
#[must_use]
pub(super) fn form_words(fit: &Fit) -> String {
    match fit.form {
        Form::Polynomial => format!("polynomial of order {}", fit.order),
        Form::Morse if fit.order == 0 => "Morse".to_owned(),
        Form::Morse if fit.order == 1 => "Morse, 1 further exponent".to_owned(),
        Form::Morse => format!("Morse, {} further exponents", fit.order),
        Form::Fourier => format!("Fourier series to n = {}", fit.order),
    }
}

/// Minima, force constants and states of a level.
pub(super) fn write(
    text: &mut String,
    result: &JobResult,
    analysis: &LevelAnalysis,
    unit: EnergyUnit,
) {
    for minimum in &analysis.minima {
        stationary(text, result, minimum);
    }
    let lowest = analysis.minima.first().map(|m| m.energy);
    for barrier in &analysis.barriers {
        stationary(text, result, barrier);
        if let Some(lowest) = lowest {
            let height = (barrier.energy - lowest) * unit.per_hartree();
            let _ = writeln!(text, "  {height:.3} {} above the lowest", unit.symbol());
        }
    }
    for (k, fit) in analysis.fits.iter().enumerate() {
        // All minima of a series share its terms.
        let known = analysis.fits[..k]
            .iter()
            .any(|f| f.sweep == fit.sweep && f.fit.model == fit.fit.model);
        fit_lines(text, &result.sweeps[fit.sweep], fit, !known);
    }
    if let Some(field) = &analysis.force_field {
        force_field(text, result, field);
    }
    if let Some(found) = &analysis.spectroscopy {
        spectroscopy(text, &result.sweeps[found.sweep], found);
    }
    for note in &analysis.notes {
        let _ = writeln!(text, "{note}");
    }
}

fn unit_sign(sweep: &SweepResult) -> &'static str {
    if sweep.unit == "angstrom" {
        " Å"
    } else {
        "°"
    }
}

fn stationary(text: &mut String, result: &JobResult, point: &MinimumResult) {
    let place: Vec<String> = result
        .sweeps
        .iter()
        .zip(&point.values)
        .map(|(s, v)| {
            let decimals = if s.unit == "angstrom" { 5 } else { 3 };
            let v = without_negative_zero(*v);
            format!("{} {v:.decimals$}{}", s.atoms.join("–"), unit_sign(s))
        })
        .collect();
    let what = match (point.kind, point.interior) {
        (StationaryKind::Minimum, true) => "minimum",
        (StationaryKind::Minimum, false) => "lowest at the end of the sweep, no minimum:",
        (StationaryKind::Maximum, _) => "maximum",
        (StationaryKind::Saddle, _) => "saddle point",
    };
    let _ = write!(
        text,
        "{what} {}, {:.9} hartree",
        place.join(", "),
        point.energy
    );
    let _ = match point.gradient_max() {
        Some(force) => writeln!(
            text,
            ", largest force on any coordinate {force:.1e} hartree/bohr"
        ),
        None => writeln!(text),
    };
    for (sweep, second) in result.sweeps.iter().zip(&point.second_derivatives) {
        if point.kind == StationaryKind::Minimum {
            let _ = writeln!(
                text,
                "  k along {} = {}, from gradients",
                sweep.atoms.join("–"),
                constants(sweep, *second)
            );
        }
    }
    if let Some(harmonic) = point.refined.as_ref().and_then(|r| r.harmonic.as_ref()) {
        let waves: Vec<String> = harmonic
            .wavenumbers_cm1
            .iter()
            .map(|w| format!("{w:.1}"))
            .collect();
        let _ = writeln!(
            text,
            "  harmonic wavenumbers {} cm⁻¹, zero point {:.6} hartree",
            waves.join(" "),
            harmonic.zero_point_hartree
        );
    }
}

/// A force constant in the units in common use.
fn constants(sweep: &SweepResult, second_derivative: f64) -> String {
    let all = constant(sweep, second_derivative).in_units(Convention::HalfK);
    let shown: &[(&str, &str)] = if sweep.unit == "angstrom" {
        &[
            ("mdyne_per_angstrom", "mdyn/Å"),
            ("kj_per_mol_angstrom2", "kJ/mol/Å²"),
            ("kcal_per_mol_angstrom2", "kcal/mol/Å²"),
        ]
    } else {
        &[
            ("mdyne_angstrom_per_rad2", "mdyn Å/rad²"),
            ("kj_per_mol_per_rad2", "kJ/mol/rad²"),
            ("kcal_per_mol_per_rad2", "kcal/mol/rad²"),
        ]
    };
    shown
        .iter()
        .filter_map(|(key, symbol)| Some(format!("{} {symbol}", digits(*all.get(key)?))))
        .collect::<Vec<_>>()
        .join(" = ")
}

/// Rounding noise below zero is no sign.
fn without_negative_zero(value: f64) -> f64 {
    if value.abs() < 1e-6 { 0.0 } else { value }
}

/// A phase in degree, rounded as it is printed; −180° is 180°.
fn phase_degrees(phase: f64) -> f64 {
    let rounded = (10.0 * phase.to_degrees()).round() / 10.0;
    match rounded {
        r if r <= -180.0 => r + 360.0,
        r if r.abs() < 0.05 => 0.0,
        r => r,
    }
}

/// Five significant digits.
fn digits(value: f64) -> String {
    let size = value.abs().max(1e-99).log10().floor();
    let decimals = (4.0 - size).clamp(0.0, 8.0) as usize;
    format!("{value:.decimals$}")
}

fn fit_lines(text: &mut String, sweep: &SweepResult, entry: &FitResult, with_terms: bool) {
    let fit = &entry.fit;
    let names: Vec<String> = sweep.coordinates.iter().map(|c| c.join("–")).collect();
    let decimals = if sweep.unit == "angstrom" { 5 } else { 3 };
    let of = match names.len() {
        1 => format!("{} {}", sweep.kind, names[0]),
        _ => format!(
            "{} together, k their sum with couplings",
            names.join(" and ")
        ),
    };
    let path = match sweep.path {
        PathKind::Rigid => format!("rigid, moving {}", sweep.moves.join(" ")),
        PathKind::Relaxed => "relaxed".to_owned(),
    };
    let _ = writeln!(
        text,
        "{}: {of}, equilibrium {:.decimals$}{} ({path})",
        form_words(fit),
        reported(sweep, fit.equilibrium),
        unit_sign(sweep)
    );
    let _ = writeln!(
        text,
        "  k = {} ± {:.2} %, {}",
        constants(sweep, fit.force_constant),
        100.0 * fit.spread,
        Convention::HalfK.formula()
    );
    if let Some(check) = &fit.derivative_check {
        let _ = writeln!(text, "  {}", check.verdict.text);
    }
    if let (Model::Fourier(series), true) = (&fit.model, with_terms) {
        for term in series.terms() {
            let kj = term.height * crate::units::KJ_PER_MOL_PER_HARTREE;
            if kj >= 5e-4 {
                let _ = writeln!(
                    text,
                    "  V{}/2 (1 + cos({0}q − {:.1}°)), V{0} = {kj:.3} kJ/mol",
                    term.multiple,
                    phase_degrees(term.phase)
                );
            }
        }
    }
    for note in &fit.notes {
        let _ = writeln!(text, "  {note}");
    }
}

fn force_field(text: &mut String, result: &JobResult, field: &ForceField) {
    let f = &field.field;
    let _ = writeln!(
        text,
        "quadratic force field ({} path), E = E0 + k11/2 d1^2 + k12 d1 d2 + k22/2 d2^2",
        field.path.word()
    );
    for (k, second, half) in [(0, f.k11, f.half_ranges[0]), (1, f.k22, f.half_ranges[2])] {
        let sweep = &result.sweeps[k];
        let decimals = if sweep.unit == "angstrom" { 5 } else { 3 };
        let _ = writeln!(
            text,
            "  k{0}{0} {1} {2}: {3:.decimals$}{4}, {5} ± {6:.2} %",
            k + 1,
            sweep.kind,
            sweep.atoms.join("–"),
            field.values[k],
            unit_sign(sweep),
            constants(sweep, second),
            100.0 * half / second
        );
    }
    let units = coupling_units(field);
    let shown: Vec<String> = units
        .iter()
        .filter(|(unit, _)| unit.starts_with("mdyne") || unit.starts_with("kj"))
        .map(|(unit, k)| format!("{} {}", digits(*k), coupling_symbol(unit)))
        .collect();
    let _ = writeln!(
        text,
        "  k12 coupling: {} ± {:.2} % of √(k11 k22)",
        shown.join(" = "),
        100.0 * f.half_ranges[1] / (f.k11 * f.k22).sqrt()
    );
    for (name, verdict) in ["k11", "k12", "k22"].iter().zip(&field.verdicts) {
        if !verdict.agrees {
            let _ = writeln!(text, "  {name}: {}", verdict.text);
        }
    }
}

/// A unit of a coupling constant as printed.
fn coupling_symbol(unit: &str) -> &str {
    match unit {
        "mdyne_per_angstrom" => "mdyn/Å",
        "mdyne_angstrom_per_rad2" => "mdyn Å/rad²",
        "mdyne_per_rad" => "mdyn/rad",
        "kj_per_mol_angstrom2" => "kJ/mol/Å²",
        "kj_per_mol_per_rad2" => "kJ/mol/rad²",
        "kj_per_mol_angstrom_rad" => "kJ/mol/Å/rad",
        other => other,
    }
}

fn spectroscopy(text: &mut String, sweep: &SweepResult, found: &Spectroscopy) {
    let (unit, decimals) = if found.mass.is_length {
        ("u", 6)
    } else {
        ("u Å²", 5)
    };
    let mass = format!("{:.decimals$} {unit}", found.mass.reduced());
    let what = if found.mass.exact {
        "reduced mass"
    } else {
        "1/g"
    };
    let _ = write!(
        text,
        "vibration in the well at {:.4}{}, {what} {mass}",
        found.minimum,
        unit_sign(sweep)
    );
    let _ = match found.omega_e_cm1 {
        Some(omega) => writeln!(text, ": ω {omega:.2} cm⁻¹"),
        None => writeln!(text),
    };
    if let Some(d) = &found.dunham {
        let _ = writeln!(
            text,
            "  from the fit:    ωe {:.2}, ωexe {:.3}, Be {:.5}, αe {:.5} cm⁻¹",
            d.omega_e_cm1, d.omega_e_x_e_cm1, d.b_e_cm1, d.alpha_e_cm1
        );
    }
    if let Some(s) = &found.from_states {
        let _ = writeln!(
            text,
            "  from the states: ωe {:.2}, ωexe {:.3}, Be {:.5}, αe {:.5} cm⁻¹",
            s.omega_e_cm1, s.omega_e_x_e_cm1, s.b_e_cm1, s.alpha_e_cm1
        );
    }
    if !found.states.is_empty() {
        let levels: Vec<String> = found
            .states
            .iter()
            .map(|s| format!("{:.2}", s.energy * PER_CM_PER_HARTREE))
            .collect();
        let _ = writeln!(
            text,
            "  states {} cm⁻¹ above the minimum",
            levels.join("  ")
        );
    }
    for multiplet in &found.multiplets {
        let _ = writeln!(
            text,
            "  states {} to {} are split by {:.4} cm⁻¹",
            multiplet.lowest,
            multiplet.lowest + found.wells - 1,
            multiplet.width * PER_CM_PER_HARTREE
        );
    }
    for note in &found.notes {
        let _ = writeln!(text, "  {note}");
    }
}
