//! Results → files and text. Every format is one small file; writers are passed in.

pub mod csv;
mod figure_fits;
pub mod figures;
mod fitted;
pub mod folder;
pub mod geometries;
pub mod parameters;
pub mod settled;
mod state_figures;
pub mod summary;
pub mod text;
mod text_fits;

use crate::job::JobResult;
use crate::spec::Spec;
use folder::{FolderError, RunFolder};

/// Writes every file that is made from results, each whole or not at all.
///
/// # Errors
/// [`FolderError`] if one cannot be written.
pub fn write_all(folder: &RunFolder, spec: &Spec, result: &JobResult) -> Result<(), FolderError> {
    folder.write("spec.toml", spec.text.as_bytes())?;
    folder.write("geometries.xyz", geometries::render(result).as_bytes())?;
    folder.write("points.csv", &csv::render(spec, result))?;
    if !result.sweeps.is_empty() {
        folder.write("parameters.csv", &parameters::render(result))?;
    }
    folder.write("summary.json", summary::render(result).as_bytes())
}
