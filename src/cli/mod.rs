//! The command line: arguments, progress, printing. A file a command.

mod basis;
mod demo;
mod exit;
mod export;
mod files;
mod gate;
mod layout;
mod ledger;
mod options;
mod pictures;
mod reading;
mod replay;
mod serve;
mod settle;
mod text;
mod vet;
mod weekly;
mod weigh;

use std::ffi::OsString;
use std::process::ExitCode;

use clap::{Parser, Subcommand};

pub use exit::Exit;

/// Finds how long to wait before giving up, from completion times that are partly cut off by a timeout.
#[derive(Debug, Parser)]
#[command(name = "outwait", version, max_term_width = 100, after_help = EXIT_CODES)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

const EXIT_CODES: &str = "Exit codes: 0 well, 1 the gate is shut, 2 wrong usage, 3 bad input, \
4 not enough evidence anywhere, 5 the system failed.";

#[derive(Debug, Subcommand)]
enum Command {
    /// Weigh waits: for each stream, how long to wait before giving up, and why
    Weigh(weigh::Weigh),
    /// Replay rival rules on later waits than they learnt from
    Replay(replay::Replay),
    /// Read a policy and say what it means for each stream, or what is wrong with it
    Vet(vet::Vet),
    /// Decide on what is proposed: accept, pin, postpone, refuse, undo
    Settle(settle::Settle),
    /// Write settled times in the form that another system reads
    Export(export::ExportArguments),
    /// Shut the gate of a build where a time in force costs more than its slack
    Gate(gate::GateArguments),
    /// Say what to keep, raise or lower this week, ready to be signed
    Weekly(weekly::WeeklyArguments),
    /// Run the daemon: waits in over HTTP, advice and metrics out
    Serve(serve::Serve),
    /// Show, check, back up or export the daemon's data
    Ledger(ledger::Ledger),
    /// Write the demo scenario (waits, policy, what to expect) into a folder
    Demo(demo::Demo),
}

/// Parses the arguments, runs the command, prints its errors on standard error, and maps the outcome to an exit code.
pub fn run(arguments: impl IntoIterator<Item = OsString>) -> ExitCode {
    let parsed = match Arguments::try_parse_from(arguments) {
        Ok(parsed) => parsed,
        Err(error) => {
            let printed = error.print();
            if error.use_stderr() {
                return Exit::Usage.into();
            }
            // Help and version go to standard output and are no error; a closed pipe there is none either.
            return exit::report(exit::printed(printed).map(|()| Exit::Well));
        }
    };
    let outcome = match parsed.command {
        Command::Weigh(weigh) => weigh.run(),
        Command::Replay(replay) => replay.run(),
        Command::Vet(vet) => vet.run(),
        Command::Settle(settle) => settle.run(),
        Command::Export(export) => export.run(),
        Command::Gate(gate) => gate.run(),
        Command::Weekly(weekly) => weekly.run(),
        Command::Serve(serve) => serve.run(),
        Command::Ledger(ledger) => ledger.run(),
        Command::Demo(demo) => demo.run(),
    };
    exit::report(outcome)
}
