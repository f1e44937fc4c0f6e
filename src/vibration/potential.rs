//! One-dimensional potentials: where they are known, and what is assumed beyond.

use super::VibrationError;
use crate::fit::spline::Spline;
use std::f64::consts::{PI, TAU};

/// Where the coordinate lives.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Domain {
    /// The whole line; the potential is known from `lower` to `upper`.
    Line {
        /// first known value
        lower: f64,
        /// last known value
        upper: f64,
    },
    /// The half line above 0, for a length; the potential is known from `lower` to `upper`.
    HalfLine {
        /// first known value, above 0
        lower: f64,
        /// last known value
        upper: f64,
    },
    /// A circle of `period` (2π for a dihedral); the potential is known all round.
    Circle {
        /// where the circle is cut open
        from: f64,
        /// length of the circle
        period: f64,
    },
}

/// A potential energy in hartree of one coordinate in bohr or radian.
pub struct Potential<'a> {
    energy: Box<dyn Fn(f64) -> f64 + 'a>,
    domain: Domain,
}

impl std::fmt::Debug for Potential<'_> {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        f.debug_struct("Potential")
            .field("domain", &self.domain)
            .finish_non_exhaustive()
    }
}

/// What stands beyond the ends of the known curve.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub(super) enum Beyond {
    /// The curve goes on along its tangent where that rises, level where it would fall.
    Tangent,
    /// The curve stays level: nothing lower is possible for a curve that rises outwards.
    Level,
    /// No particle gets there: nothing higher is possible.
    Wall,
}

impl<'a> Potential<'a> {
    /// A potential given as a function (hartree), which is asked for values inside the domain only.
    ///
    /// # Errors
    /// A domain that is empty, not finite, or reaches below 0 on the half line.
    pub fn new(energy: impl Fn(f64) -> f64 + 'a, domain: Domain) -> Result<Self, VibrationError> {
        let (lower, upper) = match domain {
            Domain::Line { lower, upper } | Domain::HalfLine { lower, upper } => (lower, upper),
            Domain::Circle { from, period } => (from, from + period),
        };
        let below = matches!(domain, Domain::HalfLine { .. }) && lower <= 0.0;
        if !(lower.is_finite() && upper.is_finite() && upper > lower) || below {
            return Err(VibrationError::Range { lower, upper });
        }
        Ok(Self {
            energy: Box::new(energy),
            domain,
        })
    }

    /// The quintic spline through the points of a bond stretch (bohr, hartree), on the half line.
    ///
    /// # Errors
    /// Points that make no curve, or lengths that are not positive.
    pub fn of_length(length: &[f64], energies: &[f64]) -> Result<Self, VibrationError> {
        let spline = Spline::new(length, energies)?;
        let (lower, upper) = (spline.lower(), spline.upper());
        Self::new(move |q| spline.value(q), Domain::HalfLine { lower, upper })
    }

    /// The quintic spline through the points of any coordinate that ends (a bend), on the line.
    ///
    /// # Errors
    /// Points that make no curve.
    pub fn of_line(x: &[f64], energies: &[f64]) -> Result<Self, VibrationError> {
        let spline = Spline::new(x, energies)?;
        let (lower, upper) = (spline.lower(), spline.upper());
        Self::new(move |q| spline.value(q), Domain::Line { lower, upper })
    }

    /// The periodic quintic spline through the points of a torsion that goes round (radian, hartree).
    ///
    /// # Errors
    /// Points that do not go round 2π.
    pub fn of_torsion(angle: &[f64], energies: &[f64]) -> Result<Self, VibrationError> {
        let spline = Spline::periodic(angle, energies, TAU)?;
        let from = spline.lower();
        Self::new(
            move |q| spline.value(q),
            Domain::Circle { from, period: TAU },
        )
    }

    /// The same for points from 0 to π (or π to 2π, or −π to 0) of a torsion that is even in the angle,
    /// an assumption the caller must state.
    ///
    /// # Errors
    /// Points that do not begin and end at a multiple of π, π apart (to 1e-6 radian).
    pub fn of_even_torsion(angle: &[f64], energies: &[f64]) -> Result<Self, VibrationError> {
        let lower = angle.first().copied().unwrap_or(0.0);
        let upper = angle.last().copied().unwrap_or(0.0);
        let on_axis = (lower / PI - (lower / PI).round()).abs() < 1e-6;
        if !on_axis || (upper - lower - PI).abs() > 1e-6 || angle.len() != energies.len() {
            return Err(VibrationError::Range { lower, upper });
        }
        let mirrored = angle.iter().zip(energies).rev().skip(1);
        let (back, back_energies): (Vec<f64>, Vec<f64>) =
            mirrored.map(|(a, e)| (2.0 * upper - a, *e)).unzip();
        let all: Vec<f64> = angle.iter().copied().chain(back).collect();
        let all_energies: Vec<f64> = energies.iter().copied().chain(back_energies).collect();
        Self::of_torsion(&all, &all_energies)
    }

    /// Where the coordinate lives and the potential is known.
    #[must_use]
    pub fn domain(&self) -> Domain {
        self.domain
    }

    /// First and last known value of the coordinate.
    #[must_use]
    pub fn range(&self) -> (f64, f64) {
        match self.domain {
            Domain::Line { lower, upper } | Domain::HalfLine { lower, upper } => (lower, upper),
            Domain::Circle { from, period } => (from, from + period),
        }
    }

    /// Energy in hartree; the coordinate is brought into the known range first.
    #[must_use]
    pub fn energy(&self, q: f64) -> f64 {
        match self.domain {
            Domain::Circle { from, period } => (self.energy)(from + (q - from).rem_euclid(period)),
            Domain::Line { lower, upper } | Domain::HalfLine { lower, upper } => {
                (self.energy)(q.clamp(lower, upper))
            }
        }
    }

    /// Energy at the two ends; `None` on a circle, which has none.
    #[must_use]
    pub fn edges(&self) -> Option<(f64, f64)> {
        let (lower, upper) = self.range();
        (!matches!(self.domain, Domain::Circle { .. }))
            .then(|| (self.energy(lower), self.energy(upper)))
    }

    /// The lower of the two ends' energies: states above it are not bound by what is known.
    /// Infinite on a circle.
    #[must_use]
    pub fn lowest_edge(&self) -> f64 {
        self.edges().map_or(f64::INFINITY, |(a, b)| a.min(b))
    }

    /// Lowest energy on 1001 places of the known range: a base for energies, not a minimum to report.
    pub(super) fn floor(&self) -> f64 {
        let (lower, upper) = self.range();
        (0..=1000)
            .map(|i| self.energy(lower + (upper - lower) * f64::from(i) / 1000.0))
            .fold(f64::INFINITY, f64::min)
    }

    /// Energy anywhere, with the given assumption beyond the ends.
    pub(super) fn extended(&self, beyond: Beyond) -> impl Fn(f64) -> f64 {
        let (lower, upper) = self.range();
        let ends = self.edges().map(|(left, right)| {
            let h = 1e-4 * (upper - lower);
            // Outward slopes from second-order one-sided differences.
            let slope = |at: f64, step: f64, end: f64| {
                let value =
                    -1.5 * end + 2.0 * self.energy(at + step) - 0.5 * self.energy(at + 2.0 * step);
                (-value / h).max(0.0)
            };
            let (out_left, out_right) = match beyond {
                Beyond::Tangent => (slope(lower, h, left), slope(upper, -h, right)),
                Beyond::Level => (0.0, 0.0),
                Beyond::Wall => (f64::INFINITY, f64::INFINITY),
            };
            (left, out_left, right, out_right)
        });
        move |q| match ends {
            Some((left, slope, ..)) if q < lower => left + slope * (lower - q),
            Some((.., right, slope)) if q > upper => right + slope * (q - upper),
            _ => self.energy(q),
        }
    }
}
