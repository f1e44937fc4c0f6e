//! The values of a sweep: from three ways to write them to an ascending list in ångström or degree.

use super::sweep::Kind;
use crate::molecule::cartesian::COINCIDENT_WITHIN_ANGSTROM;
use crate::spec::diagnostic::{Problems, all_of, number};
use crate::spec::raw::RawSweep;
use crate::spec::read::{Field, Given};
use crate::spec::{MAX_POINTS, SweepValues};
use crate::units::LengthUnit;
use std::ops::Range;

/// Largest distance that is swept, ångström: nothing changes beyond it.
const MAX_BOND_ANGSTROM: f64 = 1000.0;
/// A range that is this near to a whole number of steps (in steps) has its end on the grid.
const WHOLE_STEPS: f64 = 1e-6;

/// The values in ångström or degree, ascending, and how they were written. Without a kind, only what does not
/// depend on it is checked.
pub(super) fn values(
    given: &Given<RawSweep>,
    kind: Option<Kind>,
    unit: LengthUnit,
    problems: &mut Problems<'_>,
    notes: &mut Problems<'_>,
) -> Option<(Vec<f64>, SweepValues)> {
    let before = problems.found.len();
    let raw = &given.value;
    let written = if raw.values.is_absent() {
        range(given, problems, notes)
    } else {
        for (key, span) in [
            ("from", raw.from.get().map(|g| &g.span)),
            ("to", raw.to.get().map(|g| &g.span)),
            ("step", raw.step.get().map(|g| &g.span)),
            ("points", raw.points.get().map(|g| &g.span)),
        ] {
            if let Some(span) = span {
                problems
                    .at(span, format!("[[sweep]] has values and {key}"))
                    .expected(
                        "expected values = […] alone, or from, to and one of step and points",
                    );
            }
        }
        listed(&raw.values, problems)
    };
    if let Some(kind) = kind {
        for (span, value) in places(raw) {
            in_range(value, span, kind, unit, problems);
        }
    }
    let (kind, written) = (kind?, written?);
    if problems.found.len() > before {
        return None;
    }
    let values = written
        .expanded()
        .into_iter()
        .map(|value| match (kind, unit) {
            (Kind::Bond, LengthUnit::Bohr) => LengthUnit::Angstrom.from_bohr(value),
            _ => value,
        })
        .collect();
    Some((values, written))
}

/// The numbers that stand for values themselves.
fn places(raw: &RawSweep) -> Vec<(&Range<usize>, f64)> {
    let ends = [raw.from.get(), raw.to.get()];
    let listed = raw.values.get().map_or(&[][..], |list| &list.value);
    ends.into_iter()
        .flatten()
        .chain(listed)
        .map(|given| (&given.span, given.value))
        .collect()
}

fn in_range(
    value: f64,
    span: &Range<usize>,
    kind: Kind,
    unit: LengthUnit,
    problems: &mut Problems<'_>,
) {
    match kind {
        Kind::Bond => {
            let length_angstrom = match unit {
                LengthUnit::Angstrom => value,
                LengthUnit::Bohr => LengthUnit::Angstrom.from_bohr(value),
            };
            if value <= 0.0 {
                problems
                    .at(span, format!("{} cannot be a bond length", number(value)))
                    .expected("expected a number greater than zero");
            } else if length_angstrom < COINCIDENT_WITHIN_ANGSTROM {
                problems
                    .at(
                        span,
                        format!(
                            "{} {} is no distance of two nuclei",
                            number(value),
                            unit.word()
                        ),
                    )
                    .expected(format!("expected at least {COINCIDENT_WITHIN_ANGSTROM} Å"));
            } else if length_angstrom > MAX_BOND_ANGSTROM {
                problems
                    .at(
                        span,
                        format!(
                            "{} {} is beyond every interaction",
                            number(value),
                            unit.word()
                        ),
                    )
                    .expected(format!("expected at most {MAX_BOND_ANGSTROM} Å"));
            }
        }
        Kind::Angle => {
            if !(0.0..=180.0).contains(&value) {
                problems
                    .at(span, format!("{}° cannot be an angle", number(value)))
                    .expected("expected a number from 0 to 180");
            }
        }
        Kind::Dihedral => {}
    }
}

fn listed(field: &Field<Vec<Given<f64>>>, problems: &mut Problems<'_>) -> Option<SweepValues> {
    let list = field.get()?;
    if list.value.is_empty() {
        problems
            .at(&list.span, "a sweep without values")
            .expected("expected one value or more");
        return None;
    }
    if list.value.len() > MAX_POINTS {
        problems
            .at(&list.span, format!("{} values", list.value.len()))
            .expected(format!("expected at most {MAX_POINTS} points"));
        return None;
    }
    for pair in list.value.windows(2) {
        if pair[1].value <= pair[0].value {
            problems
                .at(
                    &pair[1].span,
                    format!(
                        "{} does not lie above {}",
                        number(pair[1].value),
                        number(pair[0].value)
                    ),
                )
                .expected("expected values in increasing order")
                .hint("start = \"last\" in [walk] begins at the other end");
        }
    }
    Some(SweepValues::List(
        list.value.iter().map(|v| v.value).collect(),
    ))
}

fn range(
    given: &Given<RawSweep>,
    problems: &mut Problems<'_>,
    notes: &mut Problems<'_>,
) -> Option<SweepValues> {
    let raw = &given.value;
    let lacking: Vec<&str> = [
        ("from", raw.from.is_absent()),
        ("to", raw.to.is_absent()),
        (
            "step (or points)",
            raw.step.is_absent() && raw.points.is_absent(),
        ),
    ]
    .into_iter()
    .filter_map(|(key, absent)| absent.then_some(key))
    .collect();
    if !lacking.is_empty() {
        problems
            .at(&given.span, format!("[[sweep]] lacks {}", all_of(&lacking)))
            .expected("expected from, to and one of step and points, or values = […]");
    }
    if let (Some(_), Some(points)) = (raw.step.get(), raw.points.get()) {
        problems
            .at(&points.span, "[[sweep]] has step and points")
            .expected("expected one of the two")
            .hint("take one of them out");
    }
    let step = raw.step.get();
    if let Some(step) = step
        && step.value <= 0.0
    {
        problems
            .at(
                &step.span,
                format!("{} cannot be a step", number(step.value)),
            )
            .expected("expected a number greater than zero")
            .hint("start = \"last\" in [walk] begins at the other end");
    }
    let points = raw.points.get();
    if let Some(points) = points
        && points.value < 1
    {
        problems
            .at(
                &points.span,
                format!("{} cannot be a number of points", points.value),
            )
            .expected("expected a whole number of at least 1");
    }
    let (from, to) = (raw.from.get()?, raw.to.get()?);
    if from.value > to.value {
        problems
            .at(
                &to.span,
                format!(
                    "to = {} lies below from = {}",
                    number(to.value),
                    number(from.value)
                ),
            )
            .expected("expected from to be the smaller")
            .hint("swap the two; start = \"last\" in [walk] begins at the other end");
        return None;
    }
    let width = to.value - from.value;
    match (step, points) {
        (Some(step), None) if step.value > 0.0 => {
            let steps = width / step.value;
            if steps > MAX_POINTS as f64 {
                problems
                    .at(&step.span, format!("this step makes {steps:.3e} points"))
                    .expected(format!("expected at most {MAX_POINTS} points"));
                return None;
            }
            let written = SweepValues::Step {
                from: from.value,
                to: to.value,
                step: step.value,
            };
            if (steps - steps.round()).abs() > WHOLE_STEPS
                && let Some(last) = written.expanded().pop()
            {
                notes
                    .at(
                        &step.span,
                        format!("this step does not reach to = {}", number(to.value)),
                    )
                    .expected(format!("the last value is {}", number(last)));
            }
            Some(written)
        }
        (None, Some(points)) => {
            let count = usize::try_from(points.value).ok().filter(|n| *n >= 1)?;
            if count > MAX_POINTS {
                problems
                    .at(&points.span, format!("{count} points"))
                    .expected(format!("expected at most {MAX_POINTS} points"));
                return None;
            }
            if (count == 1) != (width <= 0.0) {
                problems
                    .at(
                        &points.span,
                        if count == 1 {
                            format!(
                                "one point cannot reach from {} to {}",
                                number(from.value),
                                number(to.value)
                            )
                        } else {
                            format!(
                                "{count} points, but from and to are both {}",
                                number(to.value)
                            )
                        },
                    )
                    .expected(
                        "expected two points or more between two different ends, or one value",
                    )
                    .hint(format!("values = [{}] is one point", number(from.value)));
                return None;
            }
            Some(SweepValues::Points {
                from: from.value,
                to: to.value,
                points: count,
            })
        }
        _ => None,
    }
}

/// from + i·step without the rounding of the sum: 0.8, not 0.7999999999999999.
fn value_at(from: f64, step: f64, i: usize) -> f64 {
    const DECIMALS: f64 = 1e10;
    let value = from + i as f64 * step;
    if i == 0 || step * DECIMALS < 1e4 {
        value
    } else {
        (value * DECIMALS).round() / DECIMALS
    }
}

impl SweepValues {
    /// All values in the unit in which they were written. Value i is from + i·step; none lies beyond `to`, though the sum
    /// may by rounding.
    #[must_use]
    pub fn expanded(&self) -> Vec<f64> {
        match self {
            Self::Step { from, to, step } => {
                let steps = ((to - from) / step + WHOLE_STEPS).floor().max(0.0);
                // At most MAX_POINTS, checked when it was read.
                let steps = steps.min(MAX_POINTS as f64) as usize;
                (0..=steps)
                    .map(|i| value_at(*from, *step, i).min(*to))
                    .collect()
            }
            Self::Points { from, to, points } => {
                let last = points.saturating_sub(1);
                let step = (to - from) / last.max(1) as f64;
                (0..*points)
                    .map(|i| {
                        if i == last && last > 0 {
                            *to
                        } else {
                            value_at(*from, step, i)
                        }
                    })
                    .collect()
            }
            Self::List(values) => values.clone(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn the_end_of_a_range_is_included_whatever_the_rounding() {
        let step = SweepValues::Step {
            from: 0.7,
            to: 3.0,
            step: 0.05,
        };
        let values = step.expanded();
        assert_eq!(values.len(), 47);
        assert_eq!((values[0], values[46]), (0.7, 3.0));
        let points = SweepValues::Points {
            from: 0.7,
            to: 3.0,
            points: 47,
        };
        assert_eq!(points.expanded().len(), 47);
        assert_eq!(points.expanded()[46..], [3.0]);
        let short = SweepValues::Step {
            from: 0.0,
            to: 1.0,
            step: 0.4,
        };
        assert_eq!(short.expanded(), [0.0, 0.4, 0.8]);
        let one = SweepValues::Points {
            from: 2.0,
            to: 2.0,
            points: 1,
        };
        assert_eq!(one.expanded(), [2.0]);
    }

    proptest! {
        #[test]
        fn values_ascend_from_the_first_to_no_further_than_the_last(
            from in -400.0..400.0f64, width in 1e-3..400.0f64, steps in 1usize..500,
        ) {
            let to = from + width;
            let by_step = SweepValues::Step { from, to, step: width / steps as f64 };
            let by_points = SweepValues::Points { from, to, points: steps + 1 };
            for written in [by_step, by_points] {
                let values = written.expanded();
                prop_assert_eq!(values.len(), steps + 1);
                prop_assert!(values.windows(2).all(|p| p[0] < p[1]));
                prop_assert!(values[0].to_bits() == from.to_bits() && values[steps] <= to);
                prop_assert!((values[steps] - to).abs() < 1e-6 * width);
            }
        }
    }
}
