//! Tests of Hessians, settling and relaxed scans on closed-form surfaces.

use super::hessian::{HessianSettings, hessian};
use super::relaxed::Relaxed;
use super::settle::{Character, SettleSettings, settle};
use super::test_fields::{field, from_zmatrix, named};
use super::*;
use crate::molecule::connectivity::Connectivity;
use crate::molecule::motion::Motion;
use crate::surface::model::{Form, ModelSurface};
use crate::surface::{PointOutcome, PointRequest, SeedPoint};
use std::f64::consts::PI;

/// A model surface of point charges, which have a dipole moment.
struct Charged {
    model: ModelSurface,
    charges: Vec<f64>,
    /// Nuclear charges, whose centre the moment is taken about.
    nuclei: Vec<f64>,
}

impl Surface for Charged {
    type Seed = usize;
    type Workspace = ();

    fn workspace(&self) {}

    fn workspace_bytes(&self) -> u64 {
        0
    }

    fn evaluate(
        &self,
        request: &PointRequest<'_, usize>,
        workspace: &mut (),
    ) -> Result<PointOutcome<usize>, SurfaceError> {
        let mut outcome = self.model.evaluate(request, workspace)?;
        let total: f64 = self.nuclei.iter().sum();
        let centre = request
            .positions
            .iter()
            .zip(&self.nuclei)
            .fold(Vector3::zeros(), |sum, (p, z)| sum + p * *z / total);
        let dipole = request
            .positions
            .iter()
            .zip(&self.charges)
            .fold(Vector3::zeros(), |sum, (p, q)| sum + (p - centre) * *q);
        outcome.record.dipole = dipole.into();
        Ok(outcome)
    }

    fn likeness(&self, one: &usize, other: &usize) -> [f64; 2] {
        self.model.likeness(one, other)
    }

    fn apart(&self, _: &[Vector3<f64>]) -> Vec<Self::Seed> {
        Vec::new()
    }

    fn has_plain_start(&self) -> bool {
        false
    }
}

fn masses(molecule: &Molecule) -> Vec<f64> {
    molecule.atoms.iter().map(|a| a.element.mass_u()).collect()
}

/// Water with a Hessian known in its three coordinates, off its minimum.
fn water_field() -> (Molecule, ModelSurface) {
    let water = named("water");
    let at = |c: Coordinate| c.value(&water.positions);
    let [one, two, angle] = [
        Coordinate::Bond([0, 1]),
        Coordinate::Bond([0, 2]),
        Coordinate::Angle([1, 0, 2]),
    ];
    let morse = |c| {
        let form = Form::Morse {
            depth: 0.2,
            steepness: 1.2,
            equilibrium: at(c),
        };
        (c, form)
    };
    let bend = Form::Harmonic {
        force_constant: 0.17,
        equilibrium: at(angle),
    };
    let terms = vec![morse(one), morse(two), (angle, bend)];
    (water, ModelSurface::simple(-76.0, terms))
}

#[test]
fn a_hessian_is_the_derivative_of_the_gradient_on_any_number_of_threads() {
    let molecule = named("ammonia");
    let surface = field(&molecule);
    let on = |threads: usize, memory_bytes: u64| {
        let pool = rayon::ThreadPoolBuilder::new()
            .num_threads(threads)
            .build()
            .unwrap();
        let settings = HessianSettings {
            memory_bytes,
            ..HessianSettings::default()
        };
        pool.install(|| hessian(&surface, &molecule, &[], Some(&0), &settings, &()).unwrap())
    };
    let found = on(2, 1 << 20);
    assert_eq!(found, on(1, 1 << 20));
    assert!(found.asymmetry < 1e-4);
    assert_eq!(found.gradient_calls, 24);
    // At the minimum of a sum of terms H = Σ k b bᵀ, with k the curvature of each term.
    let mut exact = DMatrix::zeros(12, 12);
    for (coordinate, form) in &surface.states[0].terms {
        let q = coordinate.value(&molecule.positions);
        let curvature = (form.slope(q + 1e-5) - form.slope(q - 1e-5)) / 2e-5;
        let b = super::coordinates::rows(
            &[primitive::Primitive::Internal(*coordinate)],
            &molecule.positions,
        );
        exact += b.transpose() * b * curvature;
    }
    assert!((found.matrix - exact).amax() < 5e-5);
}

#[test]
fn dipole_derivatives_are_those_about_a_fixed_point_for_ions_too() {
    let mut molecule = named("water");
    molecule.charge = 1;
    let surface = Charged {
        model: field(&molecule),
        charges: vec![-0.2, 0.7, 0.5],
        nuclei: vec![8.0, 1.0, 1.0],
    };
    let found = hessian(
        &surface,
        &molecule,
        &[],
        None,
        &HessianSettings::default(),
        &(),
    )
    .unwrap();
    for atom in 0..3 {
        for (row, axis) in [(0, 0), (1, 1), (2, 2), (0, 1)] {
            let expected = if row == axis {
                surface.charges[atom]
            } else {
                0.0
            };
            let got = found.dipole_derivatives[(row, 3 * atom + axis)];
            assert!((got - expected).abs() < 1e-10, "{atom} {axis}: {got}");
        }
    }
}

#[test]
fn water_settles_with_the_constants_it_was_made_of() {
    let (water, surface) = water_field();
    let start = from_zmatrix("O\nH1 O 1.1\nH2 O 0.85 H1 118");
    let connectivity = Connectivity::of(&water);
    let motion =
        |coordinate| Motion::resolve(coordinate, &water, &connectivity, &[9, 1, 1], None).unwrap();
    let one = motion(Coordinate::Bond([0, 1]));
    let two = motion(Coordinate::Bond([0, 2]));
    let bend = motion(Coordinate::Angle([1, 0, 2]));
    let swept = [vec![one.clone()], vec![one, two], vec![bend]];
    let settled = settle(
        &surface,
        &start,
        &masses(&start),
        &swept,
        &SettleSettings::default(),
        &mut (),
    )
    .unwrap();
    assert!(settled.minimum.converged());
    assert_eq!(settled.character, Character::Minimum);
    assert_eq!(settled.analysis.modes.len(), 3);
    // k = 2Da² of a Morse term; nothing couples, so rigid and relaxed constants agree, and tied ones add up.
    let stretch = 2.0 * 0.2 * 1.2 * 1.2;
    for (constant, expected) in settled.swept.iter().zip([stretch, 2.0 * stretch, 0.17]) {
        assert!((constant.relaxed - expected).abs() < 2e-4, "{constant:?}");
        let rigid = constant.rigid.unwrap();
        assert!((rigid - expected).abs() < 2e-4, "{constant:?}");
    }
    // Wavenumbers from the G matrix of Wilson, Decius, Cross, *Molecular Vibrations*, §4-6: the antisymmetric stretch.
    let angle = Coordinate::Angle([1, 0, 2]).value(&water.positions);
    let [oxygen, hydrogen, _] = masses(&water)[..] else {
        panic!()
    };
    let g = 1.0 / hydrogen + (1.0 - angle.cos()) / oxygen;
    let omega = (stretch * g / crate::units::ELECTRON_MASSES_PER_U).sqrt()
        * crate::units::PER_CM_PER_HARTREE;
    let near = settled
        .analysis
        .modes
        .iter()
        .map(|m| (m.wavenumber_cm1 - omega).abs())
        .fold(f64::INFINITY, f64::min);
    assert!(near < 1.0, "{omega}: {:?}", settled.analysis.modes);
}

/// Peroxide with a torsion whose maximum is at 180° and whose minima are at ±112°.
fn peroxide_field() -> (Molecule, ModelSurface) {
    let peroxide = named("peroxide");
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let mut surface = field(&peroxide);
    let terms = &mut surface.states[0].terms;
    terms.retain(|(c, _)| *c != torsion);
    for (barrier, fold) in [(0.01, 1), (0.0067, 2)] {
        let equilibrium = if fold == 1 { PI } else { PI / 2.0 };
        terms.push((
            torsion,
            Form::Cosine {
                barrier,
                fold,
                equilibrium,
            },
        ));
    }
    (peroxide, surface)
}

#[test]
fn a_saddle_point_is_reported_and_left_on_request() {
    let (_, surface) = peroxide_field();
    let trans = from_zmatrix("O1\nO2 O1 1.45\nH1 O1 0.97 O2 100\nH2 O2 0.97 O1 100 H1 180");
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let run = |pushes| {
        let settings = SettleSettings {
            pushes,
            ..SettleSettings::default()
        };
        settle(&surface, &trans, &masses(&trans), &[], &settings, &mut ()).unwrap()
    };
    let stayed = run(0);
    assert_eq!(stayed.character, Character::Saddle { imaginary: 1 });
    assert!(stayed.minimum.converged() && stayed.analysis.imaginary == 1);
    let left = run(2);
    assert_eq!(left.character, Character::Minimum);
    assert_eq!(left.pushes, 1);
    // The minimum of V₁ and V₂: cos φ = −V₁/4V₂.
    let expected = (-0.01_f64 / (4.0 * 0.0067)).acos();
    let found = torsion.value(&left.minimum.positions).abs();
    assert!((found - expected).abs() < 1e-3, "{found} {expected}");
    assert!(left.minimum.record.energy < stayed.minimum.record.energy);
}

#[test]
fn an_atom_settles_without_vibrations() {
    let mut atom = named("water");
    atom.atoms.truncate(1);
    atom.positions.truncate(1);
    let surface = ModelSurface::simple(-1.0, vec![]);
    let settings = SettleSettings::default();
    let settled = settle(&surface, &atom, &masses(&atom), &[], &settings, &mut ()).unwrap();
    assert!(settled.analysis.modes.is_empty() && settled.internal.is_empty());
    assert_eq!(settled.character, Character::Minimum);
}

#[test]
fn a_direction_without_force_is_called_flat() {
    let (_, mut surface) = peroxide_field();
    surface.states[0]
        .terms
        .retain(|(c, _)| !matches!(c, Coordinate::Dihedral(_)));
    let start = named("peroxide");
    let settled = settle(
        &surface,
        &start,
        &masses(&start),
        &[],
        &SettleSettings::default(),
        &mut (),
    )
    .unwrap();
    assert_eq!(settled.character, Character::Flat { modes: 1 });
}

/// Walks a torsion over a relaxed surface as a scan does: each point from those before it.
fn walk(relaxed: &Relaxed<ModelSurface>, start: &Molecule, extrapolate: bool) -> Vec<PointRecord> {
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let connectivity = Connectivity::of(start);
    let motion = Motion::resolve(torsion, start, &connectivity, &[5, 5, 1, 1], None).unwrap();
    let mut seeds: Vec<(Vec<f64>, relaxed::RelaxedSeed<usize>)> = Vec::new();
    let mut records = Vec::new();
    for i in 0..19 {
        let degree = 10.0 * f64::from(i);
        let mut positions = start.positions.clone();
        motion.set(&mut positions, degree.to_radians()).unwrap();
        let from = if extrapolate {
            seeds.len().saturating_sub(5)
        } else {
            seeds.len().saturating_sub(1)
        };
        let points: Vec<SeedPoint<'_, _>> = seeds[from..]
            .iter()
            .map(|(q, seed)| SeedPoint {
                coordinates: q,
                seed,
            })
            .collect();
        let request = PointRequest {
            positions: &positions,
            coordinates: &[degree],
            start: if points.is_empty() {
                Start::Fresh
            } else {
                Start::Extrapolated(points)
            },
            gradient: false,
            stability: StabilityDemand::None,
            follow: None,
        };
        let outcome = relaxed.evaluate(&request, &mut ()).unwrap();
        seeds.push((vec![degree], outcome.seed.unwrap()));
        records.push(outcome.record);
    }
    records
}

#[test]
fn a_relaxed_torsion_costs_few_calls_and_holds_the_torsion() {
    let (peroxide, mut surface) = peroxide_field();
    // Something for the other coordinates to follow: a repulsion of the hydrogen atoms.
    surface.states[0].terms.push((
        Coordinate::Bond([2, 3]),
        Form::Morse {
            depth: 0.02,
            steepness: 0.5,
            equilibrium: 5.5,
        },
    ));
    let torsion = Coordinate::Dihedral([2, 0, 1, 3]);
    let relaxed = Relaxed::new(
        surface,
        &peroxide,
        vec![torsion],
        MinimiseSettings::default(),
    );
    for extrapolate in [false, true] {
        let records = walk(&relaxed, &peroxide, extrapolate);
        let calls: Vec<usize> = records
            .iter()
            .map(|r| r.relaxation.unwrap().gradient_calls)
            .collect();
        let most = if extrapolate { 3.0 } else { 4.0 };
        let mean = calls[1..].iter().sum::<usize>() as f64 / 18.0;
        assert!(mean <= most, "{extrapolate}: {calls:?}");
        for (i, record) in records.iter().enumerate() {
            let positions: Vec<Vector3<f64>> = record
                .positions
                .as_ref()
                .unwrap()
                .iter()
                .map(|p| Vector3::from(*p))
                .collect();
            let wanted = (10.0 * i as f64).to_radians();
            let off = torsion.difference(torsion.value(&positions), wanted);
            assert!(off.abs() < 1e-10, "{i}: {off}");
            assert!(record.gradient.is_none());
            // The neighbours' help changes the way, not the place.
            let alone = relaxed
                .evaluate(
                    &PointRequest {
                        positions: &positions,
                        coordinates: &[10.0 * i as f64],
                        start: Start::Fresh,
                        gradient: true,
                        stability: StabilityDemand::None,
                        follow: None,
                    },
                    &mut (),
                )
                .unwrap();
            let apart = alone.record.energy.unwrap() - record.energy.unwrap();
            assert!(apart.abs() < 2e-6, "{i}: {apart}");
        }
    }
}

#[test]
fn a_point_that_cannot_be_relaxed_has_no_energy() {
    let (peroxide, surface) = peroxide_field();
    let starved = MinimiseSettings {
        calls: 2,
        ..MinimiseSettings::default()
    };
    let relaxed = Relaxed::new(
        surface,
        &peroxide,
        vec![Coordinate::Dihedral([2, 0, 1, 3])],
        starved,
    );
    let far = from_zmatrix("O1\nO2 O1 1.8\nH1 O1 1.2 O2 80\nH2 O2 1.2 O1 130 H1 30");
    let outcome = relaxed
        .evaluate(
            &PointRequest {
                positions: &far.positions,
                coordinates: &[30.0],
                start: Start::Fresh,
                gradient: false,
                stability: StabilityDemand::None,
                follow: None,
            },
            &mut (),
        )
        .unwrap();
    assert_eq!(outcome.record.energy, None);
    assert!(outcome.seed.is_none());
    assert!(!outcome.record.relaxation.unwrap().converged);
}
