//! The record as another program sees it: SQLite and nothing else.

use std::path::Path;

use rusqlite::types::ValueRef;
use rusqlite::{Connection, OpenFlags};

/// The answer to a question: a line for each row, `|` between the columns.
///
/// # Errors
/// The file cannot be read, or what is asked for is not there.
pub fn query(path: &Path, sql: &str) -> rusqlite::Result<String> {
    let db = Connection::open_with_flags(path, OpenFlags::SQLITE_OPEN_READ_ONLY)?;
    db.busy_timeout(std::time::Duration::from_secs(5))?;
    let mut statement = db.prepare(sql)?;
    let columns = statement.column_count();
    let mut rows = statement.query([])?;
    let mut text = String::new();
    while let Some(row) = rows.next()? {
        let cells: Vec<String> =
            (0..columns).map(|column| row.get_ref(column).map(written)).collect::<Result<_, _>>()?;
        text.push_str(&cells.join("|"));
        text.push('\n');
    }
    Ok(text)
}

fn written(value: ValueRef<'_>) -> String {
    match value {
        ValueRef::Null => String::new(),
        ValueRef::Integer(number) => number.to_string(),
        ValueRef::Real(number) => number.to_string(),
        ValueRef::Text(text) | ValueRef::Blob(text) => String::from_utf8_lossy(text).into_owned(),
    }
}
