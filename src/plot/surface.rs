//! Energies over two sweeps as a map: tinted bands, isolines, colour bar and marks.

use super::axis::{Axis, Span, Ticks, energy, ticks};
use super::bands::Bands;
use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::font::{self, Weight};
use super::frame::{Frame, Rect, X_AXIS_ROOM, heading, y_axis_room};
use super::isoline::{FineGrid, Region, regions};
use super::isoline_numbers::draw_isolines;
use super::label::{energy_label, label};
use super::legend::{self, Entry, Sample};
use super::map_grid::{Sorted, cell, failed_cells, filled, map_span};
use super::place::Occupied;
use super::style::{INK, LABEL_SIZE, MARGIN, PAPER, PATH, TICK_SIZE};
use super::{Figure, PlotError, require_finite};

/// Height of the data area, px; its width follows the sweeps.
const HEIGHT: f64 = 440.0;
/// Width of the colour bar and its distance from the data area.
const BAR: (f64, f64) = (16.0, 30.0);

/// Energies of one level over two sweeps.
#[derive(Debug, Clone, PartialEq)]
pub struct SurfaceFigure {
    /// headline; may be empty
    pub title: String,
    /// lines of small print under the headline
    pub notes: Vec<String>,
    /// name of the level
    pub level: String,
    /// first sweep, drawn to the right
    pub x: Axis,
    /// second sweep, drawn upwards
    pub y: Axis,
    /// unit of every energy, as printed
    pub energy_unit: String,
    /// what energies are relative to (see [`CurveFigure::zero`](super::CurveFigure::zero))
    pub zero: String,
    /// values of the first sweep
    pub x_values: Vec<f64>,
    /// values of the second sweep
    pub y_values: Vec<f64>,
    /// energies, `energies[i * y_values.len() + j]` at `(x_values[i], y_values[j])`; none: not
    /// converged
    pub energies: Vec<Option<f64>>,
    /// height above the lowest energy from which all share the last tint; none: chosen so that a
    /// repulsive wall does not set the scale
    pub cap: Option<f64>,
    /// minima to be marked
    pub minima: Vec<SurfaceMark>,
    /// saddle points to be marked
    pub saddles: Vec<SurfaceMark>,
    /// valley floor or another path, as `(x, y)` along it
    pub path: Vec<(f64, f64)>,
    /// grid indices `(i, j)` of points with a finding, ringed
    pub findings: Vec<(usize, usize)>,
}

/// A marked place on a surface.
#[derive(Debug, Clone, PartialEq)]
pub struct SurfaceMark {
    /// value of the first sweep
    pub x: f64,
    /// value of the second sweep
    pub y: f64,
    /// energy
    pub energy: f64,
    /// words beside the mark; none: both values and the energy with their units
    pub text: Option<String>,
}

impl SurfaceFigure {
    /// Draws the figure. Between points the map shows a cubic spline; cells without a converged
    /// energy are hatched.
    ///
    /// # Errors
    /// [`PlotError::Length`] if the energies do not fill the grid, [`PlotError::NotFinite`],
    /// [`PlotError::Isolines`], [`PlotError::Drawing`].
    pub fn draw(&self) -> Result<Figure, PlotError> {
        self.check()?;
        let sorted = Sorted::new(&self.x_values, &self.y_values, &self.energies);
        let known: Vec<f64> = sorted.energies.iter().flatten().copied().collect();
        let bands = Bands::new(&known, self.cap);

        let x = map_span(&sorted.x);
        let y = map_span(&sorted.y);
        let (width, height) = self.proportions(x, y);
        let y_ticks = ticks(y, 8, self.y.in_degrees());
        let bar_labels = bands.labels();
        let bar_room = bar_labels
            .iter()
            .map(|l| font::width(&l.1, TICK_SIZE, Weight::Regular))
            .fold(40.0, f64::max);
        let left = MARGIN + y_axis_room(&y_ticks);
        let sheet = left + width + BAR.1 + BAR.0 + 8.0 + bar_room + MARGIN;
        let mut canvas = Canvas::new(sheet, height);
        let top = heading(&mut canvas, sheet, &self.title, &self.small_print(&bands)) + 26.0;
        let frame = Frame {
            area: Rect {
                left,
                top,
                right: left + width,
                bottom: top + height,
            },
            x,
            y,
        };
        let failed = failed_cells(&frame, &sorted);
        let lines = self.draw_tints(&mut canvas, &frame, &sorted, &bands)?;
        for cell in &failed {
            legend::hatch(&mut canvas, *cell);
        }
        let mut occupied = Occupied::default();
        self.note_marks(&frame, &mut occupied);
        let lettered = draw_isolines(&mut canvas, &frame, &lines, &bands, &failed, &mut occupied);
        frame_axes(&mut canvas, &frame, &y_ticks, self);
        self.draw_points(&mut canvas, &frame, &sorted, &lettered);
        self.draw_marks(&mut canvas, &frame, &mut occupied);
        if known.is_empty() {
            let at = (
                0.5 * (left + frame.area.right),
                0.5 * (top + frame.area.bottom),
            );
            let words = "No point has a converged energy";
            let place = (at, (0.0, -1.0));
            label(&mut canvas, frame.area, &mut occupied, place, words, INK);
        } else {
            bands.draw_bar(&mut canvas, &frame, BAR, &self.energy_unit);
        }
        let foot = frame.area.bottom + X_AXIS_ROOM + 12.0;
        let rows = legend::draw_rows(
            &mut canvas,
            (left, foot),
            sheet - left - MARGIN,
            &self.legend_entries(!failed.is_empty()),
        );
        canvas.resize(sheet, foot + rows + MARGIN - 12.0);
        canvas.finish(&self.name(), &self.description(&known, &bands))
    }

    fn check(&self) -> Result<(), PlotError> {
        let expected = self.x_values.len() * self.y_values.len();
        if self.energies.len() != expected {
            return Err(PlotError::Length {
                what: "energies of the surface".to_owned(),
                expected,
                found: self.energies.len(),
            });
        }
        require_finite("values of the first sweep", self.x_values.iter().copied())?;
        require_finite("values of the second sweep", self.y_values.iter().copied())?;
        require_finite(
            "energies of the surface",
            self.energies.iter().map(|e| e.unwrap_or(0.0)),
        )?;
        require_finite(
            "marks of the surface",
            self.minima
                .iter()
                .chain(&self.saddles)
                .flat_map(|m| [m.x, m.y, m.energy]),
        )?;
        require_finite(
            "path on the surface",
            self.path.iter().flat_map(|p| [p.0, p.1]),
        )
    }

    /// Width and height of the data area: one scale for both sweeps where they share a unit.
    fn proportions(&self, x: Span, y: Span) -> (f64, f64) {
        let aspect = if self.x.unit == self.y.unit {
            (x.length() / y.length()).clamp(0.7, 1.5)
        } else {
            1.15
        };
        if aspect > 1.3 {
            (1.3 * HEIGHT, 1.3 * HEIGHT / aspect)
        } else {
            (aspect * HEIGHT, HEIGHT)
        }
    }

    /// Draws the tints; returns the isolines of each threshold in data coordinates.
    fn draw_tints(
        &self,
        canvas: &mut Canvas,
        frame: &Frame,
        sorted: &Sorted,
        bands: &Bands,
    ) -> Result<Vec<Vec<Vec<Px>>>, PlotError> {
        let filled = filled(sorted);
        let Some(grid) = filled
            .as_ref()
            .map(|f| bands.compressed(f))
            .and_then(|values| FineGrid::refine(&sorted.x, &sorted.y, &values))
        else {
            // A single row or column has no isolines: plain cells.
            for (k, value) in sorted.energies.iter().enumerate() {
                if let Some(value) = value {
                    let (i, j) = (k / sorted.y.len(), k % sorted.y.len());
                    let rect = cell(frame, sorted, i, j);
                    // Slightly enlarged, so that no seam shows between cells.
                    canvas.area(rect.grown(0.2).corners(), bands.tint(*value), 1.0);
                }
            }
            return Ok(Vec::new());
        };
        let regions = regions(&grid, &bands.thresholds)?;
        let area = frame.area;
        let to_px = |(u, v): (f64, f64)| {
            (
                area.left + u * area.width(),
                area.bottom - v * area.height(),
            )
        };
        canvas.area(area.corners(), bands.tints[0], 1.0);
        for (Region { outlines, .. }, tint) in regions.iter().zip(&bands.tints[1..]) {
            for outline in outlines {
                canvas.area(outline.iter().map(|&p| to_px(p)).collect(), *tint, 1.0);
            }
        }
        Ok(regions
            .iter()
            .map(|r| {
                r.lines
                    .iter()
                    .map(|l| l.iter().map(|&p| to_px(p)).collect())
                    .collect()
            })
            .collect())
    }

    fn note_marks(&self, frame: &Frame, occupied: &mut Occupied) {
        let path: Vec<Px> = self.path.iter().map(|&p| frame.px(p)).collect();
        occupied.add_line(&path);
        for mark in self.minima.iter().chain(&self.saddles) {
            let (x, y) = frame.px((mark.x, mark.y));
            occupied.add_box(
                Rect {
                    left: x,
                    right: x,
                    top: y,
                    bottom: y,
                }
                .grown(6.0),
            );
        }
        for &(i, j) in &self.findings {
            if let (Some(&x), Some(&y)) = (self.x_values.get(i), self.y_values.get(j)) {
                let (x, y) = frame.px((x, y));
                occupied.add_box(
                    Rect {
                        left: x,
                        right: x,
                        top: y,
                        bottom: y,
                    }
                    .grown(7.0),
                );
            }
        }
    }

    /// The computed points themselves, so that the reader sees what is interpolated; none beside
    /// an isoline's number, where a dot would read as a decimal point.
    fn draw_points(&self, canvas: &mut Canvas, frame: &Frame, sorted: &Sorted, lettered: &[Rect]) {
        if !self.shows_points() {
            return;
        }
        for (k, value) in sorted.energies.iter().enumerate() {
            let at = frame.px((sorted.x[k / sorted.y.len()], sorted.y[k % sorted.y.len()]));
            if value.is_some() && !lettered.iter().any(|r| r.grown(3.0).holds(at)) {
                legend::map_dot(canvas, at);
            }
        }
    }

    fn draw_marks(&self, canvas: &mut Canvas, frame: &Frame, occupied: &mut Occupied) {
        for (colour, width) in [(PAPER, 4.4), (PATH, 2.2)] {
            for piece in frame.clipped(&self.path) {
                canvas.line(&piece, Stroke::new(colour, width));
            }
        }
        let cells = self.x_values.len().max(self.y_values.len()).max(1) as f64;
        let ring = (0.55 * frame.area.width() / cells).clamp(3.5, 7.0);
        for &(i, j) in &self.findings {
            if let (Some(&x), Some(&y)) = (self.x_values.get(i), self.y_values.get(j)) {
                legend::finding_ring(canvas, frame.px((x, y)), ring);
            }
        }
        let inside = |m: &&SurfaceMark| frame.x.holds(m.x) && frame.y.holds(m.y);
        for mark in self.saddles.iter().filter(inside) {
            legend::saddle(canvas, frame.px((mark.x, mark.y)));
        }
        for mark in self.minima.iter().filter(inside) {
            legend::minimum(canvas, frame.px((mark.x, mark.y)), INK);
        }
        for mark in self.saddles.iter().chain(&self.minima).filter(inside) {
            let at = frame.px((mark.x, mark.y));
            label(
                canvas,
                frame.area,
                occupied,
                (at, (1.0, 0.0)),
                &self.words(mark),
                INK,
            );
        }
    }

    fn words(&self, mark: &SurfaceMark) -> String {
        mark.text.clone().unwrap_or_else(|| {
            format!(
                "{}, {}: {} {}",
                self.x.reading(mark.x),
                self.y.reading(mark.y),
                energy(mark.energy),
                self.energy_unit
            )
        })
    }

    fn small_print(&self, bands: &Bands) -> Vec<String> {
        let mut notes = self.notes.clone();
        let mut scale = energy_label(&self.zero, &self.energy_unit);
        if !self.level.is_empty() {
            scale = format!("{}. {scale}", self.level);
        }
        if bands.step > 0.0 {
            scale.push_str(&format!("; isolines every {}", bands.print(bands.step)));
        }
        if let Some(from) = bands.open_from {
            scale.push_str(&format!("; one tint for all above {}", bands.print(from)));
        }
        scale.push('.');
        notes.push(scale);
        notes
    }

    /// Dots at computed points, unless they would crowd.
    fn shows_points(&self) -> bool {
        self.energies.len() <= 2500
    }

    fn legend_entries(&self, failed: bool) -> Vec<Entry> {
        let mut entries = Vec::new();
        if self.shows_points() && self.energies.iter().any(Option::is_some) {
            entries.push(Entry::new(Sample::Dot, "computed point"));
        }
        if !self.minima.is_empty() {
            entries.push(Entry::new(Sample::Minimum(INK), "minimum"));
        }
        if !self.saddles.is_empty() {
            entries.push(Entry::new(Sample::Saddle, "saddle point"));
        }
        if self.path.len() > 1 {
            let stroke = Stroke::new(PATH, 2.2);
            entries.push(Entry::new(Sample::Line(stroke, None), "valley floor"));
        }
        if failed {
            entries.push(Entry::new(Sample::Hatch, "not converged, no energy"));
        }
        if !self.findings.is_empty() {
            entries.push(Entry::new(Sample::Ring, "finding, see the report"));
        }
        entries
    }

    fn name(&self) -> String {
        if self.title.trim().is_empty() {
            format!("Energy over {} and {}", self.x.quantity, self.y.quantity)
        } else {
            self.title.clone()
        }
    }

    fn description(&self, known: &[f64], bands: &Bands) -> String {
        let mut text = format!(
            "Map of {} over {} (right) and {} (up). {} of {} points converged",
            energy_label(&self.zero, &self.energy_unit),
            self.x.label(),
            self.y.label(),
            known.len(),
            self.energies.len(),
        );
        if let Some(span) = Span::of(known.iter().copied()) {
            text.push_str(&format!(
                ", energies from {} to {} {}",
                energy(span.lo),
                energy(span.hi),
                self.energy_unit
            ));
        }
        if let Some(from) = bands.open_from {
            text.push_str(&format!("; all above {} drawn alike", bands.print(from)));
        }
        for mark in &self.minima {
            text.push_str(&format!("; minimum at {}", self.words(mark)));
        }
        for mark in &self.saddles {
            text.push_str(&format!("; saddle point at {}", self.words(mark)));
        }
        text.push('.');
        text
    }
}

fn frame_axes(canvas: &mut Canvas, frame: &Frame, y_ticks: &Ticks, figure: &SurfaceFigure) {
    frame.draw_y_ticks(canvas, y_ticks, false);
    frame.draw_x_axis(canvas, &frame.x_ticks(&figure.x), Some(&figure.x));
    canvas.text(
        (MARGIN, frame.area.top - 15.0),
        &figure.y.label(),
        Lettering::new(LABEL_SIZE, INK, Anchor::Start),
    );
}
