//! A curve ready for fits: points, period and extrema found once.

use super::FitError;
use super::extrema::{ExtremaSettings, Extremum, Kind, Place, check_curve, extrema, unroll};
use std::ops::Range;

/// Points of a curve; a periodic one is written out three times, and `minima` lie in the middle copy.
#[derive(Debug, Clone)]
pub(super) struct Curve {
    pub(super) x: Vec<f64>,
    pub(super) energies: Vec<f64>,
    /// Distinct points given.
    pub(super) points: usize,
    extrema: Vec<Extremum>,
    /// Indices of the copy in which minima are reported.
    home: Range<usize>,
}

impl Curve {
    pub(super) fn new(
        x: &[f64],
        energies: &[f64],
        settings: &ExtremaSettings,
    ) -> Result<Self, FitError> {
        let plain = ExtremaSettings {
            period: None,
            ..*settings
        };
        match settings.period {
            Some(period) => {
                let rolled = unroll(x, energies, period)?;
                let found = extrema(&rolled.x, &rolled.energies, &plain)?;
                Ok(Self {
                    x: rolled.x,
                    energies: rolled.energies,
                    points: rolled.points,
                    extrema: found,
                    home: rolled.points..2 * rolled.points,
                })
            }
            None => {
                check_curve(x, energies)?;
                Ok(Self {
                    x: x.to_vec(),
                    energies: energies.to_vec(),
                    points: x.len(),
                    extrema: extrema(x, energies, &plain)?,
                    home: 0..x.len(),
                })
            }
        }
    }

    /// The minima that are stationary points, each once.
    pub(super) fn minima(&self) -> impl Iterator<Item = &Extremum> {
        self.extrema.iter().filter(|e| {
            e.kind == Kind::Minimum && e.place == Place::Interior && self.home.contains(&e.index)
        })
    }

    /// Points from the maximum before a minimum to the maximum after it.
    pub(super) fn basin(&self, minimum: &Extremum) -> Range<usize> {
        let tops = || self.extrema.iter().filter(|e| e.kind == Kind::Maximum);
        let from = tops()
            .map(|e| e.index)
            .filter(|&i| i < minimum.index)
            .max()
            .unwrap_or(0);
        let to = tops()
            .map(|e| e.index)
            .filter(|&i| i > minimum.index)
            .min()
            .unwrap_or(self.x.len() - 1);
        from..to + 1
    }
}
