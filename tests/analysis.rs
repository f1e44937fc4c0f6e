//! Minima, force constants and vibrational states of whole jobs: on model surfaces against closed forms, at Hartree–Fock
//! level against derivatives at the minimum.

mod common;

use common::jobs::{at_level, fit_of, pool, spec};
use std::sync::atomic::{AtomicBool, Ordering};
use thalweg::fit::Form as FitForm;
use thalweg::job::analysis::{FitResult, PathKind};
use thalweg::job::{self, JobEvent, JobRecord, JobResult, LevelSurfaces};
use thalweg::molecule::internal::Coordinate;
use thalweg::scan::{Event, StationaryKind};
use thalweg::spec::Spec;
use thalweg::surface::model::{Form, ModelSurface};
use thalweg::units::{
    ANGSTROM_PER_BOHR, ELECTRON_MASSES_PER_U, KJ_PER_MOL_PER_HARTREE, PER_CM_PER_HARTREE,
};
use thalweg::vibration::Potential;
use thalweg::vibration::elements::{Mesh, eigenvalues};

/// What is asked of a fitted force constant: 0.3 % of the derivative-based one, and a spread of at most 1 %.
const CONSTANT: f64 = 3e-3;
const SPREAD: f64 = 1e-2;
/// What is asked of a fitted geometry, ångström and degree.
const LENGTH: f64 = 5e-5;
const ANGLE: f64 = 1e-2;

/// The whole job on a model surface.
fn on_model(spec: &Spec, surface: &ModelSurface) -> JobResult {
    let scan = job::scan_of(spec).expect("geometries");
    let mut record = JobRecord::default();
    let end = job::walk_level(
        &LevelSurfaces::rigid(surface),
        spec,
        &scan,
        0,
        &pool(),
        &AtomicBool::new(false),
        &mut |_| {},
        &mut record,
    )
    .expect("a walk");
    record.ends.push(end);
    job::assemble(spec, &record).expect("a result")
}

#[test]
fn a_stop_after_the_walk_ends_the_searches_too() {
    let text = diatomic("H", "F", 0.95, "from = 0.8\nto = 1.2\nstep = 0.1");
    let stop = AtomicBool::new(false);
    let mut found = 0;
    let ended = job::run(&spec(&text), &pool(), &stop, &mut |event| match event {
        JobEvent::Walk {
            event: Event::Finished,
            ..
        } => stop.store(true, Ordering::Relaxed),
        JobEvent::Stationary(_) => found += 1,
        _ => {}
    });
    assert!(ended.is_err_and(|error| error.is_interruption()));
    assert_eq!(found, 0);
}

#[test]
fn a_relaxed_point_counts_the_builds_of_all_its_calls() {
    let result = at_level(
        "[molecule]\nzmatrix = \"\"\"\nO\nH1 O 0.96\nH2 O 0.96 H1 104\n\"\"\"\n[[level]]\nmethod = \"rhf\"\nbasis = \"sto-3g\"\n\
         [[sweep]]\nangle = [\"H1\", \"O\", \"H2\"]\nfrom = 98\nto = 106\nstep = 4\n[walk]\nothers = \"optimised\"\n",
    );
    for point in &result.levels[0].points {
        let calls = point.record.relaxation.expect("relaxed").gradient_calls;
        assert!(
            point.record.fock_builds >= calls,
            "{} < {calls}",
            point.record.fock_builds
        );
    }
}

fn diatomic(first: &str, second: &str, length: f64, sweep: &str) -> String {
    format!(
        "[molecule]\nzmatrix = \"\"\"\n{first}\n{second} {first} {length}\n\"\"\"\n\
         [[level]]\nmethod = \"rhf\"\nbasis = \"sto-3g\"\n\
         [[sweep]]\nbond = [\"{first}\", \"{second}\"]\n{sweep}\n"
    )
}

/// ω_e, ω_e x_e and B_e of diatomics in cm⁻¹: K. P. Huber, G. Herzberg, Constants of Diatomic Molecules, 1979.
const HANDBOOK: [(&str, &str, [f64; 3]); 3] = [
    ("C", "O", [2_169.813_58, 13.288_31, 1.931_280_87]),
    ("H", "Cl", [2_990.946_3, 52.818_6, 10.593_416]),
    ("H", "F", [4_138.32, 89.88, 20.955_7]),
];

#[test]
fn val_handbook_constants_come_back_from_a_scan_of_their_morse_curve() {
    for (first, second, [omega, anharmonicity, b]) in HANDBOOK {
        let text = diatomic(first, second, 1.2, "from = 0.50\nto = 2.40\nstep = 0.02");
        let spec = spec(&text);
        let [m1, m2] = [spec.masses_u[0], spec.masses_u[1]];
        let mu = m1 * m2 / (m1 + m2) * ELECTRON_MASSES_PER_U;
        let r = (PER_CM_PER_HARTREE / (2.0 * mu * b)).sqrt();
        let depth = omega * omega / (4.0 * anharmonicity) / PER_CM_PER_HARTREE;
        let steepness = (2.0 * mu * anharmonicity / PER_CM_PER_HARTREE).sqrt();
        let morse = Form::Morse {
            depth,
            steepness,
            equilibrium: r,
        };
        let surface = ModelSurface::simple(-1.0, vec![(Coordinate::Bond([0, 1]), morse)]);
        let result = on_model(&spec, &surface);
        let fit = fit_of(&result, FitForm::Morse);
        assert_eq!(fit.fit.order, 0, "the plain function is enough");
        assert!((fit.fit.parameters["depth_hartree"] - depth).abs() < 1e-6 * depth);
        let k = 2.0 * depth * steepness * steepness;
        for fit in &result.levels[0].analysis.fits {
            let check = fit.fit.derivative_check.as_ref().expect("gradients");
            assert!(check.verdict.agrees, "{}", check.verdict.text);
            assert!((check.force_constant - k).abs() < 1e-5 * k);
            assert!((fit.fit.force_constant - k).abs() < 1e-4 * k);
            assert!((fit.fit.equilibrium - r).abs() < 1e-6);
        }
        let found = result.levels[0]
            .analysis
            .spectroscopy
            .as_ref()
            .expect("states");
        assert!(found.mass.exact);
        // The handbook gives six to nine digits; what comes back is asked to 1e-5 of ω and B and 1e-3 of the others.
        let dunham = found.dunham.expect("derivatives");
        assert!(
            (dunham.omega_e_cm1 - omega).abs() < 2e-5 * omega,
            "{dunham:?}"
        );
        assert!((dunham.b_e_cm1 - b).abs() < 2e-6 * b, "{dunham:?}");
        assert!(
            (dunham.omega_e_x_e_cm1 - anharmonicity).abs() < 2e-3 * anharmonicity,
            "{dunham:?}"
        );
        // C. L. Pekeris, Phys. Rev. 45, 98 (1934): α of a Morse curve.
        let alpha = 6.0 * (anharmonicity * b.powi(3)).sqrt() / omega - 6.0 * b * b / omega;
        assert!(
            (dunham.alpha_e_cm1 - alpha).abs() < 1e-3 * alpha,
            "{dunham:?}"
        );
        // Levels of a Morse oscillator are exactly quadratic in v + 1/2.
        for (v, state) in found.states.iter().enumerate() {
            let n = v as f64 + 0.5;
            let exact = (omega * n - anharmonicity * n * n) / PER_CM_PER_HARTREE;
            assert!(
                (state.energy - exact).abs() < 1e-6 * exact,
                "{first}{second} v = {v}: {} instead of {exact}",
                state.energy
            );
        }
        let states = found.from_states.as_ref().expect("six states");
        assert!(
            (states.omega_e_cm1 - omega).abs() < 1e-5 * omega,
            "{states:?}"
        );
        assert!((states.omega_e_x_e_cm1 - anharmonicity).abs() < 1e-4 * anharmonicity);
    }
}

const PEROXIDE: &str = r#"
[molecule]
zmatrix = """
O1
O2 O1 1.396
H1 O1 0.949 O2 102.2
H2 O2 0.949 O1 102.2 H1 115.0
"""
[[level]]
method = "rhf"
basis = "sto-3g"
[[sweep]]
dihedral = ["H1", "O1", "O2", "H2"]
"#;

#[test]
fn a_torsion_has_its_wells_barriers_terms_and_splittings() {
    let spec = spec(&format!("{PEROXIDE}from = 0\nto = 350\nstep = 10\n"));
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let heights = [30.0, 18.0].map(|kj| kj / KJ_PER_MOL_PER_HARTREE);
    // V₁/2 (1 + cos q) + V₂/2 (1 + cos 2q), minima where cos q = −V₁/(4V₂).
    let terms = [1, 2].map(|n| {
        let equilibrium = std::f64::consts::PI / f64::from(n);
        (
            torsion,
            Form::Cosine {
                barrier: heights[n as usize - 1],
                fold: n,
                equilibrium,
            },
        )
    });
    let result = on_model(&spec, &ModelSurface::simple(-2.0, terms.to_vec()));
    let analysis = &result.levels[0].analysis;
    let place = (-heights[0] / (4.0 * heights[1])).acos().to_degrees();
    assert_eq!(analysis.minima.len(), 2);
    for minimum in &analysis.minima {
        let away = (minimum.values[0] - place)
            .abs()
            .min((minimum.values[0] - 360.0 + place).abs());
        assert!(away < 1e-4, "{} and {place}", minimum.values[0]);
    }
    // cis and trans, both maxima, seen once each although cis is the seam.
    assert_eq!(analysis.barriers.len(), 2);
    assert!(
        analysis
            .barriers
            .iter()
            .all(|b| b.kind == StationaryKind::Maximum)
    );
    let [trans, cis] = [0, 1].map(|b| analysis.barriers[b].energy + 2.0);
    assert!((trans - heights[1]).abs() < 1e-9 && (cis - heights[0] - heights[1]).abs() < 1e-9);
    let fit = fit_of(&result, FitForm::Fourier);
    let thalweg::fit::Model::Fourier(series) = &fit.fit.model else {
        panic!("a series")
    };
    let found = series.terms();
    for (n, height) in heights.iter().enumerate() {
        assert!((found[n].height - height).abs() < 1e-9, "{found:?}");
    }
    let k: f64 = (1..=2)
        .map(|n| {
            let m = f64::from(n);
            -0.5 * heights[n as usize - 1] * m * m * (m * place.to_radians()).cos()
        })
        .sum();
    for fit in &analysis.fits {
        assert!(
            (fit.fit.force_constant - k).abs() < CONSTANT * k,
            "{:?}",
            fit.fit.form
        );
        assert!(
            fit.fit
                .derivative_check
                .as_ref()
                .is_some_and(|c| c.verdict.agrees)
        );
    }
    let found = analysis.spectroscopy.as_ref().expect("states");
    assert_eq!(found.wells, 2);
    assert!(!found.multiplets.is_empty());
    assert!(found.multiplets.windows(2).all(|m| m[0].width < m[1].width));
    assert!(!found.mass.exact && found.notes.iter().any(|n| n.contains("G element")));
}

const WATER: &str = r#"
[molecule]
zmatrix = """
O
H1 O 0.95
H2 O 0.95 H1 105.0
"""
[[level]]
method = "rhf"
basis = "sto-3g"
"#;

/// Water's bonds and its H–H distance as springs, which couple the two bonds.
fn springs() -> (ModelSurface, [f64; 2]) {
    let (bond, across) = (0.5, 0.08);
    let length = 0.95 / ANGSTROM_PER_BOHR;
    let half = 52.5_f64.to_radians();
    let spring = |force_constant, equilibrium| Form::Harmonic {
        force_constant,
        equilibrium,
    };
    let surface = ModelSurface::simple(
        -5.0,
        vec![
            (Coordinate::Bond([0, 1]), spring(bond, length)),
            (Coordinate::Bond([0, 2]), spring(bond, length)),
            (
                Coordinate::Bond([1, 2]),
                spring(across, 2.0 * length * half.sin()),
            ),
        ],
    );
    // At the minimum of all three springs ∂(HH)/∂r is sin(half the angle) for either bond.
    let sine = half.sin();
    (surface, [bond + across * sine * sine, across * sine * sine])
}

#[test]
fn two_sweeps_give_the_quadratic_force_field_with_its_coupling() {
    let sweep = "from = 0.80\nto = 1.10\nstep = 0.05\n";
    let text = format!(
        "{WATER}[[sweep]]\nbond = [\"O\", \"H1\"]\n{sweep}[[sweep]]\nbond = [\"O\", \"H2\"]\n{sweep}"
    );
    let (surface, [own, coupling]) = springs();
    let result = on_model(&spec(&text), &surface);
    let analysis = &result.levels[0].analysis;
    assert_eq!(analysis.minima.len(), 1);
    assert!((analysis.minima[0].values[0] - 0.95).abs() < 1e-6);
    assert!(analysis.minima[0].gradient_max().expect("a gradient") < 1e-6);
    let found = analysis.force_field.as_ref().expect("a force field");
    for (value, exact) in [
        (found.field.k11, own),
        (found.field.k12, coupling),
        (found.field.k22, own),
    ] {
        assert!((value - exact).abs() < 1e-3 * own, "{value} and {exact}");
    }
    let exact = found.from_gradients.expect("gradients");
    assert!((exact[0] - own).abs() < 1e-5 && (exact[1] - coupling).abs() < 1e-5);
    assert!(
        found.verdicts.iter().all(|v| v.agrees),
        "{:?}",
        found.verdicts
    );
    // Along either cut the other bond is held at the minimum.
    assert_eq!(
        analysis
            .fits
            .iter()
            .filter(|f| f.fit.form == FitForm::Polynomial)
            .count(),
        2
    );
    for fit in &analysis.fits {
        assert!((fit.fit.force_constant - own).abs() < CONSTANT * own);
    }
}

#[test]
fn a_tied_sweep_sums_constants_and_couplings_and_says_so() {
    let text = format!(
        "{WATER}[[sweep]]\nbond = [\"O\", \"H1\"]\nalso = [{{ bond = [\"O\", \"H2\"] }}]\n\
         from = 0.70\nto = 1.30\nstep = 0.05\n"
    );
    let (surface, [own, coupling]) = springs();
    let result = on_model(&spec(&text), &surface);
    let fit = fit_of(&result, FitForm::Polynomial);
    let sum = 2.0 * (own + coupling);
    assert!((fit.fit.force_constant - sum).abs() < 1e-3 * sum);
    let sweep = &result.sweeps[0];
    assert_eq!(sweep.coordinates.len(), 2);
    assert_eq!(sweep.moves, ["H1", "H2"]);
    assert_eq!(sweep.path, PathKind::Rigid);
    // (r₁ + r₂)/2 with all of H1 and H2 in it is the symmetric stretch, and its G element is (g₁₁ + g₁₂)/2 (Wilson,
    // Decius, Cross, appendix VI).
    let found = result.levels[0]
        .analysis
        .spectroscopy
        .as_ref()
        .expect("states");
    let masses = [15.994_914_619, 1.007_825_032].map(|m| 1.0 / (m * ELECTRON_MASSES_PER_U));
    let g = 0.5 * (masses[1] + masses[0] * (1.0 + 105.0_f64.to_radians().cos()));
    assert!((found.mass.inverse - g).abs() < 1e-6 * g);
}

#[test]
fn minima_at_the_ends_are_called_what_they_are() {
    let spec = spec(&diatomic("H", "F", 0.9, "from = 1.2\nto = 2.4\nstep = 0.1"));
    let morse = Form::Morse {
        depth: 0.2,
        steepness: 1.2,
        equilibrium: 1.73,
    };
    let surface = ModelSurface::simple(-1.0, vec![(Coordinate::Bond([0, 1]), morse)]);
    let result = on_model(&spec, &surface);
    let analysis = &result.levels[0].analysis;
    assert_eq!(analysis.minima.len(), 1);
    assert!(!analysis.minima[0].interior);
    assert!(analysis.fits.is_empty() && analysis.spectroscopy.is_none());
    assert!(
        analysis
            .notes
            .iter()
            .any(|n| n.contains("no polynomial fit")),
        "{:?}",
        analysis.notes
    );
}

#[test]
fn slopes_are_written_where_gradients_are_asked_for() {
    let text = diatomic("H", "F", 0.9, "from = 0.8\nto = 1.2\nstep = 0.1")
        + "[output]\ngradients = true\n";
    let morse = Form::Morse {
        depth: 0.2,
        steepness: 1.2,
        equilibrium: 1.73,
    };
    let spec = spec(&text);
    let surface = ModelSurface::simple(-1.0, vec![(Coordinate::Bond([0, 1]), morse)]);
    let result = on_model(&spec, &surface);
    for point in &result.levels[0].points {
        let exact = morse.slope(point.values[0] / ANGSTROM_PER_BOHR) / ANGSTROM_PER_BOHR;
        let slope = point.slopes.as_ref().expect("a gradient")[0];
        assert!((slope - exact).abs() < 1e-12);
    }
    let table = String::from_utf8(thalweg::report::csv::render(&spec, &result)).expect("text");
    assert!(
        table.contains("energy_hartree,slope_bond_H_F_hartree_per_angstrom,relative_"),
        "{table}"
    );
}

/// Every fit of a result agrees with the derivative at its minimum and knows how far to be trusted.
fn assert_defensible(result: &JobResult, what: &str) {
    let analysis = &result.levels[0].analysis;
    let checked: Vec<&FitResult> = analysis
        .fits
        .iter()
        .filter(|f| f.fit.form == FitForm::Polynomial)
        .collect();
    assert!(!checked.is_empty(), "{what}: {:?}", analysis.notes);
    for fit in checked {
        let exact = fit
            .fit
            .derivative_check
            .as_ref()
            .expect("gradients")
            .force_constant;
        let off = (fit.fit.force_constant - exact).abs() / exact;
        assert!(off < CONSTANT, "{what}: off by {off:.1e}");
        assert!(
            fit.fit.spread <= SPREAD,
            "{what}: spread {:.1e}",
            fit.fit.spread
        );
        assert!(
            off <= fit.fit.spread.max(1e-5),
            "{what}: off by {off:.1e}, spread {:.1e}",
            fit.fit.spread
        );
        let minimum = &analysis.minima[0];
        let place = fit.values[0] - minimum.values[0];
        let asked = if result.sweeps[0].unit == "angstrom" {
            LENGTH
        } else {
            ANGLE
        };
        assert!(place.abs() < asked, "{what}: off by {place}");
    }
}

#[test]
fn default_scans_of_diatomics_give_the_constant_of_the_derivative() {
    for (first, second, length, from, to) in [
        ("F", "H", 0.92, 0.60, 2.00),
        ("C", "O", 1.11, 0.80, 2.00),
        ("N1", "N2", 1.08, 0.80, 2.00),
    ] {
        let sweep = format!("from = {from:?}\nto = {to:?}\nstep = 0.05");
        let text = diatomic(first, second, length, &sweep).replace("sto-3g", "6-31g*");
        let result = at_level(&text);
        assert_defensible(&result, &format!("{first}{second}"));
        // A diatomic's minimum is one of all coordinates: the Hessian says the same as the curve.
        let analysis = &result.levels[0].analysis;
        let minimum = analysis.minima[0].refined.as_ref().expect("refined");
        let harmonic = minimum.harmonic.as_ref().expect("vibrations");
        let found = analysis.spectroscopy.as_ref().expect("states");
        let omega = found.omega_e_cm1.expect("a constant");
        assert_eq!(harmonic.wavenumbers_cm1.len(), 1);
        assert!((harmonic.wavenumbers_cm1[0] - omega).abs() < 2e-3 * omega);
        // The states know the same ω as the derivatives at the minimum.
        let states = found.from_states.as_ref().expect("states");
        assert!(
            (states.omega_e_cm1 - omega).abs() < 1e-3 * omega,
            "{states:?}"
        );
    }
}

#[test]
fn default_scans_of_water_give_the_constants_of_the_derivatives() {
    // From the optimiser's geometry a rigid scan of one coordinate has its minimum there.
    let text = WATER.replace("sto-3g", "6-31g*");
    let at_rest = spec(&text);
    let settled = job::settle::run(
        &at_rest,
        false,
        Vec::new(),
        &pool(),
        &AtomicBool::new(false),
        &mut |_| {},
    )
    .expect("settled");
    let positions: Vec<nalgebra::Vector3<f64>> = settled[0]
        .positions
        .iter()
        .map(|&p| nalgebra::Vector3::from(p))
        .collect();
    let length = Coordinate::Bond([0, 1]).reported_value(&positions);
    let angle = Coordinate::Angle([1, 0, 2]).reported_value(&positions);
    // Published RHF/6-31G* geometry of water (W. J. Hehre, L. Radom, P. v. R. Schleyer, J. A. Pople, Ab Initio Molecular
    // Orbital Theory, 1986): 0.947 Å and 105.5°.
    assert!((length - 0.947).abs() < 1e-3 && (angle - 105.5).abs() < 0.1);
    let molecule = format!(
        "[molecule]\nzmatrix = \"\"\"\nO\nH1 O {length:.9}\nH2 O {length:.9} H1 {angle:.7}\n\"\"\"\n\
         [[level]]\nmethod = \"rhf\"\nbasis = \"6-31g*\"\n[[sweep]]\n"
    );
    let stretch = at_level(&format!(
        "{molecule}bond = [\"O\", \"H1\"]\nfrom = 0.70\nto = 1.60\nstep = 0.05\n"
    ));
    assert_defensible(&stretch, "stretch");
    assert!((stretch.levels[0].analysis.minima[0].values[0] - length).abs() < LENGTH);
    let bend = at_level(&format!(
        "{molecule}angle = [\"H1\", \"O\", \"H2\"]\nfrom = 70\nto = 150\nstep = 5\n"
    ));
    assert_defensible(&bend, "bend");
    assert!((bend.levels[0].analysis.minima[0].values[0] - angle).abs() < ANGLE);
    // At the optimiser's geometry the rigid constants of the Hessian are those of the curves.
    for (result, place) in [(&stretch, 0), (&bend, 2)] {
        let rigid = settled[0].internal[place].rigid.expect("a side that moves");
        let fit = fit_of(result, FitForm::Polynomial);
        let off = (fit.fit.force_constant - rigid).abs() / rigid;
        assert!(off < CONSTANT, "{off}");
        assert!(settled[0].internal[place].relaxed < rigid);
    }
}

#[test]
fn a_relaxed_scan_ends_in_the_settled_molecule() {
    let text = format!(
        "{WATER}[[sweep]]\nangle = [\"H1\", \"O\", \"H2\"]\nfrom = 85\nto = 120\nstep = 5\n[walk]\nothers = \"optimised\"\n"
    );
    let result = at_level(&text);
    let analysis = &result.levels[0].analysis;
    let minimum = &analysis.minima[0];
    // RHF/STO-3G water: 0.9894 Å, 100.03°, −74.965 90 hartree (the same book).
    assert!(
        (minimum.values[0] - 100.03).abs() < 0.03,
        "{}",
        minimum.values[0]
    );
    assert!((minimum.energy + 74.965_90).abs() < 2e-5);
    let positions = minimum.positions.as_ref().expect("a geometry");
    let length = Coordinate::Bond([0, 1]).reported_value(positions);
    assert!((length - 0.9894).abs() < 2e-4, "{length}");
    let refined = minimum.refined.as_ref().expect("refined");
    let harmonic = refined.harmonic.as_ref().expect("vibrations");
    assert_eq!(harmonic.wavenumbers_cm1.len(), 3);
    assert!(harmonic.wavenumbers_cm1.iter().all(|w| *w > 1000.0));
    let fit = fit_of(&result, FitForm::Polynomial);
    assert_eq!(result.sweeps[0].path, PathKind::Relaxed);
    let off = (fit.fit.force_constant - harmonic.relaxed[0]).abs() / harmonic.relaxed[0];
    assert!(off < CONSTANT, "{off}");
    // Atoms that follow give way.
    assert!(harmonic.relaxed[0] < harmonic.rigid[0].expect("a side that moves"));
    // The two bonds stay alike along the whole scan.
    for point in &result.levels[0].points {
        let [a, b] = [[0, 1], [0, 2]].map(|p| Coordinate::Bond(p).reported_value(&point.positions));
        assert!((a - b).abs() < 2e-3, "{a} {b}");
    }
}

#[test]
fn a_curve_is_cut_where_unrestricted_orbitals_set_in() {
    let sweep = "from = 0.65\nto = 1.80\nstep = 0.05\n[[fit]]\nform = \"polynomial\"\nwindow = { below = 330.0 }";
    let text = diatomic("F", "H", 0.92, sweep)
        .replace("rhf", "uhf")
        .replace("sto-3g", "6-31g");
    let result = at_level(&text);
    let level = &result.levels[0];
    let onset = level
        .points
        .iter()
        .find(|p| p.record.s_squared > 1e-3)
        .expect("unrestricted orbitals");
    let minimum = level.analysis.minima[0].energy;
    let height = (onset.record.energy.expect("converged") - minimum) * KJ_PER_MOL_PER_HARTREE;
    assert!(height < 330.0, "the window would reach beyond: {height}");
    let fit = &fit_of(&result, FitForm::Polynomial).fit;
    assert!(fit.window.to * ANGSTROM_PER_BOHR < onset.values[0]);
    assert_defensible(&result, "HF");
    assert!(
        level
            .analysis
            .notes
            .iter()
            .any(|n| n.contains("second derivative of the curve jumps"))
    );
}

#[test]
fn ammonia_inverts_through_a_double_well_on_which_two_solvers_agree() {
    // Inversion as the torsion of one hydrogen through the plane of the others: planar at 180°.
    let result = at_level(
        r#"
[molecule]
zmatrix = """
N
H1 N 1.00
H2 N 1.00 H1 107
H3 N 1.00 H1 107 H2 115
"""
[[level]]
method = "rhf"
basis = "6-31g*"
[[sweep]]
dihedral = ["H1", "H2", "N", "H3"]
moves = ["H3"]
from = 60
to = 300
step = 8
[walk]
others = "optimised"
[vibration]
states = 4
"#,
    );
    let analysis = &result.levels[0].analysis;
    assert_eq!(analysis.minima.len(), 2);
    // RHF/6-31G*: −56.184 36 hartree, barrier 6.5 kcal/mol (W. J. Hehre, L. Radom, P. v. R. Schleyer, J. A. Pople, Ab Initio
    // Molecular Orbital Theory, 1986).
    assert!((analysis.minima[0].energy + 56.184_36).abs() < 1e-5);
    let [barrier] = &analysis.barriers[..] else {
        panic!("one barrier")
    };
    let height = (barrier.energy - analysis.minima[0].energy) * KJ_PER_MOL_PER_HARTREE / 4.184;
    assert!((height - 6.5).abs() < 0.05, "{height}");
    let found = analysis.spectroscopy.as_ref().expect("states");
    assert_eq!(found.wells, 2);
    assert!(found.multiplets.len() >= 2, "{:?}", found.multiplets);
    let points = &result.levels[0].points;
    let x: Vec<f64> = points.iter().map(|p| p.values[0].to_radians()).collect();
    let e: Vec<f64> = points
        .iter()
        .map(|p| p.record.energy.expect("converged"))
        .collect();
    let potential = Potential::of_line(&x, &e).expect("a curve");
    let (lower, upper) = potential.range();
    let mesh = Mesh {
        lower,
        upper,
        periodic: false,
        elements: 30,
        order: 8,
    };
    let other = eigenvalues(|q| potential.energy(q), |_| found.mass.inverse, &mesh, 4)
        .expect("eigenvalues");
    for (pair, multiplet) in found.multiplets.iter().enumerate().take(2) {
        let width = other[2 * pair + 1] - other[2 * pair];
        let off = (multiplet.width - width).abs() / width;
        assert!(off < 1e-3, "pair {pair}: {} and {width}", multiplet.width);
        // Converged with the grid.
        for state in &found.states[2 * pair..2 * pair + 2] {
            assert!(state.convergence.abs() < 1e-3 * multiplet.width);
        }
    }
}
