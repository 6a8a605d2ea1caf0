//! Opening the database file: who may, is it ours, is it of a version that we know.

use std::fmt::Write as _;
use std::fs::{File, OpenOptions};
use std::io::Read as _;
use std::path::{Path, PathBuf};

use hushwatch_quantity::Quality;
use rusqlite::{Connection, OpenFlags};

use crate::RecordError;

/// The migrations: number n takes a database from format n to n + 1.
const MIGRATIONS: &[&str] = &[include_str!("../schema/1.sql")];

/// Marks the file as ours ("Hush").
const APPLICATION_ID: i32 = 0x4875_7368;

/// The format of this version.
pub(crate) const FORMAT: i32 = MIGRATIONS.len() as i32;

/// The greatest number of prepared statements that are kept.
const STATEMENTS: usize = 64;

pub(crate) fn database(path: &Path) -> impl Fn(rusqlite::Error) -> RecordError + Copy {
    move |source| RecordError::Database { path: path.to_owned(), source }
}

/// Opens for writing; makes the file if there is none. The lock is held as long as the file lives.
pub(crate) fn for_writing(path: &Path) -> Result<(Connection, File), RecordError> {
    let lock = lock(path)?;
    check_header(path)?;
    let wrong = database(path);
    let mut db = Connection::open(path).map_err(wrong)?;
    // A log that was not checkpointed may hold a newer format than the file's own header.
    check_format(path, &db)?;
    db.pragma_update(None, "journal_mode", "wal").map_err(wrong)?;
    db.pragma_update(None, "synchronous", "full").map_err(wrong)?;
    db.pragma_update(None, "foreign_keys", true).map_err(wrong)?;
    db.set_prepared_statement_cache_capacity(STATEMENTS);
    migrate(&mut db).map_err(wrong)?;
    Ok((db, lock))
}

/// Opens for reading. The file of a service that has stopped in order has no log beside it, and whoever may not write the
/// folder cannot make one: then the file is read as one that nobody changes.
pub(crate) fn for_reading(path: &Path) -> Result<Connection, RecordError> {
    if !path.exists() {
        return Err(RecordError::Missing(path.to_owned()));
    }
    check_header(path)?;
    let wrong = database(path);
    let flags = OpenFlags::SQLITE_OPEN_READ_ONLY | OpenFlags::SQLITE_OPEN_NO_MUTEX | OpenFlags::SQLITE_OPEN_URI;
    let open = |name: &Path| -> rusqlite::Result<Connection> {
        let db = Connection::open_with_flags(name, flags)?;
        db.busy_timeout(std::time::Duration::from_secs(5))?;
        db.query_row("SELECT count(*) FROM sqlite_schema", [], |row| row.get::<_, i64>(0))?;
        Ok(db)
    };
    let db = match open(path) {
        Ok(db) => db,
        Err(error) if !log_of(path).exists() => open(&unchanging(path)).map_err(|_| wrong(error))?,
        Err(error) => return Err(wrong(error)),
    };
    check_format(path, &db)?;
    db.set_prepared_statement_cache_capacity(STATEMENTS);
    Ok(db)
}

fn log_of(path: &Path) -> PathBuf {
    let mut name = path.as_os_str().to_owned();
    name.push("-wal");
    PathBuf::from(name)
}

/// The address by which SQLite takes a file for one that nobody changes (its URI form, percent-encoded).
fn unchanging(path: &Path) -> PathBuf {
    let mut address = String::from("file:");
    for byte in path.as_os_str().as_encoded_bytes() {
        match byte {
            b'a'..=b'z' | b'A'..=b'Z' | b'0'..=b'9' | b'/' | b'-' | b'_' | b'.' => address.push(char::from(*byte)),
            other => {
                let _ = write!(address, "%{other:02X}");
            }
        }
    }
    address.push_str("?immutable=1");
    PathBuf::from(address)
}

/// An advisory lock on a file beside the record: SQLite's own locks come and go with each transaction.
fn lock(path: &Path) -> Result<File, RecordError> {
    let mut name = path.as_os_str().to_owned();
    name.push(".lock");
    let name = PathBuf::from(name);
    let wrong = |source| RecordError::File { path: name.clone(), source };
    if let Some(folder) = path.parent().filter(|folder| !folder.as_os_str().is_empty()) {
        std::fs::create_dir_all(folder).map_err(|source| RecordError::File { path: folder.to_owned(), source })?;
    }
    let file = OpenOptions::new().create(true).truncate(false).write(true).open(&name).map_err(wrong)?;
    match file.try_lock() {
        Ok(()) => Ok(file),
        Err(std::fs::TryLockError::WouldBlock) => Err(RecordError::Owned(path.to_owned())),
        Err(std::fs::TryLockError::Error(source)) => Err(wrong(source)),
    }
}

/// Looks at the file's first bytes without SQLite, which would make a log beside it: what is not ours stays untouched.
/// (SQLite's file format, 1.3: the magic text, the user version at 60 and the application at 68, big-endian.)
fn check_header(path: &Path) -> Result<(), RecordError> {
    let mut header = [0; 72];
    let wrong = |source| RecordError::File { path: path.to_owned(), source };
    let foreign = |what| Err(RecordError::Foreign { path: path.to_owned(), what });
    let mut file = match File::open(path) {
        Ok(file) => file,
        Err(error) if error.kind() == std::io::ErrorKind::NotFound => return Ok(()),
        Err(error) => return Err(wrong(error)),
    };
    match file.metadata().map_err(wrong)?.len() {
        // SQLite leaves an empty file when it is stopped before its first commit.
        0 => return Ok(()),
        1..72 => return foreign("it is no SQLite database"),
        _ => file.read_exact(&mut header).map_err(wrong)?,
    }
    let number = |at: usize| i32::from_be_bytes([header[at], header[at + 1], header[at + 2], header[at + 3]]);
    if !header.starts_with(b"SQLite format 3\0") {
        return foreign("it is no SQLite database");
    }
    let (format, application) = (number(60), number(68));
    // Before its first checkpoint a database in WAL mode has an empty header.
    if application != APPLICATION_ID && (application, format) != (0, 0) {
        return foreign("it is an SQLite database of another program");
    }
    newer(path, format)
}

fn check_format(path: &Path, db: &Connection) -> Result<(), RecordError> {
    let format: i32 = db.pragma_query_value(None, "user_version", |row| row.get(0)).map_err(database(path))?;
    let application: i32 = db.pragma_query_value(None, "application_id", |row| row.get(0)).map_err(database(path))?;
    let tables: i64 =
        db.query_row("SELECT count(*) FROM sqlite_schema", [], |row| row.get(0)).map_err(database(path))?;
    if application != APPLICATION_ID && tables > 0 {
        return Err(RecordError::Foreign {
            path: path.to_owned(),
            what: "it is an SQLite database of another program",
        });
    }
    newer(path, format)
}

fn newer(path: &Path, found: i32) -> Result<(), RecordError> {
    if found > FORMAT {
        return Err(RecordError::Newer { path: path.to_owned(), found, known: FORMAT });
    }
    Ok(())
}

fn migrate(db: &mut Connection) -> rusqlite::Result<()> {
    let format: i32 = db.pragma_query_value(None, "user_version", |row| row.get(0))?;
    let done = usize::try_from(format).unwrap_or(0);
    for (number, script) in MIGRATIONS.iter().enumerate().skip(done) {
        let transaction = db.transaction()?;
        transaction.execute_batch(script)?;
        transaction.pragma_update(None, "user_version", number as i32 + 1)?;
        transaction.pragma_update(None, "application_id", APPLICATION_ID)?;
        transaction.commit()?;
    }
    let transaction = db.transaction()?;
    for quality in qualities() {
        transaction.execute(
            "INSERT INTO quality (code, text) VALUES (?1, ?2) ON CONFLICT (code) DO NOTHING",
            (quality.code(), quality.to_string()),
        )?;
    }
    transaction.commit()
}

/// All qualities that there can be.
fn qualities() -> impl Iterator<Item = Quality> {
    (0..300).filter_map(Quality::from_code)
}
