//! The table of how far followed files were read.

use std::collections::BTreeMap;

use rusqlite::{Connection, OptionalExtension, Result, params};

use crate::ledger::{Digest, Position};

/// Writes positions within the transaction that holds what was counted up to them.
pub(super) fn write(db: &Connection, positions: &BTreeMap<&str, Position>) -> Result<()> {
    if positions.is_empty() {
        return Ok(());
    }
    let mut insert = db.prepare_cached("INSERT OR REPLACE INTO positions VALUES (?1, ?2, ?3, ?4, ?5, ?6)")?;
    for (name, Position { file: (device, file), offset, lines, before }) in positions {
        // The store has no unsigned numbers; the bits are kept.
        insert.execute(params![
            name,
            device.cast_signed(),
            file.cast_signed(),
            offset.cast_signed(),
            lines.cast_signed(),
            before.0
        ])?;
    }
    Ok(())
}

/// The position under a name; `None` too in a ledger that was never written since there are positions.
pub(super) fn read(db: &Connection, name: &str) -> Result<Option<Position>> {
    let there = db
        .prepare_cached("SELECT 1 FROM sqlite_schema WHERE type = 'table' AND name = 'positions'")?
        .exists([])?;
    if !there {
        return Ok(None);
    }
    let number = |row: &rusqlite::Row<'_>, i| row.get::<_, i64>(i).map(i64::cast_unsigned);
    db.prepare_cached("SELECT device, file, offset, lines, before FROM positions WHERE name = ?1")?
        .query_row([name], |row| {
            Ok(Position {
                file: (number(row, 0)?, number(row, 1)?),
                offset: number(row, 2)?,
                lines: number(row, 3)?,
                before: Digest(row.get(4)?),
            })
        })
        .optional()
}
