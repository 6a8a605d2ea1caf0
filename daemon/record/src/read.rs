//! Reading the record: for the companion by a connection of its own, for the service by the writer's.

use std::ops::ControlFlow;
use std::path::{Path, PathBuf};

use hushwatch_alarm::{Alarm, AlarmState, Transition};
use hushwatch_drift::{Block, ChartState, ReferenceKind, SeriesId, StateId};
use hushwatch_quantity::{Interval, Quality, Time, from_centi};
use rusqlite::types::Type;
use rusqlite::{Connection, OptionalExtension, Params, Row};

use crate::open;
use crate::write::content;
use crate::{
    CableId, EpochRow, GapRow, JournalRow, LevelRow, OutboxRow, RecordError, ReferenceRow, SeriesRow, SiteVersionRow,
};

/// A connection that only reads.
#[derive(Debug)]
pub struct Reader {
    db: Connection,
    path: PathBuf,
}

impl Reader {
    /// Opens a record for reading; nothing is changed, also not its format.
    ///
    /// # Errors
    /// There is none, a later version wrote it, it is no record, or it may not be read.
    pub fn open(path: &Path) -> Result<Self, RecordError> {
        Ok(Self { db: open::for_reading(path)?, path: path.to_owned() })
    }

    /// What the record holds.
    pub fn read(&self) -> Read<'_> {
        Read::new(&self.db, &self.path)
    }

    /// What the record holds at this moment: all that is asked sees the same commit, for as long as the closure runs.
    ///
    /// # Errors
    /// What the closure fails with, or the database.
    pub fn at_once<T>(&self, ask: impl FnOnce(Read<'_>) -> Result<T, RecordError>) -> Result<T, RecordError> {
        let wrong = open::database(&self.path);
        self.db.execute_batch("BEGIN").map_err(wrong)?;
        let answer = ask(self.read());
        self.db.execute_batch("COMMIT").map_err(wrong)?;
        answer
    }
}

/// Which levels, blocks or gaps are meant.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Filter {
    /// Of this cable only.
    pub cable: Option<String>,
    /// Of this band only.
    pub band: Option<String>,
    /// From this time on.
    pub from: Option<Time>,
    /// Up to, not including, this time.
    pub to: Option<Time>,
}

impl Filter {
    fn bounds(&self) -> (i64, i64) {
        (self.from.map_or(i64::MIN, Time::as_micros), self.to.map_or(i64::MAX, Time::as_micros))
    }
}

/// Questions that a record answers.
#[derive(Clone, Copy, Debug)]
pub struct Read<'a> {
    db: &'a Connection,
    path: &'a Path,
}

impl<'a> Read<'a> {
    pub(crate) fn new(db: &'a Connection, path: &'a Path) -> Self {
        Self { db, path }
    }

    /// All series that ever were.
    ///
    /// # Errors
    /// The database cannot be read. (As for all functions here.)
    pub fn series(self) -> Result<Vec<SeriesRow>, RecordError> {
        let sql = "SELECT e.id, c.tag, e.band, e.unit FROM series e JOIN cable c ON c.id = e.cable_id ORDER BY e.id";
        self.all(sql, [], |row| {
            Ok(SeriesRow { id: row.get(0)?, cable: row.get(1)?, band: row.get(2)?, unit: row.get(3)? })
        })
    }

    /// The names of all operating states that ever were, with their numbers.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn states(self) -> Result<Vec<(StateId, String)>, RecordError> {
        self.all("SELECT id, name FROM state ORDER BY id", [], |row| Ok((row.get(0)?, row.get(1)?)))
    }

    /// Hands out levels in the order in which they were recorded, until the closure breaks.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn levels(self, filter: &Filter, mut take: impl FnMut(LevelRow) -> ControlFlow<()>) -> Result<(), RecordError> {
        let (from, to) = filter.bounds();
        // The index of sweeps is by cable and time; without a cable the table itself is in the order of recording.
        let of_cable =
            if filter.cable.is_some() { "s.cable_id = (SELECT id FROM cable WHERE tag = ?3)" } else { "?3 IS NULL" };
        let order = if filter.cable.is_some() { "s.time_us, s.id" } else { "s.id" };
        let sql = format!(
            "SELECT s.time_us, l.series_id, s.state_id, l.level_cdb, l.peak_cdb, l.peak_hz, l.quality \
             FROM sweep s CROSS JOIN level l ON l.sweep_id = s.id \
             WHERE s.time_us >= ?1 AND s.time_us < ?2 AND {of_cable} \
               AND (?4 IS NULL OR l.series_id IN (SELECT id FROM series WHERE band = ?4)) \
             ORDER BY {order}"
        );
        let wrong = open::database(self.path);
        let mut statement = self.db.prepare_cached(&sql).map_err(wrong)?;
        let mut rows = statement.query((from, to, &filter.cable, &filter.band)).map_err(wrong)?;
        while let Some(row) = rows.next().map_err(wrong)? {
            if take(level(row).map_err(wrong)?).is_break() {
                break;
            }
        }
        Ok(())
    }

    /// The latest level of a series.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn latest_level(self, series: SeriesId) -> Result<Option<LevelRow>, RecordError> {
        self.one(
            "SELECT s.time_us, l.series_id, s.state_id, l.level_cdb, l.peak_cdb, l.peak_hz, l.quality \
             FROM sweep s CROSS JOIN level l ON l.sweep_id = s.id AND l.series_id = ?1 \
             WHERE s.cable_id = (SELECT cable_id FROM series WHERE id = ?1) ORDER BY s.time_us DESC LIMIT 1",
            [series],
            level,
        )
    }

    /// When a cable was swept last.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn latest_sweep(self, cable: CableId) -> Result<Option<Time>, RecordError> {
        let sql = "SELECT max(time_us) FROM sweep WHERE cable_id = ?1";
        Ok(self.one(sql, [cable], |row| row.get::<_, Option<i64>>(0))?.flatten().map(Time::from_micros))
    }

    /// The blocks of a series in an operating state that begin in an interval, oldest first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn blocks(self, series: SeriesId, state: StateId, interval: Interval) -> Result<Vec<Block>, RecordError> {
        self.all(
            "SELECT start_us, median_db, count, quality FROM block \
             WHERE series_id = ?1 AND state_id = ?2 AND start_us >= ?3 AND start_us < ?4 ORDER BY start_us",
            (series, state, interval.from.as_micros(), interval.to.as_micros()),
            block,
        )
    }

    /// The last blocks of a series in an operating state, oldest first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn recent_blocks(self, series: SeriesId, state: StateId, most: usize) -> Result<Vec<Block>, RecordError> {
        let mut blocks = self.all(
            "SELECT start_us, median_db, count, quality FROM block \
             WHERE series_id = ?1 AND state_id = ?2 ORDER BY start_us DESC LIMIT ?3",
            (series, state, i64::try_from(most).unwrap_or(i64::MAX)),
            block,
        )?;
        blocks.reverse();
        Ok(blocks)
    }

    /// In which operating states a series has blocks.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn states_of(self, series: SeriesId) -> Result<Vec<StateId>, RecordError> {
        // One step in the key for each state, instead of a walk over all blocks.
        self.all(
            "SELECT id FROM state st WHERE EXISTS (SELECT 1 FROM block WHERE series_id = ?1 AND state_id = st.id) ORDER BY id",
            [series],
            |row| row.get(0),
        )
    }

    /// The state of a chart after the last block that it has seen.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn chart(self, series: SeriesId, state: StateId) -> Result<Option<ChartState>, RecordError> {
        let sql = "SELECT json FROM chart WHERE series_id = ?1 AND state_id = ?2";
        let text: Option<String> = self.one(sql, (series, state), |row| row.get(0))?;
        text.map(|text| serde_json::from_str(&text).map_err(content("a chart"))).transpose()
    }

    /// All references, the earlier marked first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn references(self) -> Result<Vec<ReferenceRow>, RecordError> {
        self.all(
            "SELECT id, series_id, state_id, kind, from_us, to_us, marked_us, who, note, figure FROM reference ORDER BY id",
            [],
            |row| {
                let figure: String = row.get(9)?;
                Ok(ReferenceRow {
                    id: row.get(0)?,
                    series: row.get(1)?,
                    state: row.get(2)?,
                    kind: word(row, 3, ReferenceKind::from_label)?,
                    interval: Interval::new(time(row, 4)?, time(row, 5)?),
                    marked: time(row, 6)?,
                    who: row.get(7)?,
                    note: row.get(8)?,
                    figure: serde_json::from_str(&figure).map_err(|error| strange(9, error))?,
                })
            },
        )
    }

    /// From when on the levels of each cable are comparable, the earlier first: of a cable the last one counts.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn epochs(self) -> Result<Vec<EpochRow>, RecordError> {
        let sql = "SELECT c.tag, e.time_us, e.reason FROM epoch e JOIN cable c ON c.id = e.cable_id ORDER BY e.id";
        self.all(sql, [], |row| Ok(EpochRow { cable: row.get(0)?, time: time(row, 1)?, reason: row.get(2)? }))
    }

    /// The gaps that touch an interval, the earlier first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn gaps(self, filter: &Filter) -> Result<Vec<GapRow>, RecordError> {
        let (from, to) = filter.bounds();
        self.all(
            "SELECT g.id, c.tag, g.from_us, g.to_us, g.reason FROM gap g JOIN cable c ON c.id = g.cable_id \
             WHERE (g.to_us IS NULL OR g.to_us > ?1) AND g.from_us < ?2 AND (?3 IS NULL OR c.tag = ?3) \
             ORDER BY g.from_us, g.id",
            (from, to, &filter.cable),
            gap,
        )
    }

    /// The gaps that are not over.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn open_gaps(self) -> Result<Vec<GapRow>, RecordError> {
        self.all(
            "SELECT g.id, c.tag, g.from_us, g.to_us, g.reason FROM gap g JOIN cable c ON c.id = g.cable_id \
             WHERE g.to_us IS NULL ORDER BY g.id",
            [],
            gap,
        )
    }

    /// Alarms, the earlier first; only those that are not normal if `open`.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn alarms(self, open: bool) -> Result<Vec<Alarm>, RecordError> {
        let sql = if open {
            "SELECT json, state FROM alarm WHERE state <> 'normal' ORDER BY occurrence"
        } else {
            "SELECT json, state FROM alarm ORDER BY occurrence"
        };
        let rows: Vec<(String, AlarmState)> =
            self.all(sql, [], |row| Ok((row.get(0)?, word(row, 1, AlarmState::from_label)?)))?;
        rows.iter()
            .map(|(text, state)| {
                let alarm: Alarm = serde_json::from_str(text).map_err(content("an alarm"))?;
                // An occurrence whose place a later one took is over, though nobody acknowledged it.
                Ok(Alarm { state: *state, ..alarm })
            })
            .collect()
    }

    /// The greatest number that an alarm ever got; 0 if there was none.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn last_occurrence(self) -> Result<u64, RecordError> {
        let sql = "SELECT coalesce(max(occurrence), 0) FROM alarm";
        Ok(self.one(sql, [], |row| row.get::<_, i64>(0))?.unwrap_or(0).unsigned_abs())
    }

    /// The alarm journal, the earlier first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn journal(self) -> Result<Vec<JournalRow>, RecordError> {
        self.all(
            "SELECT v.time_us, v.occurrence, a.kind, a.subject, v.transition, v.text, v.who, v.note, v.cause \
             FROM alarm_event v JOIN alarm a ON a.occurrence = v.occurrence ORDER BY v.id",
            [],
            |row| {
                Ok(JournalRow {
                    time: time(row, 0)?,
                    occurrence: row.get::<_, i64>(1)?.unsigned_abs(),
                    kind: row.get(2)?,
                    subject: row.get(3)?,
                    transition: word(row, 4, Transition::from_label)?,
                    text: row.get(5)?,
                    who: row.get(6)?,
                    note: row.get(7)?,
                    cause: row.get(8)?,
                })
            },
        )
    }

    /// What is still to be told to recipients, the earlier first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn to_tell(self) -> Result<Vec<OutboxRow>, RecordError> {
        self.all(
            "SELECT id, recipient, key, body, attempts FROM outbox WHERE delivered_us IS NULL ORDER BY id",
            [],
            |row| {
                Ok(OutboxRow {
                    id: row.get(0)?,
                    recipient: row.get(1)?,
                    key: row.get(2)?,
                    body: row.get(3)?,
                    attempts: row.get(4)?,
                })
            },
        )
    }

    /// Something small that was to be known at the next start.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn remembered(self, key: &str) -> Result<Option<String>, RecordError> {
        self.one("SELECT value FROM meta WHERE key = ?1", [key], |row| row.get(0))
    }

    /// The versions of the site file, the earlier first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn site_versions(self) -> Result<Vec<SiteVersionRow>, RecordError> {
        self.all("SELECT id, time_us, text FROM site_version ORDER BY id", [], |row| {
            Ok(SiteVersionRow { id: row.get(0)?, time: time(row, 1)?, text: row.get(2)? })
        })
    }

    /// Size of the database, bytes, without its log.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn size(self) -> Result<u64, RecordError> {
        let sql = "SELECT page_count * page_size FROM pragma_page_count(), pragma_page_size()";
        Ok(self.one(sql, [], |row| row.get::<_, i64>(0))?.unwrap_or(0).unsigned_abs())
    }

    fn all<T>(
        self,
        sql: &str,
        values: impl Params,
        row: impl FnMut(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Vec<T>, RecordError> {
        let wrong = open::database(self.path);
        let mut statement = self.db.prepare_cached(sql).map_err(wrong)?;
        let rows = statement.query_map(values, row).map_err(wrong)?;
        rows.collect::<rusqlite::Result<_>>().map_err(wrong)
    }

    fn one<T>(
        self,
        sql: &str,
        values: impl Params,
        row: impl FnOnce(&Row<'_>) -> rusqlite::Result<T>,
    ) -> Result<Option<T>, RecordError> {
        let wrong = open::database(self.path);
        self.db.prepare_cached(sql).and_then(|mut statement| statement.query_row(values, row).optional()).map_err(wrong)
    }
}

fn strange(column: usize, error: impl std::error::Error + Send + Sync + 'static) -> rusqlite::Error {
    rusqlite::Error::FromSqlConversionFailure(column, Type::Text, Box::new(error))
}

fn time(row: &Row<'_>, column: usize) -> rusqlite::Result<Time> {
    row.get(column).map(Time::from_micros)
}

fn quality(row: &Row<'_>, column: usize) -> rusqlite::Result<Quality> {
    let code = row.get(column)?;
    Quality::from_code(code).ok_or(rusqlite::Error::IntegralValueOutOfRange(column, code))
}

fn word<T>(row: &Row<'_>, column: usize, from_label: impl FnOnce(&str) -> Option<T>) -> rusqlite::Result<T> {
    let label: String = row.get(column)?;
    let unknown = || strange(column, std::io::Error::other(format!("`{label}` is none of its words")));
    from_label(&label).ok_or_else(unknown)
}

fn level(row: &Row<'_>) -> rusqlite::Result<LevelRow> {
    Ok(LevelRow {
        time: time(row, 0)?,
        series: row.get(1)?,
        state: row.get(2)?,
        level_db: from_centi(row.get(3)?),
        peak_db: from_centi(row.get(4)?),
        peak_hz: row.get::<_, i64>(5)? as f64,
        quality: quality(row, 6)?,
    })
}

fn block(row: &Row<'_>) -> rusqlite::Result<Block> {
    Ok(Block { start: time(row, 0)?, median_db: row.get(1)?, count: row.get(2)?, worst: quality(row, 3)? })
}

fn gap(row: &Row<'_>) -> rusqlite::Result<GapRow> {
    let to: Option<i64> = row.get(3)?;
    Ok(GapRow {
        id: row.get(0)?,
        cable: row.get(1)?,
        from: time(row, 2)?,
        to: to.map(Time::from_micros),
        reason: row.get(4)?,
    })
}
