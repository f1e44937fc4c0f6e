//! Panels one above the other over the same sweep.

use super::axis::{Axis, Span, ticks};
use super::canvas::{Anchor, Canvas, Lettering, Stroke};
use super::font::{self, Weight};
use super::frame::{Frame, Rect, X_AXIS_ROOM, heading, y_axis_room};
use super::legend::{self, Entry, Sample};
use super::series::SeriesDrawing;
use super::style::{INK, LABEL_SIZE, MARGIN, SLATE, SeriesStyle};
use super::{Figure, PlotError, interpolate, range, require_finite};

/// Width of the sheet without keys beside the panels, px.
const WIDTH: f64 = 760.0;
/// Height of a panel's data area; panels with long keys grow.
const HEIGHT: f64 = 104.0;
/// Room above a panel for its label.
const HEAD: f64 = 34.0;
/// Room at the foot of the last panel for each series' ticks of failed points.
const LANE: f64 = 10.0;

/// One line of a panel.
#[derive(Debug, Clone)]
pub(super) struct Trace {
    pub(super) name: String,
    pub(super) style: SeriesStyle,
    pub(super) points: Vec<(f64, Option<f64>)>,
    pub(super) breaks: Vec<usize>,
    /// indices of ringed points
    pub(super) findings: Vec<usize>,
}

/// One panel.
#[derive(Debug, Clone)]
pub(super) struct Panel {
    pub(super) label: String,
    pub(super) traces: Vec<Trace>,
    /// values marked by a line across the panel and kept in its range
    pub(super) references: Vec<f64>,
    /// smallest range shown, so that rounding noise does not look like news
    pub(super) least: f64,
    /// whether the panel names its lines itself, at its right
    pub(super) keyed: bool,
    /// words below the panel's own key
    pub(super) remark: String,
}

/// A figure of panels.
#[derive(Debug, Clone)]
pub(super) struct Stack {
    pub(super) title: String,
    pub(super) notes: Vec<String>,
    pub(super) sweep: Axis,
    pub(super) panels: Vec<Panel>,
    /// key shared by all panels: name, style and number of points of each series
    pub(super) key: Vec<(String, SeriesStyle, usize)>,
    /// swept values of failed points, one list a series
    pub(super) failures: Vec<(SeriesStyle, Vec<f64>)>,
    pub(super) description: String,
}

impl Stack {
    pub(super) fn draw(mut self) -> Result<Figure, PlotError> {
        for trace in self.panels.iter().flat_map(|p| &p.traces) {
            require_finite(
                &format!("swept values of {}", trace.name),
                trace.points.iter().map(|p| p.0),
            )?;
            require_finite(
                &format!("values of {}", trace.name),
                trace.points.iter().map(|p| p.1.unwrap_or(0.0)),
            )?;
        }
        require_finite(
            "swept values of failed points",
            self.failures.iter().flat_map(|f| f.1.iter().copied()),
        )?;
        self.failures.retain(|f| !f.1.is_empty());

        let span = range::sweep_span(
            self.panels
                .iter()
                .flat_map(|p| &p.traces)
                .flat_map(|t| t.points.iter().map(|p| p.0))
                .chain(self.failures.iter().flat_map(|f| f.1.iter().copied())),
        );
        let last = self.panels.len().saturating_sub(1);
        let lanes = self.failures.len() as f64;
        let spans: Vec<Span> = self
            .panels
            .iter()
            .enumerate()
            .map(|(k, panel)| panel.span(if k == last { lanes } else { 0.0 }))
            .collect();
        let y_ticks: Vec<_> = spans.iter().map(|s| ticks(*s, 4, false)).collect();
        let left = MARGIN + y_ticks.iter().map(y_axis_room).fold(0.0, f64::max);
        let right = WIDTH - MARGIN;
        let keys: Vec<Vec<Entry>> = self
            .panels
            .iter()
            .map(|p| p.entries(right - left))
            .collect();
        let beside = keys
            .iter()
            .map(|k| legend::column_size(k).0)
            .fold(0.0, f64::max);
        let keyed = keys.iter().any(|k| !k.is_empty());
        let width = if keyed { WIDTH + 4.0 + beside } else { WIDTH };

        let mut canvas = Canvas::new(width, HEIGHT);
        let mut top = heading(&mut canvas, width, &self.title, &self.notes);
        let shared = self.shared_key(right - left);
        top += legend::draw_rows(
            &mut canvas,
            (MARGIN, top + 12.0),
            width - 2.0 * MARGIN,
            &shared,
        );
        top += if shared.is_empty() { 0.0 } else { 6.0 };
        if self.panels.is_empty() {
            canvas.text(
                (MARGIN, top + 30.0),
                "No values to show",
                Lettering::new(LABEL_SIZE, SLATE, Anchor::Start),
            );
            top += 50.0;
        }
        for (k, panel) in self.panels.iter().enumerate() {
            let height = HEIGHT.max(legend::column_size(&keys[k]).1);
            let area = Rect {
                left,
                top: top + HEAD,
                right,
                bottom: top + HEAD + height,
            };
            let frame = Frame {
                area,
                x: span,
                y: spans[k],
            };
            frame.draw_y_axis(&mut canvas, &y_ticks[k]);
            let x_ticks = frame.x_ticks(&self.sweep);
            let axis = (k == last).then_some(&self.sweep);
            frame.draw_x_axis(&mut canvas, &x_ticks, axis);
            panel.draw(&mut canvas, &frame);
            if k == last {
                self.draw_failures(&mut canvas, &frame);
            }
            if !keys[k].is_empty() {
                let rect = Rect {
                    left: right + 8.0,
                    top: area.top - 4.0,
                    right: width,
                    bottom: area.bottom,
                };
                legend::draw_column(&mut canvas, rect, &keys[k]);
            }
            top = area.bottom + 12.0;
        }
        let foot = if self.panels.is_empty() {
            0.0
        } else {
            X_AXIS_ROOM - 12.0
        };
        canvas.resize(width, top + foot + MARGIN - 4.0);
        canvas.finish(&self.title, &self.description)
    }

    fn draw_failures(&self, canvas: &mut Canvas, frame: &Frame) {
        for (lane, (style, failed)) in self.failures.iter().enumerate() {
            for &x in failed {
                let foot = (frame.x_px(x), frame.area.bottom - LANE * lane as f64);
                legend::failure_tick(canvas, foot, style.colour);
            }
        }
    }

    fn shared_key(&self, width: f64) -> Vec<Entry> {
        let mut entries: Vec<Entry> = self
            .key
            .iter()
            .map(|(name, style, points)| drawing(*style, width, *points).entry(name))
            .collect();
        if let [(style, _)] = self.failures.as_slice() {
            entries.push(Entry::new(Sample::Tick(style.colour), "not converged"));
        } else if !self.failures.is_empty() {
            entries.push(Entry::new(Sample::Tick(SLATE), "not converged"));
        }
        let mut traces = self.panels.iter().flat_map(|p| &p.traces);
        if traces.any(|t| !t.findings.is_empty()) {
            entries.push(Entry::new(Sample::Ring, "finding, see the report"));
        }
        entries
    }
}

impl Panel {
    fn span(&self, lanes: f64) -> Span {
        let values = self
            .traces
            .iter()
            .flat_map(|t| t.points.iter().filter_map(|p| p.1));
        let span = Span::of(values.chain(self.references.iter().copied()))
            .unwrap_or(Span { lo: 0.0, hi: 1.0 })
            .at_least(self.least);
        let foot = if lanes > 0.0 {
            (8.0 + LANE * lanes) / HEIGHT
        } else {
            0.08
        };
        span.padded(foot / (0.92 - foot), 0.08)
    }

    fn draw(&self, canvas: &mut Canvas, frame: &Frame) {
        let area = frame.area;
        canvas.text(
            (MARGIN, area.top - 13.0),
            &font::shorten(
                &self.label,
                LABEL_SIZE,
                Weight::Regular,
                area.right - MARGIN,
            ),
            Lettering::new(LABEL_SIZE, INK, Anchor::Start),
        );
        for &value in &self.references {
            let y = frame.y_px(value);
            canvas.segment((area.left, y), (area.right, y), Stroke::new(SLATE, 1.0));
        }
        for trace in &self.traces {
            let stroke = trace.drawing(frame.area.width()).stroke;
            for run in interpolate::runs(&trace.points, &trace.breaks) {
                frame.draw_line(canvas, &run, stroke);
            }
        }
        for trace in &self.traces {
            let drawing = trace.drawing(frame.area.width());
            drawing.draw_markers(canvas, frame, &trace.points, &trace.breaks);
            for &(x, value) in trace.findings.iter().filter_map(|&i| trace.points.get(i)) {
                if let Some(value) = value {
                    let at = frame.px((x, value));
                    legend::finding_ring(canvas, at, drawing.ring_radius);
                }
            }
        }
    }

    /// The panel's own key: lines in the order in which they end at the right.
    fn entries(&self, width: f64) -> Vec<Entry> {
        if !self.keyed {
            return Vec::new();
        }
        let end = |t: &Trace| {
            t.points
                .iter()
                .filter_map(|&(x, v)| Some((x, v?)))
                .max_by(|p, q| p.0.total_cmp(&q.0))
                .map_or(f64::NEG_INFINITY, |p| p.1)
        };
        let mut order: Vec<&Trace> = self.traces.iter().collect();
        order.sort_by(|p, q| end(q).total_cmp(&end(p)));
        let mut entries: Vec<Entry> = order
            .iter()
            .map(|t| t.drawing(width).entry(&t.name))
            .collect();
        if !self.remark.is_empty() {
            entries.push(Entry::new(Sample::None, self.remark.clone()));
        }
        entries
    }
}

impl Trace {
    fn drawing(&self, width: f64) -> SeriesDrawing {
        drawing(self.style, width, self.points.len())
    }
}

fn drawing(style: SeriesStyle, width: f64, points: usize) -> SeriesDrawing {
    SeriesDrawing::new(style, width, points, 1.5, 2.6)
}
