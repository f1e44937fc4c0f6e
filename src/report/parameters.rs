//! `parameters.csv`: fitted terms in every unit and both conventions, one row each, to be taken over by a model.

use super::fitted::{constant, coupling_units, reported};
use crate::fit::{Convention, ForceConstant, Model};
use crate::job::analysis::{FitResult, ForceField, MinimumResult};
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
        for (k, fit) in level.analysis.fits.iter().enumerate() {
            // All minima of a series share its terms.
            let known = level.analysis.fits[..k]
                .iter()
                .any(|f| f.sweep == fit.sweep && f.fit.model == fit.fit.model);
            for row in fit_rows(&result.sweeps[fit.sweep], fit, &level.name, !known) {
                let _ = writer.write_record(row);
            }
        }
        for minimum in level.analysis.minima.iter().filter(|m| m.interior) {
            for row in minimum_rows(result, minimum, &level.name) {
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

/// What the rows of one fit or minimum share.
struct Source<'a> {
    sweep: &'a SweepResult,
    level: &'a str,
    form: String,
    /// Relative; none where there is no fit to have one.
    spread: Option<f64>,
}

impl Source<'_> {
    /// A row: term, place, constant with unit and formula.
    fn row(
        &self,
        term: String,
        (equilibrium, equilibrium_unit): (f64, &str),
        (k, unit): (f64, &str),
        convention: &str,
    ) -> [String; 12] {
        let sweep = self.sweep;
        let atoms: Vec<String> = sweep.coordinates.iter().map(|c| c.join(" ")).collect();
        [
            term,
            atoms.join(" = "),
            equilibrium.to_string(),
            k.to_string(),
            unit.to_owned(),
            convention.to_owned(),
            self.level.to_owned(),
            self.spread
                .map_or_else(String::new, |spread| spread.to_string()),
            equilibrium_unit.to_owned(),
            self.form.clone(),
            sweep.path.word().to_owned(),
            sweep.moves.join(" "),
        ]
    }

    /// A force constant in every unit and both conventions.
    fn constant(&self, equilibrium: f64, constant: ForceConstant) -> Vec<[String; 12]> {
        let sweep = self.sweep;
        let mut rows = Vec::new();
        for convention in [Convention::HalfK, Convention::FullK] {
            for (unit, k) in constant.in_units(convention) {
                rows.push(self.row(
                    sweep.kind.to_owned(),
                    (equilibrium, sweep.unit),
                    (k, unit),
                    convention.formula(),
                ));
            }
        }
        rows
    }
}

fn fit_rows(
    sweep: &SweepResult,
    entry: &FitResult,
    level: &str,
    with_terms: bool,
) -> Vec<[String; 12]> {
    let fit = &entry.fit;
    let source = Source {
        sweep,
        level,
        form: super::text_fits::form_words(fit),
        spread: Some(fit.spread),
    };
    let mut rows = source.constant(reported(sweep, fit.equilibrium), fit.constant());
    if let (Model::Fourier(series), true) = (&fit.model, with_terms) {
        for term in series.terms() {
            for (unit, scale) in [
                ("kj_per_mol", KJ_PER_MOL_PER_HARTREE),
                ("kcal_per_mol", KCAL_PER_MOL_PER_HARTREE),
            ] {
                rows.push(source.row(
                    format!("cosine {}", term.multiple),
                    (term.phase.to_degrees(), "degree"),
                    (term.height * scale, unit),
                    "E = V/2 (1 + cos(n q - q0))",
                ));
            }
        }
    }
    rows
}

/// The second derivatives from gradients at a minimum: no fit, so no spread.
fn minimum_rows(result: &JobResult, minimum: &MinimumResult, level: &str) -> Vec<[String; 12]> {
    result
        .sweeps
        .iter()
        .zip(&minimum.values)
        .zip(&minimum.second_derivatives)
        .flat_map(|((sweep, &value), &second)| {
            let source = Source {
                sweep,
                level,
                form: "second derivative from gradients".to_owned(),
                spread: None,
            };
            source.constant(value, constant(sweep, second))
        })
        .collect()
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
