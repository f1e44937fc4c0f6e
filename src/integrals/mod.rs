//! Molecular integrals over contracted Gaussian functions.

pub mod boys;
