//! Where labels and legends go: the emptiest place near what they belong to.

use super::canvas::Px;
use super::frame::Rect;

/// What is drawn already and must stay readable.
#[derive(Debug, Clone, Default)]
pub(super) struct Occupied {
    points: Vec<Px>,
    boxes: Vec<Rect>,
}

impl Occupied {
    /// Notes a line, sampled every few px.
    pub(super) fn add_line(&mut self, line: &[Px]) {
        for pair in line.windows(2) {
            let (p, q) = (pair[0], pair[1]);
            let length = (q.0 - p.0).hypot(q.1 - p.1);
            let pieces = (length / 3.0).ceil().clamp(1.0, 2000.0) as usize;
            for k in 0..=pieces {
                let t = k as f64 / pieces as f64;
                self.points
                    .push((p.0 + (q.0 - p.0) * t, p.1 + (q.1 - p.1) * t));
            }
        }
    }

    pub(super) fn add_point(&mut self, at: Px) {
        self.points.push(at);
    }

    pub(super) fn add_box(&mut self, rect: Rect) {
        self.boxes.push(rect);
    }

    /// How much a box would cover: sampled points and boxes under it; zero for a free place.
    pub(super) fn covered(&self, rect: Rect) -> f64 {
        let near = rect.grown(3.0);
        let points = self.points.iter().filter(|p| near.holds(**p)).count() as f64;
        let boxes: f64 = self
            .boxes
            .iter()
            .map(|b| {
                let w = b.right.min(near.right) - b.left.max(near.left);
                let h = b.bottom.min(near.bottom) - b.top.max(near.top);
                if w > 0.0 && h > 0.0 {
                    5.0 + 0.2 * w * h
                } else {
                    0.0
                }
            })
            .sum();
        points + boxes
    }

    /// The best box of the given size near `anchor` and inside `bounds`: as free as possible, then
    /// as near as possible. `toward` (a direction of the sheet) is tried first.
    pub(super) fn near(&self, bounds: Rect, anchor: Px, size: (f64, f64), toward: Px) -> Rect {
        let (w, h) = size;
        let mut best: Option<(f64, Rect)> = None;
        for distance in [9.0, 15.0, 24.0, 36.0, 52.0, 72.0, 100.0] {
            for turn in 0..12 {
                let angle = f64::from(turn) * std::f64::consts::PI / 6.0;
                let (c, s) = (angle.cos(), angle.sin());
                // The box touches the circle of this distance with the side that faces it.
                let centre = (
                    anchor.0 + c * (distance + 0.5 * w),
                    anchor.1 + s * (distance + 0.5 * h),
                );
                let rect = shifted_into(bounds, centre, size);
                let gap = gap_to(rect, anchor);
                let against = 1.0 - (c * toward.0 + s * toward.1);
                let cost = 25.0 * self.covered(rect)
                    + 0.35 * gap
                    + 2.5 * against
                    + if gap < 6.0 { 60.0 } else { 0.0 };
                if best.is_none_or(|(least, _)| cost < least - 1e-9) {
                    best = Some((cost, rect));
                }
            }
        }
        best.map_or_else(|| shifted_into(bounds, anchor, size), |(_, rect)| rect)
    }

    /// A wholly free box of the given size inside `bounds`, in a corner if possible and at the
    /// upper right by preference; `None` if nothing is free.
    pub(super) fn free_corner(&self, bounds: Rect, size: (f64, f64)) -> Option<Rect> {
        let (w, h) = size;
        let (room_x, room_y) = (bounds.width() - w, bounds.height() - h);
        if room_x < 0.0 || room_y < 0.0 {
            return None;
        }
        let (columns, rows) = ((room_x / 8.0) as usize, (room_y / 8.0) as usize);
        let mut best: Option<(f64, Rect)> = None;
        for i in 0..=columns {
            for j in 0..=rows {
                let u = i as f64 / columns.max(1) as f64;
                let v = j as f64 / rows.max(1) as f64;
                let rect = Rect {
                    left: bounds.left + u * room_x,
                    top: bounds.top + v * room_y,
                    right: bounds.left + u * room_x + w,
                    bottom: bounds.top + v * room_y + h,
                };
                let off_corner = u.min(1.0 - u) * room_x + v.min(1.0 - v) * room_y;
                let cost = off_corner + 40.0 * v + 20.0 * (1.0 - u);
                if best.is_none_or(|(least, _)| cost < least)
                    && self.covered(rect.grown(4.0)) <= 0.0
                {
                    best = Some((cost, rect));
                }
            }
        }
        best.map(|(_, rect)| rect)
    }
}

fn shifted_into(bounds: Rect, centre: Px, (w, h): (f64, f64)) -> Rect {
    let left = (centre.0 - 0.5 * w).min(bounds.right - w).max(bounds.left);
    let top = (centre.1 - 0.5 * h).min(bounds.bottom - h).max(bounds.top);
    Rect {
        left,
        top,
        right: left + w,
        bottom: top + h,
    }
}

/// Distance from a box to a point, zero inside.
pub(super) fn gap_to(rect: Rect, at: Px) -> f64 {
    let dx = (rect.left - at.0).max(at.0 - rect.right).max(0.0);
    let dy = (rect.top - at.1).max(at.1 - rect.bottom).max(0.0);
    dx.hypot(dy)
}

/// The point of a box nearest to a point outside it: where a leader ends.
pub(super) fn nearest_in(rect: Rect, at: Px) -> Px {
    (
        at.0.clamp(rect.left, rect.right),
        at.1.clamp(rect.top, rect.bottom),
    )
}

#[cfg(test)]
mod tests {
    use super::*;

    const BOUNDS: Rect = Rect {
        left: 0.0,
        top: 0.0,
        right: 400.0,
        bottom: 300.0,
    };

    #[test]
    fn labels_and_legends_avoid_lines() {
        let mut occupied = Occupied::default();
        let line: Vec<Px> = (0..=80)
            .map(|i| (5.0 * f64::from(i), 150.0 + f64::from(i)))
            .collect();
        occupied.add_line(&line);
        let label = occupied.near(BOUNDS, line[40], (80.0, 12.0), (0.0, -1.0));
        assert!(occupied.covered(label) <= 0.0);
        assert!(gap_to(label, line[40]) < 40.0);
        let legend = occupied
            .free_corner(BOUNDS, (120.0, 70.0))
            .expect("half the sheet is free");
        assert!(occupied.covered(legend) <= 0.0);
        assert!(legend.top < 1.0 && legend.right > 399.0);
    }

    #[test]
    fn no_legend_is_forced_into_a_full_area() {
        let mut occupied = Occupied::default();
        for i in 0..40 {
            let x = 10.0 * f64::from(i);
            occupied.add_line(&[(x, 0.0), (x, 300.0)]);
        }
        assert!(occupied.free_corner(BOUNDS, (120.0, 70.0)).is_none());
    }
}
