//! Figures: arrays with labels and units in, SVG and PNG out.
//!
//! Nothing here knows how the numbers came about; [`CurveFigure`], [`SurfaceFigure`],
//! [`AuditFigure`], [`DensityFigure`] and [`VibrationFigure`] are plain data filled by the caller,
//! each with a `draw` method. Energies arrive in the unit to be shown, relative to a zero that the
//! caller names.
//!
//! Drawing order: [`Figure`] ← `canvas` (shapes → SVG → PNG) ← `frame` (data coordinates, axes) ←
//! `place`, `label`, `legend` (words and keys) ← one file per figure. `range` decides which energies are
//! shown, `interpolate` which points are joined, `series` how, `style`, `colour` and `font` hold the look.
//!
//! Conventions: a point without a converged energy is a tick on the horizontal axis and interrupts
//! its line; a point with a finding has a ring; a line that leaves the frame ends in an arrowhead.

mod audit;
mod axis;
mod bands;
mod canvas;
mod colour;
mod curve;
mod density;
mod font;
mod frame;
mod interpolate;
mod isoline;
mod isoline_numbers;
mod label;
mod legend;
mod map_grid;
mod panels;
mod place;
mod range;
mod series;
mod style;
mod surface;
mod vibration;

pub use audit::{AuditFigure, AuditLevel};
pub use axis::Axis;
pub use curve::{CurveFigure, CurveFit, CurveLevel, CurveLimit, CurveMark};
pub use density::{DensityFigure, DensityTrace};
pub use surface::{SurfaceFigure, SurfaceMark};
pub use vibration::{VibrationFigure, VibrationState};

/// A finished figure as SVG text.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Figure {
    /// the SVG document, readable with or without DejaVu Sans installed
    pub svg: String,
}

impl Figure {
    /// The same drawing as PNG bytes, two pixels to each px of the SVG.
    ///
    /// # Errors
    /// [`PlotError::Raster`] if the SVG cannot be read or the image encoded.
    pub fn png(&self) -> Result<Vec<u8>, PlotError> {
        canvas::rasterise(&self.svg)
    }
}

/// Why a figure could not be made.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum PlotError {
    /// A value to be drawn is infinite or not a number.
    #[error("{what} holds {value} at index {index}, which cannot be drawn")]
    NotFinite {
        /// which array
        what: String,
        /// place in the array
        index: usize,
        /// the value itself
        value: f64,
    },
    /// Arrays that belong together differ in length.
    #[error("{what} has {found} entries where {expected} are needed")]
    Length {
        /// which array
        what: String,
        /// entries needed
        expected: usize,
        /// entries found
        found: usize,
    },
    /// The drawing library refused.
    #[error("drawing failed: {message}")]
    Drawing {
        /// its own words
        message: String,
    },
    /// Isolines could not be computed.
    #[error("computing isolines failed: {message}")]
    Isolines {
        /// its own words
        message: String,
    },
    /// The SVG could not be turned into a PNG.
    #[error("turning the SVG into a PNG failed: {message}")]
    Raster {
        /// its own words
        message: String,
    },
}

/// Refuses values that are not finite.
fn require_finite(what: &str, values: impl IntoIterator<Item = f64>) -> Result<(), PlotError> {
    for (index, value) in values.into_iter().enumerate() {
        if !value.is_finite() {
            return Err(PlotError::NotFinite {
                what: what.to_owned(),
                index,
                value,
            });
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests;
