//! `hushwatch demo`
