//! A rectangle of the sheet with data coordinates: transforms, clipping, axes and headings.

use super::axis::{Axis, Span, Ticks, ticks};
use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::colour::Rgb;
use super::font::{self, Weight};
use super::style::{
    AXIS_GAP, HAIR, INK, LABEL_SIZE, MARGIN, NOTE_SIZE, SLATE, TICK_SIZE, TITLE_SIZE,
};

/// A rectangle on the sheet, px.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Rect {
    pub(super) left: f64,
    pub(super) top: f64,
    pub(super) right: f64,
    pub(super) bottom: f64,
}

impl Rect {
    pub(super) fn width(self) -> f64 {
        self.right - self.left
    }

    pub(super) fn height(self) -> f64 {
        self.bottom - self.top
    }

    pub(super) fn holds(self, (x, y): Px) -> bool {
        x >= self.left && x <= self.right && y >= self.top && y <= self.bottom
    }

    pub(super) fn grown(self, by: f64) -> Self {
        Self {
            left: self.left - by,
            top: self.top - by,
            right: self.right + by,
            bottom: self.bottom + by,
        }
    }

    pub(super) fn corners(self) -> Vec<Px> {
        vec![
            (self.left, self.top),
            (self.right, self.top),
            (self.right, self.bottom),
            (self.left, self.bottom),
        ]
    }

    /// The part of a segment inside (Liang and Barsky, ACM Trans. Graph. 3, 1 (1984)).
    fn clip_segment(self, p: Px, q: Px) -> Option<(Px, Px)> {
        let (dx, dy) = (q.0 - p.0, q.1 - p.1);
        let (mut enter, mut leave) = (0.0_f64, 1.0_f64);
        for (run, room) in [
            (-dx, p.0 - self.left),
            (dx, self.right - p.0),
            (-dy, p.1 - self.top),
            (dy, self.bottom - p.1),
        ] {
            if run.abs() < 1e-12 {
                if room < 0.0 {
                    return None;
                }
            } else if run < 0.0 {
                enter = enter.max(room / run);
            } else {
                leave = leave.min(room / run);
            }
        }
        if enter > leave {
            return None;
        }
        let at = |t: f64| (p.0 + dx * t, p.1 + dy * t);
        Some((at(enter), at(leave)))
    }

    /// The pieces of a line inside.
    pub(super) fn clip(self, line: &[Px]) -> Vec<Vec<Px>> {
        let mut pieces: Vec<Vec<Px>> = Vec::new();
        for pair in line.windows(2) {
            let Some((p, q)) = self.clip_segment(pair[0], pair[1]) else {
                continue;
            };
            match pieces.last_mut() {
                Some(piece)
                    if piece
                        .last()
                        .is_some_and(|l| (l.0 - p.0).hypot(l.1 - p.1) < 1e-9) =>
                {
                    piece.push(q);
                }
                _ => pieces.push(vec![p, q]),
            }
        }
        pieces
    }
}

/// A data area: its place on the sheet and the ranges of its two coordinates, y upwards.
#[derive(Debug, Clone, Copy)]
pub(super) struct Frame {
    pub(super) area: Rect,
    pub(super) x: Span,
    pub(super) y: Span,
}

impl Frame {
    pub(super) fn x_px(&self, x: f64) -> f64 {
        self.area.left + (x - self.x.lo) / self.x.length() * self.area.width()
    }

    pub(super) fn y_px(&self, y: f64) -> f64 {
        self.area.bottom - (y - self.y.lo) / self.y.length() * self.area.height()
    }

    pub(super) fn px(&self, (x, y): (f64, f64)) -> Px {
        (self.x_px(x), self.y_px(y))
    }

    /// A line of data inside the area, piece by piece.
    pub(super) fn clipped(&self, line: &[(f64, f64)]) -> Vec<Vec<Px>> {
        let line: Vec<Px> = line.iter().map(|&p| self.px(p)).collect();
        self.area.clip(&line)
    }

    /// Draws a clipped line; where it goes on beyond the upper or lower border, a small arrowhead
    /// of its colour says so.
    pub(super) fn draw_line(&self, canvas: &mut Canvas, line: &[(f64, f64)], stroke: Stroke) {
        for piece in self.clipped(line) {
            canvas.line(&piece, stroke);
            let ends = [piece.first().copied(), piece.last().copied()];
            for end in ends.into_iter().flatten() {
                let beyond = |y: f64| {
                    line.iter().any(|p| {
                        if y < 0.0 {
                            p.1 > self.y.hi
                        } else {
                            p.1 < self.y.lo
                        }
                    })
                };
                if (end.1 - self.area.top).abs() < 1e-6 && beyond(-1.0) {
                    arrowhead(canvas, end, -1.0, stroke.colour);
                } else if (end.1 - self.area.bottom).abs() < 1e-6 && beyond(1.0) {
                    arrowhead(canvas, end, 1.0, stroke.colour);
                }
            }
        }
    }

    /// The vertical axis left of the area with its ticks, and a hairline across for each.
    pub(super) fn draw_y_axis(&self, canvas: &mut Canvas, ticks: &Ticks) {
        self.draw_y_ticks(canvas, ticks, true);
    }

    /// The vertical axis, with hairlines across the area or without (over a map).
    pub(super) fn draw_y_ticks(&self, canvas: &mut Canvas, ticks: &Ticks, hairlines: bool) {
        let x = self.area.left - AXIS_GAP;
        for (value, label) in ticks.values.iter().zip(ticks.labels()) {
            let y = self.y_px(*value);
            if hairlines {
                let ends = ((self.area.left, y), (self.area.right, y));
                canvas.segment(ends.0, ends.1, Stroke::new(HAIR, 0.8));
            }
            canvas.segment((x - 4.0, y), (x, y), Stroke::new(SLATE, 1.0));
            canvas.text(
                (x - 8.0, y),
                &label,
                Lettering::new(TICK_SIZE, SLATE, Anchor::End),
            );
        }
        canvas.segment(
            (x, self.area.top),
            (x, self.area.bottom + AXIS_GAP),
            Stroke::new(SLATE, 1.0),
        );
    }

    /// The horizontal axis below the area with ticks and, if wanted, their labels and the name.
    pub(super) fn draw_x_axis(&self, canvas: &mut Canvas, ticks: &Ticks, axis: Option<&Axis>) {
        let y = self.area.bottom + AXIS_GAP;
        canvas.segment(
            (self.area.left - AXIS_GAP, y),
            (self.area.right, y),
            Stroke::new(SLATE, 1.0),
        );
        for (value, label) in ticks.values.iter().zip(ticks.labels()) {
            let x = self.x_px(*value);
            canvas.segment((x, y), (x, y + 4.0), Stroke::new(SLATE, 1.0));
            if axis.is_some() {
                // A wide number at the end of the axis moves in rather than off the sheet.
                let half = 0.5 * font::width(&label, TICK_SIZE, Weight::Regular);
                let x = x.min(self.area.right + MARGIN - 2.0 - half);
                canvas.text(
                    (x, y + 14.0),
                    &label,
                    Lettering::new(TICK_SIZE, SLATE, Anchor::Middle),
                );
            }
        }
        if let Some(axis) = axis {
            canvas.text(
                (0.5 * (self.area.left + self.area.right), y + 35.0),
                &axis.label(),
                Lettering::new(LABEL_SIZE, INK, Anchor::Middle),
            );
        }
    }

    /// Round values for the horizontal axis, as many as their labels leave room for.
    pub(super) fn x_ticks(&self, axis: &Axis) -> Ticks {
        let mut target = (self.area.width() / 55.0).round().max(2.0) as usize;
        loop {
            let ticks = ticks(self.x, target, axis.in_degrees());
            let widest = widest(&ticks.labels());
            let apart = ticks.step / self.x.length() * self.area.width();
            if target <= 2 || widest + 14.0 <= apart {
                return ticks;
            }
            target -= 1;
        }
    }
}

/// Room below a data area that `draw_x_axis` needs for labels and name.
pub(super) const X_AXIS_ROOM: f64 = AXIS_GAP + 46.0;

/// Room left of a data area that `draw_y_axis` needs for these labels.
pub(super) fn y_axis_room(ticks: &Ticks) -> f64 {
    AXIS_GAP + 8.0 + widest(&ticks.labels())
}

fn widest(labels: &[String]) -> f64 {
    labels
        .iter()
        .map(|l| font::width(l, TICK_SIZE, Weight::Regular))
        .fold(0.0, f64::max)
}

fn arrowhead(canvas: &mut Canvas, tip: Px, direction: f64, colour: Rgb) {
    let y = tip.1 + direction * 5.0;
    canvas.area(
        vec![(tip.0, y), (tip.0 + 3.4, tip.1), (tip.0 - 3.4, tip.1)],
        colour,
        1.0,
    );
}

/// Title and notes at the head of a sheet, wrapped to its width; returns the y below them.
pub(super) fn heading(canvas: &mut Canvas, width: f64, title: &str, notes: &[String]) -> f64 {
    let room = width - 2.0 * MARGIN;
    let mut y = MARGIN;
    if !title.trim().is_empty() {
        for line in font::wrap(title, TITLE_SIZE, Weight::Bold, room, 2) {
            canvas.text(
                (MARGIN, y + 6.0),
                &line,
                Lettering::new(TITLE_SIZE, INK, Anchor::Start).bold(),
            );
            y += 20.0;
        }
    }
    for note in notes.iter().filter(|n| !n.trim().is_empty()) {
        for line in font::wrap(note, NOTE_SIZE, Weight::Regular, room, 2) {
            canvas.text(
                (MARGIN, y + 6.0),
                &line,
                Lettering::new(NOTE_SIZE, SLATE, Anchor::Start),
            );
            y += 14.0;
        }
    }
    y + 6.0
}

#[cfg(test)]
mod tests {
    use super::*;

    const AREA: Rect = Rect {
        left: 0.0,
        top: 0.0,
        right: 100.0,
        bottom: 50.0,
    };

    #[test]
    fn a_line_leaving_and_coming_back_gives_two_pieces_ending_on_the_border() {
        let line = [(10.0, 25.0), (30.0, -15.0), (50.0, 25.0), (60.0, 30.0)];
        let pieces = AREA.clip(&line);
        assert_eq!(pieces.len(), 2);
        assert!(pieces[0][1].1.abs() < 1e-12 && pieces[1][0].1.abs() < 1e-12);
        assert_eq!(pieces[1].len(), 3);
        assert!(AREA.clip(&[(-5.0, -5.0), (-5.0, 80.0)]).is_empty());
    }

    #[test]
    fn crowded_ticks_give_way() {
        let frame = Frame {
            area: Rect {
                right: 120.0,
                ..AREA
            },
            x: Span {
                lo: 0.123_41,
                hi: 0.123_49,
            },
            y: Span { lo: 0.0, hi: 1.0 },
        };
        let ticks = frame.x_ticks(&Axis::new("x", "Å"));
        let apart = ticks.step / frame.x.length() * 120.0;
        assert!(ticks.values.len() < 2 || widest(&ticks.labels()) < apart);
    }
}
