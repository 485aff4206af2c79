//! The codes the program ends with, and what stops a verb.

use std::fmt;
use std::process::ExitCode;

use crate::config::ConfigError;

/// How the program ends.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
#[repr(u8)]
pub enum Exit {
    /// Done.
    Done = 0,
    /// Done, and what was asked for does not hold.
    DoesNotHold = 1,
    /// The command or the site file is wrong.
    Wrong = 2,
    /// The input or the store cannot be used.
    Unusable = 3,
    /// Interrupted.
    Interrupted = 4,
    /// A panic in `run`.
    Panic = 70,
}

impl Exit {
    /// The code.
    #[must_use]
    pub fn code(self) -> u8 {
        self as u8
    }
}

impl From<Exit> for ExitCode {
    fn from(exit: Exit) -> Self {
        Self::from(exit.code())
    }
}

/// What stopped a verb: how the program ends, and the words for standard error.
#[derive(Debug)]
pub struct Failure {
    exit: Exit,
    error: anyhow::Error,
}

impl Failure {
    /// The command or the site file is wrong.
    pub fn wrong(error: impl Into<anyhow::Error>) -> Self {
        Self {
            exit: Exit::Wrong,
            error: error.into(),
        }
    }

    /// The input or the store cannot be used.
    pub fn unusable(error: impl Into<anyhow::Error>) -> Self {
        Self {
            exit: Exit::Unusable,
            error: error.into(),
        }
    }

    /// How the program ends.
    #[must_use]
    pub fn exit(&self) -> Exit {
        self.exit
    }
}

impl fmt::Display for Failure {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        // With all its causes, on one line.
        write!(f, "{:#}", self.error)
    }
}

impl From<ConfigError> for Failure {
    fn from(error: ConfigError) -> Self {
        Self::wrong(error)
    }
}
