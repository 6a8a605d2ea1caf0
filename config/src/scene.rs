//! The scene file.
