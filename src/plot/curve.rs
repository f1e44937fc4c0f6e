//! Energies over one sweep, one line per level.

use super::axis::{Axis, Span, Ticks, energy, ticks};
use super::canvas::{Anchor, Canvas, Lettering, Stroke};
use super::font::{self, Weight};
use super::frame::{Frame, Rect, X_AXIS_ROOM, heading, y_axis_room};
use super::label::{energy_label, label};
use super::legend::{self, Entry, Sample};
use super::place::Occupied;
use super::series::SeriesDrawing;
use super::style::{
    DOTS, FIT_DASHES, INK, LABEL_SIZE, MARGIN, Marker, SLATE, SeriesStyle, TICK_SIZE, WHOLE, series,
};
use super::{Figure, PlotError, interpolate, range, require_finite};

/// Width of the whole sheet, px; a legend that finds no free place inside widens it.
const WIDTH: f64 = 760.0;
/// Height of the data area.
const HEIGHT: f64 = 380.0;
/// Room at the foot of the data area for each level's ticks of failed points.
const LANE: f64 = 10.0;

/// Energies over one sweep.
#[derive(Debug, Clone, PartialEq)]
pub struct CurveFigure {
    /// headline; may be empty
    pub title: String,
    /// lines of small print under the headline: conditions, cautions
    pub notes: Vec<String>,
    /// what is swept
    pub sweep: Axis,
    /// unit of every energy below, as printed (`kJ/mol`, `cm⁻¹`)
    pub energy_unit: String,
    /// what energies are relative to, ending "Energy relative to …", such as
    /// `the lowest point of RHF/6-31G*`
    pub zero: String,
    /// one curve each
    pub levels: Vec<CurveLevel>,
}

/// One level's curve and what belongs to it. Coordinates in the sweep's unit, energies in the
/// figure's.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct CurveLevel {
    /// name in the legend
    pub name: String,
    /// swept value and energy in the order of the sweep; no energy: not converged
    pub points: Vec<(f64, Option<f64>)>,
    /// indices of points that no line joins to the point before them (the state changes between)
    pub breaks: Vec<usize>,
    /// a higher or rival solution of the same level, drawn thin
    pub second_solution: Vec<(f64, Option<f64>)>,
    /// minima to be marked with their values
    pub minima: Vec<CurveMark>,
    /// energy of the separated parts
    pub limit: Option<CurveLimit>,
    /// fitted curves, drawn as broad pale dashes under the points
    pub fits: Vec<CurveFit>,
    /// swept value where an instability of the solution sets in
    pub onset: Option<f64>,
    /// indices of points with a finding, ringed
    pub findings: Vec<usize>,
}

/// A marked place on a curve.
#[derive(Debug, Clone, PartialEq)]
pub struct CurveMark {
    /// swept value
    pub x: f64,
    /// energy
    pub energy: f64,
    /// words beside the mark; none: the swept value with its unit
    pub text: Option<String>,
}

/// The energy of the separated parts.
#[derive(Debug, Clone, PartialEq)]
pub struct CurveLimit {
    /// energy
    pub energy: f64,
    /// words at the line; none: "separated parts" and the energy
    pub text: Option<String>,
}

/// A fitted curve, as densely sampled as it is to be drawn.
#[derive(Debug, Clone, PartialEq)]
pub struct CurveFit {
    /// name in the legend, such as `Morse fit`
    pub name: String,
    /// swept value and energy in rising order of the swept value
    pub points: Vec<(f64, f64)>,
}

impl CurveFigure {
    /// Draws the figure.
    ///
    /// The range of energies follows the wells and limits, not a repulsive wall; neighbouring
    /// converged points are joined by a cubic spline, gaps and breaks are left open.
    ///
    /// # Errors
    /// [`PlotError::NotFinite`] for a value that is no number; [`PlotError::Drawing`].
    pub fn draw(&self) -> Result<Figure, PlotError> {
        self.check()?;
        let mut canvas = Canvas::new(WIDTH, HEIGHT);
        let top = heading(&mut canvas, WIDTH, &self.title, &self.notes);
        let lanes = self.levels.iter().filter(|l| l.fails()).count() as f64;
        let y = self.energy_span(lanes);
        let nothing = self.levels.iter().all(|l| l.converged().is_empty());
        let mut y_ticks = ticks(y, 7, false);
        if nothing {
            y_ticks.values.clear();
        }
        let area = Rect {
            left: MARGIN + y_axis_room(&y_ticks),
            top: top + 26.0,
            right: WIDTH - MARGIN,
            bottom: top + 26.0 + HEIGHT,
        };
        let x = range::sweep_span(self.levels.iter().flat_map(|l| {
            l.points
                .iter()
                .map(|p| p.0)
                .chain(l.minima.iter().map(|m| m.x))
        }));
        let frame = Frame { area, x, y };
        canvas.resize(WIDTH, area.bottom + X_AXIS_ROOM + MARGIN - 4.0);
        self.draw_axes(&mut canvas, &frame, &y_ticks);

        let mut occupied = Occupied::default();
        for (k, level) in self.levels.iter().enumerate() {
            level.draw_lines(&mut canvas, &frame, &mut occupied, series(k));
        }
        let mut lane = 0.0;
        for (k, level) in self.levels.iter().enumerate() {
            level.draw_marks(&mut canvas, &frame, &mut occupied, series(k), lane);
            if level.fails() {
                lane += 1.0;
            }
        }
        for (k, level) in self.levels.iter().enumerate() {
            self.label_level(&mut canvas, &frame, &mut occupied, level, series(k));
        }
        if nothing {
            canvas.text(
                (
                    0.5 * (area.left + area.right),
                    0.5 * (area.top + area.bottom),
                ),
                "No point has a converged energy",
                Lettering::new(LABEL_SIZE, SLATE, Anchor::Middle),
            );
        }
        self.draw_legend(&mut canvas, &frame, &occupied);
        canvas.finish(&self.name(), &self.description(&frame))
    }

    fn check(&self) -> Result<(), PlotError> {
        for level in &self.levels {
            let name = &level.name;
            require_finite(
                &format!("swept values of {name}"),
                level.points.iter().map(|p| p.0),
            )?;
            // A missing energy counts as 0 here, so that the index reported is the point's.
            require_finite(
                &format!("energies of {name}"),
                level.points.iter().map(|p| p.1.unwrap_or(0.0)),
            )?;
            require_finite(
                &format!("second solution of {name}"),
                level
                    .second_solution
                    .iter()
                    .flat_map(|p| [p.0, p.1.unwrap_or(0.0)]),
            )?;
            require_finite(
                &format!("minima of {name}"),
                level.minima.iter().flat_map(|m| [m.x, m.energy]),
            )?;
            require_finite(
                &format!("fits of {name}"),
                level
                    .fits
                    .iter()
                    .flat_map(|f| f.points.iter().flat_map(|p| [p.0, p.1])),
            )?;
            require_finite(
                &format!("limit or onset of {name}"),
                level.limit.iter().map(|l| l.energy).chain(level.onset),
            )?;
        }
        Ok(())
    }

    /// The range of energies shown. Room for the ticks of failed points is added below.
    fn energy_span(&self, lanes: f64) -> Span {
        let curves: Vec<Vec<(f64, f64)>> = self.levels.iter().map(CurveLevel::converged).collect();
        let second = self
            .levels
            .iter()
            .flat_map(|l| &l.second_solution)
            .filter_map(|p| p.1);
        let all = Span::of(curves.iter().flatten().map(|p| p.1).chain(second));
        let Some(all) = all else {
            return Span { lo: 0.0, hi: 1.0 };
        };
        let shown = range::ceiling(&curves, all.lo);
        let mut span = Span {
            lo: all.lo,
            hi: shown,
        };
        for limit in self.levels.iter().filter_map(|l| l.limit.as_ref()) {
            // A limit far above a narrow sweep would squash it; it is then named at the border.
            if limit.energy - all.lo <= 2.5 * span.length() {
                span = span.with(limit.energy);
            }
        }
        // Equal energies, up to rounding, make a level line in the middle.
        let span = if span.length() > 1e-9 * (1.0 + all.lo.abs()) {
            span
        } else {
            span.at_least(1.0)
        };
        let foot = (12.0 + LANE * lanes) / HEIGHT;
        span.padded(foot / (1.0 - foot - 0.06), 0.08)
    }

    fn draw_axes(&self, canvas: &mut Canvas, frame: &Frame, y_ticks: &Ticks) {
        frame.draw_y_axis(canvas, y_ticks);
        frame.draw_x_axis(canvas, &frame.x_ticks(&self.sweep), Some(&self.sweep));
        canvas.text(
            (MARGIN, frame.area.top - 15.0),
            &font::shorten(
                &self.energy_label(),
                LABEL_SIZE,
                Weight::Regular,
                WIDTH - 2.0 * MARGIN,
            ),
            Lettering::new(LABEL_SIZE, INK, Anchor::Start),
        );
    }

    fn energy_label(&self) -> String {
        energy_label(&self.zero, &self.energy_unit)
    }

    fn label_level(
        &self,
        canvas: &mut Canvas,
        frame: &Frame,
        occupied: &mut Occupied,
        level: &CurveLevel,
        style: SeriesStyle,
    ) {
        let ink = style.colour.legible();
        for minimum in &level.minima {
            let at = frame.px((minimum.x, minimum.energy));
            if !frame.area.holds(at) {
                continue;
            }
            let words = minimum
                .text
                .clone()
                .unwrap_or_else(|| self.sweep.reading(minimum.x));
            label(canvas, frame.area, occupied, (at, (0.0, -1.0)), &words, ink);
        }
        if let Some(limit) = &level.limit {
            let words = limit.text.clone().unwrap_or_else(|| {
                format!(
                    "separated parts {} {}",
                    energy(limit.energy),
                    self.energy_unit
                )
            });
            let y = frame.y_px(limit.energy);
            if frame.y.holds(limit.energy) {
                let width = font::width(&words, TICK_SIZE, Weight::Regular);
                let at = (frame.area.right - 0.5 * width - 8.0, y);
                label(canvas, frame.area, occupied, (at, (0.0, -1.0)), &words, ink);
            } else {
                let arrow = if y < frame.area.top { "↑" } else { "↓" };
                let edge = y.clamp(frame.area.top, frame.area.bottom);
                let at = (frame.area.right - 60.0, edge);
                let words = format!("{arrow} {words}");
                label(canvas, frame.area, occupied, (at, (0.0, 1.0)), &words, ink);
            }
        }
        if let Some(onset) = level.onset.filter(|x| frame.x.holds(*x)) {
            let foot = (frame.x_px(onset), frame.area.bottom - 26.0);
            let words = format!("instability from {}", self.sweep.reading(onset));
            label(
                canvas,
                frame.area,
                occupied,
                (foot, (1.0, 0.0)),
                &words,
                ink,
            );
        }
    }

    fn draw_legend(&self, canvas: &mut Canvas, frame: &Frame, occupied: &Occupied) {
        let entries = self.legend_entries(frame);
        if entries.is_empty() {
            return;
        }
        let size = legend::column_size(&entries);
        if let Some(rect) = occupied.free_corner(frame.area.grown(-2.0), size) {
            legend::draw_column(canvas, rect, &entries);
        } else {
            let left = WIDTH - MARGIN + 10.0;
            let rect = Rect {
                left,
                top: frame.area.top,
                right: left + size.0,
                bottom: frame.area.top + size.1,
            };
            canvas.grow(rect.right + MARGIN - 6.0, rect.bottom + MARGIN);
            legend::draw_column(canvas, rect, &entries);
        }
    }

    fn legend_entries(&self, frame: &Frame) -> Vec<Entry> {
        let mut entries = Vec::new();
        for (k, level) in self.levels.iter().enumerate() {
            let style = series(k);
            entries.push(level.drawing(frame, style).entry(&level.name));
            if level.second_solution.iter().any(|p| p.1.is_some()) {
                entries.push(Entry::new(
                    Sample::Line(second_stroke(style), None),
                    format!("{}, second solution", level.name),
                ));
            }
            for (f, fit) in level.fits.iter().enumerate() {
                let words = if self.levels.len() > 1 {
                    format!("{}, {}", level.name, fit.name)
                } else {
                    fit.name.clone()
                };
                entries.push(Entry::new(Sample::Line(fit_stroke(style, f), None), words));
            }
        }
        let mut limits = self.levels.iter().filter_map(|l| l.limit.as_ref());
        if limits.any(|l| frame.y.holds(l.energy)) {
            let stroke = Stroke::new(SLATE, 1.5).dashed(DOTS);
            entries.push(Entry::new(Sample::Line(stroke, None), "separated parts"));
        }
        let failing: Vec<usize> = (0..self.levels.len())
            .filter(|&k| self.levels[k].fails())
            .collect();
        if let Some(&first) = failing.first() {
            let colour = if failing.len() == 1 {
                series(first).colour
            } else {
                SLATE
            };
            entries.push(Entry::new(Sample::Tick(colour), "not converged, no energy"));
        }
        if self.levels.iter().any(|l| !l.findings.is_empty()) {
            entries.push(Entry::new(Sample::Ring, "finding, see the report"));
        }
        entries
    }

    fn name(&self) -> String {
        if self.title.trim().is_empty() {
            format!("Energy over {}", self.sweep.quantity)
        } else {
            self.title.clone()
        }
    }

    fn description(&self, frame: &Frame) -> String {
        let mut text = format!("{} over {}.", self.energy_label(), self.sweep.label());
        for level in &self.levels {
            let converged = level.converged().len();
            text.push_str(&format!(
                " {}: {converged} of {} points converged",
                level.name,
                level.points.len()
            ));
            for m in &level.minima {
                text.push_str(&format!(
                    "; minimum at {}, {} {}",
                    self.sweep.reading(m.x),
                    energy(m.energy),
                    self.energy_unit
                ));
            }
            if let Some(limit) = &level.limit {
                text.push_str(&format!(
                    "; separated parts at {} {}",
                    energy(limit.energy),
                    self.energy_unit
                ));
            }
            if !level.findings.is_empty() {
                text.push_str(&format!("; {} points with findings", level.findings.len()));
            }
            let hidden = level
                .points
                .iter()
                .filter(|p| p.1.is_some_and(|e| e > frame.y.hi));
            let hidden = hidden.count();
            if hidden > 0 {
                text.push_str(&format!("; {hidden} points above the range shown"));
            }
            text.push('.');
        }
        text
    }
}

fn second_stroke(style: SeriesStyle) -> Stroke {
    Stroke::new(style.colour, 0.9).faint(0.8)
}

/// Broad and pale, so that a good fit shows although it lies on its points.
fn fit_stroke(style: SeriesStyle, index: usize) -> Stroke {
    Stroke::new(style.colour, 5.5)
        .faint(0.38)
        .dashed(FIT_DASHES[index % FIT_DASHES.len()])
}

impl CurveLevel {
    fn converged(&self) -> Vec<(f64, f64)> {
        self.points
            .iter()
            .filter_map(|&(x, e)| Some((x, e?)))
            .collect()
    }

    fn fails(&self) -> bool {
        self.points.iter().any(|p| p.1.is_none())
    }

    fn drawing(&self, frame: &Frame, style: SeriesStyle) -> SeriesDrawing {
        SeriesDrawing::new(style, frame.area.width(), self.points.len(), 1.9, 3.2)
    }

    fn draw_lines(
        &self,
        canvas: &mut Canvas,
        frame: &Frame,
        occupied: &mut Occupied,
        style: SeriesStyle,
    ) {
        if let Some(limit) = self.limit.as_ref().filter(|l| frame.y.holds(l.energy)) {
            let y = frame.y_px(limit.energy);
            let line = [(frame.area.left, y), (frame.area.right, y)];
            canvas.line(&line, Stroke::new(style.colour, 1.5).dashed(DOTS));
            occupied.add_line(&line);
        }
        let draw = |canvas: &mut Canvas, occupied: &mut Occupied, line: &[(f64, f64)], stroke| {
            frame.draw_line(canvas, line, stroke);
            for piece in frame.clipped(line) {
                occupied.add_line(&piece);
            }
        };
        for (k, fit) in self.fits.iter().enumerate() {
            draw(canvas, occupied, &fit.points, fit_stroke(style, k));
        }
        for run in interpolate::runs(&self.second_solution, &[]) {
            let line = interpolate::smooth(&run, pieces(frame, &run));
            draw(canvas, occupied, &line, second_stroke(style));
        }
        let stroke = self.drawing(frame, style).stroke;
        for run in interpolate::runs(&self.points, &self.breaks) {
            let line = interpolate::smooth(&run, pieces(frame, &run));
            draw(canvas, occupied, &line, stroke);
        }
    }

    fn draw_marks(
        &self,
        canvas: &mut Canvas,
        frame: &Frame,
        occupied: &mut Occupied,
        style: SeriesStyle,
        lane: f64,
    ) {
        if let Some(onset) = self.onset.filter(|x| frame.x.holds(*x)) {
            let x = frame.x_px(onset);
            let line = [(x, frame.area.bottom), (x, frame.area.bottom - 46.0)];
            canvas.line(&line, Stroke::new(style.colour, 1.2).dashed(WHOLE));
            canvas.marker(
                (x, frame.area.bottom - 46.0),
                3.4,
                Marker::Triangle,
                style.colour,
            );
            occupied.add_line(&line);
        }
        let drawing = self.drawing(frame, style);
        let foot = frame.area.bottom - LANE * lane;
        for at in drawing.draw_markers(canvas, frame, &self.points, &self.breaks) {
            occupied.add_point(at);
        }
        for &(x, _) in self.points.iter().filter(|p| p.1.is_none()) {
            let at = (frame.x_px(x), foot);
            legend::failure_tick(canvas, at, style.colour);
            occupied.add_line(&[at, (at.0, at.1 - 8.0)]);
        }
        for &(x, value) in self.findings.iter().filter_map(|&i| self.points.get(i)) {
            let at = match value {
                Some(e) => frame.px((x, e)),
                None => (frame.x_px(x), foot - 4.0),
            };
            if frame.area.grown(8.0).holds(at) {
                legend::finding_ring(canvas, at, drawing.ring_radius);
                occupied.add_box(
                    Rect {
                        left: at.0,
                        right: at.0,
                        top: at.1,
                        bottom: at.1,
                    }
                    .grown(7.0),
                );
            }
        }
        for minimum in &self.minima {
            let at = frame.px((minimum.x, minimum.energy));
            if frame.area.holds(at) {
                legend::minimum(canvas, at, style.colour);
                occupied.add_box(
                    Rect {
                        left: at.0,
                        right: at.0,
                        top: at.1,
                        bottom: at.1,
                    }
                    .grown(5.0),
                );
            }
        }
    }
}

/// Pieces per interval that make a run look smooth: about 3 px each.
fn pieces(frame: &Frame, run: &[(f64, f64)]) -> usize {
    let span = run.last().map_or(0.0, |l| l.0 - run[0].0);
    let px = span / frame.x.length() * frame.area.width();
    (px / run.len().max(2) as f64 / 3.0).ceil().clamp(2.0, 60.0) as usize
}
