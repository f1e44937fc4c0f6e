//! `parameters.csv`: fitted terms in every unit and both conventions, one row each, to be taken over by a model.

use super::fitted::{coupling_units, reported};
use crate::fit::{Convention, Model};
use crate::job::analysis::{FitResult, ForceField};
use crate::job::{JobResult, SweepResult};
use crate::units::{KCAL_PER_MOL_PER_HARTREE, KJ_PER_MOL_PER_HARTREE};

/// Names of the columns.
pub(super) const HEADER: [&str; 12] = [
    "term",
    "atoms",
    "equilibrium",
    "k",
    "unit",
    "convention",
    "level",
    "spread",
    "equilibrium_unit",
    "form",
    "path",
    "moves",
];

/// The table as CSV text. Of a tied sweep all coordinates stand in `atoms`, joined by ` = `: its k sums theirs and their
/// couplings. A torsion's cosine terms have their height as k and their phase as equilibrium.
#[must_use]
pub fn render(result: &JobResult) -> Vec<u8> {
    let mut writer = ::csv::Writer::from_writer(Vec::new());
    // Writing to memory cannot fail, and every row has as many fields as the header.
    let _ = writer.write_record(HEADER);
    for level in &result.levels {
        for fit in &level.analysis.fits {
            for row in rows(&result.sweeps[fit.sweep], fit, &level.name) {
                let _ = writer.write_record(row);
            }
        }
        if let Some(field) = &level.analysis.force_field {
            for row in coupling_rows(result, field, &level.name) {
                let _ = writer.write_record(row);
            }
        }
    }
    writer.into_inner().unwrap_or_default()
}

fn rows(sweep: &SweepResult, entry: &FitResult, level: &str) -> Vec<[String; 12]> {
    let fit = &entry.fit;
    let atoms: Vec<String> = entry.coordinates.iter().map(|c| c.join(" ")).collect();
    let row = |term: String,
               equilibrium: f64,
               equilibrium_unit: &str,
               k: f64,
               unit: &str,
               convention: &str,
               spread: f64| {
        [
            term,
            atoms.join(" = "),
            equilibrium.to_string(),
            k.to_string(),
            unit.to_owned(),
            convention.to_owned(),
            level.to_owned(),
            spread.to_string(),
            equilibrium_unit.to_owned(),
            super::text_fits::form_words(fit),
            entry.path.word().to_owned(),
            entry.moves.join(" "),
        ]
    };
    let mut rows = Vec::new();
    for convention in [Convention::HalfK, Convention::FullK] {
        for (unit, k) in fit.constant().in_units(convention) {
            rows.push(row(
                sweep.kind.to_owned(),
                reported(sweep, fit.equilibrium),
                sweep.unit,
                k,
                unit,
                convention.formula(),
                fit.spread,
            ));
        }
    }
    if let Model::Fourier(series) = &fit.model {
        for term in series.terms() {
            for (unit, scale) in [
                ("kj_per_mol", KJ_PER_MOL_PER_HARTREE),
                ("kcal_per_mol", KCAL_PER_MOL_PER_HARTREE),
            ] {
                rows.push(row(
                    format!("cosine {}", term.multiple),
                    term.phase.to_degrees(),
                    "degree",
                    term.height * scale,
                    unit,
                    "E = V/2 (1 + cos(n q - q0))",
                    fit.spread,
                ));
            }
        }
    }
    rows
}

fn coupling_rows(result: &JobResult, field: &ForceField, level: &str) -> Vec<[String; 12]> {
    let [a, b] = [&result.sweeps[0], &result.sweeps[1]];
    let scale = (field.field.k11 * field.field.k22).sqrt();
    coupling_units(field)
        .into_iter()
        .map(|(unit, k)| {
            [
                format!("{}-{} coupling", a.kind, b.kind),
                format!("{} / {}", a.atoms.join(" "), b.atoms.join(" ")),
                format!("{} / {}", field.values[0], field.values[1]),
                k.to_string(),
                unit.to_owned(),
                "E = E0 + k11/2 d1^2 + k12 d1 d2 + k22/2 d2^2".to_owned(),
                level.to_owned(),
                (field.field.half_ranges[1] / scale).to_string(),
                format!("{} / {}", a.unit, b.unit),
                format!("polynomial of order {}", field.field.order),
                field.path.word().to_owned(),
                String::new(),
            ]
        })
        .collect()
}
