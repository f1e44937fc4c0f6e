//! The tints of an energy map and the colour bar that explains them.

use super::axis::{self, Span, energy, number};
use super::canvas::{Anchor, Canvas, Lettering, Stroke};
use super::colour::{Rgb, ramp};
use super::frame::Frame;
use super::range;
use super::style::{INK, PAPER, SLATE, TICK_SIZE};

/// The tints of a map: bands of equal height from `base` upwards.
pub(super) struct Bands {
    /// lower bounds of all bands but the first, the isolines
    pub(super) thresholds: Vec<f64>,
    pub(super) base: f64,
    pub(super) step: f64,
    pub(super) tints: Vec<Rgb>,
    /// the energy from which the last tint stands for everything, where there is more
    pub(super) open_from: Option<f64>,
}

impl Bands {
    pub(super) fn new(known: &[f64], wanted: Option<f64>) -> Self {
        let span = Span::of(known.iter().copied()).unwrap_or(Span { lo: 0.0, hi: 0.0 });
        let heights: Vec<f64> = known.iter().map(|e| e - span.lo).collect();
        let (cap, step) = range::cap_and_step(&heights, wanted);
        // A flat map (up to rounding of its energies) is one band.
        if step <= 0.0 || span.length() <= 1e-12 * span.lo.abs() {
            return Self {
                thresholds: Vec::new(),
                base: span.lo,
                step: 0.0,
                tints: ramp(4)[1..2].to_vec(),
                open_from: None,
            };
        }
        let base = (span.lo / step + 1e-9).floor() * step;
        let top = span.lo + cap;
        let count = (((top - base) / step - 1e-9).ceil() as usize).clamp(1, 60);
        let last = base + count as f64 * step;
        let open = span.hi > last + 1e-9 * step;
        let bands = count + usize::from(open);
        Self {
            thresholds: (1..bands).map(|k| base + k as f64 * step).collect(),
            base,
            step,
            tints: ramp(bands),
            open_from: open.then_some(last),
        }
    }

    pub(super) fn tint(&self, value: f64) -> Rgb {
        let k = self.thresholds.partition_point(|t| *t <= value);
        self.tints[k.min(self.tints.len() - 1)]
    }

    /// White on the dark tints, ink on the pale ones.
    pub(super) fn line_colour(&self, threshold: usize) -> Rgb {
        if self.tints[threshold + 1].is_dark() {
            PAPER
        } else {
            INK
        }
    }

    pub(super) fn print(&self, value: f64) -> String {
        number(value, axis::decimals_for(self.step))
    }

    /// Values with everything above the last isoline bent towards a plateau: far walls would make
    /// the spline ring, and their height is not shown anyway.
    pub(super) fn compressed(&self, values: &[f64]) -> Vec<f64> {
        let Some(top) = self.open_from else {
            return values.to_vec();
        };
        let room = (top - self.base).max(self.step);
        values
            .iter()
            .map(|&v| {
                if v > top {
                    top + room * (1.0 - (-(v - top) / room).exp())
                } else {
                    v
                }
            })
            .collect()
    }

    /// Bar positions in bands and labels of the bounds, lowest first.
    pub(super) fn labels(&self) -> Vec<(f64, String)> {
        if self.step <= 0.0 {
            return vec![(0.5, energy(self.base))];
        }
        let bounds = self.tints.len() + usize::from(self.open_from.is_none());
        (0..bounds)
            .map(|k| (k as f64, self.print(self.base + k as f64 * self.step)))
            .collect()
    }

    /// Draws the colour bar beside the frame; `bar` is its width and its distance from the frame.
    pub(super) fn draw_bar(&self, canvas: &mut Canvas, frame: &Frame, bar: (f64, f64), unit: &str) {
        let labels = self.labels();
        let left = frame.area.right + bar.1;
        let right = left + bar.0;
        let count = self.tints.len() as f64;
        let (top, bottom) = (frame.area.top, frame.area.bottom);
        let at = |k: f64| bottom - k / count * (bottom - top);
        for (k, tint) in self.tints.iter().enumerate() {
            let (low, high) = (at(k as f64), at(k as f64 + 1.0));
            let open = self.open_from.is_some() && k + 1 == self.tints.len();
            let shape = if open {
                // An arrow: this tint has no upper bound.
                vec![(left, low), (0.5 * (left + right), high), (right, low)]
            } else {
                vec![(left, low), (left, high), (right, high), (right, low)]
            };
            canvas.area(shape, *tint, 1.0);
        }
        let stem = if self.open_from.is_some() {
            at(count - 1.0)
        } else {
            top
        };
        canvas.line(
            &[(left, stem), (left, bottom), (right, bottom), (right, stem)],
            Stroke::new(SLATE, 0.8),
        );
        let tip = if self.open_from.is_some() {
            vec![(left, stem), (0.5 * (left + right), top), (right, stem)]
        } else {
            vec![(left, top), (right, top)]
        };
        canvas.line(&tip, Stroke::new(SLATE, 0.8));
        let skip = (15.0 * count / (bottom - top)).ceil().max(1.0) as usize;
        for (position, label) in labels.iter().step_by(skip) {
            let y = at(*position);
            canvas.segment((right, y), (right + 4.0, y), Stroke::new(SLATE, 0.8));
            canvas.text(
                (right + 8.0, y),
                label,
                Lettering::new(TICK_SIZE, SLATE, Anchor::Start),
            );
        }
        canvas.text(
            (left, top - 15.0),
            unit,
            Lettering::new(TICK_SIZE, SLATE, Anchor::Start),
        );
    }
}
