-- The logbook, schema 2. The file is an SQLite 3 database, <data folder>/logbook.db, with
-- application_id 0x67656D6C ("geml") and user_version 2. Schema 1 had no sums; a file that has it
-- is brought along when a daemon opens it, and what stood in it stays without.
--
-- There is one truth: the bodies in "journal". They are the JSON documents that protocol/ describes,
-- byte for byte as they were appended and as NATS carries them. "header" holds what belongs to a run
-- as a whole and is known before its first entry; "remark" holds what people wrote. Everything else
-- is a view, worked out from the bodies when it is read; no number is stored twice.
--
-- Read the views, not the tables: run, reading, reading_angle, reading_setting, reading_sensor,
-- reading_count, event and note keep their names and their first columns for ever; columns may be
-- added behind them. Times are text, RFC 3339 in UTC with nine digits, and sort as text. Yes and no
-- are 1 and 0. Angles are REAL degrees, seconds are REAL, counts are INTEGER (a count of 2^63 or
-- more, which no gate reaches, would come out as REAL). Database arithmetic may differ from the
-- decimal in the body in the last bit of a REAL; programs that must not lose it read the body.
--
-- To look into a file that a daemon is writing: sqlite3 -readonly logbook.db. Never copy the file
-- of a running daemon, let SQLite do it (VACUUM INTO).

-- One row a run, in the order the runs were asked for. bench is the name in the first entry.
CREATE TABLE header (
  number      INTEGER PRIMARY KEY,
  run         TEXT NOT NULL UNIQUE,
  bench       TEXT NOT NULL,
  title       TEXT NOT NULL,
  recipe_text TEXT NOT NULL,
  bench_text  TEXT NOT NULL,
  version     TEXT NOT NULL,   -- of the program that took the run in
  simulated   INTEGER,         -- null on a real bench, else the clock factor
  key         TEXT,            -- the idempotency key of the request, if it had one
  who         TEXT NOT NULL,
  queued_at   TEXT NOT NULL,
  sum         INTEGER,         -- as in the journal, of the columns from run to queued_at; null counts as empty
  UNIQUE (bench, key)
) STRICT;

-- The journal. id counts from 1 without gaps in the order of commits; sequence does so within a
-- run. Run "-" holds the events of the bench itself and has no header. The checks are here, and
-- not only in the program, so that no other writer can make an entry that contradicts its key.
-- SQLite notices damage to its own structure; that a body is what was written, only sum says: the
-- CRC-32C (Castagnoli) of kind and body, each followed by a zero byte. Null: written by schema 1.
CREATE TABLE journal (
  id       INTEGER PRIMARY KEY,
  run      TEXT NOT NULL,
  sequence INTEGER NOT NULL CHECK (sequence >= 1),
  kind     TEXT NOT NULL CHECK (kind IN ('reading', 'point', 'event', 'result')),
  body     TEXT NOT NULL CHECK (json_valid(body)
             AND json_extract(body, '$.run') IS run
             AND json_extract(body, '$.sequence') IS sequence),
  sum      INTEGER,
  UNIQUE (run, sequence)
) STRICT;

CREATE TRIGGER journal_is_never_changed BEFORE UPDATE ON journal
BEGIN SELECT raise(ABORT, 'the journal is append-only'); END;
CREATE TRIGGER journal_is_never_shortened BEFORE DELETE ON journal
BEGIN SELECT raise(ABORT, 'the journal is append-only'); END;

-- Few entries are events, and fewer carry a state: these cost a reading nothing. The third
-- answers for a doubt without a look at its body; SQLite must be told so (view doubt).
CREATE INDEX event_by_kind ON journal (run, json_extract(body, '$.kind'), sequence)
  WHERE kind = 'event';
CREATE INDEX event_with_state ON journal (run, sequence)
  WHERE kind = 'event' AND json_extract(body, '$.state') <> '';

CREATE INDEX event_of_doubt ON journal (run, json_extract(body, '$.detail.from_sequence'),
    json_extract(body, '$.detail.to_sequence'), sequence, json_extract(body, '$.detail.why'))
  WHERE kind = 'event' AND json_extract(body, '$.kind') = 'doubted';

-- What people wrote about a run, or about the bench ("-").
CREATE TABLE remark (
  number INTEGER PRIMARY KEY,
  run    TEXT NOT NULL,
  at     TEXT NOT NULL,
  who    TEXT NOT NULL,
  text   TEXT NOT NULL
) STRICT;
CREATE INDEX remark_of_run ON remark (run, number);

-- state, reason and causes are those of the last event that carries a state. started_at is null
-- until the run began, ended_at until it ended.
CREATE VIEW run AS
SELECT h.run, h.title,
       json_extract(l.body, '$.state') AS state,
       json_extract(l.body, '$.text') AS reason,
       (SELECT json_extract(e.body, '$.at') FROM journal e
         WHERE e.run = h.run AND e.kind = 'event' AND json_extract(e.body, '$.kind') = 'began'
         ORDER BY e.sequence LIMIT 1) AS started_at,
       (SELECT json_extract(e.body, '$.at') FROM journal e
         WHERE e.run = h.run AND e.kind = 'event' AND json_extract(e.body, '$.kind') = 'ended'
         ORDER BY e.sequence DESC LIMIT 1) AS ended_at,
       h.recipe_text, h.bench_text, h.version, h.simulated,
       json_extract(l.body, '$.causes') AS causes,  -- a JSON list, or null
       h.bench, h.number, h.key, h.who, h.queued_at
  FROM header h
  LEFT JOIN journal l ON l.id = (
       SELECT s.id FROM journal s
        WHERE s.run = h.run AND s.kind = 'event' AND json_extract(s.body, '$.state') <> ''
        ORDER BY s.sequence DESC LIMIT 1);

-- One row a finding that readings from_sequence to to_sequence of its run, both included, are not
-- to be trusted, and why.
CREATE VIEW doubt AS
SELECT run, sequence,
       json_extract(body, '$.detail.from_sequence') AS from_sequence,
       json_extract(body, '$.detail.to_sequence') AS to_sequence,
       json_extract(body, '$.detail.why') AS why
  FROM journal INDEXED BY event_of_doubt
 WHERE kind = 'event' AND json_extract(body, '$.kind') = 'doubted';

-- doubt is null, or the reasons in the order they were found, joined by "; ".
CREATE VIEW reading AS
SELECT j.run, j.sequence,
       json_extract(j.body, '$.point') AS point,
       json_extract(j.body, '$.visit') AS visit,
       json_extract(j.body, '$.kind') AS kind,
       json_extract(j.body, '$.accepted') AS accepted,
       json_extract(j.body, '$.reason') AS reason,
       EXISTS (SELECT 1 FROM doubt d WHERE d.run = j.run
         AND d.from_sequence <= j.sequence AND d.to_sequence >= j.sequence) AS doubtful,
       (SELECT group_concat(o.why, '; ') FROM (
         SELECT d.why FROM doubt d WHERE d.run = j.run
            AND d.from_sequence <= j.sequence AND d.to_sequence >= j.sequence
          ORDER BY d.sequence) o) AS doubt,
       json_extract(j.body, '$.started_at') AS started_at,
       CAST(json_extract(j.body, '$.gate_set_s') AS REAL) AS gate_set_s,
       CAST(json_extract(j.body, '$.gate_s') AS REAL) AS gate_s,
       json_extract(j.body, '$.ended_at') AS ended_at,
       json_extract(j.body, '$.attempt') AS attempt,
       json_extract(j.body, '$.scatter.channel') AS scatter_channel,
       CAST(json_extract(j.body, '$.scatter.chi_square') AS REAL) AS chi_square,
       json_extract(j.body, '$.scatter.degrees_of_freedom') AS degrees_of_freedom,
       CAST(json_extract(j.body, '$.scatter.p_two_sided') AS REAL) AS p_two_sided,
       json_extract(j.body, '$.simulated') AS simulated
  FROM journal j
 WHERE j.kind = 'reading';

-- An empty list may be written as null, of which json_each makes one row: hence "type".
CREATE VIEW reading_angle AS
SELECT j.run, j.sequence,
       json_extract(a.value, '$.axis') AS axis,
       CAST(json_extract(a.value, '$.target_deg') AS REAL) AS target_deg,
       CAST(json_extract(a.value, '$.before_deg') AS REAL) AS before_deg,
       CAST(json_extract(a.value, '$.after_deg') AS REAL) AS after_deg,
       json_extract(a.value, '$.proof') AS proof
  FROM journal j, json_each(j.body, '$.angles') a
 WHERE j.kind = 'reading' AND a.type = 'object';

CREATE VIEW reading_setting AS
SELECT j.run, j.sequence,
       json_extract(s.value, '$.name') AS name,
       CAST(json_extract(s.value, '$.target') AS REAL) AS target,
       CAST(json_extract(s.value, '$.before') AS REAL) AS before,
       CAST(json_extract(s.value, '$.after') AS REAL) AS after,
       json_extract(s.value, '$.unit') AS unit
  FROM journal j, json_each(j.body, '$.settings') s
 WHERE j.kind = 'reading' AND s.type = 'object';

CREATE VIEW reading_sensor AS
SELECT j.run, j.sequence,
       json_extract(s.value, '$.sensor') AS sensor,
       CAST(json_extract(s.value, '$.minimum') AS REAL) AS minimum,
       CAST(json_extract(s.value, '$.mean') AS REAL) AS mean,
       CAST(json_extract(s.value, '$.maximum') AS REAL) AS maximum,
       json_extract(s.value, '$.samples') AS samples,
       json_extract(s.value, '$.unit') AS unit
  FROM journal j, json_each(j.body, '$.sensors') s
 WHERE j.kind = 'reading' AND s.type = 'object';

CREATE VIEW reading_count AS
SELECT j.run, j.sequence,
       json_extract(c.value, '$.channel') AS channel,
       json_extract(c.value, '$.counts') AS counts
  FROM journal j, json_each(j.body, '$.counts') c
 WHERE j.kind = 'reading' AND c.type = 'object';

-- One row a slice and channel; slices count from 1. raw is the instrument's answer as received.
CREATE VIEW reading_slice AS
SELECT j.run, j.sequence,
       s.key + 1 AS slice,
       CAST(json_extract(s.value, '$.gate_set_s') AS REAL) AS gate_set_s,
       CAST(json_extract(s.value, '$.gate_s') AS REAL) AS gate_s,
       json_extract(c.value, '$.channel') AS channel,
       json_extract(c.value, '$.counts') AS counts,
       json_extract(s.value, '$.raw') AS raw
  FROM journal j, json_each(j.body, '$.slices') s, json_each(s.value, '$.counts') c
 WHERE j.kind = 'reading' AND s.type = 'object' AND c.type = 'object';

-- run is "-" for what happened to the bench. detail is a JSON object, or null.
CREATE VIEW event AS
SELECT run, sequence,
       json_extract(body, '$.at') AS at,
       json_extract(body, '$.kind') AS kind,
       json_extract(body, '$.text') AS text,
       json_extract(body, '$.detail') AS detail,
       json_extract(body, '$.state') AS state,
       json_extract(body, '$.causes') AS causes
  FROM journal
 WHERE kind = 'event';

CREATE VIEW note AS
SELECT run, at, who, text, number FROM remark;
