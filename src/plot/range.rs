//! Which energies a figure shows: the well and what leads out of it, not the repulsive wall.

use super::axis::{Span, round_step};

/// The highest energy worth showing of curves given as (x, energy), lowest energy `floor`.
///
/// A wall is steep, so it takes few points of a sweep: the 85 % quantile knows little of it.
/// Beside the quantile, the lower of the two sides of each curve is always shown whole. A curve
/// without a wall (a torsion, a narrow sweep) is shown to its top.
pub(super) fn ceiling(curves: &[Vec<(f64, f64)>], floor: f64) -> f64 {
    let mut heights: Vec<f64> = curves.iter().flatten().map(|p| p.1 - floor).collect();
    heights.sort_by(f64::total_cmp);
    let Some(&top) = heights.last() else {
        return floor;
    };
    let mut shown = 1.25 * heights[(heights.len() - 1) * 85 / 100];
    for curve in curves {
        let Some(lowest) = curve.iter().min_by(|p, q| p.1.total_cmp(&q.1)) else {
            continue;
        };
        let side = |right: bool| {
            curve
                .iter()
                .filter(|p| (p.0 > lowest.0) == right)
                .map(|p| p.1 - floor)
                .fold(0.0, f64::max)
        };
        shown = shown.max(1.15 * side(true).min(side(false)));
    }
    // A frame that would hide only a little more is not worth leaving.
    floor
        + if top <= 2.0 * shown || shown <= 0.0 {
            top
        } else {
            shown
        }
}

/// A round cap for an energy map whose energies above the lowest are `heights`, and the step of its
/// isolines: `(cap, step)`. The cap is the highest energy itself, rounded up, where no wall
/// stretches the scale.
pub(super) fn cap_and_step(heights: &[f64], wanted: Option<f64>) -> (f64, f64) {
    let mut sorted: Vec<f64> = heights.to_vec();
    sorted.sort_by(f64::total_cmp);
    let top = sorted.last().copied().unwrap_or(0.0).max(0.0);
    let cap = match wanted {
        Some(cap) if cap > 0.0 && cap.is_finite() => cap,
        _ => {
            let bulk = sorted
                .get(sorted.len().saturating_sub(1) * 85 / 100)
                .map_or(0.0, |q| 1.15 * q);
            if top <= 1.2 * bulk || bulk <= 0.0 {
                top
            } else {
                bulk
            }
        }
    };
    if cap <= 0.0 {
        return (0.0, 0.0);
    }
    let step = round_step(cap, 10);
    let rounded = match wanted {
        Some(_) => cap,
        None => (cap / step - 1e-9).ceil() * step,
    };
    (rounded, step)
}

/// The range of a sweep's values, widened so that marks do not touch the axes.
pub(super) fn sweep_span(values: impl IntoIterator<Item = f64>) -> Span {
    let span = Span::of(values).unwrap_or(Span { lo: 0.0, hi: 1.0 });
    let size = span.lo.abs().max(span.hi.abs());
    let least = if size > 0.0 { 0.1 * size } else { 1.0 };
    if span.length() > 1e-6 * least {
        span.padded(0.02, 0.02)
    } else {
        span.at_least(least)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn morse(depth: f64, from: f64) -> Vec<(f64, f64)> {
        (0..60)
            .map(|i| from + 0.05 * f64::from(i))
            .map(|x| (x, depth * (1.0 - (-2.2 * (x - 0.95)).exp()).powi(2)))
            .collect()
    }

    #[test]
    fn a_wall_does_not_set_the_scale_but_the_well_is_whole() {
        let curve = morse(450.0, 0.35);
        let wall = curve[0].1;
        assert!(wall > 3000.0);
        let top = ceiling(&[curve], 0.0);
        assert!((450.0..900.0).contains(&top), "{top}");
    }

    #[test]
    fn a_torsion_is_shown_to_its_top() {
        let torsion: Vec<(f64, f64)> = (0..37)
            .map(|i| 10.0 * f64::from(i))
            .map(|x| (x, 15.0 * (1.0 + (3.0 * x.to_radians()).cos())))
            .collect();
        assert!((ceiling(&[torsion], 0.0) - 30.0).abs() < 1e-9);
    }

    #[test]
    fn caps_are_round_and_flat_maps_have_none() {
        let mut heights: Vec<f64> = (0..100).map(f64::from).collect();
        heights.extend([4000.0, 9000.0]);
        let (cap, step) = cap_and_step(&heights, None);
        assert!((90.0..200.0).contains(&cap), "{cap}");
        assert!(((cap / step).round() - cap / step).abs() < 1e-9);
        assert_eq!(cap_and_step(&[0.0, 0.0], None), (0.0, 0.0));
        assert_eq!(cap_and_step(&[], None), (0.0, 0.0));
    }
}
