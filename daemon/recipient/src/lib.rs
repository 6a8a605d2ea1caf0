//! Where alarms go. A [`Notice`] is what a recipient is told; [`deliver`] tells it once; [`retry_after`] says when to try
//! again.
//!
//! The record keeps each notice until it was delivered, so it is told at least once, also over a crash: then perhaps
//! twice, with the same `key`. What a recipient is told is one JSON object; its names are a surface that people script
//! against, and only ever added to.

mod command;
mod notice;

use std::time::Duration;

use thiserror::Error;

pub use command::Command;
pub use notice::{Band, Notice};

/// Why a notice was not delivered.
#[derive(Debug, Error)]
pub enum DeliveryError {
    /// The program cannot be started.
    #[error("`{program}` cannot be started: {source}")]
    Start {
        /// The program.
        program: String,
        /// What the system says.
        source: std::io::Error,
    },
    /// It took too long, and was stopped with all that it had started.
    #[error("`{program}` was stopped: it ran longer than {} s", limit.as_secs())]
    TooLong {
        /// The program.
        program: String,
        /// Its time.
        limit: Duration,
    },
    /// It says that it failed.
    #[error("`{program}` failed ({how}){said}")]
    Failed {
        /// The program.
        program: String,
        /// Its exit code or signal.
        how: String,
        /// The end of what it wrote to its error output, if anything, with a colon before.
        said: String,
    },
}

/// A way to tell somebody.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Outlet {
    /// A program with the notice on its standard input.
    Command(Command),
}

/// Tells a recipient once.
///
/// # Errors
/// It cannot be told now; [`retry_after`] says when to try again.
pub async fn deliver(outlet: &Outlet, notice: &str) -> Result<(), DeliveryError> {
    match outlet {
        Outlet::Command(command) => command.deliver(notice).await,
    }
}

/// How long to wait after so many attempts in vain (1 or more): 10 s, doubled each time, an hour at most.
pub fn retry_after(attempts: u32) -> Duration {
    const FIRST: Duration = Duration::from_secs(10);
    const LONGEST: Duration = Duration::from_hours(1);
    let doublings = attempts.saturating_sub(1).min(16);
    FIRST.saturating_mul(1 << doublings).min(LONGEST)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn attempts_become_rarer() {
        let seconds: Vec<u64> = [1, 2, 3, 9, 10, u32::MAX].map(|n| retry_after(n).as_secs()).to_vec();
        assert_eq!(seconds, [10, 20, 40, 2560, 3600, 3600]);
    }
}
