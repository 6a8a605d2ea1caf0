//! alarm
