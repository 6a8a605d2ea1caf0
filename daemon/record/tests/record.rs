//! The record as a file: what is written comes back, also after a crash, and what is not ours stays as it was.

#![expect(clippy::expect_used, reason = "a test fails by a panic that tells what was expected")]

use std::ops::ControlFlow;
use std::path::{Path, PathBuf};

use hushwatch_alarm::{Acknowledged, AlarmKey, AlarmKind, AlarmState, Board, Cause, Detail, Event, Place};
use hushwatch_drift::{Block, ReferenceKind, reference_figure};
use hushwatch_quantity::{Interval, LevelUnit, Quality, Reason, Span, Time};
use hushwatch_record::{Filter, LevelRow, NewLevel, NewReference, NewSweep, Read, Reader, RecordError, Writer};
use tempfile::TempDir;

fn folder() -> (TempDir, PathBuf) {
    let folder = tempfile::Builder::new().prefix("hw").tempdir().expect("a folder");
    let path = folder.path().join("e14.db");
    (folder, path)
}

fn at(secs: i64) -> Time {
    Time::from_secs(1_790_000_000 + secs)
}

/// Writes a sweep of W12 with one level.
fn sweep(writer: &mut Writer, time: Time, level_db: f64) {
    let cable = writer.cable("W12").expect("a cable");
    let state = writer.state("running").expect("a state");
    let series = writer.series(cable, "ringing", LevelUnit::DbMicroamp).expect("a series");
    let setting = writer.setting("rx1", "{}").expect("settings");
    let quality = Quality { reason: Some(Reason::Assumed), ..Quality::GOOD };
    let level = NewLevel { series, level_db, peak_db: level_db + 3.0, peak_hz: 4_200_000.0, quality };
    writer.sweep(&NewSweep { time, cable, state, setting, levels: &[level] }).expect("written");
}

fn writer(path: &Path) -> Writer {
    let mut writer = Writer::open(path).expect("a writer");
    writer.site_version(at(0), Path::new("site.toml"), "format = 1").expect("kept");
    writer
}

fn levels(read: Read<'_>, filter: &Filter) -> Vec<LevelRow> {
    let mut all = Vec::new();
    let take = |row| {
        all.push(row);
        ControlFlow::Continue(())
    };
    read.levels(filter, take).expect("levels");
    all
}

#[test]
fn levels_come_back_to_a_hundredth_of_a_db() {
    let (_folder, path) = folder();
    let mut writer = writer(&path);
    for (secs, level_db) in [(1, 42.1749), (2, -3.005), (3, f64::NAN), (4, 40.0)] {
        sweep(&mut writer, at(secs), level_db);
    }
    writer.commit().expect("committed");
    let reader = Reader::open(&path).expect("a reader");
    let all = levels(reader.read(), &Filter::default());
    assert_eq!(all.iter().map(|row| row.level_db).collect::<Vec<_>>(), [42.17, -3.01, 40.0]);
    assert_eq!((all[0].peak_db, all[0].peak_hz, all[0].time), (45.17, 4.2e6, at(1)));
    assert_eq!(all[0].quality.to_string(), "good: assumed setting");
    for (filter, count) in [
        (Filter { cable: Some("W12".into()), ..Filter::default() }, 3),
        (Filter { cable: Some("W14".into()), ..Filter::default() }, 0),
        (Filter { band: Some("ringing".into()), from: Some(at(2)), to: Some(at(4)), ..Filter::default() }, 1),
        (Filter { band: Some("low".into()), ..Filter::default() }, 0),
    ] {
        assert_eq!(levels(reader.read(), &filter).len(), count, "{filter:?}");
    }
    assert_eq!(reader.read().latest_level(1).expect("read").map(|row| row.time), Some(at(4)));
}

#[test]
fn what_was_not_committed_is_gone_and_what_was_is_there() {
    let (_folder, path) = folder();
    let copy = path.with_file_name("copy.db");
    let mut writer = writer(&path);
    sweep(&mut writer, at(1), 40.0);
    writer.commit().expect("committed");
    sweep(&mut writer, at(2), 41.0);
    assert!(writer.is_dirty());
    // What is on the disk now is what a crash would leave: database and log, copied while the writer lives.
    for end in ["", "-wal"] {
        let mut from = path.clone().into_os_string();
        from.push(end);
        let mut to = copy.clone().into_os_string();
        to.push(end);
        std::fs::copy(from, to).expect("copied");
    }
    let crashed = Writer::open(&copy).expect("recovered");
    assert_eq!(levels(crashed.read(), &Filter::default()).len(), 1);
    assert_eq!(levels(writer.read(), &Filter::default()).len(), 2);
}

#[test]
fn one_writer_alone() {
    let (_folder, path) = folder();
    let first = writer(&path);
    let second = Writer::open(&path).expect_err("the first one holds it");
    assert!(matches!(second, RecordError::Owned(_)) && second.to_string().contains("e14.db"), "{second}");
    drop(first);
    Writer::open(&path).expect("free again");
}

#[test]
fn what_is_not_ours_or_too_new_is_refused_untouched() {
    let make = |path: &Path, sql: &str| {
        let db = rusqlite::Connection::open(path).expect("a database");
        db.execute_batch(sql).expect("made");
    };
    for (sql, expected) in [
        ("PRAGMA user_version = 99; PRAGMA application_id = 1215656808; CREATE TABLE t (x);", "later version"),
        ("CREATE TABLE t (x);", "another program"),
        ("PRAGMA application_id = 7; CREATE TABLE t (x);", "another program"),
    ] {
        let (folder, path) = folder();
        make(&path, sql);
        let before = std::fs::read(&path).expect("bytes");
        for error in [Writer::open(&path).expect_err("refused"), Reader::open(&path).expect_err("refused")] {
            assert!(error.to_string().contains(expected), "{error}");
        }
        assert_eq!(std::fs::read(&path).expect("bytes"), before, "{sql}");
        let mut names: Vec<_> =
            std::fs::read_dir(folder.path()).expect("files").map(|file| file.expect("a file").file_name()).collect();
        names.sort();
        assert_eq!(names, ["e14.db", "e14.db.lock"], "something was left beside it");
    }
    let (_folder, path) = folder();
    std::fs::write(
        &path,
        "a letter to my aunt, which is no database at all, and long enough to have a header of its own",
    )
    .expect("written");
    let error = Writer::open(&path).expect_err("refused").to_string();
    assert!(error.contains("no SQLite database"), "{error}");
    assert!(matches!(Reader::open(&path.with_file_name("none.db")), Err(RecordError::Missing(_))));
}

#[test]
fn a_newer_format_that_stands_in_the_log_alone_is_refused_too() {
    let (_folder, path) = folder();
    drop(writer(&path));
    let db = rusqlite::Connection::open(&path).expect("a database");
    db.pragma_update(None, "journal_mode", "wal").expect("a log");
    db.pragma_update(None, "user_version", 99).expect("set");
    assert!(matches!(Writer::open(&path), Err(RecordError::Newer { found: 99, .. })));
}

#[test]
fn alarms_and_their_journal() {
    let (_folder, path) = folder();
    let mut writer = writer(&path);
    let mut board = Board::default();
    let place = Place { band: "ringing".into(), state: "running".into(), rise_db: 6.27, since: at(10) };
    let detail = Detail { text: "up by 6.3 dB".into(), since: Some(at(10)), places: vec![place] };
    let key = AlarmKey::new(AlarmKind::Regression, "W12");
    let by = |time| Acknowledged { time, who: "shift".into(), note: "latch open".into(), cause: Cause::Choke };
    let clears = |secs| Event::Clears { key: key.clone(), time: at(secs), text: "back".into() };
    let occurs = |secs| Event::Occurs { key: key.clone(), time: at(secs), detail: detail.clone() };
    for event in [occurs(20), clears(30), occurs(40), Event::Acknowledge { occurrence: 2, by: by(at(50)) }, clears(60)]
    {
        let action = board.handle(event).expect("taken").expect("an action");
        writer.alarm(&action).expect("written");
    }
    writer.commit().expect("committed");
    let reader = Reader::open(&path).expect("a reader");
    let states: Vec<_> = reader.read().alarms(false).expect("alarms").iter().map(|a| a.state).collect();
    assert_eq!(states, [AlarmState::Normal, AlarmState::Normal]);
    assert!(reader.read().alarms(true).expect("alarms").is_empty(), "the second occurrence stands for the first one");
    assert_eq!(reader.read().last_occurrence().expect("a number"), 2);
    let journal = reader.read().journal().expect("a journal");
    let told: Vec<_> = journal.iter().map(|row| (row.occurrence, row.transition.label(), row.who.as_str())).collect();
    assert_eq!(
        told,
        [
            (1, "occurred", ""),
            (1, "cleared", ""),
            (2, "occurred", ""),
            (2, "acknowledged", "shift"),
            (2, "cleared", "")
        ]
    );
    let db = rusqlite::Connection::open(&path).expect("a connection");
    let seen: (String, f64) = db
        .query_row("SELECT since, rise FROM alarms WHERE occurrence = 1", [], |row| Ok((row.get(0)?, row.get(1)?)))
        .expect("the view");
    assert_eq!(seen, (at(10).to_string(), 6.27));
}

#[test]
fn blocks_charts_references_gaps_and_the_outbox() {
    let (_folder, path) = folder();
    let mut writer = writer(&path);
    sweep(&mut writer, at(0), 40.0);
    let block =
        |n: i64| Block { start: at(60 * n), median_db: 40.0 + 0.125 * (n % 3) as f64, count: 6, worst: Quality::GOOD };
    let blocks: Vec<Block> = (0..30).map(block).collect();
    for block in &blocks {
        writer.block(1, 1, block).expect("written");
    }
    assert!(writer.block(1, 1, &blocks[3]).is_err(), "no block is there twice");
    let interval = Interval::new(at(0), at(1800));
    let figure = reference_figure(&blocks, Span::from_secs(60)).expect("a figure");
    let new = NewReference {
        series: 1,
        state: 1,
        kind: ReferenceKind::After,
        interval,
        marked: at(2000),
        who: "shift",
        note: "",
        figure,
    };
    writer.reference(&new).expect("written");
    let gap = writer.begin_gap(1, at(1800), "unplugged").expect("written");
    writer.begin_gap(1, at(5000), "no answer").expect("written");
    writer.end_gap(gap, at(1900)).expect("written");
    let first = writer.to_tell(at(1), "shift", "1-occurred", "{}").expect("written");
    writer.to_tell(at(1), "office", "1-occurred", "{}").expect("written");
    writer.not_told(first, "it does not answer").expect("written");
    writer.not_told(first, "it does not answer").expect("written");
    writer.remember("stopped", Some("now")).expect("written");
    writer.commit().expect("committed");

    let reader = Reader::open(&path).expect("a reader");
    let read = reader.read();
    assert_eq!(read.recent_blocks(1, 1, 4).expect("blocks"), blocks[26..]);
    assert_eq!(read.blocks(1, 1, Interval::new(at(60), at(180))).expect("blocks"), blocks[1..3]);
    assert_eq!(read.states_of(1).expect("states"), [1]);
    let references = read.references().expect("references");
    assert_eq!((references[0].figure, references[0].interval), (figure, interval));
    let open: Vec<_> = read.open_gaps().expect("gaps").into_iter().map(|gap| gap.reason).collect();
    assert_eq!(open, ["no answer"]);
    let touching = Filter { from: Some(at(1850)), to: Some(at(1860)), ..Filter::default() };
    assert_eq!(read.gaps(&touching).expect("gaps").len(), 1);
    let waiting = read.to_tell().expect("the outbox");
    assert_eq!(
        waiting.iter().map(|row| (row.recipient.as_str(), row.attempts)).collect::<Vec<_>>(),
        [("shift", 2), ("office", 0)]
    );
    writer.told(first, at(9)).expect("written");
    writer.remember("stopped", None).expect("written");
    writer.commit().expect("committed");
    assert_eq!(reader.read().to_tell().expect("the outbox").len(), 1);
    assert_eq!(reader.read().remembered("stopped").expect("read"), None);
}

#[test]
fn an_epoch_ends_the_charts_of_its_cable_alone() {
    let (_folder, path) = folder();
    let mut writer = writer(&path);
    sweep(&mut writer, at(0), 40.0);
    let other = writer.cable("W14").expect("a cable");
    let series = writer.series(other, "ringing", LevelUnit::DbMicroamp).expect("a series");
    let chart = |epoch| hushwatch_drift::ChartState {
        epoch,
        from: at(0),
        target_db: 40.0,
        max_rise_db: 3.0,
        blocks: 0,
        statistic: 0.5,
        gross: 0,
        previous: None,
        active: None,
    };
    writer.chart(1, 1, &chart(1)).expect("written");
    writer.chart(series, 1, &chart(2)).expect("written");
    writer.epoch(1, at(5), "attenuation_db: 20, not 10").expect("written");
    writer.commit().expect("committed");
    let reader = Reader::open(&path).expect("a reader");
    assert_eq!(reader.read().chart(1, 1).expect("read"), None);
    assert_eq!(reader.read().chart(series, 1).expect("read"), Some(chart(2)));
    let epochs = reader.read().epochs().expect("read");
    assert_eq!(epochs.iter().map(|row| (row.cable.as_str(), row.time)).collect::<Vec<_>>(), [("W12", at(5))]);
}

#[test]
fn each_version_of_the_site_file_is_kept_once() {
    let (_folder, path) = folder();
    let mut writer = writer(&path);
    for (text, new) in [("format = 1", false), ("format = 1\n# a word", true), ("format = 1", true)] {
        assert_eq!(writer.site_version(at(5), Path::new("site.toml"), text).expect("kept"), new, "{text}");
    }
    let texts: Vec<_> = writer.read().site_versions().expect("versions").into_iter().map(|row| row.text).collect();
    assert_eq!(texts, ["format = 1", "format = 1\n# a word", "format = 1"]);
}

#[test]
fn the_record_grows_as_it_is_told_to() {
    for bands in [1, 3, 8] {
        let (_folder, path) = folder();
        let mut writer = writer(&path);
        let cable = writer.cable("W12").expect("a cable");
        let state = writer.state("running").expect("a state");
        let setting = writer.setting("rx1", "{}").expect("settings");
        let sweeps = 30_000;
        let series: Vec<u32> = (0..bands)
            .map(|band| writer.series(cable, &format!("band-{band}"), LevelUnit::DbMicroamp).expect("a series"))
            .collect();
        for n in 0..sweeps {
            let level = |series: &u32| NewLevel {
                series: *series,
                level_db: 40.0 + f64::from(n % 97) / 50.0,
                peak_db: 30.0,
                peak_hz: 2e6 + 50e3 * f64::from(n % 160),
                quality: Quality::GOOD,
            };
            let levels: Vec<NewLevel> = series.iter().map(level).collect();
            let time = at(10 * i64::from(n));
            writer.sweep(&NewSweep { time, cable, state, setting, levels: &levels }).expect("written");
        }
        writer.commit().expect("committed");
        let got = writer.read().size().expect("a size") as f64 / f64::from(sweeps);
        let told = hushwatch_record::SWEEP_BYTES + hushwatch_record::LEVEL_BYTES * f64::from(bands);
        assert!((got / told - 1.0).abs() < 0.1, "{bands} bands: {got:.1} bytes a sweep, not {told:.1}");
    }
}
