//! recipient
