//! Throughput of the repulsion integrals, in integrals a second and in flop-slots.
//!
//! *Slots* are the peak multiply–add rate of one thread, measured in the same run, divided by the
//! rate of unique contracted integrals: how many operations the machine could have done for each.
//! They compare machines fairly. Each rate is the best of several passes with pauses between them.
//!
//! `cargo bench --bench integrals` prints the table and then runs criterion on two cases;
//! `cargo bench --bench integrals -- --test`, or THALWEG_BENCH_SHORT=1 in the environment, does a
//! short subset once.

use criterion::{Criterion, Throughput};
use nalgebra::{DMatrix, Vector3};
use std::fmt::Write as _;
use std::hint::black_box;
use std::io::Write as _;
use std::time::{Duration, Instant};
use thalweg::basis::{Basis, Contraction, FunctionKind, Shell, library};
use thalweg::elements::Element;
use thalweg::integrals::repulsion::peak::{OPERATIONS_PER_ROUND, multiply_adds};
use thalweg::integrals::{CoulombExchange, RepulsionList, RepulsionSettings};
use thalweg::units::ANGSTROM_PER_BOHR;

type Atoms = Vec<(&'static str, Vector3<f64>)>;

/// Water: O–H 0.9572 Å, H–O–H 104.52° (common practice for benchmarks).
fn water() -> Atoms {
    let half = 52.26f64.to_radians();
    let (x, z) = (0.9572 * half.sin(), 0.9572 * half.cos());
    vec![
        ("O", Vector3::zeros()),
        ("H", Vector3::new(x, 0.0, z)),
        ("H", Vector3::new(-x, 0.0, z)),
    ]
}

/// Benzene: C–C 1.397 Å, C–H 1.084 Å.
fn benzene() -> Atoms {
    [("C", 1.397), ("H", 2.481)]
        .iter()
        .flat_map(|&(symbol, radius)| {
            (0..6).map(move |k| {
                let angle = f64::from(k) * std::f64::consts::FRAC_PI_3;
                let place = Vector3::new(angle.cos(), angle.sin(), 0.0) * radius;
                (symbol, place)
            })
        })
        .collect()
}

fn place(set: &str, atoms: &Atoms) -> Option<Basis> {
    let set = library::find(set).ok()?;
    let mut shells = Vec::new();
    for (atom, (symbol, _)) in atoms.iter().enumerate() {
        for shell in set.shells(Element::from_symbol(symbol)?, None)? {
            shells.push(Shell { atom, ..shell });
        }
    }
    let centres = atoms.iter().map(|(_, r)| r / ANGSTROM_PER_BOHR).collect();
    Some(Basis::new(shells, centres))
}

/// One shell of each kind on each of `count` atoms along a helix, so that nothing is screened.
fn helix(count: usize, kinds: impl Fn(usize) -> (Vec<usize>, Vec<f64>)) -> Basis {
    let shells = (0..count)
        .map(|atom| {
            let (ls, exponents) = kinds(atom);
            let tabulated: Vec<f64> = exponents.iter().map(|_| 0.5).collect();
            Shell {
                atom,
                contractions: ls
                    .iter()
                    .map(|&l| Contraction::normalised(l, &exponents, &tabulated))
                    .collect(),
                exponents,
                kind: FunctionKind::Spherical,
            }
        })
        .collect();
    let centres = (0..count)
        .map(|i| {
            let t = i as f64;
            Vector3::new((0.9 * t).cos(), (0.9 * t).sin(), 0.25 * t) * 1.2
        })
        .collect();
    Basis::new(shells, centres)
}

/// Best time of several passes with pauses.
fn best(passes: usize, mut pass: impl FnMut()) -> f64 {
    (0..passes)
        .map(|_| {
            std::thread::sleep(Duration::from_millis(30));
            let start = Instant::now();
            pass();
            start.elapsed().as_secs_f64()
        })
        .fold(f64::INFINITY, f64::min)
}

fn peak(passes: usize) -> f64 {
    let rounds = 2_000_000;
    let seconds = best(passes, || {
        black_box(multiply_adds(black_box(rounds)));
    });
    (rounds * OPERATIONS_PER_ROUND) as f64 / seconds
}

/// Bytes a second at which one thread sums a list that does not fit the caches.
fn read_rate(list: &[f64], passes: usize) -> f64 {
    let seconds = best(passes, || {
        let mut sums = [0.0; 32];
        for chunk in list.as_chunks::<32>().0 {
            for (sum, value) in sums.iter_mut().zip(chunk) {
                *sum += value;
            }
        }
        black_box(sums);
    });
    std::mem::size_of_val(list) as f64 / seconds
}

fn densities(n: usize) -> [DMatrix<f64>; 2] {
    let p = DMatrix::from_fn(n, n, |i, j| 1.0 / (1 + i + j) as f64);
    [p.clone(), p * 0.5]
}

/// A row of the table: rate of a pass that evaluates `integrals` integrals.
fn row(text: &mut String, name: &str, integrals: u64, seconds: f64, peak: f64) {
    let rate = integrals as f64 / seconds;
    let _ = writeln!(
        text,
        "{name:<28} {integrals:>11} {:>9.1} {:>8.0}",
        rate / 1e6,
        peak / rate
    );
}

/// The table of one number of threads.
fn table(threads: usize, short: bool) -> String {
    let passes = if short { 2 } else { 15 };
    let peak = peak(passes);
    let settings = RepulsionSettings::default();
    let mut text = format!(
        "{threads} thread(s), peak of one {:.1} Gflop/s\n{:<28} {:>11} {:>9} {:>8}\n",
        peak / 1e9,
        "case",
        "integrals",
        "M/s",
        "slots"
    );
    let molecules = [
        ("benzene 6-31G*", "6-31G*", benzene()),
        ("benzene cc-pVDZ", "cc-pVDZ", benzene()),
        ("benzene STO-3G", "STO-3G", benzene()),
        ("water cc-pVTZ", "cc-pVTZ", water()),
        ("water cc-pVQZ", "cc-pVQZ", water()),
    ];
    for (name, set, atoms) in &molecules {
        if short && !matches!(*set, "STO-3G" | "cc-pVTZ") {
            continue;
        }
        let Some(basis) = place(set, atoms) else {
            let _ = writeln!(text, "{name:<28} not in the library");
            continue;
        };
        let mut list = RepulsionList::compute(&basis, &settings);
        let seconds = best(passes, || list.refill());
        row(
            &mut text,
            name,
            list.integrals().len() as u64,
            seconds,
            peak,
        );
        let densities = densities(basis.len());
        let read = read_rate(list.integrals(), passes);
        for (count, words) in [(1, "one density  "), (2, "two densities")] {
            let seconds = best(passes, || {
                black_box(list.coulomb_exchange(&densities[..count]));
            });
            let rate = list.integrals().len() as f64 / seconds;
            let _ = writeln!(
                text,
                "  J and K of {words}   {:>9.0} M/s; list read at {:.1} GB/s, memory gives {:.1} GB/s",
                rate / 1e6,
                8e-9 * rate,
                read / 1e9
            );
        }
    }
    let sp = || (vec![0, 1], vec![0.27]);
    let d = || (vec![2], vec![0.8]);
    let f = || (vec![3], vec![1.4]);
    type Kinds = Box<dyn Fn(usize) -> (Vec<usize>, Vec<f64>)>;
    let uniform: [(&str, usize, Kinds); 3] = [
        ("(sp sp|sp sp)", 20, Box::new(move |_| sp())),
        (
            "(sp sp|sp sp), 3 primitives",
            20,
            Box::new(|_| (vec![0, 1], vec![7.8, 1.9, 0.54])),
        ),
        ("(dd|dd)", 18, Box::new(move |_| d())),
    ];
    for (name, count, kinds) in uniform {
        if short && count == 18 {
            continue;
        }
        let mut list = RepulsionList::compute(&helix(count, kinds), &settings);
        let seconds = best(passes, || list.refill());
        row(
            &mut text,
            name,
            list.integrals().len() as u64,
            seconds,
            peak,
        );
    }
    // One moved f shell among d shells, or one d among f: nine tenths of what it touches is the class named.
    let mixed: [(&str, Kinds); 2] = [
        (
            "(fd|dd), mostly",
            Box::new(move |i| if i == 18 { f() } else { d() }),
        ),
        (
            "(ff|fd), mostly",
            Box::new(move |i| if i == 18 { d() } else { f() }),
        ),
    ];
    for (name, kinds) in mixed {
        if short {
            continue;
        }
        let basis = helix(19, kinds);
        let mut list = RepulsionList::compute(&basis, &settings);
        let mut centres = basis.centres().to_vec();
        let mut counts = list.counts();
        let seconds = best(passes, || {
            centres[18].x += 1e-3;
            counts = list.update(&basis.at(&centres));
        });
        row(&mut text, name, counts.computed, seconds, peak);
    }
    text
}

fn criterion_cases(criterion: &mut Criterion) {
    let settings = RepulsionSettings::default();
    let mut group = criterion.benchmark_group("repulsion");
    for (name, set, atoms) in [
        ("water 6-31G*", "6-31G*", water()),
        ("benzene STO-3G", "STO-3G", benzene()),
    ] {
        let Some(basis) = place(set, &atoms) else {
            continue;
        };
        let mut list = RepulsionList::compute(&basis, &settings);
        group.throughput(Throughput::Elements(list.integrals().len() as u64));
        group.bench_function(format!("{name} list"), |b| b.iter(|| list.refill()));
        let densities = densities(basis.len());
        group.bench_function(format!("{name} J and K"), |b| {
            b.iter(|| black_box(list.coulomb_exchange(&densities)));
        });
    }
    group.finish();
}

fn main() {
    let short = std::env::var_os("THALWEG_BENCH_SHORT").is_some()
        || std::env::args().any(|a| a == "--test");
    for threads in [1, 2] {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build();
        if let Ok(pool) = pool {
            let text = pool.install(|| table(threads, short));
            let _ = writeln!(std::io::stdout(), "{text}");
        }
    }
    if short {
        return;
    }
    let mut criterion = Criterion::default().configure_from_args();
    criterion_cases(&mut criterion);
    criterion.final_summary();
}
