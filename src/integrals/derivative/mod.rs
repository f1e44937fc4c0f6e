//! First derivatives of the integrals with respect to the centres of the functions, contracted on
//! the spot with densities: gradients of energies, no derivative integral is ever stored.

mod density;
mod one_electron;
mod pairs;
mod quartet;
mod repulsion;
mod transform;

pub use one_electron::{attraction_gradient, kinetic_gradient, overlap_gradient};
pub use repulsion::{RepulsionGradientSettings, repulsion_gradient};
