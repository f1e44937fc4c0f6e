//! Tests of the optimiser on force fields whose minima are known.

use super::test_fields::{ZMATRICES, distorted, field, from_zmatrix};
use super::*;

fn run(molecule: &Molecule, surface: &crate::surface::model::ModelSurface, settings: &MinimiseSettings) -> Minimum<usize> {
    minimise(surface, Task::of(molecule), settings, &mut ()).unwrap()
}

#[test]
fn distorted_molecules_find_their_minimum_in_few_calls() {
    let mut calls = Vec::new();
    for (number, (name, text)) in ZMATRICES.iter().enumerate() {
        let reference = from_zmatrix(text);
        let surface = field(&reference);
        let minimum = run(&distorted(text, 11 + number as u64), &surface, &MinimiseSettings::default());
        eprintln!("{name}: {:?} {} calls, E {:?}", minimum.stop, minimum.calls.len(), minimum.record.energy);
        for c in &minimum.calls { eprintln!("   {c:?}"); }
        calls.push(minimum.calls.len());
    }
    calls.sort_unstable();
    eprintln!("{calls:?}");
    panic!();
}
