//! The writer: everything that goes into the record goes through here.

use std::collections::HashMap;
use std::fs::File;
use std::path::{Path, PathBuf};

use hushwatch_alarm::{Action, AlarmState};
use hushwatch_drift::{Block, ChartState, SeriesId, StateId};
use hushwatch_quantity::{LevelUnit, Time, to_centi};
use rusqlite::{Connection, OptionalExtension, params};
use sha2::{Digest, Sha256};

use crate::open;
use crate::{CableId, NewReference, NewSweep, Read, RecordError, SettingId};

/// The one writer of a record. It holds a lock that keeps a second one away, also in another process.
#[derive(Debug)]
pub struct Writer {
    db: Connection,
    path: PathBuf,
    cables: HashMap<String, CableId>,
    series: HashMap<(CableId, String, LevelUnit), SeriesId>,
    states: HashMap<String, StateId>,
    settings: HashMap<(String, String), SettingId>,
    site_version: Option<i64>,
    _lock: File,
}

impl Writer {
    /// Opens the record, makes it if there is none, and brings an older one to the present format.
    ///
    /// # Errors
    /// Another process writes it, a later version wrote it, it is no record, or the file cannot be written.
    pub fn open(path: &Path) -> Result<Self, RecordError> {
        let (db, lock) = open::for_writing(path)?;
        Ok(Self {
            db,
            path: path.to_owned(),
            cables: HashMap::new(),
            series: HashMap::new(),
            states: HashMap::new(),
            settings: HashMap::new(),
            site_version: None,
            _lock: lock,
        })
    }

    /// What the record holds, with all that was written so far.
    pub fn read(&self) -> Read<'_> {
        Read::new(&self.db, &self.path)
    }

    /// Is there something that was written, but not committed?
    pub fn is_dirty(&self) -> bool {
        !self.db.is_autocommit()
    }

    /// Puts on the disk what was written since the last commit: all of it or, on failure, nothing of it.
    ///
    /// # Errors
    /// The disk is full, or otherwise refuses. What was gathered is kept and can be committed later.
    pub fn commit(&mut self) -> Result<(), RecordError> {
        if self.is_dirty() {
            self.db.execute_batch("COMMIT").map_err(open::database(&self.path))?;
        }
        Ok(())
    }

    /// Commits, and brings everything from the log beside the file into the file itself, as far as no reader is in the
    /// way: whoever copies the file alone after an orderly stop has it all.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn close(mut self) -> Result<(), RecordError> {
        self.commit()?;
        let wrong = open::database(&self.path);
        self.db.query_row("PRAGMA wal_checkpoint(TRUNCATE)", [], |_| Ok(())).map_err(wrong)
    }

    /// Keeps the site file, if it is another one than the latest. Its number is laid to all settings from now on.
    ///
    /// # Errors
    /// The database cannot be written. (As for all functions here.)
    pub fn site_version(&mut self, time: Time, path: &Path, text: &str) -> Result<bool, RecordError> {
        self.begin()?;
        let sha256 = hexadecimal(&Sha256::digest(text.as_bytes()));
        let wrong = open::database(&self.path);
        let latest: Option<(i64, String)> = self
            .db
            .query_row("SELECT id, sha256 FROM site_version ORDER BY id DESC LIMIT 1", [], |row| {
                Ok((row.get(0)?, row.get(1)?))
            })
            .optional()
            .map_err(wrong)?;
        self.settings.clear();
        if let Some((id, _)) = latest.filter(|(_, latest)| *latest == sha256) {
            self.site_version = Some(id);
            return Ok(false);
        }
        let path = path.to_string_lossy();
        self.insert(
            "INSERT INTO site_version (time_us, sha256, path, text) VALUES (?1, ?2, ?3, ?4)",
            params![time.as_micros(), sha256, path, text],
        )?;
        self.site_version = Some(self.db.last_insert_rowid());
        Ok(true)
    }

    /// The number of the cable with this tag.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn cable(&mut self, tag: &str) -> Result<CableId, RecordError> {
        if let Some(id) = self.cables.get(tag) {
            return Ok(*id);
        }
        let id =
            self.number("SELECT id FROM cable WHERE tag = ?1", "INSERT INTO cable (tag) VALUES (?1)", params![tag])?;
        self.cables.insert(tag.to_owned(), id);
        Ok(id)
    }

    /// The number of an operating state.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn state(&mut self, name: &str) -> Result<StateId, RecordError> {
        if let Some(id) = self.states.get(name) {
            return Ok(*id);
        }
        let id =
            self.number("SELECT id FROM state WHERE name = ?1", "INSERT INTO state (name) VALUES (?1)", params![name])?;
        let id = small(id)?;
        self.states.insert(name.to_owned(), id);
        Ok(id)
    }

    /// The number of a band of a cable, in a unit.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn series(&mut self, cable: CableId, band: &str, unit: LevelUnit) -> Result<SeriesId, RecordError> {
        let key = (cable, band.to_owned(), unit);
        if let Some(id) = self.series.get(&key) {
            return Ok(*id);
        }
        let id = self.number(
            "SELECT id FROM series WHERE cable_id = ?1 AND band = ?2 AND unit = ?3",
            "INSERT INTO series (cable_id, band, unit) VALUES (?1, ?2, ?3)",
            params![cable, band, unit.label()],
        )?;
        let id = small(id)?;
        self.series.insert(key, id);
        Ok(id)
    }

    /// The number of a set of settings, as JSON, of an instrument under the present site file.
    ///
    /// # Errors
    /// The database cannot be written, or no site file was kept yet.
    pub fn setting(&mut self, instrument: &str, json: &str) -> Result<SettingId, RecordError> {
        let key = (instrument.to_owned(), json.to_owned());
        if let Some(id) = self.settings.get(&key) {
            return Ok(*id);
        }
        let site_version = self.site_version;
        let id = self.number(
            "SELECT id FROM setting WHERE instrument = ?1 AND json = ?2 AND site_version_id = ?3",
            "INSERT INTO setting (instrument, json, site_version_id) VALUES (?1, ?2, ?3)",
            params![instrument, json, site_version],
        )?;
        self.settings.insert(key, id);
        Ok(id)
    }

    /// A sweep with its levels.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn sweep(&mut self, sweep: &NewSweep<'_>) -> Result<(), RecordError> {
        self.insert(
            "INSERT INTO sweep (time_us, cable_id, state_id, setting_id) VALUES (?1, ?2, ?3, ?4)",
            params![sweep.time.as_micros(), sweep.cable, sweep.state, sweep.setting],
        )?;
        let id = self.db.last_insert_rowid();
        let wrong = open::database(&self.path);
        let mut insert = self
            .db
            .prepare_cached(
                "INSERT INTO level (sweep_id, series_id, level_cdb, peak_cdb, peak_hz, quality) \
                 VALUES (?1, ?2, ?3, ?4, ?5, ?6)",
            )
            .map_err(wrong)?;
        for level in sweep.levels {
            // What is no number is no level; a series without one at a time is simply absent there.
            let Some(level_cdb) = to_centi(level.level_db) else { continue };
            let row = params![
                id,
                level.series,
                level_cdb,
                to_centi(level.peak_db).unwrap_or(level_cdb),
                level.peak_hz.round() as i64,
                level.quality.code()
            ];
            insert.execute(row).map_err(wrong)?;
        }
        Ok(())
    }

    /// A closed block.
    ///
    /// # Errors
    /// The database cannot be written, or the block is there already.
    pub fn block(&mut self, series: SeriesId, state: StateId, block: &Block) -> Result<(), RecordError> {
        self.insert(
            "INSERT INTO block (series_id, state_id, start_us, median_db, count, quality) VALUES (?1, ?2, ?3, ?4, ?5, ?6)",
            params![series, state, block.start.as_micros(), block.median_db, block.count, block.worst.code()],
        )
    }

    /// The state of a chart after the last block that it has seen.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn chart(&mut self, series: SeriesId, state: StateId, chart: &ChartState) -> Result<(), RecordError> {
        let json = serde_json::to_string(chart).map_err(content("a chart"))?;
        self.insert(
            "INSERT INTO chart (series_id, state_id, json) VALUES (?1, ?2, ?3) \
             ON CONFLICT (series_id, state_id) DO UPDATE SET json = excluded.json",
            params![series, state, json],
        )
    }

    /// A reference.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn reference(&mut self, new: &NewReference<'_>) -> Result<(), RecordError> {
        let figure = serde_json::to_string(&new.figure).map_err(content("a reference"))?;
        self.insert(
            "INSERT INTO reference (series_id, state_id, kind, from_us, to_us, marked_us, who, note, figure) \
             VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9)",
            params![
                new.series,
                new.state,
                new.kind.label(),
                new.interval.from.as_micros(),
                new.interval.to.as_micros(),
                new.marked.as_micros(),
                new.who,
                new.note,
                figure
            ],
        )
    }

    /// From `time` on the levels of a cable cannot be compared with those before. The states of its charts are forgotten;
    /// references stay, but those of before no longer count.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn epoch(&mut self, cable: CableId, time: Time, reason: &str) -> Result<(), RecordError> {
        self.insert(
            "INSERT INTO epoch (cable_id, time_us, reason) VALUES (?1, ?2, ?3)",
            params![cable, time.as_micros(), reason],
        )?;
        self.insert("DELETE FROM chart WHERE series_id IN (SELECT id FROM series WHERE cable_id = ?1)", params![cable])
    }

    /// A cable has no levels from `from` on; the number of the gap.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn begin_gap(&mut self, cable: CableId, from: Time, reason: &str) -> Result<i64, RecordError> {
        self.insert(
            "INSERT INTO gap (cable_id, from_us, reason) VALUES (?1, ?2, ?3)",
            params![cable, from.as_micros(), reason],
        )?;
        Ok(self.db.last_insert_rowid())
    }

    /// A gap is over.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn end_gap(&mut self, gap: i64, to: Time) -> Result<(), RecordError> {
        self.insert("UPDATE gap SET to_us = ?2 WHERE id = ?1", params![gap, to.as_micros()])
    }

    /// What happened to an alarm: the alarm as it is now, and the entry of the journal.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn alarm(&mut self, action: &Action) -> Result<(), RecordError> {
        let alarm = &action.alarm;
        let json = serde_json::to_string(alarm).map_err(content("an alarm"))?;
        self.insert(
            "INSERT INTO alarm (occurrence, kind, subject, state, raised_us, since_us, rise_cdb, text, json) \
             VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9) ON CONFLICT (occurrence) DO UPDATE SET \
             state = excluded.state, since_us = excluded.since_us, rise_cdb = excluded.rise_cdb, text = excluded.text, \
             json = excluded.json",
            params![
                alarm.occurrence as i64,
                alarm.key.kind.label(),
                alarm.key.subject,
                alarm.state.label(),
                alarm.raised.as_micros(),
                alarm.detail.since.map(Time::as_micros),
                alarm.detail.rise_db().and_then(to_centi),
                alarm.detail.text,
                json
            ],
        )?;
        if alarm.state != AlarmState::Returned {
            self.supersede(alarm.occurrence, &alarm.key.kind.to_string(), &alarm.key.subject)?;
        }
        let by = alarm.acknowledged.as_ref().filter(|by| by.time == action.time);
        let by = by.filter(|_| action.transition == hushwatch_alarm::Transition::Acknowledged);
        let (who, note, cause) = by.map_or(("", "", ""), |by| (&by.who, &by.note, by.cause.label()));
        self.insert(
            "INSERT INTO alarm_event (occurrence, time_us, transition, text, who, note, cause) \
             VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)",
            params![
                alarm.occurrence as i64,
                action.time.as_micros(),
                action.transition.label(),
                action.text,
                who,
                note,
                cause
            ],
        )
    }

    /// An alarm that occurs again before its last occurrence was acknowledged takes that one's place among the open ones.
    fn supersede(&mut self, occurrence: u64, kind: &str, subject: &str) -> Result<(), RecordError> {
        self.insert(
            "UPDATE alarm SET state = 'normal' \
             WHERE kind = ?1 AND subject = ?2 AND occurrence < ?3 AND state <> 'normal'",
            params![kind, subject, occurrence as i64],
        )
    }

    /// Something is to be told to a recipient.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn to_tell(&mut self, time: Time, recipient: &str, key: &str, body: &str) -> Result<i64, RecordError> {
        self.insert(
            "INSERT INTO outbox (recipient, key, body, created_us) VALUES (?1, ?2, ?3, ?4)",
            params![recipient, key, body, time.as_micros()],
        )?;
        Ok(self.db.last_insert_rowid())
    }

    /// It was told.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn told(&mut self, id: i64, time: Time) -> Result<(), RecordError> {
        self.insert("UPDATE outbox SET delivered_us = ?2 WHERE id = ?1", params![id, time.as_micros()])
    }

    /// It was tried to tell, in vain.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn not_told(&mut self, id: i64, why: &str) -> Result<(), RecordError> {
        self.insert("UPDATE outbox SET attempts = attempts + 1, error = ?2 WHERE id = ?1", params![id, why])
    }

    /// Something small that is to be known at the next start; `None` forgets it.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn remember(&mut self, key: &str, value: Option<&str>) -> Result<(), RecordError> {
        match value {
            Some(value) => self.insert(
                "INSERT INTO meta (key, value) VALUES (?1, ?2) ON CONFLICT (key) DO UPDATE SET value = excluded.value",
                params![key, value],
            ),
            None => self.insert("DELETE FROM meta WHERE key = ?1", params![key]),
        }
    }

    fn begin(&mut self) -> Result<(), RecordError> {
        if self.db.is_autocommit() {
            self.db.execute_batch("BEGIN IMMEDIATE").map_err(open::database(&self.path))?;
        }
        Ok(())
    }

    fn insert(&mut self, sql: &str, values: &[&dyn rusqlite::ToSql]) -> Result<(), RecordError> {
        self.begin()?;
        let done = self.db.prepare_cached(sql).and_then(|mut statement| statement.execute(values));
        done.map(|_| ()).map_err(open::database(&self.path))
    }

    /// The number that `select` finds; what `insert` makes if it finds none.
    fn number(&mut self, select: &str, insert: &str, values: &[&dyn rusqlite::ToSql]) -> Result<i64, RecordError> {
        let found = self
            .db
            .prepare_cached(select)
            .and_then(|mut statement| statement.query_row(values, |row| row.get(0)).optional())
            .map_err(open::database(&self.path))?;
        if let Some(id) = found {
            return Ok(id);
        }
        self.insert(insert, values)?;
        Ok(self.db.last_insert_rowid())
    }
}

impl Drop for Writer {
    /// What was gathered is not lost by a stop that forgot to commit; SQLite then clears the log away.
    fn drop(&mut self) {
        let _ = self.commit();
    }
}

fn hexadecimal(bytes: &[u8]) -> String {
    const DIGITS: &[u8; 16] = b"0123456789abcdef";
    bytes.iter().flat_map(|byte| [byte >> 4, byte & 15]).map(|digit| char::from(DIGITS[usize::from(digit)])).collect()
}

fn small(id: i64) -> Result<u32, RecordError> {
    u32::try_from(id).map_err(|_| RecordError::Content { what: "a number", why: format!("{id} is too great") })
}

pub(crate) fn content<E: std::fmt::Display>(what: &'static str) -> impl Fn(E) -> RecordError {
    move |error| RecordError::Content { what, why: error.to_string() }
}
