//! Gradient of the electron repulsion in a Hartree–Fock state.

use super::density::Densities;
use super::pairs::{Pair, PairClass, pair_classes};
use super::quartet::{BraPrimitive, KetSums, Places, Quartets, Work, places};
use crate::basis::Basis;
use crate::integrals::boys;
use crate::integrals::recurrence::hermite_count;
use crate::integrals::repulsion::lanes::{Four, dispatch};
use crate::integrals::repulsion::primitives::{field, run_primitives, scratch_len};
use nalgebra::{DMatrix, Vector3};
use rayon::prelude::*;

/// Number of partial gradients: fixed, so that the order of addition does not depend on threads.
const PARTS: usize = 192;
/// Ket primitives gathered before they are worked off.
const BATCH: usize = 128;

/// Settings of [`repulsion_gradient`].
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct RepulsionGradientSettings {
    /// Primitive quartets whose contribution to any component is estimated to be smaller, in
    /// hartree/bohr, are left out. Default 1e-11: benzene's gradient then errs by less than 1e-10.
    pub threshold: f64,
}

impl Default for RepulsionGradientSettings {
    fn default() -> Self {
        Self { threshold: 1e-11 }
    }
}

/// A ket primitive waiting for its turn.
struct Waiting {
    pair: usize,
    primitive: usize,
    density: usize,
    largest: f64,
}

/// Buffers of one thread.
#[derive(Default)]
struct Buffers {
    work: Work,
    density: Vec<f64>,
    waiting: Vec<Waiting>,
    bra_fields: Vec<Four>,
    bra_values: Vec<f64>,
    bra_primitives: Vec<BraPrimitive>,
    bra_apart: [f64; 3],
    ket_fields: Vec<Four>,
    ket_values: Vec<Four>,
    ket_density: Vec<Four>,
    zeros: Vec<f64>,
    coulomb: Vec<Four>,
    scratch: Vec<Four>,
}

/// Gradient of the two-electron energy ½ Σ (P_ab P_cd − Σ_σ P^σ_ac P^σ_bd) (ab|cd) at fixed densities, in
/// hartree/bohr, one vector per centre of the basis.
///
/// `alpha` and `beta` are the one-particle densities of the two spins; when they are the same, the
/// cheaper closed-shell form is used. Functions up to g. The bits of the result do not depend on
/// the number of threads.
#[must_use]
pub fn repulsion_gradient(
    basis: &Basis,
    alpha: &DMatrix<f64>,
    beta: &DMatrix<f64>,
    settings: &RepulsionGradientSettings,
) -> Vec<Vector3<f64>> {
    let densities = Densities::new(basis, alpha, beta);
    let classes = pair_classes(basis);
    let job = Job {
        basis,
        densities: &densities,
        classes: &classes,
        threshold: settings.threshold,
        places: places(),
    };
    let bras: Vec<(usize, usize)> = classes
        .iter()
        .enumerate()
        .flat_map(|(c, class)| (0..class.pairs.len()).map(move |p| (c, p)))
        .collect();
    let parts: Vec<Vec<Vector3<f64>>> = (0..PARTS)
        .into_par_iter()
        .with_max_len(1)
        .map(|part| {
            let mut gradient = vec![Vector3::zeros(); basis.centres().len()];
            let mut buffers = Buffers::default();
            for &bra in bras.iter().skip(part).step_by(PARTS) {
                job.bra_pair(bra, &mut buffers, &mut gradient);
            }
            gradient
        })
        .collect();
    let mut gradient = vec![Vector3::zeros(); basis.centres().len()];
    for part in parts {
        for (sum, value) in gradient.iter_mut().zip(part) {
            *sum += value;
        }
    }
    gradient
}

/// What all shell pairs need.
struct Job<'a> {
    basis: &'a Basis,
    densities: &'a Densities,
    classes: &'a [PairClass],
    threshold: f64,
    places: &'static Places,
}

impl Job<'_> {
    /// Adds all quartets of one bra pair with ket pairs that do not come before it.
    fn bra_pair(
        &self,
        (class, place): (usize, usize),
        buffers: &mut Buffers,
        gradient: &mut [Vector3<f64>],
    ) {
        let bra_class = &self.classes[class];
        let bra = &bra_class.pairs[place];
        let strongest = bra_class.primitives[bra.primitives.start].weight;
        set_bra(bra_class, bra, buffers);
        let apart = self.basis.centre(bra.shells[0]) - self.basis.centre(bra.shells[1]);
        buffers.bra_apart = [apart[0], apart[1], apart[2]];
        let mut bra_gradient = [[Four::default(); 3]; 2];
        for (k, ket_class) in self.classes.iter().enumerate().skip(class) {
            let first = if k == class { place } else { 0 };
            for (i, ket) in ket_class.pairs.iter().enumerate().skip(first) {
                let [a, b] = bra.atoms;
                if a == b && ket.atoms == [a, a] {
                    continue;
                }
                let twice = |different: bool| if different { 2.0 } else { 1.0 };
                let weight = twice(bra.shells[0] != bra.shells[1])
                    * twice(ket.shells[0] != ket.shells[1])
                    * twice(k != class || i != place);
                let bound = weight * self.densities.bound(bra.shells, ket.shells);
                if bound * bra.weight * ket.weight < self.threshold {
                    continue;
                }
                let start = buffers.density.len();
                let largest = self.densities.two_particle(
                    self.basis,
                    bra.shells,
                    ket.shells,
                    weight,
                    &mut buffers.density,
                );
                for primitive in ket.primitives.clone() {
                    let ket_weight = ket_class.primitives[primitive].weight;
                    if ket_weight * strongest * largest < self.threshold {
                        break;
                    }
                    buffers.waiting.push(Waiting {
                        pair: i,
                        primitive,
                        density: start,
                        largest,
                    });
                }
                if buffers.waiting.len() >= BATCH {
                    self.work_off(bra_class, ket_class, buffers, &mut bra_gradient, gradient);
                }
            }
            self.work_off(bra_class, ket_class, buffers, &mut bra_gradient, gradient);
        }
        for (atom, sums) in bra.atoms.iter().zip(&bra_gradient) {
            for axis in 0..3 {
                gradient[*atom][axis] += sums[axis].0.iter().sum::<f64>();
            }
        }
    }

    /// Computes what waits, four primitives at a time.
    fn work_off(
        &self,
        bra: &PairClass,
        ket: &PairClass,
        buffers: &mut Buffers,
        bra_gradient: &mut [[Four; 3]; 2],
        gradient: &mut [Vector3<f64>],
    ) {
        let degree = bra.degree + ket.degree + 1;
        let boys = boys::table(degree);
        let Buffers {
            work,
            density,
            waiting,
            bra_fields,
            bra_values,
            bra_primitives,
            bra_apart,
            ket_fields,
            ket_values,
            ket_density,
            zeros,
            coulomb,
            scratch,
        } = buffers;
        coulomb.resize(
            hermite_count(degree) * bra_primitives.len(),
            Four::default(),
        );
        scratch.resize(scratch_len(degree, bra_primitives.len()), Four::default());
        ket_fields.resize(field::SCALARS, Four::default());
        ket_values.resize(ket.len(), Four::default());
        let size = bra.rows_count() * ket.rows_count();
        ket_density.resize(size, Four::default());
        zeros.resize(size, 0.0);
        for group in waiting.chunks(4) {
            // Empty lanes repeat the first primitive with no density at all.
            let of_lane = |lane: usize| group.get(lane).unwrap_or(&group[0]).primitive;
            let primitives = [0, 1, 2, 3].map(|lane| &ket.primitives[of_lane(lane)]);
            ket_fields[field::EXPONENT] = Four(primitives.map(|p| p.exponent));
            for axis in 0..3 {
                ket_fields[field::CENTRE + axis] = Four(primitives.map(|p| p.centre[axis]));
            }
            ket_fields[field::FACTOR] = Four([1.0; 4]);
            ket_fields[field::BOUND] = Four(primitives.map(|p| p.weight));
            interleave(
                [0, 1, 2, 3].map(|lane| ket.values_of(of_lane(lane))),
                ket_values,
            );
            let mut cut = Four([f64::INFINITY; 4]);
            let mut sources: [&[f64]; 4] = [zeros; 4];
            for (lane, one) in group.iter().enumerate() {
                cut.0[lane] = self.threshold / one.largest;
                sources[lane] = &density[one.density..one.density + size];
            }
            interleave(sources, ket_density);
            let done = run_primitives(
                degree,
                ket_fields,
                bra_fields,
                field::SCALARS,
                &cut,
                boys,
                coulomb,
                scratch,
            );
            let sums = dispatch(Quartets {
                places: self.places,
                bra,
                ket,
                primitives: &bra_primitives[..done],
                apart: *bra_apart,
                bra_values,
                ket_values,
                density: ket_density,
                coulomb,
                work,
                bra_gradient,
            });
            for (lane, one) in group.iter().enumerate() {
                let pair = &ket.pairs[one.pair];
                let (c, d) = ket_gradient(ket, one.primitive, &sums, lane);
                gradient[pair.atoms[0]] += c;
                gradient[pair.atoms[1]] += d;
            }
        }
        waiting.clear();
        density.clear();
    }
}

/// Four lists side by side, one per lane.
fn interleave([a, b, c, d]: [&[f64]; 4], out: &mut [Four]) {
    for ((((out, &a), &b), &c), &d) in out.iter_mut().zip(a).zip(b).zip(c).zip(d) {
        *out = Four([a, b, c, d]);
    }
}

/// Gradients of the two centres of a ket primitive.
fn ket_gradient(
    class: &PairClass,
    primitive: usize,
    sums: &KetSums,
    lane: usize,
) -> (Vector3<f64>, Vector3<f64>) {
    let primitive = &class.primitives[primitive];
    let at = |from: &[Four; 3]| Vector3::from_fn(|axis, _| from[axis].0[lane]);
    let force = at(&sums.force);
    let split = if class.two_centre {
        Vector3::from(primitive.stretch) * sums.energy.0[lane]
            + at(&sums.lowered)
            + at(&sums.shifted) * primitive.twice_second
    } else {
        Vector3::zeros()
    };
    let [first, second] = primitive.fractions;
    (force * first + split, force * second - split)
}

/// Spreads the numbers of a bra pair over the lanes.
fn set_bra(class: &PairClass, bra: &Pair, buffers: &mut Buffers) {
    buffers.bra_fields.clear();
    buffers.bra_values.clear();
    buffers.bra_primitives.clear();
    for p in bra.primitives.clone() {
        let primitive = &class.primitives[p];
        let start = buffers.bra_fields.len();
        buffers
            .bra_fields
            .resize(start + field::SCALARS, Four::default());
        let fields = &mut buffers.bra_fields[start..];
        fields[field::EXPONENT] = Four([primitive.exponent; 4]);
        for axis in 0..3 {
            fields[field::CENTRE + axis] = Four([primitive.centre[axis]; 4]);
        }
        fields[field::FACTOR] = Four([1.0; 4]);
        fields[field::BOUND] = Four([primitive.weight; 4]);
        let signed = class.values_of(p).iter().zip(&class.signs);
        buffers.bra_values.extend(signed.map(|(v, s)| v * s));
        buffers.bra_primitives.push(BraPrimitive {
            fractions: primitive.fractions,
            stretch: primitive.stretch,
            stretch_factor: primitive.stretch_factor,
            twice_second: primitive.twice_second,
        });
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::basis::FunctionKind;
    use crate::integrals::one_electron::samples;
    use crate::integrals::reference::repulsion_block;

    /// A symmetric matrix without structure.
    fn weights(n: usize, phase: f64) -> DMatrix<f64> {
        DMatrix::from_fn(n, n, |i, j| {
            (phase + (i + j) as f64 * 0.7 + (i * j) as f64 * 0.31).sin()
        })
    }

    fn energy(basis: &Basis, alpha: &DMatrix<f64>, beta: &DMatrix<f64>) -> f64 {
        let total = alpha + beta;
        let count = basis.shells().len();
        let mut energy = 0.0;
        for s1 in 0..count {
            for s2 in 0..=s1 {
                for s3 in 0..count {
                    for s4 in 0..count {
                        let block = repulsion_block(basis, [s1, s2, s3, s4]);
                        let mut values = block.iter();
                        let factor = if s1 == s2 { 0.5 } else { 1.0 };
                        for a in basis.range(s1) {
                            for b in basis.range(s2) {
                                for c in basis.range(s3) {
                                    for (d, value) in basis.range(s4).zip(&mut values) {
                                        let exchange = alpha[(a, c)] * alpha[(b, d)]
                                            + beta[(a, c)] * beta[(b, d)];
                                        energy += factor
                                            * value
                                            * (total[(a, b)] * total[(c, d)] - exchange);
                                    }
                                }
                            }
                        }
                    }
                }
            }
        }
        energy
    }

    /// Compares the slope along a displacement of all atoms with five-point differences.
    fn compare(
        basis: &Basis,
        alpha: &DMatrix<f64>,
        beta: &DMatrix<f64>,
        displacement: &[[f64; 3]],
    ) {
        let settings = RepulsionGradientSettings { threshold: 0.0 };
        let gradient = repulsion_gradient(basis, alpha, beta, &settings);
        let scale: f64 = 1.0 + gradient.iter().map(|g| g.norm()).sum::<f64>();
        let sum: Vector3<f64> = gradient.iter().sum();
        assert!(sum.norm() < 1e-12 * scale, "translation: {sum}");
        let h = 1.5e-3;
        let at = |steps: f64| {
            let moved = |(r, d): (&Vector3<f64>, &[f64; 3])| r + Vector3::from(*d) * (steps * h);
            let centres: Vec<_> = basis
                .centres()
                .iter()
                .zip(displacement)
                .map(moved)
                .collect();
            energy(&basis.at(&centres), alpha, beta)
        };
        let slope = (8.0 * (at(1.0) - at(-1.0)) - (at(2.0) - at(-2.0))) / (12.0 * h);
        let projected: f64 = gradient
            .iter()
            .zip(displacement)
            .map(|(g, d)| g.dot(&Vector3::from(*d)))
            .sum();
        // Differences err by h⁴ f⁽⁵⁾/30.
        assert!(
            (slope - projected).abs() < 1e-8 * scale,
            "{slope} {projected}"
        );
    }

    const DISPLACEMENT: [[f64; 3]; 4] = [
        [0.3, -0.6, 0.5],
        [0.0, 0.7, 0.2],
        [-0.5, 0.1, 0.4],
        [0.2, 0.3, -0.8],
    ];

    #[test]
    fn matches_differences_for_low_angular_momentum() {
        let basis = samples::mixed_basis(FunctionKind::Cartesian, 1);
        let (alpha, beta) = (weights(basis.len(), 0.0), weights(basis.len(), 0.4));
        compare(&basis, &alpha, &alpha, &DISPLACEMENT[..2]);
        compare(&basis, &alpha, &beta, &DISPLACEMENT[..2]);
    }

    #[test]
    fn turns_with_the_molecule_up_to_g() {
        // Two atoms with a g shell each and no density outside those: (gg|gg) in all its forms.
        let kind = FunctionKind::Spherical;
        let shells = vec![samples::shell(0, 4, kind), samples::shell(1, 4, kind)];
        let basis = Basis::new(
            shells,
            vec![Vector3::new(0.1, -0.2, 0.3), Vector3::new(-0.4, 0.9, 1.2)],
        );
        let settings = RepulsionGradientSettings::default();
        // The overlap is a density that turns with the molecule.
        let along = |basis: &Basis| {
            let density = crate::integrals::overlap(basis);
            let gradient = repulsion_gradient(basis, &density, &density, &settings);
            let axis = basis.centres()[0] - basis.centres()[1];
            assert!((gradient[0] + gradient[1]).norm() < 1e-12);
            assert!(gradient[0].cross(&axis).norm() < 1e-10, "no torque");
            gradient[0].dot(&axis)
        };
        let here = along(&basis);
        let rotation = nalgebra::Rotation3::from_euler_angles(0.7, -0.2, 1.9);
        let turned: Vec<_> = basis.centres().iter().map(|r| rotation * r).collect();
        let there = along(&basis.at(&turned));
        assert!(
            (here - there).abs() < 1e-11 * here.abs().max(1.0),
            "{here} {there}"
        );
        assert!(here.abs() > 1e-3);
    }

    #[test]
    fn screening_errs_less_than_it_promises() {
        let basis = samples::mixed_basis(FunctionKind::Spherical, 2);
        let alpha = weights(basis.len(), 0.1);
        let at = |threshold| {
            repulsion_gradient(
                &basis,
                &alpha,
                &alpha,
                &RepulsionGradientSettings { threshold },
            )
        };
        for (exact, screened) in at(0.0).iter().zip(at(1e-8)) {
            assert!((exact - screened).norm() < 1e-5);
        }
        assert_ne!(at(0.0), at(1e-2), "a coarse threshold leaves something out");
    }

    #[test]
    fn threads_do_not_change_bits() {
        let basis = samples::mixed_basis(FunctionKind::Cartesian, 2);
        let alpha = weights(basis.len(), 0.1);
        let settings = RepulsionGradientSettings::default();
        let with = |threads| {
            let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build();
            pool.map(|p| p.install(|| repulsion_gradient(&basis, &alpha, &alpha, &settings)))
        };
        match (with(1), with(2)) {
            (Ok(one), Ok(two)) => assert_eq!(one, two),
            _ => panic!("no thread pool"),
        }
    }

    #[test]
    fn matches_differences_for_single_shells_up_to_g() {
        // One shell on each of four centres: all kinds of classes occur, with two, three and four centres.
        for kind in [FunctionKind::Cartesian, FunctionKind::Spherical] {
            for momenta in [[2, 1, 0, 2], [3, 2, 1, 0], [4, 1, 0, 0]] {
                let shells = momenta
                    .iter()
                    .enumerate()
                    .map(|(atom, &l)| samples::shell(atom, l, kind))
                    .collect();
                let centres = vec![
                    Vector3::new(0.1, -0.2, 0.3),
                    Vector3::new(-0.4, 0.5, 1.2),
                    Vector3::new(0.9, 0.8, -0.1),
                    Vector3::new(-0.6, -0.9, 0.2),
                ];
                let basis = Basis::new(shells, centres);
                let alpha = weights(basis.len(), 0.2);
                compare(&basis, &alpha, &alpha, &DISPLACEMENT);
            }
        }
    }
}
