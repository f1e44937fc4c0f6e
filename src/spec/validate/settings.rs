//! The title and the tables `[walk]`, `[scf]`, `[[fit]]`, `[vibration]` and `[output]`.

use super::{positive, short_text, whole};
use crate::scan::{Others, Passes, SeedKind, StateChoice, WalkSettings};
use crate::scf::ScfSettings;
use crate::spec::diagnostic::{Problems, counted, number};
use crate::spec::not_yet::{Feature, default_walk};
use crate::spec::raw::{RawFit, RawOutput, RawScf, RawVibration, RawWalk, RawWindow};
use crate::spec::read::{Choice, Field, Given, Word};
use crate::spec::{FigureFormat, FitForm, FitSpec, FitWindow, OutputSpec, VibrationSpec};
use crate::units::EnergyUnit;
use std::path::{Path, PathBuf};

/// The title; without one, the name of the spec file.
pub(super) fn title(raw: &Field<String>, problems: &mut Problems<'_>) -> String {
    raw.get()
        .and_then(|given| short_text(given, "the title", problems))
        .unwrap_or_else(|| spec_name(problems.file))
}

/// The name of the spec file without its ending, fit for a title and a folder.
fn spec_name(file: &Path) -> String {
    let stem = file.file_stem().unwrap_or_default().to_string_lossy();
    let name: String = stem
        .chars()
        .map(|c| if c.is_control() { '_' } else { c })
        .collect();
    let name = name.trim();
    if name.is_empty() { "spec" } else { name }.to_owned()
}

fn chosen<T: Choice>(field: &Field<Word<T>>, default: T) -> T {
    field.get().map_or(default, |word| word.value.0)
}

/// How the grid is walked.
pub(super) fn walk(raw: &Field<RawWalk>, problems: &mut Problems<'_>) -> WalkSettings {
    let default = default_walk();
    let Some(given) = raw.get() else {
        return default;
    };
    let raw = &given.value;
    let settings = WalkSettings {
        start: chosen(&raw.start, default.start),
        seed: chosen(&raw.seed, default.seed),
        passes: chosen(&raw.passes, default.passes),
        others: chosen(&raw.others, default.others),
        state: chosen(&raw.state, default.state),
        stability: raw.stability.get().map_or(default.stability, |s| s.value),
    };
    let demands = [
        (
            settings.seed == SeedKind::Extrapolated,
            Feature::SeedExtrapolated,
            raw.seed.get().map(|w| &w.span),
        ),
        (
            settings.passes == Passes::Both,
            Feature::PassesBoth,
            raw.passes.get().map(|w| &w.span),
        ),
        (
            settings.others == Others::Optimised,
            Feature::OthersOptimised,
            raw.others.get().map(|w| &w.span),
        ),
        (
            settings.state == StateChoice::Follow,
            Feature::StateFollow,
            raw.state.get().map(|w| &w.span),
        ),
        (
            settings.stability,
            Feature::Stability,
            raw.stability.get().map(|w| &w.span),
        ),
    ];
    for (asked, feature, span) in demands {
        if let (true, Some(span)) = (asked, span) {
            feature.demand(span, problems);
        }
    }
    settings
}

/// Thresholds and limits of the SCF.
pub(super) fn scf(raw: &Field<RawScf>, problems: &mut Problems<'_>) -> ScfSettings {
    const MOST_ITERATIONS: i64 = 100_000;
    const MOST_MIB: i64 = 1 << 30;
    let default = ScfSettings::default();
    let Some(given) = raw.get() else {
        return default;
    };
    let raw = &given.value;
    let dependence = positive(
        &raw.dependence,
        default.dependence,
        "a threshold for overlap eigenvalues",
        problems,
    );
    if let Some(given) = raw.dependence.get()
        && given.value >= 1.0
    {
        problems
            .at(
                &given.span,
                format!("{} would drop most of the basis", number(given.value)),
            )
            .expected("expected a number between 0 and 1");
    }
    ScfSettings {
        energy: positive(&raw.energy, default.energy, "an energy threshold", problems),
        commutator: positive(
            &raw.commutator,
            default.commutator,
            "a threshold for the commutator",
            problems,
        ),
        iterations: whole(
            raw.iterations.get(),
            (1, MOST_ITERATIONS),
            "a number of iterations",
            problems,
        )
        .unwrap_or(default.iterations),
        dependence,
        memory_mib: whole(
            raw.memory_mib.get(),
            (0, MOST_MIB),
            "an amount of memory",
            problems,
        )
        .unwrap_or(default.memory_mib),
        first_density: chosen(&raw.first_density, default.first_density),
    }
}

/// The fits asked for, or those that suit the sweeps. `all_known`: `kinds` holds every sweep of the spec.
pub(super) fn fits(
    raw: &Field<Vec<Given<RawFit>>>,
    kinds: &[&'static str],
    all_known: bool,
    problems: &mut Problems<'_>,
) -> Vec<FitSpec> {
    let Some(list) = raw.get() else {
        return [FitForm::Polynomial, FitForm::Morse, FitForm::Fourier]
            .into_iter()
            .filter(|form| kinds.iter().any(|kind| form.suits(kind)))
            .map(|form| FitSpec {
                form,
                orders: form.default_orders(),
                window: FitWindow::default(),
            })
            .collect();
    };
    list.value
        .iter()
        .filter_map(|given| fit(given, kinds, all_known, problems))
        .collect()
}

fn fit(
    given: &Given<RawFit>,
    kinds: &[&'static str],
    all_known: bool,
    problems: &mut Problems<'_>,
) -> Option<FitSpec> {
    Feature::Fit.demand(&given.span, problems);
    let raw = &given.value;
    let window = window(&raw.window, problems);
    let word = raw.form.get()?;
    let form = word.value.0;
    if all_known && !kinds.iter().any(|kind| form.suits(kind)) {
        let needs = match form {
            FitForm::Polynomial => "a sweep",
            FitForm::Morse => "the sweep of a bond",
            FitForm::Fourier => "the sweep of a dihedral",
        };
        problems.at(
            &word.span,
            format!("a {} fit needs {needs}, and there is none", form.word()),
        );
    }
    let orders = match raw.orders.get() {
        None => form.default_orders(),
        Some(list) => orders(list, form, problems),
    };
    Some(FitSpec {
        form,
        orders,
        window: window.unwrap_or_default(),
    })
}

/// Highest order of a fit: beyond it the powers of a scan's displacements can no longer be told apart in double precision.
const MAX_ORDER: i64 = 12;

fn orders(
    list: &Given<Vec<Given<i64>>>,
    form: FitForm,
    problems: &mut Problems<'_>,
) -> Option<(usize, usize)> {
    let Some((lowest, _)) = form.default_orders() else {
        problems.at(&list.span, format!("a {} fit has no orders", form.word()));
        return None;
    };
    let [first, last] = list.value.as_slice() else {
        problems
            .at(
                &list.span,
                format!(
                    "{} cannot be a range of orders",
                    counted(list.value.len(), "number")
                ),
            )
            .expected("expected [lowest, highest]");
        return None;
    };
    let range = (lowest as i64, MAX_ORDER);
    let first_order: Option<usize> = whole(Some(first), range, "an order", problems);
    let last_order: Option<usize> = whole(Some(last), range, "an order", problems);
    let orders = first_order.zip(last_order);
    if let Some((low, high)) = orders
        && low > high
    {
        problems
            .at(
                &list.span,
                format!("the orders run from {low} down to {high}"),
            )
            .expected("expected [lowest, highest]");
    }
    orders
}

fn window(raw: &Field<RawWindow>, problems: &mut Problems<'_>) -> Option<FitWindow> {
    let given = raw.get()?;
    let window = &given.value;
    match (window.below.get(), window.within.get()) {
        (Some(_), None) => Some(FitWindow::Below {
            energy: positive(
                &window.below,
                250.0,
                "an energy above the minimum",
                problems,
            ),
            unit: chosen(&window.unit, EnergyUnit::KiloJoulePerMol),
        }),
        (None, Some(_)) => {
            let within = positive(&window.within, 1.0, "a distance from the minimum", problems);
            if let Some(word) = window.unit.get() {
                problems
                    .at(&word.span, "within is in the sweep's own unit")
                    .hint("take unit out");
            }
            Some(FitWindow::Within(within))
        }
        _ if window.below == Field::Wrong || window.within == Field::Wrong => None,
        _ => {
            problems
                .at(&given.span, "a window is one of two")
                .expected("expected { below = energy, unit = \"…\" } or { within = distance }");
            None
        }
    }
}

/// Vibrational states.
pub(super) fn vibration(
    raw: &Field<RawVibration>,
    problems: &mut Problems<'_>,
) -> Option<VibrationSpec> {
    const MOST_STATES: i64 = 1000;
    let given = raw.get()?;
    Feature::Vibration.demand(&given.span, problems);
    let states = whole(
        given.value.states.get(),
        (1, MOST_STATES),
        "a number of states",
        problems,
    )?;
    Some(VibrationSpec { states })
}

/// What is written and where.
pub(super) fn output(raw: &Field<RawOutput>, problems: &mut Problems<'_>) -> OutputSpec {
    let default_folder = PathBuf::from("runs").join(spec_name(problems.file));
    let mut output = OutputSpec {
        folder: default_folder,
        energy: EnergyUnit::default(),
        figures: vec![FigureFormat::Png, FigureFormat::Svg],
        gradients: false,
    };
    let Some(given) = raw.get() else {
        return output;
    };
    let raw = &given.value;
    if let Some(folder) = raw
        .folder
        .get()
        .and_then(|given| short_path(given, problems))
    {
        output.folder = folder;
    }
    output.energy = chosen(&raw.energy, output.energy);
    if let Some(figures) = raw.figures.get() {
        output.figures.clear();
        for figure in &figures.value {
            if output.figures.contains(&figure.value.0) {
                problems.at(&figure.span, "this format stands twice");
            }
            output.figures.push(figure.value.0);
        }
    }
    if let Some(gradients) = raw.gradients.get() {
        output.gradients = gradients.value;
        if gradients.value {
            Feature::Gradients.demand(&gradients.span, problems);
        }
    }
    output
}

fn short_path(given: &Given<String>, problems: &mut Problems<'_>) -> Option<PathBuf> {
    const MOST_BYTES: usize = 1000;
    let problem = if given.value.trim().is_empty() {
        "the folder has no name"
    } else if given.value.chars().any(char::is_control) {
        "the folder's name holds a control character"
    } else if given.value.len() > MOST_BYTES {
        "the folder's name is too long"
    } else {
        return Some(PathBuf::from(&given.value));
    };
    problems.at(&given.span, problem);
    None
}
