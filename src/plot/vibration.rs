//! Vibrational states of one coordinate, drawn in the well that holds them.

use super::axis::{Axis, Span, energy, ticks};
use super::canvas::{Anchor, Canvas, Lettering, Px, Stroke};
use super::font::{self, Weight};
use super::frame::{Frame, Rect, X_AXIS_ROOM, heading, y_axis_room};
use super::label::energy_label;
use super::style::{DOTS, INK, LABEL_SIZE, MARGIN, SLATE, TICK_SIZE, series};
use super::{Figure, PlotError, interpolate, range, require_finite};

/// Width of the sheet, px.
const WIDTH: f64 = 760.0;
/// Height of the data area.
const HEIGHT: f64 = 420.0;
/// Share of the tallest density below which a tail is not drawn.
const TAIL: f64 = 2e-3;
/// Least distance of the labels beside the well.
const LABEL_PITCH: f64 = 14.0;

/// A curve with its vibrational states.
#[derive(Debug, Clone, PartialEq)]
pub struct VibrationFigure {
    /// headline; may be empty
    pub title: String,
    /// lines of small print under the headline: level, reduced mass and its approximation
    pub notes: Vec<String>,
    /// what is swept
    pub sweep: Axis,
    /// unit of every energy, as printed
    pub energy_unit: String,
    /// what energies are relative to (see [`CurveFigure::zero`](super::CurveFigure::zero))
    pub zero: String,
    /// swept value and potential energy in the order of the sweep; none: not converged
    pub points: Vec<(f64, Option<f64>)>,
    /// the states, lowest first
    pub states: Vec<VibrationState>,
    /// energy of the separated parts
    pub limit: Option<f64>,
}

/// One vibrational state.
#[derive(Debug, Clone, PartialEq)]
pub struct VibrationState {
    /// energy on the figure's scale
    pub energy: f64,
    /// words beside it, such as `v = 0`; its energy is added
    pub name: String,
    /// probability density over the swept value in rising order, drawn as a hump on the level in
    /// one common scale; may be empty
    pub density: Vec<(f64, f64)>,
}

impl VibrationFigure {
    /// Draws the figure. Levels are drawn where they are classically allowed.
    ///
    /// # Errors
    /// [`PlotError::NotFinite`], [`PlotError::Drawing`].
    pub fn draw(&self) -> Result<Figure, PlotError> {
        require_finite("swept values", self.points.iter().map(|p| p.0))?;
        require_finite("energies", self.points.iter().map(|p| p.1.unwrap_or(0.0)))?;
        require_finite("state energies", self.states.iter().map(|s| s.energy))?;
        require_finite(
            "probability densities",
            self.states
                .iter()
                .flat_map(|s| s.density.iter().flat_map(|p| [p.0, p.1])),
        )?;
        require_finite("dissociation limit", self.limit)?;

        let words: Vec<(&str, String)> = self
            .states
            .iter()
            .map(|s| (s.name.as_str(), energy(s.energy)))
            .collect();
        let column =
            |text: &dyn Fn(&(&str, String)) -> f64| words.iter().map(text).fold(0.0, f64::max);
        let beside = if words.is_empty() {
            0.0
        } else {
            34.0 + column(&|w| font::width(w.0, TICK_SIZE, Weight::Regular))
                + column(&|w| font::width(&w.1, TICK_SIZE, Weight::Regular))
        };
        let y = self.energy_span();
        let y_ticks = ticks(y, 8, false);
        let mut canvas = Canvas::new(WIDTH, HEIGHT);
        let top = heading(&mut canvas, WIDTH, &self.title, &self.notes) + 26.0;
        let area = Rect {
            left: MARGIN + y_axis_room(&y_ticks),
            top,
            right: WIDTH - MARGIN - beside,
            bottom: top + HEIGHT,
        };
        let x = range::sweep_span(self.shown_sweep(y.hi));
        let frame = Frame { area, x, y };
        canvas.resize(WIDTH, area.bottom + X_AXIS_ROOM + MARGIN - 4.0);
        frame.draw_y_axis(&mut canvas, &y_ticks);
        frame.draw_x_axis(&mut canvas, &frame.x_ticks(&self.sweep), Some(&self.sweep));
        canvas.text(
            (MARGIN, area.top - 15.0),
            &energy_label(&self.zero, &self.energy_unit),
            Lettering::new(LABEL_SIZE, INK, Anchor::Start),
        );

        let style = series(0);
        if let Some(limit) = self.limit.filter(|l| y.holds(*l)) {
            let at = frame.y_px(limit);
            let stroke = Stroke::new(style.colour, 1.5).dashed(DOTS);
            canvas.segment((area.left, at), (area.right, at), stroke);
            canvas.text(
                (area.right - 4.0, at - 9.0),
                &format!("separated parts {} {}", energy(limit), self.energy_unit),
                Lettering::new(TICK_SIZE, SLATE, Anchor::End),
            );
        }
        let well: Vec<Vec<(f64, f64)>> = interpolate::runs(&self.points, &[])
            .iter()
            .map(|run| interpolate::smooth(run, 16))
            .collect();
        self.draw_states(&mut canvas, &frame, &well, &words);
        for run in &well {
            frame.draw_line(&mut canvas, run, Stroke::new(style.colour, 2.1));
        }
        for &(x, value) in &self.points {
            match value {
                None => {
                    let foot = (frame.x_px(x), area.bottom);
                    super::legend::failure_tick(&mut canvas, foot, style.colour);
                }
                Some(value) if y.holds(value) => {
                    canvas.marker(frame.px((x, value)), 2.2, style.marker, style.colour);
                }
                Some(_) => {}
            }
        }
        canvas.finish(&self.name(), &self.description())
    }

    /// From below the well to above the highest state drawn.
    fn energy_span(&self) -> Span {
        let potential: Vec<(f64, f64)> = self
            .points
            .iter()
            .filter_map(|&(x, e)| Some((x, e?)))
            .collect();
        let Some(all) = Span::of(
            potential
                .iter()
                .map(|p| p.1)
                .chain(self.states.iter().map(|s| s.energy)),
        ) else {
            return Span { lo: 0.0, hi: 1.0 };
        };
        let states = Span::of(self.states.iter().map(|s| s.energy));
        let top = match states {
            Some(states) => (states.hi + 0.3 * (states.hi - all.lo)).min(all.hi),
            None => range::ceiling(&[potential], all.lo),
        };
        let mut span = Span {
            lo: all.lo,
            hi: top.max(states.map_or(top, |s| s.hi)),
        };
        if let Some(limit) = self.limit
            && limit > span.lo
            && limit - span.lo < 1.4 * span.length()
        {
            span = span.with(limit);
        }
        span.at_least(1e-3).padded(0.05, 0.08)
    }

    /// The part of the sweep worth showing: where the potential or a density is in the picture,
    /// and one point more on each side.
    fn shown_sweep(&self, top: f64) -> Vec<f64> {
        let tallest = self.tallest();
        let mut x: Vec<f64> = self.points.iter().map(|p| p.0).collect();
        x.sort_by(f64::total_cmp);
        let low = self
            .points
            .iter()
            .filter(|p| p.1.is_none_or(|e| e <= top))
            .map(|p| p.0);
        let dense = self
            .states
            .iter()
            .flat_map(|s| &s.density)
            .filter(|p| p.1 > TAIL * tallest)
            .map(|p| p.0);
        let Some(span) = Span::of(low.chain(dense)) else {
            return x;
        };
        let before = x.iter().rev().find(|v| **v < span.lo).copied();
        let after = x.iter().find(|v| **v > span.hi).copied();
        [before, Some(span.lo), Some(span.hi), after]
            .into_iter()
            .flatten()
            .collect()
    }

    fn tallest(&self) -> f64 {
        self.states
            .iter()
            .flat_map(|s| s.density.iter().map(|p| p.1))
            .fold(0.0, f64::max)
    }

    fn draw_states(
        &self,
        canvas: &mut Canvas,
        frame: &Frame,
        well: &[Vec<(f64, f64)>],
        words: &[(&str, String)],
    ) {
        let style = series(1);
        let tallest = self.tallest();
        let spacing = self
            .states
            .windows(2)
            .map(|p| frame.y_px(p[0].energy) - frame.y_px(p[1].energy))
            .fold(f64::INFINITY, f64::min);
        let rise = if spacing.is_finite() {
            spacing.clamp(8.0, 60.0)
        } else {
            40.0
        };
        let wanted: Vec<f64> = self.states.iter().map(|s| frame.y_px(s.energy)).collect();
        let placed = spread(&wanted, LABEL_PITCH);
        for (k, state) in self.states.iter().enumerate() {
            let y = frame.y_px(state.energy);
            if !frame.y.holds(state.energy) {
                continue;
            }
            if tallest > 0.0 && state.density.len() > 2 {
                let hump: Vec<Px> = without_tails(&state.density, TAIL * tallest)
                    .iter()
                    .filter(|p| frame.x.holds(p.0))
                    .map(|p| (frame.x_px(p.0), y - 0.9 * rise * p.1 / tallest))
                    .collect();
                if let (Some(first), Some(last)) = (hump.first(), hump.last()) {
                    let mut area = hump.clone();
                    area.push((last.0, y));
                    area.push((first.0, y));
                    canvas.area(area, style.colour, 0.18);
                }
                canvas.line(&hump, Stroke::new(style.colour, 0.8).faint(0.7));
            }
            let mut right = frame.area.left;
            for (from, to) in allowed(well, state.energy) {
                let ends = (frame.x_px(from), frame.x_px(to));
                canvas.segment((ends.0, y), (ends.1, y), Stroke::new(style.colour, 1.4));
                right = right.max(ends.1);
            }
            // A thin leader from the level to its label at the right.
            let (edge, label) = (frame.area.right + 6.0, placed[k]);
            canvas.line(
                &[
                    (right, y),
                    (frame.area.right, y),
                    (edge + 8.0, label),
                    (edge + 12.0, label),
                ],
                Stroke::new(style.colour, 0.6).faint(0.6),
            );
            let lettering = Lettering::new(TICK_SIZE, style.colour.legible(), Anchor::Start);
            canvas.text((edge + 16.0, label), words[k].0, lettering);
            let lettering = Lettering {
                anchor: Anchor::End,
                ..lettering
            };
            canvas.text((WIDTH - MARGIN, label), &words[k].1, lettering);
        }
    }

    fn name(&self) -> String {
        if self.title.trim().is_empty() {
            format!("Vibrational states over {}", self.sweep.quantity)
        } else {
            self.title.clone()
        }
    }

    fn description(&self) -> String {
        let states: Vec<String> = self
            .states
            .iter()
            .map(|s| format!("{} at {} {}", s.name, energy(s.energy), self.energy_unit))
            .collect();
        format!(
            "Potential over {} with its vibrational states: {}.",
            self.sweep.label(),
            states.join(", ")
        )
    }
}

/// The samples from the first to the last that exceed `least`.
fn without_tails(density: &[(f64, f64)], least: f64) -> &[(f64, f64)] {
    let first = density.iter().position(|p| p.1 > least);
    let last = density.iter().rposition(|p| p.1 > least);
    match (first, last) {
        (Some(first), Some(last)) => &density[first..=last],
        _ => &[],
    }
}

/// Intervals of the swept value in which a sampled potential lies below an energy.
fn allowed(well: &[Vec<(f64, f64)>], energy: f64) -> Vec<(f64, f64)> {
    let mut out = Vec::new();
    for run in well {
        let mut from: Option<f64> = run.first().filter(|p| p.1 <= energy).map(|p| p.0);
        for pair in run.windows(2) {
            let (p, q) = (pair[0], pair[1]);
            if (p.1 <= energy) == (q.1 <= energy) {
                continue;
            }
            let x = p.0 + (q.0 - p.0) * (energy - p.1) / (q.1 - p.1);
            match from.take() {
                Some(start) => out.push((start, x)),
                None => from = Some(x),
            }
        }
        if let (Some(start), Some(last)) = (from, run.last()) {
            out.push((start, last.0));
        }
    }
    out
}

/// Label positions as near as possible to the wanted ones but `pitch` apart, in the same order.
///
/// Overlapping neighbours are pooled and the pool is centred on what its members want.
fn spread(wanted: &[f64], pitch: f64) -> Vec<f64> {
    let mut order: Vec<usize> = (0..wanted.len()).collect();
    order.sort_by(|&a, &b| wanted[a].total_cmp(&wanted[b]));
    // pools of (mean of wanted positions moved back to the first member, members)
    let mut pools: Vec<(f64, Vec<usize>)> = Vec::new();
    for &k in &order {
        pools.push((wanted[k], vec![k]));
        while pools.len() > 1 {
            let (last, before) = (&pools[pools.len() - 1], &pools[pools.len() - 2]);
            if last.0 >= before.0 + pitch * before.1.len() as f64 {
                break;
            }
            let mut members = before.1.clone();
            members.extend(&last.1);
            let start = members
                .iter()
                .enumerate()
                .map(|(rank, &m)| wanted[m] - pitch * rank as f64)
                .sum::<f64>()
                / members.len() as f64;
            pools.truncate(pools.len() - 2);
            pools.push((start, members));
        }
    }
    let mut placed = vec![0.0; wanted.len()];
    for (start, members) in pools {
        for (rank, member) in members.into_iter().enumerate() {
            placed[member] = start + pitch * rank as f64;
        }
    }
    placed
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn levels_end_at_the_classical_turning_points() {
        let run: Vec<(f64, f64)> = (-100..=100)
            .map(|i| 0.01 * f64::from(i))
            .map(|x| (x, x * x))
            .collect();
        let intervals = allowed(&[run], 0.25);
        assert_eq!(intervals.len(), 1);
        assert!((intervals[0].0 + 0.5).abs() < 1e-9 && (intervals[0].1 - 0.5).abs() < 1e-9);
        let double: Vec<(f64, f64)> = (-200..=200)
            .map(|i| 0.01 * f64::from(i))
            .map(|x| (x, (x * x - 1.0).powi(2)))
            .collect();
        assert_eq!(allowed(&[double], 0.5).len(), 2);
    }

    proptest! {
        #[test]
        fn labels_keep_their_distance_and_order(wanted in proptest::collection::vec(0.0..300.0f64, 1..12)) {
            let placed = spread(&wanted, 14.0);
            for i in 0..wanted.len() {
                for j in 0..wanted.len() {
                    if wanted[i] < wanted[j] {
                        prop_assert!(placed[j] - placed[i] >= 14.0 - 1e-9);
                    }
                }
            }
            let shift: f64 = placed.iter().zip(&wanted).map(|(p, w)| p - w).sum();
            prop_assert!(shift.abs() < 1e-6);
        }
    }
}
