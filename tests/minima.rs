//! Experiments.
mod common;
use common::{surface, surface_with};
use thalweg::minimise::{MinimiseSettings, Task, minimise};
use thalweg::molecule::{Molecule, zmatrix};
use thalweg::scf::{Method, ScfSettings};
use thalweg::surface::Surface;
use thalweg::units::LengthUnit;

fn from_zmatrix(text: &str) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    Molecule {
        atoms: rows.atoms(),
        positions: rows
            .positions(LengthUnit::Angstrom)
            .expect("a defined geometry"),
        charge: 0,
        multiplicity: 1,
    }
}
struct Random(u64);

impl Random {
    fn next(&mut self) -> f64 {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1_u64 << 52) as f64 - 1.0
    }
    fn between(&mut self, from: f64, to: f64) -> f64 {
        let x = self.next();
        x.signum() * (from + x.abs() * (to - from))
    }
}
fn distorted(text: &str, seed: u64) -> Molecule {
    let rows = zmatrix::parse(text).expect("a valid z-matrix");
    let mut random = Random(seed);
    let mut distorted = String::new();
    for row in rows.rows() {
        distorted.push_str(&row.label);
        for (place, reference) in row.references.iter().enumerate() {
            let value = reference.value
                + match place {
                    0 => random.between(0.1, 0.2),
                    1 => random.between(5.0, 15.0),
                    _ => 0.0,
                };
            let value = if place == 1 && value > 180.0 {
                360.0 - value
            } else {
                value
            };
            let to = &rows.rows()[reference.row].label;
            distorted.push_str(&format!(" {to} {value}"));
        }
        distorted.push('\n');
    }
    from_zmatrix(&distorted)
}
#[test]
fn experiment() {
    let basis = std::env::var("BASIS").unwrap_or("STO-3G".into());
    let seed: u64 = std::env::var("SEED").map_or(11, |s| s.parse().unwrap());
    let skip = std::env::var("SKIP").unwrap_or_default();
    let only = std::env::var("ONLY").ok();
    let mut all = vec![];
    for (number, entry) in include_str!("data/molecules.txt")
        .split("\n[")
        .skip(1)
        .enumerate()
    {
        let (name, text) = entry.split_once("]\n").unwrap();
        if skip.contains(name) || only.as_ref().is_some_and(|o| !o.contains(name)) {
            continue;
        }
        let clock = std::time::Instant::now();
        let reference = from_zmatrix(text);
        let s = surface_with(
            &reference,
            &basis,
            Method::Rhf,
            ScfSettings::default(),
            None,
        );
        let settings = MinimiseSettings::default();
        let a = minimise(&s, Task::of(&reference), &settings, &mut s.workspace()).unwrap();
        let b = minimise(
            &s,
            Task::of(&distorted(text, seed + 97 * number as u64)),
            &settings,
            &mut s.workspace(),
        )
        .unwrap();
        eprintln!(
            "{name}: plain {:?} {} calls {:?}; distorted {:?} {} calls diff {:.2e}, builds {} time {:?}",
            a.stop,
            a.calls.len(),
            a.record.energy,
            b.stop,
            b.calls.len(),
            b.record.energy.unwrap() - a.record.energy.unwrap(),
            b.all_builds,
            clock.elapsed()
        );
        if std::env::var("TRACE").is_ok() {
            for c in a.calls.iter().chain(&b.calls) {
                eprintln!(
                    "   {:.8} g {:.2e} d {:.2e} p {:.2e} {}",
                    c.energy, c.gradient_max, c.displacement, c.promise, c.kept
                );
            }
        }
        all.push(b.calls.len());
    }
    all.sort_unstable();
    eprintln!("{all:?}");
}
