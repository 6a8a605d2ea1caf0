-- Times are microseconds since 1970 (UTC), levels hundredths of a dB, frequencies Hz.

CREATE TABLE meta (key TEXT PRIMARY KEY, value TEXT NOT NULL) STRICT, WITHOUT ROWID;

CREATE TABLE site_version (
    id INTEGER PRIMARY KEY, time_us INTEGER NOT NULL, sha256 TEXT NOT NULL, path TEXT NOT NULL, text TEXT NOT NULL
) STRICT;

CREATE TABLE cable (id INTEGER PRIMARY KEY, tag TEXT NOT NULL UNIQUE) STRICT;
CREATE TABLE state (id INTEGER PRIMARY KEY, name TEXT NOT NULL UNIQUE) STRICT;
CREATE TABLE series (
    id INTEGER PRIMARY KEY, cable_id INTEGER NOT NULL REFERENCES cable, band TEXT NOT NULL, unit TEXT NOT NULL,
    UNIQUE (cable_id, band, unit)
) STRICT;

-- What an instrument was set to, as JSON, by the site file of that time.
CREATE TABLE setting (
    id INTEGER PRIMARY KEY, instrument TEXT NOT NULL, site_version_id INTEGER NOT NULL REFERENCES site_version,
    json TEXT NOT NULL, UNIQUE (instrument, site_version_id, json)
) STRICT;

CREATE TABLE sweep (
    id INTEGER PRIMARY KEY, time_us INTEGER NOT NULL, cable_id INTEGER NOT NULL REFERENCES cable,
    state_id INTEGER NOT NULL REFERENCES state, setting_id INTEGER NOT NULL REFERENCES setting
) STRICT;
CREATE INDEX sweep_of_cable ON sweep (cable_id, time_us);

CREATE TABLE level (
    sweep_id INTEGER NOT NULL REFERENCES sweep, series_id INTEGER NOT NULL REFERENCES series,
    level_cdb INTEGER NOT NULL, peak_cdb INTEGER NOT NULL, peak_hz INTEGER NOT NULL, quality INTEGER NOT NULL,
    PRIMARY KEY (sweep_id, series_id)
) STRICT, WITHOUT ROWID;

CREATE TABLE quality (code INTEGER PRIMARY KEY, text TEXT NOT NULL) STRICT;

CREATE TABLE block (
    series_id INTEGER NOT NULL REFERENCES series, state_id INTEGER NOT NULL REFERENCES state,
    start_us INTEGER NOT NULL, median_db REAL NOT NULL, count INTEGER NOT NULL, quality INTEGER NOT NULL,
    PRIMARY KEY (series_id, state_id, start_us)
) STRICT, WITHOUT ROWID;

-- The state of each chart after the last block that it has seen, as JSON.
CREATE TABLE chart (
    series_id INTEGER NOT NULL REFERENCES series, state_id INTEGER NOT NULL REFERENCES state, json TEXT NOT NULL,
    PRIMARY KEY (series_id, state_id)
) STRICT, WITHOUT ROWID;

-- Never changed, never deleted: the latest of a kind counts, the first `after` is that of the commissioning.
CREATE TABLE reference (
    id INTEGER PRIMARY KEY, series_id INTEGER NOT NULL REFERENCES series, state_id INTEGER NOT NULL REFERENCES state,
    kind TEXT NOT NULL CHECK (kind IN ('before', 'after')), from_us INTEGER NOT NULL, to_us INTEGER NOT NULL,
    marked_us INTEGER NOT NULL, who TEXT NOT NULL, note TEXT NOT NULL, figure TEXT NOT NULL
) STRICT;
CREATE INDEX reference_of_series ON reference (series_id, state_id, kind);

-- From here on the levels of a cable cannot be compared with those before, and why: another setting, another instrument.
CREATE TABLE epoch (
    id INTEGER PRIMARY KEY, cable_id INTEGER NOT NULL REFERENCES cable, time_us INTEGER NOT NULL, reason TEXT NOT NULL
) STRICT;

CREATE TABLE gap (
    id INTEGER PRIMARY KEY, cable_id INTEGER NOT NULL REFERENCES cable, from_us INTEGER NOT NULL, to_us INTEGER,
    reason TEXT NOT NULL
) STRICT;
CREATE INDEX gap_open ON gap (cable_id) WHERE to_us IS NULL;

CREATE TABLE alarm (
    occurrence INTEGER PRIMARY KEY, kind TEXT NOT NULL, subject TEXT NOT NULL, state TEXT NOT NULL,
    raised_us INTEGER NOT NULL, since_us INTEGER, rise_cdb INTEGER, text TEXT NOT NULL, json TEXT NOT NULL
) STRICT;
CREATE INDEX alarm_open ON alarm (state) WHERE state <> 'normal';

CREATE TABLE alarm_event (
    id INTEGER PRIMARY KEY, occurrence INTEGER NOT NULL REFERENCES alarm, time_us INTEGER NOT NULL,
    transition TEXT NOT NULL, text TEXT NOT NULL, who TEXT NOT NULL, note TEXT NOT NULL, cause TEXT NOT NULL
) STRICT;

-- What is to be told to recipients; a row stays until it was delivered, and a while as evidence.
CREATE TABLE outbox (
    id INTEGER PRIMARY KEY, recipient TEXT NOT NULL, key TEXT NOT NULL, body TEXT NOT NULL, created_us INTEGER NOT NULL,
    attempts INTEGER NOT NULL DEFAULT 0, error TEXT NOT NULL DEFAULT '', delivered_us INTEGER
) STRICT;
CREATE INDEX outbox_open ON outbox (id) WHERE delivered_us IS NULL;

-- For people -------------------------------------------------------------------------------------------------------

CREATE VIEW levels AS
SELECT strftime('%Y-%m-%dT%H:%M:%S', s.time_us / 1000000, 'unixepoch') || printf('.%06dZ', s.time_us % 1000000) AS time,
       c.tag AS cable, e.band, l.level_cdb / 100.0 AS level, l.peak_cdb / 100.0 AS peak, l.peak_hz, e.unit,
       st.name AS state, q.text AS quality
FROM sweep s JOIN cable c ON c.id = s.cable_id JOIN level l ON l.sweep_id = s.id JOIN series e ON e.id = l.series_id
     JOIN state st ON st.id = s.state_id LEFT JOIN quality q ON q.code = l.quality;

CREATE VIEW blocks AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', b.start_us / 1000000, 'unixepoch') AS time, c.tag AS cable, e.band,
       st.name AS state, round(b.median_db, 3) AS level, b.count, e.unit, q.text AS quality
FROM block b JOIN series e ON e.id = b.series_id JOIN cable c ON c.id = e.cable_id JOIN state st ON st.id = b.state_id
     LEFT JOIN quality q ON q.code = b.quality;

CREATE VIEW gaps AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', g.from_us / 1000000, 'unixepoch') AS "from",
       strftime('%Y-%m-%dT%H:%M:%SZ', g.to_us / 1000000, 'unixepoch') AS "to", c.tag AS cable, g.reason
FROM gap g JOIN cable c ON c.id = g.cable_id;

CREATE VIEW epochs AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', e.time_us / 1000000, 'unixepoch') AS time, c.tag AS cable, e.reason
FROM epoch e JOIN cable c ON c.id = e.cable_id;

CREATE VIEW alarms AS
SELECT occurrence, kind, subject, state, strftime('%Y-%m-%dT%H:%M:%SZ', raised_us / 1000000, 'unixepoch') AS raised,
       strftime('%Y-%m-%dT%H:%M:%SZ', since_us / 1000000, 'unixepoch') AS since, rise_cdb / 100.0 AS rise, text
FROM alarm;

CREATE VIEW journal AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', v.time_us / 1000000, 'unixepoch') AS time, v.occurrence, a.kind, a.subject,
       v.transition, v.text, v.who, v.note, v.cause
FROM alarm_event v JOIN alarm a ON a.occurrence = v.occurrence;

CREATE VIEW reference_list AS
SELECT strftime('%Y-%m-%dT%H:%M:%SZ', r.from_us / 1000000, 'unixepoch') AS "from",
       strftime('%Y-%m-%dT%H:%M:%SZ', r.to_us / 1000000, 'unixepoch') AS "to", c.tag AS cable, e.band,
       st.name AS state, r.kind, round(r.figure ->> 'median_db', 2) AS level,
       round(r.figure ->> 'standard_error_db', 2) AS standard_error, r.figure ->> 'blocks' AS blocks,
       r.figure ->> 'provisional' AS provisional, e.unit, r.who, r.note
FROM reference r JOIN series e ON e.id = r.series_id JOIN cable c ON c.id = e.cable_id
     JOIN state st ON st.id = r.state_id;

CREATE VIEW site_versions AS
SELECT id, strftime('%Y-%m-%dT%H:%M:%SZ', time_us / 1000000, 'unixepoch') AS time, path, sha256, text FROM site_version;
