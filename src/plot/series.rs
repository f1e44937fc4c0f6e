//! How a series is drawn, given how closely its points lie.

use super::canvas::{Canvas, Px, Stroke};
use super::frame::Frame;
use super::interpolate;
use super::legend::{Entry, Sample};
use super::style::{SeriesStyle, WHOLE};

/// Smallest marker whose shape can be told.
const SMALLEST: f64 = 1.9;
/// Marker of a lone point in a series drawn without markers.
const LONE: f64 = 2.0;

/// Stroke, marker and ring sizes of one series in one frame.
///
/// Markers tell series apart while there is room for them; where they would crowd, dashes do.
#[derive(Debug, Clone, Copy)]
pub(super) struct SeriesDrawing {
    pub(super) style: SeriesStyle,
    pub(super) stroke: Stroke,
    /// none where points crowd
    pub(super) marker_radius: Option<f64>,
    pub(super) ring_radius: f64,
}

impl SeriesDrawing {
    /// For `points` points across `width` px, with markers of at most `largest` px.
    pub(super) fn new(
        style: SeriesStyle,
        width: f64,
        points: usize,
        line_width: f64,
        largest: f64,
    ) -> Self {
        let pitch = width / points.max(1) as f64;
        let radius = (0.22 * pitch).min(largest);
        let shown = radius >= SMALLEST;
        let dash = if shown { WHOLE } else { style.dash };
        Self {
            style,
            stroke: Stroke::new(style.colour, line_width).dashed(dash),
            marker_radius: shown.then_some(radius),
            ring_radius: (0.55 * pitch).clamp(4.0, 7.0),
        }
    }

    /// Marks the points: all of them, or where they crowd only those that no line touches.
    pub(super) fn draw_markers(
        &self,
        canvas: &mut Canvas,
        frame: &Frame,
        points: &[(f64, Option<f64>)],
        breaks: &[usize],
    ) -> Vec<Px> {
        let mut drawn = Vec::new();
        for run in interpolate::runs(points, breaks) {
            let radius = match self.marker_radius {
                Some(radius) => radius,
                None if run.len() == 1 => LONE,
                None => continue,
            };
            for at in run.iter().map(|&p| frame.px(p)) {
                if frame.area.grown(0.5).holds(at) {
                    canvas.marker(at, radius, self.style.marker, self.style.colour);
                    drawn.push(at);
                }
            }
        }
        drawn
    }

    /// The series' line in a key.
    pub(super) fn entry(&self, name: &str) -> Entry {
        let marker = self.marker_radius.map(|_| self.style.marker);
        Entry::new(Sample::Line(self.stroke, marker), name)
    }
}
