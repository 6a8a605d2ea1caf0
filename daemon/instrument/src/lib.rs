//! instrument
