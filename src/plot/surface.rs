//! Energies over two sweeps as a map: tinted bands, isolines, colour bar and marks.

use super::axis::{Axis, Span, energy, number, ticks};
use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::colour::{Rgb, ramp};
use super::font::{self, Weight};
use super::frame::{Frame, Rect, X_AXIS_ROOM, heading, y_axis_room};
use super::isoline::{FineGrid, Region, regions};
use super::legend::{self, Entry, Sample};
use super::place::{Occupied, gap_to};
use super::style::{INK, LABEL_SIZE, MARGIN, NOTE_SIZE, PAPER, PATH, SLATE, TICK_SIZE};
use super::{Figure, PlotError, curve, range, require_finite};

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

/// The tints of a map: bands of equal height from `base` upwards.
struct Bands {
    /// lower bounds of all bands but the first, the isolines
    thresholds: Vec<f64>,
    base: f64,
    step: f64,
    tints: Vec<Rgb>,
    /// the energy from which the last tint stands for everything, where there is more
    open_from: Option<f64>,
}

/// Sweep values in rising order, and energies in that order.
struct Sorted {
    x: Vec<f64>,
    y: Vec<f64>,
    energies: Vec<Option<f64>>,
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
        let sorted = self.sorted();
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
        draw_bar(&mut canvas, &frame, &bands, &bar_labels, &self.energy_unit);
        if known.is_empty() {
            canvas.text(
                (
                    0.5 * (left + frame.area.right),
                    0.5 * (top + frame.area.bottom),
                ),
                "No point has a converged energy",
                Lettering::new(LABEL_SIZE, INK, Anchor::Middle),
            );
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

    fn sorted(&self) -> Sorted {
        let rising = |values: &[f64]| {
            let mut order: Vec<usize> = (0..values.len()).collect();
            order.sort_by(|&a, &b| values[a].total_cmp(&values[b]));
            order
        };
        let (columns, rows) = (rising(&self.x_values), rising(&self.y_values));
        let ny = self.y_values.len();
        Sorted {
            x: columns.iter().map(|&i| self.x_values[i]).collect(),
            y: rows.iter().map(|&j| self.y_values[j]).collect(),
            energies: columns
                .iter()
                .flat_map(|&i| rows.iter().map(move |&j| (i, j)))
                .map(|(i, j)| self.energies[i * ny + j])
                .collect(),
        }
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
                    canvas.area(rect.corners(), bands.tint(*value), 1.0);
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
                canvas.disc(at, legend::DOT, INK);
            }
        }
    }

    fn draw_marks(&self, canvas: &mut Canvas, frame: &Frame, occupied: &mut Occupied) {
        for (colour, width) in [(PAPER, 4.4), (PATH, 2.2)] {
            for piece in frame.clipped(&self.path) {
                canvas.line(&piece, Stroke::new(colour, width));
            }
        }
        for &(i, j) in &self.findings {
            if let (Some(&x), Some(&y)) = (self.x_values.get(i), self.y_values.get(j)) {
                legend::finding_ring(canvas, frame.px((x, y)));
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
            curve::label(
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
        let mut scale = curve::energy_label(&self.zero, &self.energy_unit);
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
            curve::energy_label(&self.zero, &self.energy_unit),
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

impl Bands {
    fn new(known: &[f64], wanted: Option<f64>) -> Self {
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

    fn tint(&self, value: f64) -> Rgb {
        let k = self.thresholds.partition_point(|t| *t <= value);
        self.tints[k.min(self.tints.len() - 1)]
    }

    /// White on the dark tints, ink on the pale ones.
    fn line_colour(&self, threshold: usize) -> Rgb {
        if self.tints[threshold + 1].is_dark() {
            PAPER
        } else {
            INK
        }
    }

    fn print(&self, value: f64) -> String {
        number(value, super::axis::decimals_for(self.step))
    }

    /// Values with everything above the last isoline bent towards a plateau: far walls would make
    /// the spline ring, and their height is not shown anyway.
    fn compressed(&self, values: &[f64]) -> Vec<f64> {
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
    fn labels(&self) -> Vec<(f64, String)> {
        if self.step <= 0.0 {
            return vec![(0.5, energy(self.base))];
        }
        let bounds = self.tints.len() + usize::from(self.open_from.is_none());
        (0..bounds)
            .map(|k| (k as f64, self.print(self.base + k as f64 * self.step)))
            .collect()
    }
}

/// The range of a map's axis: the sweep itself; a single value gets some room.
fn map_span(values: &[f64]) -> Span {
    let exact = Span::of(values.iter().copied()).unwrap_or(Span { lo: 0.0, hi: 1.0 });
    if exact.length() > 1e-9 * exact.lo.abs().max(1e-3) {
        exact
    } else {
        range::sweep_span(values.iter().copied())
    }
}

/// The cell of a grid point: half way to each neighbour.
fn cell(frame: &Frame, sorted: &Sorted, i: usize, j: usize) -> Rect {
    let bounds = |values: &[f64], k: usize, span: Span| {
        let lo = if k > 0 {
            0.5 * (values[k - 1] + values[k])
        } else {
            span.lo
        };
        let hi = if k + 1 < values.len() {
            0.5 * (values[k] + values[k + 1])
        } else {
            span.hi
        };
        (lo, hi)
    };
    let (x_lo, x_hi) = bounds(&sorted.x, i, frame.x);
    let (y_lo, y_hi) = bounds(&sorted.y, j, frame.y);
    Rect {
        left: frame.x_px(x_lo),
        top: frame.y_px(y_hi),
        right: frame.x_px(x_hi),
        bottom: frame.y_px(y_lo),
    }
}

fn failed_cells(frame: &Frame, sorted: &Sorted) -> Vec<Rect> {
    let ny = sorted.y.len();
    (0..sorted.energies.len())
        .filter(|&k| sorted.energies[k].is_none())
        .map(|k| cell(frame, sorted, k / ny, k % ny))
        .collect()
}

/// Energies with holes bridged from their surroundings, only so that isolines of the neighbours
/// can be drawn up to the hatched cells which hide the bridge. `None` without any energy.
fn filled(sorted: &Sorted) -> Option<Vec<f64>> {
    let (nx, ny) = (sorted.x.len(), sorted.y.len());
    let mut values = sorted.energies.clone();
    let neighbours = |k: usize| {
        let (i, j) = (k / ny, k % ny);
        [
            (i > 0).then(|| k - ny),
            (i + 1 < nx).then(|| k + ny),
            (j > 0).then(|| k - 1),
            (j + 1 < ny).then(|| k + 1),
        ]
    };
    if values.iter().all(Option::is_none) {
        return None;
    }
    while values.iter().any(Option::is_none) {
        let before = values.clone();
        for k in 0..values.len() {
            if before[k].is_none() {
                let known: Vec<f64> = neighbours(k)
                    .into_iter()
                    .flatten()
                    .filter_map(|m| before[m])
                    .collect();
                if !known.is_empty() {
                    values[k] = Some(known.iter().sum::<f64>() / known.len() as f64);
                }
            }
        }
    }
    Some(values.into_iter().flatten().collect())
}

/// Draws the isolines with their numbers; returns the boxes of the numbers.
fn draw_isolines(
    canvas: &mut Canvas,
    frame: &Frame,
    lines: &[Vec<Vec<Px>>],
    bands: &Bands,
    failed: &[Rect],
    occupied: &mut Occupied,
) -> Vec<Rect> {
    for rect in failed {
        occupied.add_box(*rect);
    }
    let mut labels: Vec<Option<Rect>> = Vec::new();
    for (k, of_threshold) in lines.iter().enumerate() {
        let mut others = occupied.clone();
        for (m, other) in lines.iter().enumerate() {
            if m != k && m.abs_diff(k) <= 3 {
                other.iter().for_each(|line| others.add_line(line));
            }
        }
        let words = bands.print(bands.thresholds[k]);
        let size = (
            font::width(&words, NOTE_SIZE, Weight::Regular) + 5.0,
            NOTE_SIZE,
        );
        let place = isoline_label(frame.area, of_threshold, &others, size);
        if let Some(rect) = place {
            occupied.add_box(rect.grown(10.0));
            canvas.text(
                (
                    0.5 * (rect.left + rect.right),
                    0.5 * (rect.top + rect.bottom),
                ),
                &words,
                Lettering::new(NOTE_SIZE, bands.line_colour(k), Anchor::Middle),
            );
        }
        labels.push(place);
    }
    for (k, (of_threshold, label)) in lines.iter().zip(&labels).enumerate() {
        let stroke = Stroke::new(bands.line_colour(k), 0.8).faint(0.75);
        for line in of_threshold {
            for piece in outside(line, label, failed) {
                canvas.line(&piece, stroke);
            }
        }
    }
    labels.into_iter().flatten().collect()
}

/// The best place for a label on the isolines of one threshold: on a long line, free of everything
/// else, away from the border.
fn isoline_label(
    area: Rect,
    lines: &[Vec<Px>],
    others: &Occupied,
    (w, h): (f64, f64),
) -> Option<Rect> {
    let length = |line: &[Px]| -> f64 {
        line.windows(2)
            .map(|p| (p[1].0 - p[0].0).hypot(p[1].1 - p[0].1))
            .sum()
    };
    let line = lines
        .iter()
        .max_by(|p, q| length(p).total_cmp(&length(q)))?;
    if length(line) < 3.0 * w {
        return None;
    }
    let inner = area.grown(-8.0);
    let mut best: Option<(f64, Rect)> = None;
    for k in (1..line.len().saturating_sub(1)).step_by(2) {
        let (x, y) = line[k];
        let rect = Rect {
            left: x - 0.5 * w,
            top: y - 0.5 * h,
            right: x + 0.5 * w,
            bottom: y + 0.5 * h,
        };
        if !inner.holds((rect.left, rect.top)) || !inner.holds((rect.right, rect.bottom)) {
            continue;
        }
        let (p, q) = (line[k - 1], line[k + 1]);
        let steep = (q.1 - p.1).abs() / ((q.0 - p.0).hypot(q.1 - p.1) + 1e-9);
        let centre = (
            0.5 * (area.left + area.right),
            0.5 * (area.top + area.bottom),
        );
        let cost =
            10.0 * others.covered(rect.grown(1.0)) + 3.0 * steep + 0.01 * gap_to(rect, centre);
        if best.is_none_or(|(least, _)| cost < least) {
            best = Some((cost, rect));
        }
    }
    best.filter(|(cost, _)| *cost < 20.0).map(|(_, rect)| rect)
}

/// The pieces of a line outside a label and outside failed cells.
fn outside(line: &[Px], label: &Option<Rect>, failed: &[Rect]) -> Vec<Vec<Px>> {
    let mut pieces: Vec<Vec<Px>> = vec![Vec::new()];
    for &p in line {
        let hidden = label.is_some_and(|r| r.holds(p)) || failed.iter().any(|r| r.holds(p));
        if hidden {
            pieces.push(Vec::new());
        } else if let Some(piece) = pieces.last_mut() {
            piece.push(p);
        }
    }
    pieces.retain(|p| p.len() > 1);
    pieces
}

fn frame_axes(
    canvas: &mut Canvas,
    frame: &Frame,
    y_ticks: &super::axis::Ticks,
    figure: &SurfaceFigure,
) {
    frame.draw_y_ticks(canvas, y_ticks, false);
    frame.draw_x_axis(canvas, &frame.x_ticks(&figure.x), Some(&figure.x));
    canvas.text(
        (MARGIN, frame.area.top - 15.0),
        &figure.y.label(),
        Lettering::new(LABEL_SIZE, INK, Anchor::Start),
    );
}

fn draw_bar(
    canvas: &mut Canvas,
    frame: &Frame,
    bands: &Bands,
    labels: &[(f64, String)],
    unit: &str,
) {
    let left = frame.area.right + BAR.1;
    let right = left + BAR.0;
    let count = bands.tints.len() as f64;
    let (top, bottom) = (frame.area.top, frame.area.bottom);
    let at = |k: f64| bottom - k / count * (bottom - top);
    for (k, tint) in bands.tints.iter().enumerate() {
        let (low, high) = (at(k as f64), at(k as f64 + 1.0));
        let open = bands.open_from.is_some() && k + 1 == bands.tints.len();
        let shape = if open {
            // An arrow: this tint has no upper bound.
            vec![(left, low), (0.5 * (left + right), high), (right, low)]
        } else {
            vec![(left, low), (left, high), (right, high), (right, low)]
        };
        canvas.area(shape, *tint, 1.0);
    }
    let stem = if bands.open_from.is_some() {
        at(count - 1.0)
    } else {
        top
    };
    canvas.line(
        &[(left, stem), (left, bottom), (right, bottom), (right, stem)],
        Stroke::new(SLATE, 0.8),
    );
    let tip = if bands.open_from.is_some() {
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
