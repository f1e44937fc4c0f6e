//! Minima and maxima of a curve given as points.

use super::FitError;
use super::polynomial::Series;

/// Minimum or maximum.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Kind {
    /// lower than what surrounds it
    Minimum,
    /// higher than what surrounds it
    Maximum,
}

/// Where on the curve an extremum lies.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Place {
    /// between the ends of the curve
    Interior,
    /// at the first point: the curve goes on beyond it, so this is no stationary point
    Start,
    /// at the last point: the curve goes on beyond it, so this is no stationary point
    End,
}

/// A minimum or maximum of a curve.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Extremum {
    /// Minimum or maximum.
    pub kind: Kind,
    /// Inside the curve, or at an end.
    pub place: Place,
    /// Index of the lowest (highest) point.
    pub index: usize,
    /// Place between the points (bohr or radian); the point itself at an end.
    pub x: f64,
    /// Energy there, in hartree.
    pub energy: f64,
    /// First to fourth derivative of the interpolating polynomial there (hartree per bohrⁿ or
    /// radianⁿ); zeros at an end.
    pub derivatives: [f64; 4],
}

/// How extrema are told from ripples.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ExtremaSettings {
    /// Period of the coordinate (2π for a dihedral), when the curve goes round it.
    pub period: Option<f64>,
    /// Extrema that rise or fall by less than this (hartree) are taken for noise. The default, 1e-7, is
    /// a hundred times the energy convergence of the points and a hundredth of the shallowest
    /// van der Waals wells.
    pub prominence: f64,
}

impl Default for ExtremaSettings {
    fn default() -> Self {
        Self {
            period: None,
            prominence: 1e-7,
        }
    }
}

/// Checks arrays of a curve: equal lengths, finite, strictly increasing coordinate.
pub(super) fn check_curve(x: &[f64], energies: &[f64]) -> Result<(), FitError> {
    if x.len() != energies.len() {
        return Err(FitError::LengthsDiffer {
            coordinates: x.len(),
            energies: energies.len(),
        });
    }
    if let Some(at) = x
        .iter()
        .zip(energies)
        .position(|(a, b)| !(a + b).is_finite())
    {
        return Err(FitError::NotFinite { index: at });
    }
    match x.windows(2).position(|w| w[1] <= w[0]) {
        Some(at) => Err(FitError::NotIncreasing { index: at + 1 }),
        None => Ok(()),
    }
}

/// A periodic curve written out three times, so that nothing near the seam is special.
#[derive(Debug, Clone)]
pub(super) struct Unrolled {
    pub(super) x: Vec<f64>,
    pub(super) energies: Vec<f64>,
    /// Distinct points of one period; the middle copy is `points..2 * points`.
    pub(super) points: usize,
}

/// Writes a periodic curve out three times; a last point that repeats the first is dropped.
///
/// Errors when the points do not go round the period: the gap at the seam must not exceed 1.5 times
/// the largest step.
pub(super) fn unroll(x: &[f64], energies: &[f64], period: f64) -> Result<Unrolled, FitError> {
    check_curve(x, energies)?;
    let mut points = x.len();
    let span = match (x.first(), x.last()) {
        (Some(first), Some(last)) => last - first,
        _ => 0.0,
    };
    if points >= 2 && (span - period).abs() < 1e-6 * period {
        points -= 1;
    }
    let step = x.windows(2).map(|w| w[1] - w[0]).fold(0.0, f64::max);
    let gap = period - (x[..points].last().copied().unwrap_or(0.0) - x.first().unwrap_or(&0.0));
    if points < 3 || gap < 1e-6 * period || gap > 1.5 * step {
        return Err(FitError::NotAllRound { span, period });
    }
    let copy = |shift: f64| x[..points].iter().map(move |v| v + shift * period);
    Ok(Unrolled {
        x: copy(-1.0).chain(copy(0.0)).chain(copy(1.0)).collect(),
        energies: energies[..points].repeat(3),
        points,
    })
}

/// All minima and maxima of a curve, in the order of the coordinate.
///
/// `x` in bohr or radian, strictly increasing and not necessarily even; `energies` in hartree. Points
/// between two given ones are found on the polynomial through up to seven neighbours. Without a
/// period, the two ends are listed too, as [`Place::Start`] and [`Place::End`]; a curve flat within
/// the prominence has no extremum. With a period, `x` of an extremum lies within half a step of the
/// range given.
///
/// # Errors
/// Arrays of different lengths, numbers that are not finite, coordinates out of order, or a period
/// that the points do not go round.
pub fn extrema(
    x: &[f64],
    energies: &[f64],
    settings: &ExtremaSettings,
) -> Result<Vec<Extremum>, FitError> {
    if let Some(period) = settings.period {
        let rolled = unroll(x, energies, period)?;
        let n = rolled.points;
        let found = turning_points(&rolled.energies, settings.prominence)
            .into_iter()
            .filter(|(_, index)| (n..2 * n).contains(index))
            .map(|(kind, index)| {
                let mut e = refine(&rolled.x, &rolled.energies, index, kind);
                e.index -= n;
                e
            })
            .collect();
        return Ok(found);
    }
    check_curve(x, energies)?;
    let last = x.len().saturating_sub(1);
    Ok(turning_points(energies, settings.prominence)
        .into_iter()
        .map(|(kind, index)| match index {
            0 => end(x, energies, 0, kind, Place::Start),
            i if i == last => end(x, energies, last, kind, Place::End),
            i => refine(x, energies, i, kind),
        })
        .collect())
}

fn end(x: &[f64], energies: &[f64], index: usize, kind: Kind, place: Place) -> Extremum {
    Extremum {
        kind,
        place,
        index,
        x: x[index],
        energy: energies[index],
        derivatives: [0.0; 4],
    }
}

/// Alternating minima and maxima that differ from each other by more than `prominence`; the first is
/// at index 0 and the last at the last index, unless the curve is flat.
fn turning_points(energies: &[f64], prominence: f64) -> Vec<(Kind, usize)> {
    let mut found = Vec::new();
    let (mut low, mut high) = (0, 0);
    let mut falling = None;
    for i in 0..energies.len() {
        if energies[i] < energies[low] {
            low = i;
        }
        if energies[i] > energies[high] {
            high = i;
        }
        let risen = energies[i] - energies[low] > prominence;
        let fallen = energies[high] - energies[i] > prominence;
        match falling {
            // The direction is still open: the start is an extremum of the other kind.
            None if risen => {
                found.push((Kind::Minimum, if low == 0 { 0 } else { low }));
                falling = Some(false);
                high = i;
            }
            None if fallen => {
                found.push((Kind::Maximum, if high == 0 { 0 } else { high }));
                falling = Some(true);
                low = i;
            }
            Some(true) if risen => {
                found.push((Kind::Minimum, low));
                falling = Some(false);
                high = i;
            }
            Some(false) if fallen => {
                found.push((Kind::Maximum, high));
                falling = Some(true);
                low = i;
            }
            _ => {}
        }
    }
    if let Some(falling) = falling {
        let kind = if falling {
            Kind::Minimum
        } else {
            Kind::Maximum
        };
        found.push((kind, energies.len() - 1));
    }
    found
}

/// The extremum of the polynomial through the points around `index`: seven points if they give one
/// inside the two neighbouring steps, else five, else three.
fn refine(x: &[f64], energies: &[f64], index: usize, kind: Kind) -> Extremum {
    let sign = match kind {
        Kind::Minimum => 1.0,
        Kind::Maximum => -1.0,
    };
    let (lower, upper) = (x[index - 1], x[index + 1]);
    for points in [7, 5, 3] {
        if points > x.len() {
            continue;
        }
        let from = index
            .saturating_sub(points / 2)
            .min(x.len().saturating_sub(points));
        let range = from..from + points;
        let Ok(series) = Series::through(&x[range.clone()], &energies[range]) else {
            continue;
        };
        if let Some(at) = series.stationary(x[index], lower, upper) {
            let d = series.derivatives(at, 4);
            // A runaway interpolation shows as the wrong curvature or an energy beyond the points'.
            let beyond = sign * (energies[index] - d[0]) + 1e-12;
            let steepest = (energies[index - 1] - energies[index])
                .abs()
                .max((energies[index + 1] - energies[index]).abs());
            if sign * d[2] > 0.0 && beyond >= 0.0 && beyond <= 1e-9 + steepest {
                return Extremum {
                    kind,
                    place: Place::Interior,
                    index,
                    x: at,
                    energy: d[0],
                    derivatives: [d[1], d[2], d[3], d[4]],
                };
            }
        }
    }
    Extremum {
        kind,
        place: Place::Interior,
        index,
        x: x[index],
        energy: energies[index],
        derivatives: [0.0; 4],
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::f64::consts::{PI, TAU};

    fn sample(f: impl Fn(f64) -> f64, from: f64, to: f64, n: usize) -> (Vec<f64>, Vec<f64>) {
        let x: Vec<f64> = (0..n)
            .map(|i| from + (to - from) * i as f64 / (n - 1) as f64)
            .collect();
        let e = x.iter().map(|&v| f(v)).collect();
        (x, e)
    }

    fn list(x: &[f64], e: &[f64], period: Option<f64>) -> Vec<Extremum> {
        let settings = ExtremaSettings {
            period,
            ..ExtremaSettings::default()
        };
        extrema(x, e, &settings).unwrap()
    }

    #[test]
    fn a_double_well_has_three_inner_extrema_and_two_ends() {
        let (x, e) = sample(|q| 0.01 * (q * q - 1.0).powi(2), -1.73, 1.61, 41);
        let found = list(&x, &e, None);
        let kinds: Vec<_> = found.iter().map(|f| (f.kind, f.place)).collect();
        use Kind::{Maximum, Minimum};
        use Place::{End, Interior, Start};
        assert_eq!(
            kinds,
            [
                (Maximum, Start),
                (Minimum, Interior),
                (Maximum, Interior),
                (Minimum, Interior),
                (Maximum, End)
            ]
        );
        for (f, exact) in found[1..4].iter().zip([-1.0, 0.0, 1.0]) {
            assert!((f.x - exact).abs() < 1e-9, "{f:?}");
            assert!((f.energy - 0.01 * (exact * exact - 1.0).powi(2)).abs() < 1e-13);
        }
        assert!((found[1].derivatives[1] - 0.08).abs() < 1e-8);
    }

    #[test]
    fn a_minimum_at_the_end_of_the_sweep_is_no_stationary_point() {
        let (x, e) = sample(|q| 0.3 / q, 1.0, 3.0, 21);
        let found = list(&x, &e, None);
        assert_eq!(found.len(), 2);
        assert_eq!(
            (found[0].kind, found[0].place),
            (Kind::Maximum, Place::Start)
        );
        assert_eq!((found[1].kind, found[1].place), (Kind::Minimum, Place::End));
    }

    #[test]
    fn a_torsion_is_followed_across_the_seam() {
        let f = |q: f64| 0.004 * (1.0 + (3.0 * q).cos()) + 0.0005 * q.cos();
        for (n, to) in [(73, TAU), (72, TAU * 71.0 / 72.0)] {
            let (x, e) = sample(f, 0.0, to, n);
            let found = list(&x, &e, Some(TAU));
            assert_eq!(found.len(), 6);
            assert!(found.iter().all(|f| f.place == Place::Interior));
            assert!((found[0].x).abs() < 1e-9, "the maximum at 0 is found once");
            let middle = found.iter().find(|f| (f.x - PI).abs() < 0.1).unwrap();
            assert_eq!(middle.kind, Kind::Minimum);
            assert!((middle.x - PI).abs() < 1e-8);
        }
    }

    #[test]
    fn a_minimum_halfway_between_equal_points_counts_once() {
        let (x, e) = sample(|q| 0.2 * (q - 0.5).powi(2), -3.0, 4.0, 8);
        let found = list(&x, &e, None);
        let minima: Vec<_> = found.iter().filter(|f| f.kind == Kind::Minimum).collect();
        assert_eq!(minima.len(), 1);
        assert!((minima[0].x - 0.5).abs() < 1e-12);
    }

    #[test]
    fn ripples_of_the_convergence_threshold_are_no_extrema() {
        let (x, mut e) = sample(|q| 0.2 * (1.0 - (-(q - 1.5)).exp()).powi(2), 1.0, 30.0, 200);
        for (i, v) in e.iter_mut().enumerate() {
            *v += if i % 2 == 0 { 1e-9 } else { -1e-9 };
        }
        let found = list(&x, &e, None);
        assert_eq!(found.len(), 3);
        assert!((found[1].x - 1.5).abs() < 1e-4);
    }

    #[test]
    fn arrays_that_make_no_curve_are_refused() {
        let s = ExtremaSettings::default();
        assert!(extrema(&[0.0, 1.0], &[0.0], &s).is_err());
        assert!(extrema(&[0.0, 0.0], &[0.0, 1.0], &s).is_err());
        assert!(extrema(&[0.0, 1.0], &[0.0, f64::NAN], &s).is_err());
        let round = ExtremaSettings {
            period: Some(TAU),
            ..s
        };
        assert!(extrema(&[0.0, 1.0, 2.0, 3.0], &[0.0, 1.0, 0.0, 1.0], &round).is_err());
        assert_eq!(extrema(&[], &[], &s).unwrap().len(), 0);
    }
}
