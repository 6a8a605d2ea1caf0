//! What users write: the site file, dialects and scenes, parsed and checked with every fault at its place.
//!
//! [`faults`] says what is wrong and shows it, [`walk`] reads a TOML tree by hand and collects all faults of a file.
//! Upon these stand [`site`] (one cabinet and all that watches it), [`dialect`] (how one kind of instrument is spoken
//! to) and [`scene`] (a simulated cabinet). Reading files is the only thing that happens here: no clock, no network.

pub mod dialect;
pub mod faults;
pub mod scene;
pub mod site;
pub mod walk;
