//! Exit codes, and how an error is told.

use std::io::{self, Write};
use std::process::ExitCode;

/// How a command ended; the number is the process's exit code (INTERFACE: commands).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Exit {
    /// 0: well.
    Well,
    /// 1: the gate is shut.
    Shut,
    /// 2: wrong usage.
    Usage,
    /// 3: bad input.
    BadInput,
    /// 4: not enough evidence anywhere.
    NoEvidence,
    /// 5: the system failed.
    System,
}

impl From<Exit> for ExitCode {
    fn from(exit: Exit) -> ExitCode {
        ExitCode::from(match exit {
            Exit::Well => 0,
            Exit::Shut => 1,
            Exit::Usage => 2,
            Exit::BadInput => 3,
            Exit::NoEvidence => 4,
            Exit::System => 5,
        })
    }
}

/// A command's failure: the exit code it maps to, and the chain of causes to print.
#[derive(Debug)]
pub(super) struct Failure {
    pub(super) exit: Exit,
    pub(super) error: anyhow::Error,
}

/// Attaches an exit code to an error.
pub(super) trait OrExit<T> {
    fn or_exit(self, exit: Exit) -> Result<T, Failure>;
}

impl<T, E: Into<anyhow::Error>> OrExit<T> for Result<T, E> {
    fn or_exit(self, exit: Exit) -> Result<T, Failure> {
        self.map_err(|error| Failure { exit, error: error.into() })
    }
}

/// Prints a failure to standard error and gives the exit code.
pub(super) fn report(outcome: Result<Exit, Failure>) -> ExitCode {
    match outcome {
        Ok(exit) => exit.into(),
        // Whoever read our output has seen enough: not an error of ours.
        Err(failure) if is_broken_pipe(&failure.error) => Exit::Well.into(),
        Err(failure) => {
            let _ = writeln!(io::stderr(), "outwait: {:#}", failure.error);
            failure.exit.into()
        }
    }
}

fn is_broken_pipe(error: &anyhow::Error) -> bool {
    error
        .chain()
        .filter_map(|cause| cause.downcast_ref::<io::Error>())
        .any(|e| e.kind() == io::ErrorKind::BrokenPipe)
}

/// Writes a command's output to standard output, whole.
pub(super) fn print(text: &str) -> Result<(), Failure> {
    let mut out = io::stdout().lock();
    out.write_all(text.as_bytes())
        .and_then(|()| out.flush())
        .map_err(|e| anyhow::Error::new(e).context("cannot write to standard output"))
        .or_exit(Exit::System)
}
