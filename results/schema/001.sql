-- Version 1. Entries are the truth; every other table but open_runs is an index of them, derived anew by verify.

CREATE TABLE entries (
  station   TEXT    NOT NULL,
  number    INTEGER NOT NULL,
  kind      TEXT    NOT NULL,
  text      TEXT    NOT NULL,  -- canonical JSON (RFC 8785)
  before    TEXT    NOT NULL,  -- digest of the entry before; 64 zeros for the first
  digest    TEXT    NOT NULL,  -- SHA-256 of before and text
  key       TEXT    NOT NULL,  -- SHA-256 of the public key
  signature TEXT    NOT NULL,  -- Ed25519 of the digest, base64
  PRIMARY KEY (station, number)
) STRICT;

CREATE TABLE documents (       -- procedures, bench files and profiles, each once
  digest TEXT PRIMARY KEY,
  text   BLOB NOT NULL
) STRICT;

CREATE TABLE open_runs (       -- begun and not sealed
  run   TEXT PRIMARY KEY,
  start TEXT NOT NULL          -- JSON
) STRICT;

CREATE TABLE runs (
  run             TEXT PRIMARY KEY,
  station         TEXT    NOT NULL,
  number          INTEGER NOT NULL,
  started         INTEGER NOT NULL, -- ns since 1970, UTC
  procedure       TEXT    NOT NULL,
  revision        TEXT    NOT NULL,
  specification   TEXT    NOT NULL,
  procedure_digest TEXT   NOT NULL REFERENCES documents (digest),
  bench           TEXT    NOT NULL,
  bench_digest    TEXT    NOT NULL REFERENCES documents (digest),
  operator        TEXT    NOT NULL,
  seed            TEXT    NOT NULL,
  version         TEXT    NOT NULL,
  go              TEXT    NOT NULL,
  architecture    TEXT    NOT NULL,
  outcome         TEXT    NOT NULL,
  reason          TEXT    NOT NULL,
  bench_seconds   REAL    NOT NULL,
  wall_seconds    REAL    NOT NULL,
  FOREIGN KEY (station, number) REFERENCES entries (station, number)
) STRICT;

CREATE TABLE parameters (
  run        TEXT NOT NULL REFERENCES runs (run),
  name       TEXT NOT NULL,
  value      TEXT NOT NULL,
  overridden INTEGER NOT NULL,
  PRIMARY KEY (run, name)
) STRICT;

CREATE TABLE instruments (
  run            TEXT NOT NULL REFERENCES runs (run),
  name           TEXT NOT NULL,
  profile        TEXT NOT NULL,
  profile_digest TEXT NOT NULL REFERENCES documents (digest),
  maker          TEXT NOT NULL,
  model          TEXT NOT NULL,
  serial         TEXT NOT NULL,
  firmware       TEXT NOT NULL,
  PRIMARY KEY (run, name)
) STRICT;

CREATE TABLE trial_index (
  run       TEXT NOT NULL REFERENCES runs (run),
  slot      TEXT NOT NULL,
  part      TEXT NOT NULL,
  serial    TEXT NOT NULL,
  verdict   TEXT NOT NULL,
  reason    TEXT NOT NULL,
  recording TEXT NOT NULL,     -- file, below recordings/
  sha256    TEXT NOT NULL,
  bytes     INTEGER NOT NULL,
  PRIMARY KEY (run, slot)
) STRICT;
CREATE INDEX trials_by_serial ON trial_index (serial);

CREATE TABLE recordings (
  run      TEXT NOT NULL,
  slot     TEXT NOT NULL,
  position INTEGER NOT NULL,
  name     TEXT NOT NULL,
  labels   TEXT NOT NULL,
  samples  INTEGER NOT NULL,
  sha256   TEXT NOT NULL,
  PRIMARY KEY (run, slot, position),
  FOREIGN KEY (run, slot) REFERENCES trial_index (run, slot)
) STRICT;

CREATE TABLE figures (
  run      TEXT NOT NULL,
  slot     TEXT NOT NULL,
  position INTEGER NOT NULL,
  name     TEXT NOT NULL,
  labels   TEXT NOT NULL,
  method   TEXT NOT NULL,
  value    REAL,
  unit     TEXT NOT NULL,
  u        REAL,
  dof      REAL,               -- null: infinite
  low      REAL,
  high     REAL,
  family   TEXT NOT NULL,
  budget   TEXT NOT NULL,      -- JSON
  reason   TEXT NOT NULL,      -- why it is void, or empty
  PRIMARY KEY (run, slot, position),
  FOREIGN KEY (run, slot) REFERENCES trial_index (run, slot)
) STRICT;

CREATE TABLE judgements (
  run         TEXT NOT NULL,
  slot        TEXT NOT NULL,
  position    INTEGER NOT NULL,
  clause      TEXT NOT NULL,
  requirement TEXT NOT NULL,
  rule        TEXT NOT NULL,
  labels      TEXT NOT NULL,
  verdict     TEXT NOT NULL,
  margin      REAL,
  u_margin    REAL,
  unit        TEXT NOT NULL,
  probability REAL,
  draws       INTEGER NOT NULL,
  reason      TEXT NOT NULL,
  PRIMARY KEY (run, slot, position),
  FOREIGN KEY (run, slot) REFERENCES trial_index (run, slot)
) STRICT;

CREATE TABLE events (
  run      TEXT NOT NULL REFERENCES runs (run),
  position INTEGER NOT NULL,
  at       REAL NOT NULL,      -- bench seconds
  kind     TEXT NOT NULL,
  slot     TEXT NOT NULL,
  step     TEXT NOT NULL,
  text     TEXT NOT NULL,
  PRIMARY KEY (run, position)
) STRICT;

-- For any SQLite client.
CREATE VIEW trials AS
  SELECT t.serial, t.part, t.verdict, t.run, t.slot, datetime(r.started / 1000000000, 'unixepoch') AS started_utc,
         r.procedure, r.revision, r.operator, r.bench, r.outcome, t.reason
  FROM trial_index t JOIN runs r USING (run)
  ORDER BY r.started, t.slot;

CREATE VIEW figures_by_trial AS
  SELECT t.serial, t.part, f.run, f.slot, datetime(r.started / 1000000000, 'unixepoch') AS started_utc,
         f.name AS figure, f.labels, f.value, f.unit, f.u, f.dof, f.low, f.high, f.method, f.reason
  FROM figures f JOIN trial_index t USING (run, slot) JOIN runs r USING (run)
  ORDER BY r.started, f.slot, f.position;

CREATE VIEW judgements_by_trial AS
  SELECT t.serial, t.part, j.run, j.slot, datetime(r.started / 1000000000, 'unixepoch') AS started_utc,
         j.clause, j.requirement, j.rule, j.labels, j.verdict, j.margin, j.u_margin, j.unit, j.probability, j.reason
  FROM judgements j JOIN trial_index t USING (run, slot) JOIN runs r USING (run)
  ORDER BY r.started, j.slot, j.position;

-- A courtesy: the chain is the proof.
CREATE TRIGGER entries_kept BEFORE DELETE ON entries BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER entries_unchanged BEFORE UPDATE ON entries BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER documents_kept BEFORE DELETE ON documents BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER documents_unchanged BEFORE UPDATE ON documents BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER runs_kept BEFORE DELETE ON runs BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER runs_unchanged BEFORE UPDATE ON runs BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER parameters_kept BEFORE DELETE ON parameters BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER parameters_unchanged BEFORE UPDATE ON parameters BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER instruments_kept BEFORE DELETE ON instruments BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER instruments_unchanged BEFORE UPDATE ON instruments BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER trial_index_kept BEFORE DELETE ON trial_index BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER trial_index_unchanged BEFORE UPDATE ON trial_index BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER recordings_kept BEFORE DELETE ON recordings BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER recordings_unchanged BEFORE UPDATE ON recordings BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER figures_kept BEFORE DELETE ON figures BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER figures_unchanged BEFORE UPDATE ON figures BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER judgements_kept BEFORE DELETE ON judgements BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER judgements_unchanged BEFORE UPDATE ON judgements BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER events_kept BEFORE DELETE ON events BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
CREATE TRIGGER events_unchanged BEFORE UPDATE ON events BEGIN SELECT RAISE(ABORT, 'the ledger keeps what it has'); END;
