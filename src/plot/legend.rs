//! Keys to the lines and marks of a figure.

use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::colour::Rgb;
use super::font::{self, Weight};
use super::frame::Rect;
use super::style::{INK, Marker, PAPER, SLATE, TICK_SIZE};

/// Height of one row, px.
const ROW: f64 = 18.0;
/// Width of the sample before the words.
const SAMPLE: f64 = 34.0;
/// Longest words, px; longer ones end in an ellipsis.
const LONGEST: f64 = 250.0;

/// Radius of the dot at a computed point of a map, and of the pale rim that shows it on dark tints.
const DOT: f64 = 1.1;
const DOT_RIM: f64 = 1.8;

/// The sample shown beside the words.
#[derive(Debug, Clone, Copy)]
pub(super) enum Sample {
    Line(Stroke, Option<Marker>),
    /// minimum
    Minimum(Rgb),
    /// words alone
    None,
    /// point without a converged energy
    Tick(Rgb),
    /// finding
    Ring,
    /// map cell without a converged energy
    Hatch,
    Saddle,
    /// computed point of a map
    Dot,
}

/// Sample and words.
#[derive(Debug, Clone)]
pub(super) struct Entry {
    pub(super) sample: Sample,
    pub(super) words: String,
}

impl Entry {
    pub(super) fn new(sample: Sample, words: impl Into<String>) -> Self {
        Self {
            sample,
            words: font::shorten(&words.into(), TICK_SIZE, Weight::Regular, LONGEST),
        }
    }

    fn width(&self) -> f64 {
        SAMPLE + 7.0 + font::width(&self.words, TICK_SIZE, Weight::Regular)
    }

    fn draw(&self, canvas: &mut Canvas, (x, y): Px) {
        draw_sample(canvas, self.sample, (x, y));
        canvas.text(
            (x + SAMPLE + 7.0, y),
            &self.words,
            Lettering::new(TICK_SIZE, INK, Anchor::Start),
        );
    }
}

/// Size of the entries one below the other.
pub(super) fn column_size(entries: &[Entry]) -> (f64, f64) {
    let width = entries.iter().map(Entry::width).fold(0.0, f64::max);
    (width + 12.0, ROW * entries.len() as f64 + 6.0)
}

/// Draws the entries one below the other into a box of `column_size`.
pub(super) fn draw_column(canvas: &mut Canvas, rect: Rect, entries: &[Entry]) {
    for (k, entry) in entries.iter().enumerate() {
        let y = rect.top + 3.0 + ROW * (k as f64 + 0.5);
        entry.draw(canvas, (rect.left + 6.0, y));
    }
}

/// Draws the entries in rows of at most `width`, the first row's middle at `at`; returns the
/// height used.
pub(super) fn draw_rows(canvas: &mut Canvas, at: Px, width: f64, entries: &[Entry]) -> f64 {
    let (mut x, mut y) = at;
    for entry in entries {
        if x > at.0 && x + entry.width() > at.0 + width {
            x = at.0;
            y += ROW;
        }
        entry.draw(canvas, (x, y));
        x += entry.width() + 22.0;
    }
    if entries.is_empty() {
        0.0
    } else {
        y - at.1 + ROW
    }
}

/// Draws a sample in the space of a legend's row, left end at `(x, y)`.
pub(super) fn draw_sample(canvas: &mut Canvas, sample: Sample, (x, y): Px) {
    let middle = (x + 0.5 * SAMPLE, y);
    match sample {
        Sample::Line(stroke, marker) => {
            canvas.segment((x, y), (x + SAMPLE, y), stroke);
            if let Some(marker) = marker {
                canvas.marker(middle, 3.2, marker, stroke.colour);
            }
        }
        Sample::Minimum(colour) => minimum(canvas, middle, colour),
        Sample::None => {}
        Sample::Tick(colour) => failure_tick(canvas, (middle.0, y + 4.0), colour),
        Sample::Ring => finding_ring(canvas, middle, 7.0),
        Sample::Hatch => hatch(
            canvas,
            Rect {
                left: middle.0 - 10.0,
                top: y - 6.0,
                right: middle.0 + 10.0,
                bottom: y + 6.0,
            },
        ),
        Sample::Saddle => saddle(canvas, middle),
        Sample::Dot => map_dot(canvas, middle),
    }
}

/// A tick for a point that did not converge, standing on `foot`.
pub(super) fn failure_tick(canvas: &mut Canvas, foot: Px, colour: Rgb) {
    canvas.segment(foot, (foot.0, foot.1 - 8.0), Stroke::new(colour, 2.2));
}

/// The mark of a computed point of a map.
pub(super) fn map_dot(canvas: &mut Canvas, centre: Px) {
    canvas.disc(centre, DOT_RIM, PAPER);
    canvas.disc(centre, DOT, INK);
}

/// The ring round a point with a finding.
pub(super) fn finding_ring(canvas: &mut Canvas, centre: Px, radius: f64) {
    canvas.ring(centre, radius, Stroke::new(PAPER, 3.2));
    canvas.ring(centre, radius, Stroke::new(INK, 1.4));
}

/// The mark of a minimum: a diamond around white.
pub(super) fn minimum(canvas: &mut Canvas, at: Px, colour: Rgb) {
    canvas.marker(at, 5.2, Marker::Diamond, colour);
    canvas.marker(at, 2.0, Marker::Diamond, PAPER);
}

/// The mark of a saddle point: a cross with a pale casing.
pub(super) fn saddle(canvas: &mut Canvas, (x, y): Px) {
    for (colour, width, r) in [(PAPER, 4.6, 5.8), (INK, 2.0, 5.0)] {
        canvas.segment((x - r, y - r), (x + r, y + r), Stroke::new(colour, width));
        canvas.segment((x - r, y + r), (x + r, y - r), Stroke::new(colour, width));
    }
}

/// White with slanting lines: nothing is known here. Lines of neighbouring boxes meet.
pub(super) fn hatch(canvas: &mut Canvas, rect: Rect) {
    const PITCH: f64 = 5.0;
    canvas.area(rect.corners(), PAPER, 1.0);
    let first = ((rect.left + rect.top) / PITCH).ceil() as i64;
    let last = ((rect.right + rect.bottom) / PITCH).floor() as i64;
    for k in first..=last {
        let sum = k as f64 * PITCH;
        let left = rect.left.max(sum - rect.bottom);
        let right = rect.right.min(sum - rect.top);
        canvas.segment(
            (left, sum - left),
            (right, sum - right),
            Stroke::new(SLATE, 0.7),
        );
    }
}
