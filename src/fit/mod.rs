//! Fits of energy curves: force constants with a spread, from points alone.
//!
//! Coordinates in bohr or radian, energies in hartree, results in atomic units; [`constant`] turns a
//! second derivative into the units of the model that will use it.

#[cfg(test)]
mod checks;
mod choice;
pub mod constant;
mod curve;
pub mod extrema;
pub mod fourier;
pub mod least_squares;
pub mod morse;
pub mod polynomial;
pub mod spline;
pub mod surface;

pub use constant::{Convention, Coordinate, ForceConstant, Verdict, verdict};
pub use extrema::{ExtremaSettings, Extremum, Kind, Place, extrema};

use crate::units::KJ_PER_MOL_PER_HARTREE;
use curve::Curve;
use std::collections::BTreeMap;
use std::f64::consts::TAU;
use std::ops::Range;

/// Functional form of a fit.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "lowercase")]
pub enum Form {
    /// polynomial around one minimum
    Polynomial,
    /// Morse function, with terms that let its exponent vary
    Morse,
    /// Fourier series of a torsion
    Fourier,
}

/// Which points around a minimum a fit may use.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Window {
    /// Points no higher above the minimum than this, in hartree.
    Below {
        /// energy above the minimum
        hartree: f64,
    },
    /// Points no further from the minimum than this, in bohr or radian.
    Within {
        /// distance from the minimum
        half_width: f64,
    },
}

/// What a fit runs over.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FitSettings {
    /// Orders tried, inclusive. Polynomial: the degree (from 2). Fourier: the highest multiple of the angle.
    /// Morse: ignored, see `morse_terms`.
    pub orders: (usize, usize),
    /// Terms beyond the plain Morse function tried, inclusive; (0, 0) is the plain function.
    pub morse_terms: (usize, usize),
    /// Well depth (hartree) to hold fixed in a Morse fit, when a dissociation limit is known.
    pub morse_depth: Option<f64>,
    /// The widest window tried; it is grown until it holds order + 3 points, and never crosses a
    /// neighbouring maximum unless it must for that.
    pub window: Window,
    /// Convergence error of each energy, hartree; default 1e-9.
    pub noise_hartree: f64,
    /// How extrema are told from ripples, and the period of the coordinate.
    pub extrema: ExtremaSettings,
}

impl Default for FitSettings {
    fn default() -> Self {
        Self {
            orders: (2, 8),
            morse_terms: (0, 3),
            morse_depth: None,
            window: Window::Below {
                hartree: 250.0 / KJ_PER_MOL_PER_HARTREE,
            },
            noise_hartree: 1e-9,
            extrema: ExtremaSettings::default(),
        }
    }
}

/// Why there is no fit.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum FitError {
    /// Arrays of different lengths.
    #[error("{coordinates} coordinates and {energies} energies make no curve")]
    LengthsDiffer {
        /// number of coordinates
        coordinates: usize,
        /// number of energies
        energies: usize,
    },
    /// Too few points for the form.
    #[error("{points} points are too few, {needed} are needed")]
    TooFewPoints {
        /// points given
        points: usize,
        /// points needed
        needed: usize,
    },
    /// A coordinate or energy is NaN or infinite.
    #[error("point {index} is not finite")]
    NotFinite {
        /// index of the point
        index: usize,
    },
    /// The coordinate does not increase.
    #[error("the coordinate of point {index} does not exceed the one before")]
    NotIncreasing {
        /// index of the point
        index: usize,
    },
    /// A periodic curve with a gap.
    #[error("points over {span} do not go round the period of {period} (radian)")]
    NotAllRound {
        /// last minus first coordinate
        span: f64,
        /// period asked for
        period: f64,
    },
    /// The order range is empty or asks for nothing.
    #[error("orders from {from} to {to} hold no order that this form can take")]
    NoOrders {
        /// first order
        from: usize,
        /// last order
        to: usize,
    },
    /// The curve has no minimum between its ends.
    #[error(
        "the lowest of {points} points lies at an end of the curve: there is no minimum to fit"
    )]
    NoMinimum {
        /// points of the curve
        points: usize,
    },
    /// Nothing converged to a minimum with positive curvature.
    #[error(
        "no order and window gives a minimum near {at}; {points} points are there, {needed} are needed at least"
    )]
    NoFit {
        /// where the points have their minimum (bohr or radian)
        at: f64,
        /// points of the curve
        points: usize,
        /// points needed for the lowest order
        needed: usize,
    },
    /// A Morse function of an angle was asked for.
    #[error("a Morse function needs a length, not an angle")]
    NeedsLength,
    /// A Fourier series of a length was asked for.
    #[error("a Fourier series needs an angle, not a length")]
    NeedsAngle,
    /// A least-squares problem failed.
    #[error(transparent)]
    LeastSquares(#[from] least_squares::LeastSquaresError),
}

/// The points that a fit used.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct WindowUsed {
    /// Coordinate of the first point used (bohr or radian).
    pub from: f64,
    /// Coordinate of the last point used.
    pub to: f64,
    /// Number of points used.
    pub points: usize,
}

impl WindowUsed {
    fn of(curve: &Curve, range: Range<usize>) -> Self {
        Self {
            from: curve.x[range.start],
            to: curve.x[range.end - 1],
            points: range.len(),
        }
    }
}

/// A function that draws a fit: energy in hartree of a coordinate in bohr or radian.
#[derive(Debug, Clone, PartialEq)]
pub enum Model {
    /// Σ c_j (q − origin)^j
    Taylor {
        /// place of expansion
        origin: f64,
        /// c_0, c_1, …
        coefficients: Vec<f64>,
    },
    /// see [`morse`]
    Morse(morse::Morse),
    /// see [`fourier`]
    Fourier(fourier::Fourier),
}

impl Model {
    /// Energy in hartree at `q`.
    #[must_use]
    pub fn energy(&self, q: f64) -> f64 {
        match self {
            Self::Taylor {
                origin,
                coefficients,
            } => coefficients
                .iter()
                .rev()
                .fold(0.0, |sum, c| sum * (q - origin) + c),
            Self::Morse(m) => m.energy(q),
            Self::Fourier(f) => f.derivative(q, 0),
        }
    }
}

/// The second derivative from gradients at the fitted minimum, and what it says about the fit.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct DerivativeCheck {
    /// Second derivative in hartree/bohr² or hartree/rad².
    pub force_constant: f64,
    /// Whether it agrees.
    pub verdict: Verdict,
}

/// One minimum of a curve in one functional form, atomic units throughout.
#[derive(Debug, Clone, PartialEq)]
pub struct Fit {
    /// Functional form.
    pub form: Form,
    /// Order chosen: degree of a polynomial, highest multiple of a Fourier series, terms beyond a plain Morse function.
    pub order: usize,
    /// Length or angle.
    pub coordinate: Coordinate,
    /// Points used.
    pub window: WindowUsed,
    /// Place of the minimum, bohr or radian.
    pub equilibrium: f64,
    /// Energy at the minimum, hartree.
    pub energy: f64,
    /// Second derivative at the minimum, hartree/bohr² or hartree/rad².
    pub force_constant: f64,
    /// Third derivative, where the form gives it.
    pub third_derivative: Option<f64>,
    /// Fourth derivative, where the form gives it.
    pub fourth_derivative: Option<f64>,
    /// Half range of the force constant over all acceptable orders and windows (at least the
    /// model error predicted for the chosen one), divided by the force constant.
    pub spread: f64,
    /// Orders and windows whose predicted model error is acceptable: those the spread runs over.
    pub trials_accepted: usize,
    /// Orders and windows tried.
    pub trials: usize,
    /// Root mean square of the leave-one-out residuals, hartree.
    pub leave_one_out_hartree: f64,
    /// Root mean square of the residuals, hartree.
    pub rms_residual_hartree: f64,
    /// Parameters by name; the names carry the units.
    pub parameters: BTreeMap<String, f64>,
    /// Leave-one-out standard error of each parameter, in its unit.
    pub parameter_errors: BTreeMap<String, f64>,
    /// Half range of a parameter over the acceptable trials, in its unit, where the form's parameters
    /// mean the same in all of them (Morse: depth and exponent).
    pub parameter_spreads: BTreeMap<String, f64>,
    /// The second derivative from gradients, once [`Fit::check_against`] was called.
    pub derivative_check: Option<DerivativeCheck>,
    /// What a reader must know about the fit, in sentences.
    pub notes: Vec<String>,
    /// The fitted function.
    pub model: Model,
}

impl Fit {
    /// The force constant with its units.
    #[must_use]
    pub fn constant(&self) -> ForceConstant {
        ForceConstant {
            second_derivative: self.force_constant,
            coordinate: self.coordinate,
        }
    }

    /// Attaches the second derivative from gradients (hartree/bohr² or hartree/rad²) and its verdict.
    pub fn check_against(&mut self, derivative: f64) {
        self.derivative_check = Some(DerivativeCheck {
            force_constant: derivative,
            verdict: verdict(self.force_constant, self.spread, derivative),
        });
    }
}

/// The fits of a curve: one per minimum, and why a minimum has none.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct CurveFits {
    /// In the order of the coordinate; at least one unless `failures` has entries.
    pub fits: Vec<Fit>,
    /// One for each minimum that no order and window fits.
    pub failures: Vec<FitError>,
}

/// Fits one form to every minimum of a curve, in the order of the coordinate.
///
/// `x` in bohr or radian, strictly increasing, any spacing; `energies` in hartree, unconverged points
/// left out. A dihedral that goes round the circle should have `settings.extrema.period` set to 2π,
/// so that minima at the seam are seen whole; a Fourier series sets it itself where the points allow.
///
/// # Errors
/// Arrays that make no curve, a form that does not suit the coordinate, or no minimum between the ends.
/// A minimum that nothing fits is one of [`CurveFits::failures`].
pub fn fit_curve(
    x: &[f64],
    energies: &[f64],
    form: Form,
    coordinate: Coordinate,
    settings: &FitSettings,
) -> Result<CurveFits, FitError> {
    let (from, to) = settings.orders;
    let least = if form == Form::Polynomial { 2 } else { 1 };
    if form != Form::Morse && (from > to || to < least) {
        return Err(FitError::NoOrders { from, to });
    }
    match (form, coordinate) {
        (Form::Morse, Coordinate::Angle) => return Err(FitError::NeedsLength),
        (Form::Fourier, Coordinate::Length) => return Err(FitError::NeedsAngle),
        _ => {}
    }
    let mut fits = match form {
        Form::Fourier => fourier::fit(x, energies, settings)?,
        _ => fit_minima(x, energies, form, coordinate, settings)?,
    };
    for fit in fits.fits.iter_mut().filter(|f| f.spread > WIDE_SPREAD) {
        fit.notes.push(format!(
            "the force constant is uncertain by {:.1} %: a finer step, higher orders or points further beyond the minimum are needed",
            100.0 * fit.spread
        ));
    }
    Ok(fits)
}

/// A larger spread of a force constant is worth a sentence.
const WIDE_SPREAD: f64 = 0.01;

fn fit_minima(
    x: &[f64],
    energies: &[f64],
    form: Form,
    coordinate: Coordinate,
    settings: &FitSettings,
) -> Result<CurveFits, FitError> {
    let curve = Curve::new(x, energies, &settings.extrema)?;
    let mut fits = CurveFits::default();
    for minimum in curve.minima() {
        let fit = match form {
            Form::Morse => morse::fit(&curve, minimum, settings),
            _ => polynomial::fit(&curve, minimum, coordinate, settings),
        };
        match fit {
            Ok(fit) => fits.fits.push(fit),
            Err(error) => fits.failures.push(error),
        }
    }
    if fits.fits.is_empty() && fits.failures.is_empty() {
        return Err(FitError::NoMinimum {
            points: curve.points,
        });
    }
    Ok(fits)
}

/// The period of a dihedral: 2π when the points go round the circle, else none.
#[must_use]
pub fn dihedral_period(x: &[f64]) -> Option<f64> {
    let zeros = vec![0.0; x.len()];
    extrema::unroll(x, &zeros, TAU).ok().map(|_| TAU)
}
