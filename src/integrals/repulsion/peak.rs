//! The yardstick of the benchmarks: nothing but multiply–adds, in the vectors that the kernel uses.

use super::lanes::{Kernel, Lanes, dispatch};
use std::hint::black_box;

/// Independent sums: enough to hide the latency of a multiply–add on two units.
const SUMS: usize = 12;

/// Floating-point operations of one round of [`multiply_adds`].
pub const OPERATIONS_PER_ROUND: usize = SUMS * 4 * 2;

/// Carries out `rounds` rounds of independent multiply–adds that touch no memory; their time is the
/// peak that integral rates are measured against. Returns a number that depends on all of them.
#[must_use]
pub fn multiply_adds(rounds: usize) -> f64 {
    dispatch(MultiplyAdds { rounds })
}

struct MultiplyAdds {
    rounds: usize,
}

impl Kernel for MultiplyAdds {
    type Output = f64;

    #[inline(always)]
    fn run<V: Lanes>(self) -> f64 {
        let factor = V::splat(black_box(0.999_999));
        let addend = V::splat(black_box(1e-9));
        let mut sums = [factor; SUMS];
        for _ in 0..self.rounds {
            for sum in &mut sums {
                *sum = sum.mul_add(factor, addend);
            }
        }
        sums.iter()
            .map(|sum| sum.to_array().iter().sum::<f64>())
            .sum()
    }
}
