//! hushwatch
fn main() {}
