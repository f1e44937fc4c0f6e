//! Words beside marks, and the label of energy axes.

use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::colour::Rgb;
use super::font::{self, Weight};
use super::frame::Rect;
use super::place::{Occupied, gap_to, nearest_in};
use super::style::{PAPER, TICK_SIZE};

/// The label of an energy axis, with its zero and unit.
pub(super) fn energy_label(zero: &str, unit: &str) -> String {
    if zero.trim().is_empty() {
        format!("Energy ({unit})")
    } else {
        format!("Energy relative to {} ({unit})", zero.trim())
    }
}

/// Words near an anchor at the freest place, on a pale ground, led to the anchor where they had to
/// move away.
pub(super) fn label(
    canvas: &mut Canvas,
    bounds: Rect,
    occupied: &mut Occupied,
    (at, toward): (Px, Px),
    words: &str,
    ink: Rgb,
) {
    let size = (
        font::width(words, TICK_SIZE, Weight::Regular) + 6.0,
        TICK_SIZE + 5.0,
    );
    let rect = occupied.near(bounds.grown(-2.0), at, size, toward);
    let gap = gap_to(rect, at);
    if gap > 20.0 {
        // The leader stops short of the mark.
        let (end, short) = (nearest_in(rect, at), 7.0 / gap);
        let start = (at.0 + (end.0 - at.0) * short, at.1 + (end.1 - at.1) * short);
        canvas.segment(start, end, Stroke::new(ink, 0.7).faint(0.7));
    }
    canvas.area(rect.corners(), PAPER, 0.85);
    canvas.text(
        (
            0.5 * (rect.left + rect.right),
            0.5 * (rect.top + rect.bottom),
        ),
        words,
        Lettering::new(TICK_SIZE, ink, Anchor::Middle),
    );
    occupied.add_box(rect);
}
