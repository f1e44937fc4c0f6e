//! thalweg
fn main() {}
