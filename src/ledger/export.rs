//! A ledger as records that every command of this program reads again.

use std::io::{self, Write};

use super::{Damage, Hour, LedgerError, Reader};
use crate::wait::{Age, Wait};

/// What an export wrote.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Exported {
    /// Lines.
    pub lines: u64,
    /// Waits that they stand for.
    pub waits: u64,
    /// Open waits among the lines.
    pub open: u64,
    /// What is broken and therefore missing.
    pub damage: Vec<Damage>,
}

/// Why an export ended early.
#[derive(Debug, thiserror::Error)]
pub enum ExportError {
    /// The ledger could not be read.
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    /// The target could not be written.
    #[error("writing the export: {0}")]
    Write(#[from] io::Error),
}

/// Writes all that a ledger holds as NDJSON: for each stream and period waits that count up to an equal tally, then
/// the starts of waits that are open. Keys and counts of bad lines are not part of it.
///
/// # Errors
/// [`ExportError`]; damage to single tallies is no error.
pub fn export(reader: &dyn Reader, out: &mut dyn Write) -> Result<Exported, ExportError> {
    let mut exported = Exported::default();
    for stream in reader.streams()? {
        let mut written = Ok(());
        let damage = reader.visit(&stream, Hour(i32::MIN)..Hour(i32::MAX), &mut |_, tally| {
            for wait in tally.waits() {
                if written.is_ok() {
                    written = write_wait(out, &stream, &wait);
                    exported.lines += 1;
                    exported.waits = exported.waits.saturating_add(wait.count());
                }
            }
        })?;
        written?;
        exported.damage.extend(damage);
    }
    for open in reader.open_waits(None, usize::MAX)? {
        let id = serde_json::to_string(&open.id).map_err(io::Error::from)?;
        write!(out, r#"{{"stream":"{}","id":{id},"started":{}"#, open.stream, open.started)?;
        write_rest(out, open.attempt, open.entered, 1)?;
        (exported.lines, exported.open) = (exported.lines + 1, exported.open + 1);
    }
    Ok(exported)
}

// A stream's name holds nothing that a string would have to escape, and Rust writes a number in the fewest figures
// that read back to it.
fn write_wait(out: &mut dyn Write, stream: &str, wait: &Wait) -> io::Result<()> {
    write!(out, r#"{{"stream":"{stream}""#)?;
    if let Some(at) = wait.at() {
        write!(out, r#","at":{at}"#)?;
    }
    match wait.age() {
        Age::Exact(elapsed) => write!(out, r#","elapsed":{elapsed}"#)?,
        Age::Between { over, upto } if upto.is_finite() => write!(out, r#","over":{over},"upto":{upto}"#)?,
        Age::Between { over, .. } => write!(out, r#","over":{over},"upto":"inf""#)?,
    }
    write!(out, r#","ending":"{}""#, wait.ending().name())?;
    write_rest(out, wait.attempt(), wait.entered(), wait.count())
}

fn write_rest(out: &mut dyn Write, attempt: u32, entered: f64, count: u64) -> io::Result<()> {
    if attempt != 1 {
        write!(out, r#","attempt":{attempt}"#)?;
    }
    if entered != 0.0 {
        write!(out, r#","entered":{entered}"#)?;
    }
    if count != 1 {
        write!(out, r#","count":{count}"#)?;
    }
    out.write_all(b"}\n")
}
