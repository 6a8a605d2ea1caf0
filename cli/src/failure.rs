//! Why a command could not do what it was asked, and with which exit code it ends.

use std::io::{ErrorKind, Write};
use std::process::ExitCode;

/// The call was wrong.
pub(crate) const WRONG_CALL: u8 = 2;
/// It could not be done.
pub(crate) const COULD_NOT: u8 = 3;

/// Why a command ends early.
#[derive(Debug)]
pub(crate) struct Failure {
    text: String,
    code: u8,
}

/// What a command ends with.
pub(crate) type Outcome = Result<ExitCode, Failure>;

impl Failure {
    /// The call was wrong: in a sentence, with what would be right.
    pub(crate) fn wrong_call(text: impl Into<String>) -> Self {
        Self { text: text.into(), code: WRONG_CALL }
    }

    /// It could not be done.
    pub(crate) fn could_not(text: impl Into<String>) -> Self {
        Self { text: text.into(), code: COULD_NOT }
    }

    /// What is told.
    #[cfg(test)]
    pub(crate) fn text(self) -> String {
        self.text
    }

    /// Tells it and gives the exit code. A reader that has seen enough (`| head`) is no failure at all.
    pub(crate) fn told(self) -> ExitCode {
        if !self.text.is_empty() {
            let _ = writeln!(anstream::stderr(), "hushwatch: {}", self.text);
        }
        ExitCode::from(self.code)
    }
}

impl From<std::io::Error> for Failure {
    fn from(error: std::io::Error) -> Self {
        if error.kind() == ErrorKind::BrokenPipe {
            return Self { text: String::new(), code: 0 };
        }
        Self::could_not(error.to_string())
    }
}

/// What the rooms below could not do.
macro_rules! could_not {
    ($($error:ty),*) => { $(impl From<$error> for Failure {
        fn from(error: $error) -> Self {
            Self::could_not(error.to_string())
        }
    })* };
}

could_not!(hushwatch_record::RecordError, hushwatch_control::ControlError, serde_json::Error);
