//! What a choke should do by its physics.
//!
//! - Impedances and permeabilities are complex, for a time factor of exp(+j w t): Z = R + j X, mu = mu' - j mu''. The
//!   real part of mu makes reactance, the loss part makes resistance.
//! - Cores: Z = j w L0 mu_e N^2, times the number of cores; L0 is that of the bare geometry ([`Core`]), mu_e the
//!   permeability of the material ([`Material`]) after the air gap ([`gapped_permeability`]). N counts passes through
//!   the bore: a cable that goes straight through makes one turn.
//! - [`insertion_loss_db`] compares the current in a loop without and with the choke; it depends on the loop as much as
//!   on the choke. One clip of 26/13/28 mm of `nizn-800` has 6 ohm at 300 kHz and 190 ohm at 100 MHz: in 150 + 150 ohm
//!   that is 0.01 and 4 dB, in 25 + 25 ohm 0.1 and 14 dB.
//! - What is not in here: saturation, temperature, the cable's own length. A loop is taken as one impedance at all
//!   frequencies. Read the result as what is to be expected within some dB, not as a promise.
//!
//! The room is pure: numbers in, numbers out.

#![forbid(unsafe_code)]

mod choke;
mod core_shape;
mod insertion_loss;
mod material;
mod table;

#[cfg(test)]
mod published_tests;

pub use choke::{Choke, ChokeError};
pub use core_shape::{Core, gapped_permeability};
pub use insertion_loss::{band_insertion_loss_db, insertion_loss_db};
pub use material::{DomainWall, Material, Spin};
/// The complex numbers of this room.
pub use num_complex::Complex;
