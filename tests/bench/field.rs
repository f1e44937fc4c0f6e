//! Benches above the integral kernel: Fock build, gradient, SCF cold and seeded, a scan point, and the linear
//! algebra that goes with them.
//!
//! `cargo bench --bench field` measures; `cargo test --benches` runs each once.

use criterion::{BatchSize, Criterion, criterion_group, criterion_main};
use nalgebra::DMatrix;
use std::hint::black_box;
use std::path::Path;
use thalweg::integrals::{CoulombExchange, RepulsionList, RepulsionSettings};
use thalweg::scf::orthogonal::symmetric_eigen;
use thalweg::spec::{Spec, parse};
use thalweg::surface::{
    HartreeFock, PointOutcome, PointRequest, SeedPoint, StabilityDemand, Start, Surface,
};

const BENZENE: &str = r#"
[molecule]
cartesian = """
C  1.397  0.0     0
C  0.6985 1.20984 0
C -0.6985 1.20984 0
C -1.397  0.0     0
C -0.6985 -1.20984 0
C  0.6985 -1.20984 0
H  2.481  0.0     0
H  1.2405 2.14861 0
H -1.2405 2.14861 0
H -2.481  0.0     0
H -1.2405 -2.14861 0
H  1.2405 -2.14861 0
"""
[[level]]
method = "rhf"
basis = "6-31g*"
"#;

const ETHANOL: &str = r#"
[molecule]
zmatrix = """
C1
C2 C1 1.516
O C2 1.405 C1 107.9
Ho O 0.946 C2 109.5 C1 180
H1 C2 1.088 C1 110.3 O 120.8
H2 C2 1.088 C1 110.3 O -120.8
H3 C1 1.084 C2 110.4 O 180
H4 C1 1.084 C2 110.4 O 60
H5 C1 1.084 C2 110.4 O -60
"""
[[level]]
method = "rhf"
basis = "6-31g*"
[[sweep]]
bond = ["O", "Ho"]
from = 0.75
to = 1.75
step = 0.05
"#;

/// A molecule at one level, ready to be evaluated.
struct Case {
    spec: Spec,
    surface: HartreeFock,
}

type Work = <HartreeFock as Surface>::Workspace;
type Outcome = PointOutcome<<HartreeFock as Surface>::Seed>;

impl Case {
    fn new(text: &str) -> Self {
        let spec = parse(text, Path::new("bench.toml")).expect("a sound spec");
        let level = &spec.levels[0];
        let molecule = level.molecule(&spec.molecule);
        let shells = level.shells_of_atom.clone();
        let surface = HartreeFock::new(&molecule, shells, level.method, spec.scf.clone());
        Self {
            surface: surface.expect("a sound level"),
            spec,
        }
    }

    /// The point at some swept values, from nothing or from another.
    fn at(
        &self,
        values: &[f64],
        from: Option<(&[f64], &Outcome)>,
        gradient: bool,
        work: &mut Work,
    ) -> Outcome {
        let positions = self.spec.positions_at(values).expect("a geometry");
        let start = match from.and_then(|(coordinates, o)| Some((coordinates, o.seed.as_ref()?))) {
            Some((coordinates, seed)) => Start::Previous(SeedPoint { coordinates, seed }),
            None => Start::Fresh,
        };
        let request = PointRequest {
            positions: &positions,
            coordinates: values,
            start,
            gradient,
            stability: StabilityDemand::None,
            follow: None,
        };
        self.surface
            .evaluate(&request, work)
            .expect("an evaluation")
    }
}

fn benzene(c: &mut Criterion) {
    let case = Case::new(BENZENE);
    let level = &case.spec.levels[0];
    let basis = level.basis(&case.spec.molecule);
    let settings = RepulsionSettings::default();
    let mut group = c.benchmark_group("benzene 6-31G*");
    group.sample_size(10);
    group.bench_function("integral list", |b| {
        b.iter(|| RepulsionList::compute(&basis, &settings))
    });
    let list = RepulsionList::compute(&basis, &settings);
    let n = basis.len();
    let density = DMatrix::from_fn(n, n, |i, j| 1.0 / (1.0 + (i as f64 - j as f64).abs()));
    group.bench_function("Fock build", |b| {
        b.iter(|| list.coulomb_exchange(black_box(std::slice::from_ref(&density))))
    });
    let mut work = case.surface.workspace();
    group.bench_function("SCF cold", |b| {
        b.iter_batched(
            || case.surface.workspace(),
            |mut work| case.at(&[], None, false, &mut work),
            BatchSize::PerIteration,
        )
    });
    let converged = case.at(&[], None, false, &mut work);
    group.bench_function("SCF again from its own density", |b| {
        b.iter(|| case.at(&[], Some((&[], &converged)), false, &mut work))
    });
    group.bench_function("the same with gradient", |b| {
        b.iter(|| case.at(&[], Some((&[], &converged)), true, &mut work))
    });
    group.finish();
}

fn ethanol(c: &mut Criterion) {
    let case = Case::new(ETHANOL);
    let mut group = c.benchmark_group("ethanol 6-31G*, O–H stretch");
    group.sample_size(20);
    group.bench_function("cold point", |b| {
        b.iter_batched(
            || case.surface.workspace(),
            |mut work| case.at(&[1.0], None, false, &mut work),
            BatchSize::PerIteration,
        )
    });
    let mut work = case.surface.workspace();
    let before = case.at(&[0.95], None, false, &mut work);
    group.bench_function("next point from the previous density", |b| {
        b.iter_batched(
            || work.clone(),
            |mut work| case.at(&[1.0], Some((&[0.95], &before)), false, &mut work),
            BatchSize::PerIteration,
        )
    });
    group.finish();
}

fn linear_algebra(c: &mut Criterion) {
    let mut group = c.benchmark_group("linear algebra");
    group.sample_size(10);
    for n in [50, 100, 250] {
        let matrix = DMatrix::from_fn(n, n, |i, j| {
            let (i, j) = (i.min(j) as f64, i.max(j) as f64);
            (0.3 * i + 0.7 * j).sin() + if (i - j).abs() < 0.5 { i } else { 0.0 }
        });
        group.bench_function(format!("eigenproblem of order {n}"), |b| {
            b.iter(|| symmetric_eigen(black_box(&matrix)))
        });
        group.bench_function(format!("product of order {n}"), |b| {
            b.iter(|| &matrix * black_box(&matrix))
        });
    }
    group.finish();
}

criterion_group!(benches, benzene, ethanol, linear_algebra);
criterion_main!(benches);
