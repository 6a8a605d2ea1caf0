//! hushwatchd
