//! Products with the sparse matrices that take pairs of functions to Hermite functions.

use super::pairs::PairClass;
use crate::integrals::repulsion::lanes::{Four, Lanes};

/// out[row, column] = Σ_ij input[row, ij] · E_column^{ij} for the columns of the range.
#[inline(always)]
pub(super) fn from_right<V: Lanes>(
    class: &PairClass,
    range: std::ops::Range<usize>,
    values: &[Four],
    (input, stride): (&[Four], usize),
    (out, out_stride): (&mut [Four], usize),
    rows: usize,
) {
    let mut row = 0;
    while row + 4 <= rows {
        rows_from_right::<V, 4>(
            class,
            range.clone(),
            values,
            &input[row * stride..],
            stride,
            &mut out[row * out_stride..],
            out_stride,
        );
        row += 4;
    }
    while row < rows {
        rows_from_right::<V, 1>(
            class,
            range.clone(),
            values,
            &input[row * stride..],
            stride,
            &mut out[row * out_stride..],
            out_stride,
        );
        row += 1;
    }
}

#[inline(always)]
fn rows_from_right<V: Lanes, const N: usize>(
    class: &PairClass,
    range: std::ops::Range<usize>,
    values: &[Four],
    input: &[Four],
    stride: usize,
    out: &mut [Four],
    out_stride: usize,
) {
    let inputs: [&[Four]; N] = std::array::from_fn(|n| &input[n * stride..(n + 1) * stride]);
    for column in range {
        let elements = class.starts[column]..class.starts[column + 1];
        let mut sums = [V::zero(); N];
        for (value, &place) in values[elements.clone()].iter().zip(&class.rows[elements]) {
            let value = V::load(value);
            for n in 0..N {
                sums[n] = value.mul_add(V::load(&inputs[n][usize::from(place)]), sums[n]);
            }
        }
        for n in 0..N {
            sums[n].store(&mut out[n * out_stride + column]);
        }
    }
}

/// out[column, k] = Σ_ij E_column^{ij} · input[ij, k] for the columns of the range and k < `width`.
#[inline(always)]
pub(super) fn from_left<V: Lanes>(
    class: &PairClass,
    range: std::ops::Range<usize>,
    values: &[f64],
    (input, stride): (&[Four], usize),
    out: &mut [Four],
    out_stride: usize,
    width: usize,
) {
    for column in range {
        let elements = class.starts[column]..class.starts[column + 1];
        let values = &values[elements.clone()];
        let places = &class.rows[elements];
        let out = &mut out[column * out_stride..column * out_stride + width];
        let mut k = 0;
        while k + 8 <= width {
            part_from_left::<V, 8>(values, places, input, stride, k, out);
            k += 8;
        }
        if k + 4 <= width {
            part_from_left::<V, 4>(values, places, input, stride, k, out);
            k += 4;
        }
        if k + 2 <= width {
            part_from_left::<V, 2>(values, places, input, stride, k, out);
            k += 2;
        }
        if k < width {
            part_from_left::<V, 1>(values, places, input, stride, k, out);
        }
    }
}

#[inline(always)]
fn part_from_left<V: Lanes, const N: usize>(
    values: &[f64],
    places: &[u16],
    input: &[Four],
    stride: usize,
    start: usize,
    out: &mut [Four],
) {
    let mut sums = [V::zero(); N];
    for (&value, &place) in values.iter().zip(places) {
        let value = V::splat(value);
        let from = usize::from(place) * stride + start;
        let input = &input[from..from + N];
        for n in 0..N {
            sums[n] = value.mul_add(V::load(&input[n]), sums[n]);
        }
    }
    for (sum, out) in sums.iter().zip(&mut out[start..start + N]) {
        sum.store(out);
    }
}
