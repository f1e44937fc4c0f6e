//! Axes: names with units, round tick values, and numbers as they are printed.

/// What an axis shows: a quantity and its unit.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Axis {
    /// the quantity in words, such as `O–H1 distance`
    pub quantity: String,
    /// the unit's symbol, such as `Å` or `°`; empty for a pure number
    pub unit: String,
}

impl Axis {
    /// An axis of the given quantity and unit.
    #[must_use]
    pub fn new(quantity: impl Into<String>, unit: impl Into<String>) -> Self {
        Self {
            quantity: quantity.into(),
            unit: unit.into(),
        }
    }

    /// The label as printed: quantity, then the unit in parentheses.
    #[must_use]
    pub fn label(&self) -> String {
        if self.unit.is_empty() {
            self.quantity.clone()
        } else {
            format!("{} ({})", self.quantity, self.unit)
        }
    }

    pub(super) fn in_degrees(&self) -> bool {
        self.unit == "°" || self.unit == "degree"
    }

    /// A value with its unit: a space between, but none before the degree sign.
    pub(super) fn with_unit(&self, value: &str) -> String {
        match self.unit.as_str() {
            "" => value.to_owned(),
            "°" => format!("{value}°"),
            unit => format!("{value} {unit}"),
        }
    }

    /// Decimals that a value read off a sweep deserves: more than the ticks, fewer than the data.
    pub(super) fn reading(&self, value: f64) -> String {
        self.with_unit(&number(value, if self.in_degrees() { 1 } else { 3 }))
    }
}

/// A closed range of values.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Span {
    pub(super) lo: f64,
    pub(super) hi: f64,
}

impl Span {
    /// The smallest range holding all finite values; `None` without any.
    pub(super) fn of(values: impl IntoIterator<Item = f64>) -> Option<Self> {
        values
            .into_iter()
            .filter(|v| v.is_finite())
            .fold(None, |span: Option<Self>, v| {
                Some(span.map_or(Self { lo: v, hi: v }, |s| Self {
                    lo: s.lo.min(v),
                    hi: s.hi.max(v),
                }))
            })
    }

    pub(super) fn length(self) -> f64 {
        self.hi - self.lo
    }

    /// The range widened about its middle to at least `least`, and beyond rounding of its values.
    pub(super) fn at_least(self, least: f64) -> Self {
        let floor = 1e-9 * self.lo.abs().max(self.hi.abs());
        let missing = least.max(floor) - self.length();
        if missing > 0.0 {
            Self {
                lo: self.lo - 0.5 * missing,
                hi: self.hi + 0.5 * missing,
            }
        } else {
            self
        }
    }

    /// The range with fractions of its length added below and above.
    pub(super) fn padded(self, below: f64, above: f64) -> Self {
        let length = self.length();
        Self {
            lo: self.lo - below * length,
            hi: self.hi + above * length,
        }
    }

    pub(super) fn with(self, value: f64) -> Self {
        Self {
            lo: self.lo.min(value),
            hi: self.hi.max(value),
        }
    }

    pub(super) fn holds(self, value: f64) -> bool {
        value >= self.lo && value <= self.hi
    }
}

/// Round values within a range, and the decimals that print them all exactly.
#[derive(Debug, Clone, PartialEq)]
pub(super) struct Ticks {
    pub(super) values: Vec<f64>,
    pub(super) step: f64,
    pub(super) decimals: usize,
}

impl Ticks {
    /// Labels in the order of the values; tiny or huge steps are written with a power of ten.
    pub(super) fn labels(&self) -> Vec<String> {
        let largest = self.values.iter().fold(0.0_f64, |m, v| m.max(v.abs()));
        if largest > 0.0 && !(1e-3..1e7).contains(&largest) {
            let power = largest.log10().floor() as i32;
            let scale = 10f64.powi(power);
            let decimals = decimals_for(self.step / scale);
            return self
                .values
                .iter()
                .map(|v| {
                    if v.abs() < 0.5 * self.step {
                        "0".to_owned()
                    } else {
                        format!("{}×10{}", number(v / scale, decimals), superscript(power))
                    }
                })
                .collect();
        }
        self.values
            .iter()
            .map(|&v| number(v, self.decimals))
            .collect()
    }
}

/// Round steps: 1, 2 or 5 times a power of ten.
pub(super) fn round_step(length: f64, target: usize) -> f64 {
    let rough = length / target.max(1) as f64;
    if !(rough > 0.0 && rough.is_finite()) {
        return 1.0;
    }
    let power = 10f64.powf(rough.log10().floor());
    let lead = rough / power;
    let factor = if lead < 1.5 {
        1.0
    } else if lead < 3.5 {
        2.0
    } else if lead < 7.5 {
        5.0
    } else {
        10.0
    };
    factor * power
}

/// Round steps for angles, degree.
fn degree_step(length: f64, target: usize) -> f64 {
    let rough = length / target.max(1) as f64;
    [1.0, 2.0, 5.0, 10.0, 15.0, 30.0, 45.0, 60.0, 90.0, 180.0]
        .into_iter()
        .find(|step| *step >= 0.8 * rough && rough >= 0.5)
        .unwrap_or_else(|| round_step(length, target))
}

/// About `target` round values within the range.
pub(super) fn ticks(span: Span, target: usize, degrees: bool) -> Ticks {
    let step = if degrees {
        degree_step(span.length(), target)
    } else {
        round_step(span.length(), target)
    };
    ticks_by(span, step)
}

/// All multiples of `step` within the range, ends included within rounding.
pub(super) fn ticks_by(span: Span, step: f64) -> Ticks {
    let slack = 1e-6;
    let first = (span.lo / step - slack).ceil();
    let last = (span.hi / step + slack).floor();
    // A range far from zero and far smaller than its values can defeat the step; stay bounded.
    let count = (last - first).clamp(-1.0, 200.0) as i64;
    Ticks {
        values: (0..=count)
            .map(|k| {
                let value = (first + k as f64) * step;
                // −0 would print with a sign.
                if value.abs() < 0.5 * step { 0.0 } else { value }
            })
            .collect(),
        step,
        decimals: decimals_for(step),
    }
}

/// Decimals that write multiples of `step` exactly, for steps of one significant figure.
pub(super) fn decimals_for(step: f64) -> usize {
    if step >= 1.0 || step <= 0.0 {
        return 0;
    }
    ((-step.log10() - 1e-9).ceil() as i32).clamp(0, 12) as usize
}

/// A number with fixed decimals, a true minus sign, and no sign on zero.
pub(super) fn number(value: f64, decimals: usize) -> String {
    let text = format!("{value:.decimals$}");
    if text.chars().all(|c| matches!(c, '-' | '0' | '.')) {
        return text.trim_start_matches('-').to_owned();
    }
    text.replace('-', "−")
}

/// An energy as read off a figure: about four figures, never more than six decimals.
pub(super) fn energy(value: f64) -> String {
    let magnitude = value.abs();
    let decimals = if !(1e-12..100.0).contains(&magnitude) {
        1
    } else {
        (3 - magnitude.log10().floor() as i32).clamp(1, 6) as usize
    };
    number(value, decimals)
}

fn superscript(power: i32) -> String {
    power
        .to_string()
        .chars()
        .map(|c| match c {
            '-' => '⁻',
            '1' => '¹',
            '2' => '²',
            '3' => '³',
            '0' => '⁰',
            digit => char::from_u32('⁴' as u32 + digit as u32 - '4' as u32).unwrap_or(digit),
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    #[test]
    fn numbers_are_typeset() {
        assert_eq!(number(-1.25, 1), "−1.2");
        assert_eq!(number(-0.01, 1), "0.0");
        assert_eq!(superscript(-47), "⁻⁴⁷");
        assert_eq!(Axis::new("angle", "°").reading(104.46), "104.5°");
        assert_eq!(Axis::new("O–H1 distance", "Å").label(), "O–H1 distance (Å)");
    }

    #[test]
    fn angles_step_by_parts_of_a_circle() {
        let full = ticks(
            Span {
                lo: -180.0,
                hi: 180.0,
            },
            7,
            true,
        );
        assert!((full.step - 45.0).abs() < 1e-12 || (full.step - 60.0).abs() < 1e-12);
        assert_eq!(full.labels().first().map(String::as_str), Some("−180"));
    }

    #[test]
    fn small_ticks_use_powers_of_ten() {
        let labels = ticks(
            Span {
                lo: -2e-5,
                hi: 4e-5,
            },
            4,
            false,
        )
        .labels();
        assert!(labels.contains(&"2×10⁻⁵".to_owned()), "{labels:?}");
        assert!(labels.contains(&"0".to_owned()));
    }

    proptest! {
        #[test]
        fn ticks_lie_within_rise_and_read_back(lo in -1e4..1e4f64, power in -5.0..5.0f64, target in 3usize..12) {
            let span = Span { lo, hi: lo + 10f64.powf(power) };
            let ticks = ticks(span, target, false);
            let slack = 1e-5 * span.length();
            prop_assert!(ticks.values.len() <= 2 * target + 2);
            for pair in ticks.values.windows(2) {
                prop_assert!(pair[1] > pair[0]);
            }
            for v in &ticks.values {
                prop_assert!(*v >= span.lo - slack && *v <= span.hi + slack);
                if ticks.step >= 1e-5 {
                    let text = number(*v, ticks.decimals).replace('−', "-");
                    let back: f64 = text.parse().expect("a number");
                    prop_assert!((back - v).abs() <= 1e-9 * v.abs().max(1.0), "{} {}", text, v);
                }
            }
        }
    }
}
