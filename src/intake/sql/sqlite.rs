//! A SQLite file, opened for reading.

use std::path::Path;

use rusqlite::types::ValueRef;
use rusqlite::{Connection, Error, OpenFlags};

use super::{QueryError, Rows, Table, Told, hand_over};

/// How long to wait for a writer that is at work.
const PATIENCE: std::time::Duration = std::time::Duration::from_secs(10);

/// Asks, and hands over what comes.
pub(super) fn ask(path: &Path, query: &str, rows: &Rows) -> Result<(), QueryError> {
    let reach = |error: Error| QueryError::Reach { reason: error.to_string() };
    let refused = |error: Error| QueryError::Refused { reason: error.to_string() };
    let broke_off = |error: Error| QueryError::BrokeOff { reason: error.to_string() };
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX;
    let db = Connection::open_with_flags(path, flags).map_err(reach)?;
    db.busy_timeout(PATIENCE).map_err(reach)?;
    // Nothing that a schema of others holds is run, and nothing is written even where the file would let us.
    db.execute_batch("PRAGMA trusted_schema = OFF; PRAGMA query_only = ON; PRAGMA cell_size_check = ON;")
        .map_err(reach)?;
    let mut statement = db.prepare(query).map_err(refused)?;
    let columns: Vec<String> = statement.column_names().map(String::from).collect();
    let width = columns.len();
    if width == 0 || !statement.readonly() {
        return Err(QueryError::Refused { reason: "it must be a SELECT, and change nothing".into() });
    }
    let mut found = statement.query([]).map_err(refused)?;
    if rows.send(Ok(Told::Columns(columns))).is_err() {
        return Ok(());
    }
    let mut table = Table::new(width);
    while let Some(row) = found.next().map_err(broke_off)? {
        for column in 0..width {
            match row.get_ref(column).map_err(broke_off)? {
                ValueRef::Null => table.nothing(),
                ValueRef::Integer(number) => table.whole(number),
                ValueRef::Real(number) => table.number(number),
                ValueRef::Text(text) | ValueRef::Blob(text) => table.text(&String::from_utf8_lossy(text)),
            }
        }
        if table.is_full() && !hand_over(rows, std::mem::replace(&mut table, Table::new(width))) {
            return Ok(());
        }
    }
    if !table.is_empty() {
        hand_over(rows, table);
    }
    Ok(())
}
