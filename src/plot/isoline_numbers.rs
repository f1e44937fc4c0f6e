//! Isolines on the sheet, each interrupted by its number.

use super::bands::Bands;
use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::font::{self, Weight};
use super::frame::{Frame, Rect};
use super::place::{Occupied, gap_to};
use super::style::NOTE_SIZE;

/// Draws the isolines with their numbers; returns the boxes of the numbers.
pub(super) fn draw_isolines(
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
