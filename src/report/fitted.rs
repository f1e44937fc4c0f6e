//! The analysed part of `summary.json`: minima, fits, force field, spectroscopy.

use crate::fit::{Convention, Coordinate, Fit, ForceConstant, Model};
use crate::job::analysis::{
    FitResult, ForceField, LevelAnalysis, MinimumResult, Spectroscopy, Valley,
};
use crate::job::{JobResult, SweepResult};
use crate::units::{ANGSTROM_PER_BOHR, PER_CM_PER_HARTREE};
use serde::Serialize;
use std::collections::BTreeMap;

type Units = BTreeMap<&'static str, f64>;

/// A stationary point.
#[derive(Serialize)]
pub(super) struct Minimum<'a> {
    values: &'a [f64],
    energy_hartree: f64,
    /// `interior`, or `end of the sweep`: no stationary point.
    place: &'static str,
    kind: crate::scan::StationaryKind,
    geometry_angstrom: Option<Vec<(&'a str, f64, f64, f64)>>,
    gradient_max_hartree_per_bohr: Option<f64>,
    /// dE/dq of every sweep that remains, hartree per ångström or degree.
    slopes_hartree_per_unit: Option<Vec<f64>>,
    force_constants: Option<Vec<Units>>,
    coupling_atomic_units: Option<f64>,
    /// From the Hessian, while all other coordinates follow, and along the rigid motion.
    #[serde(skip_serializing_if = "Option::is_none")]
    relaxed_force_constants: Option<Vec<Units>>,
    #[serde(skip_serializing_if = "Option::is_none")]
    rigid_force_constants: Option<Vec<Option<Units>>>,
    frequencies_cm1: Option<&'a [f64]>,
    intensities_km_per_mol: Option<&'a [f64]>,
    zero_point_hartree: Option<f64>,
    gradient_calls: Option<usize>,
}

/// Minima or barriers.
pub(super) fn minima<'a>(result: &'a JobResult, list: &'a [MinimumResult]) -> Vec<Minimum<'a>> {
    list.iter()
        .map(|m| {
            let refined = m.refined.as_ref();
            let harmonic = refined.and_then(|r| r.harmonic.as_ref());
            Minimum {
                values: &m.values,
                energy_hartree: m.energy,
                place: if m.interior {
                    "interior"
                } else {
                    "end of the sweep"
                },
                kind: m.kind,
                geometry_angstrom: m.positions.as_ref().map(|positions| {
                    result
                        .symbols
                        .iter()
                        .zip(positions)
                        .map(|(&symbol, p)| {
                            let [x, y, z] = [p.x, p.y, p.z].map(|v| v * ANGSTROM_PER_BOHR);
                            (symbol, x, y, z)
                        })
                        .collect()
                }),
                gradient_max_hartree_per_bohr: m.gradient_max(),
                slopes_hartree_per_unit: refined.map(|r| {
                    r.slopes
                        .iter()
                        .zip(&result.sweeps)
                        .map(|(slope, sweep)| slope / reported(sweep, 1.0))
                        .collect()
                }),
                force_constants: refined.map(|r| {
                    (0..r.curvature.len())
                        .map(|k| {
                            constant(&result.sweeps[k], r.curvature[k][k])
                                .in_units(Convention::HalfK)
                        })
                        .collect()
                }),
                coupling_atomic_units: refined.and_then(|r| r.curvature.first()?.get(1).copied()),
                relaxed_force_constants: harmonic.map(|h| {
                    h.relaxed
                        .iter()
                        .zip(&result.sweeps)
                        .map(|(k, sweep)| constant(sweep, *k).in_units(Convention::HalfK))
                        .collect()
                }),
                rigid_force_constants: harmonic.map(|h| {
                    h.rigid
                        .iter()
                        .zip(&result.sweeps)
                        .map(|(k, sweep)| k.map(|k| constant(sweep, k).in_units(Convention::HalfK)))
                        .collect()
                }),
                frequencies_cm1: harmonic.map(|h| &h.wavenumbers_cm1[..]),
                intensities_km_per_mol: harmonic.map(|h| &h.intensities_km_per_mol[..]),
                zero_point_hartree: harmonic.map(|h| h.zero_point_hartree),
                gradient_calls: refined.map(|r| r.gradient_calls),
            }
        })
        .collect()
}

/// A second derivative along a sweep.
pub(super) fn constant(sweep: &SweepResult, second_derivative: f64) -> ForceConstant {
    ForceConstant {
        second_derivative,
        coordinate: kind(sweep),
    }
}

fn kind(sweep: &SweepResult) -> Coordinate {
    if sweep.unit == "angstrom" {
        Coordinate::Length
    } else {
        Coordinate::Angle
    }
}

/// From bohr or radian to the sweep's unit.
pub(super) fn reported(sweep: &SweepResult, value: f64) -> f64 {
    match kind(sweep) {
        Coordinate::Length => value * ANGSTROM_PER_BOHR,
        Coordinate::Angle => value.to_degrees(),
    }
}

#[derive(Serialize)]
struct Window {
    from: f64,
    to: f64,
    points: usize,
}

#[derive(Serialize)]
struct WithoutHalf {
    convention: &'static str,
    force_constant: Units,
}

#[derive(Serialize)]
struct DerivativeCheck {
    force_constant: Units,
    agrees: bool,
    verdict: String,
}

#[derive(Serialize)]
struct TorsionTerm {
    multiple: usize,
    height_kj_per_mol: f64,
    height_kcal_per_mol: f64,
    phase_degree: f64,
}

/// One entry of `fits`.
#[derive(Serialize)]
pub(super) struct FitEntry<'a> {
    sweep: usize,
    form: crate::fit::Form,
    order: usize,
    window: Window,
    equilibrium: f64,
    unit: &'a str,
    coordinates: &'a [Vec<String>],
    moves: &'a [String],
    path: crate::job::analysis::PathKind,
    energy_hartree: f64,
    force_constant: Units,
    convention: &'static str,
    without_half: WithoutHalf,
    spread: f64,
    trials: usize,
    trials_accepted: usize,
    leave_one_out_hartree: f64,
    rms_residual_hartree: f64,
    from_gradients: Option<DerivativeCheck>,
    parameters: &'a BTreeMap<String, f64>,
    parameter_errors: &'a BTreeMap<String, f64>,
    parameter_spreads: &'a BTreeMap<String, f64>,
    #[serde(skip_serializing_if = "Vec::is_empty")]
    torsion_terms: Vec<TorsionTerm>,
    notes: &'a [String],
}

/// The entries of `fits`.
pub(super) fn fits<'a>(result: &'a JobResult, analysis: &'a LevelAnalysis) -> Vec<FitEntry<'a>> {
    analysis
        .fits
        .iter()
        .map(|fit| fit_entry(&result.sweeps[fit.sweep], fit))
        .collect()
}

fn fit_entry<'a>(sweep: &'a SweepResult, entry: &'a FitResult) -> FitEntry<'a> {
    let fit = &entry.fit;
    FitEntry {
        sweep: entry.sweep,
        form: fit.form,
        order: fit.order,
        window: Window {
            from: reported(sweep, fit.window.from),
            to: reported(sweep, fit.window.to),
            points: fit.window.points,
        },
        equilibrium: reported(sweep, fit.equilibrium),
        unit: sweep.unit,
        coordinates: &sweep.coordinates,
        moves: &sweep.moves,
        path: sweep.path,
        energy_hartree: fit.energy,
        force_constant: fit.constant().in_units(Convention::HalfK),
        convention: Convention::HalfK.formula(),
        without_half: WithoutHalf {
            convention: Convention::FullK.formula(),
            force_constant: fit.constant().in_units(Convention::FullK),
        },
        spread: fit.spread,
        trials: fit.trials,
        trials_accepted: fit.trials_accepted,
        leave_one_out_hartree: fit.leave_one_out_hartree,
        rms_residual_hartree: fit.rms_residual_hartree,
        from_gradients: fit.derivative_check.as_ref().map(|check| DerivativeCheck {
            force_constant: constant(sweep, check.force_constant).in_units(Convention::HalfK),
            agrees: check.verdict.agrees,
            verdict: check.verdict.text.clone(),
        }),
        parameters: &fit.parameters,
        parameter_errors: &fit.parameter_errors,
        parameter_spreads: &fit.parameter_spreads,
        torsion_terms: torsion_terms(fit),
        notes: &fit.notes,
    }
}

fn torsion_terms(fit: &Fit) -> Vec<TorsionTerm> {
    let Model::Fourier(series) = &fit.model else {
        return Vec::new();
    };
    series
        .terms()
        .iter()
        .map(|term| TorsionTerm {
            multiple: term.multiple,
            height_kj_per_mol: term.height * crate::units::KJ_PER_MOL_PER_HARTREE,
            height_kcal_per_mol: term.height * crate::units::KCAL_PER_MOL_PER_HARTREE,
            phase_degree: term.phase.to_degrees(),
        })
        .collect()
}

/// The quadratic force field of two sweeps.
#[derive(Serialize)]
pub(super) struct ForceFieldEntry<'a> {
    convention: &'static str,
    path: crate::job::analysis::PathKind,
    equilibrium: [f64; 2],
    energy_hartree: f64,
    order: usize,
    points: usize,
    force_constants: [Units; 2],
    coupling: Units,
    /// k₁₁, k₁₂, k₂₂ in hartree per bohr or radian of each coordinate.
    atomic_units: [f64; 3],
    half_ranges_atomic_units: [f64; 3],
    spread: f64,
    rms_residual_hartree: f64,
    from_gradients_atomic_units: Option<[f64; 3]>,
    verdicts: Vec<&'a str>,
}

/// A product of two coordinates' units: the coupling constant in what goes with each.
pub(super) fn coupling_units(field: &ForceField) -> Units {
    let k = field.field.k12;
    let per_angstrom = 1.0 / ANGSTROM_PER_BOHR;
    let factor = |c: Coordinate| match c {
        Coordinate::Length => per_angstrom,
        Coordinate::Angle => 1.0,
    };
    let [a, b] = field.coordinates;
    let scale = factor(a) * factor(b);
    let kj = k * scale * crate::units::KJ_PER_MOL_PER_HARTREE;
    let kcal = k * scale * crate::units::KCAL_PER_MOL_PER_HARTREE;
    // 1 hartree/Å² is 4.3597 aJ/Å², and 1 mdyn/Å is 1 aJ/Å² (definition of the dyne).
    let attojoule = k * scale * crate::units::JOULE_PER_HARTREE * 1e18;
    match (a, b) {
        (Coordinate::Length, Coordinate::Length) => Units::from([
            ("hartree_per_bohr2", k),
            ("mdyne_per_angstrom", attojoule),
            ("newton_per_metre", 100.0 * attojoule),
            ("kj_per_mol_angstrom2", kj),
            ("kcal_per_mol_angstrom2", kcal),
        ]),
        (Coordinate::Angle, Coordinate::Angle) => Units::from([
            ("hartree_per_rad2", k),
            ("mdyne_angstrom_per_rad2", attojoule),
            ("kj_per_mol_per_rad2", kj),
            ("kcal_per_mol_per_rad2", kcal),
        ]),
        _ => Units::from([
            ("hartree_per_bohr_rad", k),
            ("mdyne_per_rad", attojoule),
            ("kj_per_mol_angstrom_rad", kj),
            ("kcal_per_mol_angstrom_rad", kcal),
        ]),
    }
}

/// The entry `force_field`.
pub(super) fn force_field(field: &ForceField) -> ForceFieldEntry<'_> {
    let f = &field.field;
    let one = |k: usize, second_derivative: f64| {
        ForceConstant {
            second_derivative,
            coordinate: field.coordinates[k],
        }
        .in_units(Convention::HalfK)
    };
    ForceFieldEntry {
        convention: "E = E0 + k11/2 d1^2 + k12 d1 d2 + k22/2 d2^2",
        path: field.path,
        equilibrium: field.values,
        energy_hartree: f.energy,
        order: f.order,
        points: f.points,
        force_constants: [one(0, f.k11), one(1, f.k22)],
        coupling: coupling_units(field),
        atomic_units: [f.k11, f.k12, f.k22],
        half_ranges_atomic_units: f.half_ranges,
        spread: f.spread,
        rms_residual_hartree: f.rms_residual_hartree,
        from_gradients_atomic_units: field.from_gradients,
        verdicts: field.verdicts.iter().map(|v| v.text.as_str()).collect(),
    }
}

/// A valley floor.
#[derive(Serialize)]
pub(super) struct ValleyEntry {
    top: [f64; 2],
    top_energy_hartree: f64,
    is_saddle: bool,
    barriers_hartree: [f64; 2],
    path: Vec<(f64, f64, f64)>,
}

/// The entry `valleys`: values of both sweeps and energy (hartree) along each path.
pub(super) fn valleys(list: &[Valley]) -> Vec<ValleyEntry> {
    list.iter()
        .map(|v| ValleyEntry {
            top: v.top,
            top_energy_hartree: v.top_energy,
            is_saddle: v.is_saddle,
            barriers_hartree: v.barriers,
            path: v.points.iter().map(|([a, b], e)| (*a, *b, *e)).collect(),
        })
        .collect()
}

#[derive(Serialize)]
struct StateEntry {
    v: usize,
    energy_cm1: f64,
    convergence_cm1: f64,
    edge_uncertainty_cm1: f64,
    mean: f64,
}

#[derive(Serialize)]
struct Splitting {
    lowest_state: usize,
    width_cm1: f64,
}

/// The entry `spectroscopy`.
#[derive(Serialize)]
pub(super) struct SpectroscopyEntry<'a> {
    minimum: f64,
    minimum_energy_hartree: f64,
    /// u, or u Å² for an angle.
    #[serde(skip_serializing_if = "Option::is_none")]
    reduced_mass_u: Option<f64>,
    #[serde(skip_serializing_if = "Option::is_none")]
    reduced_moment_u_angstrom2: Option<f64>,
    mass: &'static str,
    omega_e_cm1: Option<f64>,
    omega_e_x_e_cm1: Option<f64>,
    b_e_cm1: Option<f64>,
    alpha_e_cm1: Option<f64>,
    zero_point_hartree: Option<f64>,
    states_cm1: Vec<f64>,
    states: Vec<StateEntry>,
    wells: usize,
    splittings: Vec<Splitting>,
    dunham: &'a Option<crate::vibration::diatomic::DunhamConstants>,
    from_states: &'a Option<crate::vibration::diatomic::StateConstants>,
    notes: &'a [String],
}

/// Energies of states count from the minimum.
pub(super) fn spectroscopy(found: &Spectroscopy) -> SpectroscopyEntry<'_> {
    let reduced = found.mass.reduced();
    SpectroscopyEntry {
        minimum: found.minimum,
        minimum_energy_hartree: found.minimum_energy,
        reduced_mass_u: found.mass.is_length.then_some(reduced),
        reduced_moment_u_angstrom2: (!found.mass.is_length).then_some(reduced),
        mass: if found.mass.exact {
            "reduced mass of two atoms"
        } else {
            "G element at the minimum"
        },
        omega_e_cm1: found.omega_e_cm1,
        omega_e_x_e_cm1: found.dunham.map(|d| d.omega_e_x_e_cm1),
        b_e_cm1: found.dunham.map(|d| d.b_e_cm1),
        alpha_e_cm1: found.dunham.map(|d| d.alpha_e_cm1),
        zero_point_hartree: found.zero_point,
        states_cm1: found
            .states
            .iter()
            .map(|s| s.energy * PER_CM_PER_HARTREE)
            .collect(),
        states: found
            .states
            .iter()
            .enumerate()
            .map(|(v, s)| StateEntry {
                v,
                energy_cm1: s.energy * PER_CM_PER_HARTREE,
                convergence_cm1: s.convergence * PER_CM_PER_HARTREE,
                edge_uncertainty_cm1: s.edge_uncertainty * PER_CM_PER_HARTREE,
                mean: s.mean,
            })
            .collect(),
        wells: found.wells,
        splittings: found
            .multiplets
            .iter()
            .map(|m| Splitting {
                lowest_state: m.lowest,
                width_cm1: m.width * PER_CM_PER_HARTREE,
            })
            .collect(),
        dunham: &found.dunham,
        from_states: &found.from_states,
        notes: &found.notes,
    }
}
