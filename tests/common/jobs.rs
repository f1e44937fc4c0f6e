//! Whole jobs from the text of a spec, for tests of their results.

use std::path::Path;
use std::sync::atomic::AtomicBool;
use thalweg::fit::Form;
use thalweg::job::analysis::FitResult;
use thalweg::job::{self, JobResult};
use thalweg::spec::{Spec, parse};

/// A spec that is sound.
pub(crate) fn spec(text: &str) -> Spec {
    parse(text, Path::new("test.toml")).unwrap_or_else(|errors| panic!("{errors}"))
}

/// Two threads.
pub(crate) fn pool() -> rayon::ThreadPool {
    rayon::ThreadPoolBuilder::new()
        .num_threads(2)
        .build()
        .expect("threads")
}

/// The whole job of a spec.
pub(crate) fn run(spec: &Spec) -> JobResult {
    let record =
        job::run(spec, &pool(), &AtomicBool::new(false), &mut |_| {}).expect("a finished job");
    job::assemble(spec, &record).expect("a result")
}

/// The whole job at Hartree–Fock level.
pub(crate) fn at_level(text: &str) -> JobResult {
    run(&spec(text))
}

/// A spec of one level and one sweep; `extra` holds further tables.
pub(crate) fn scan(zmatrix: &str, level: &str, sweep: &str, extra: &str) -> Spec {
    spec(&format!(
        "[molecule]\nzmatrix = \"\"\"\n{zmatrix}\n\"\"\"\n[[level]]\n{level}\n[[sweep]]\n{sweep}\n{extra}\n"
    ))
}

/// The first fit of a form.
pub(crate) fn fit_of(result: &JobResult, form: Form) -> &FitResult {
    let fits = &result.levels[0].analysis.fits;
    fits.iter()
        .find(|f| f.fit.form == form)
        .unwrap_or_else(|| panic!("no {form:?}: {:?}", result.levels[0].analysis.notes))
}
