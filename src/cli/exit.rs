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

/// A command's failure: the exit code it maps to, the chain of causes to print, and what to do if they do not say.
#[derive(Debug)]
pub(super) struct Failure {
    exit: Exit,
    error: anyhow::Error,
    remedy: Option<String>,
}

impl Failure {
    pub(super) fn new(exit: Exit, error: impl Into<anyhow::Error>) -> Failure {
        Failure { exit, error: error.into(), remedy: None }
    }

    pub(super) fn with_remedy(self, remedy: impl Into<String>) -> Failure {
        Failure { remedy: Some(remedy.into()), ..self }
    }
}

/// Attaches an exit code to an error.
pub(super) trait OrExit<T> {
    fn or_exit(self, exit: Exit) -> Result<T, Failure>;
}

impl<T, E: Into<anyhow::Error>> OrExit<T> for Result<T, E> {
    fn or_exit(self, exit: Exit) -> Result<T, Failure> {
        self.map_err(|error| Failure::new(exit, error))
    }
}

/// Prints a failure to standard error and gives the exit code.
pub(super) fn report(outcome: Result<Exit, Failure>) -> ExitCode {
    match outcome {
        Ok(exit) => exit.into(),
        // Whoever read our output has seen enough: not an error of ours.
        Err(failure) if is_broken_pipe(&failure.error) => Exit::Well.into(),
        Err(failure) => {
            let mut text = format!("outwait: {}\n", chain(&failure.error));
            if let Some(remedy) = &failure.remedy {
                text += &format!("  {remedy}\n");
            }
            let _ = io::stderr().write_all(text.as_bytes());
            failure.exit.into()
        }
    }
}

/// The causes, outermost first; one that the text before it tells already is not told again.
fn chain(error: &anyhow::Error) -> String {
    let mut text = String::new();
    for cause in error.chain().map(ToString::to_string).filter(|cause| !cause.is_empty()) {
        if text.is_empty() {
            text = cause;
        } else if !text.contains(&cause) {
            text = text + ": " + &cause;
        }
    }
    text
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
    printed(out.write_all(text.as_bytes()).and_then(|()| out.flush()))
}

/// What became of writing to standard output.
pub(super) fn printed(outcome: io::Result<()>) -> Result<(), Failure> {
    outcome.map_err(|error| {
        Failure::new(Exit::System, anyhow::Error::new(error).context("cannot write to standard output"))
            .with_remedy("send it where there is room and where you may write")
    })
}
