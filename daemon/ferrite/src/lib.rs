//! ferrite
