//! hushwatchd
fn main() {}
