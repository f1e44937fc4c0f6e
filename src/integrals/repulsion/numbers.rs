//! Memory for a list of integrals.

use memmap2::MmapMut;
use std::ops::{Deref, DerefMut};

/// Bytes from which a list is mapped by itself: some large pages (2 MiB on x86-64).
const MAPPED_FROM: usize = 8 << 20;

/// Zeros to be overwritten. Large ones ask the system for large pages: filling a list of 100 MB in small ones spends a
/// tenth of its time on 27,000 page faults, and every pass over it on translating addresses.
#[derive(Debug)]
pub(super) enum Numbers {
    /// from the allocator
    Heap(Vec<f64>),
    /// pages of their own
    Mapped(MmapMut),
}

impl Numbers {
    pub(super) fn zeros(count: usize) -> Self {
        Self::mapped(count).unwrap_or_else(|| Self::Heap(vec![0.0; count]))
    }

    fn mapped(count: usize) -> Option<Self> {
        let bytes = count.checked_mul(size_of::<f64>())?;
        if bytes < MAPPED_FROM {
            return None;
        }
        let map = MmapMut::map_anon(bytes).ok()?;
        // Where the system has no large pages to give, small ones do.
        #[cfg(target_os = "linux")]
        let _ = map.advise(memmap2::Advice::HugePage);
        Some(Self::Mapped(map))
    }
}

impl Deref for Numbers {
    type Target = [f64];

    fn deref(&self) -> &[f64] {
        match self {
            Self::Heap(numbers) => numbers,
            Self::Mapped(map) => bytemuck::cast_slice(map),
        }
    }
}

impl DerefMut for Numbers {
    fn deref_mut(&mut self) -> &mut [f64] {
        match self {
            Self::Heap(numbers) => numbers,
            Self::Mapped(map) => bytemuck::cast_slice_mut(map),
        }
    }
}

impl Clone for Numbers {
    fn clone(&self) -> Self {
        let mut copy = Self::zeros(self.len());
        copy.copy_from_slice(self);
        copy
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn small_and_large_ones_begin_as_zeros_and_copy_what_they_hold() {
        for count in [0, 1, 1000, MAPPED_FROM / 8, MAPPED_FROM / 8 + 3] {
            let mut numbers = Numbers::zeros(count);
            assert_eq!(numbers.len(), count);
            assert!(numbers.iter().all(|x| x.to_bits() == 0));
            for (k, x) in numbers.iter_mut().enumerate() {
                *x = k as f64;
            }
            assert_eq!(*numbers.clone(), *numbers);
        }
    }
}
