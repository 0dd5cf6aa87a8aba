"""The ledger's tables; ``docs/ledger.md`` explains them to people with other tools."""

from scatterfit.overnight.columns import NUMBERS

APPLICATION_ID = 0x53466C67
"""Marks the SQLite file as a ledger (``PRAGMA application_id``)."""

VERSION = 2
"""Of the tables (``PRAGMA user_version``); a newer one is refused, an older one brought up."""

ADDED = tuple(name for name in NUMBERS
              if name.startswith(("background_", "start_")))
"""Columns of numbers that version 1 lacks."""

_NUMBERS = ",\n".join(f'    "{name}" REAL' for name in NUMBERS)

VIEW = """CREATE VIEW night AS
SELECT pulses.*,
       coalesce(last.excluded, 0) AS excluded,
       CASE WHEN last.excluded THEN last.author END AS excluded_by,
       CASE WHEN last.excluded THEN last.note END AS excluded_note
FROM pulses LEFT JOIN exclusions AS last
  ON last.id = (SELECT max(id) FROM exclusions WHERE exclusions.trace = pulses.trace)"""
"""The view for people: one row a trace, with what is excluded by hand."""

SCHEMA = f"""
CREATE TABLE about (
    name TEXT PRIMARY KEY,
    value TEXT
) WITHOUT ROWID;

CREATE TABLE chambers (
    sha256 TEXT PRIMARY KEY,
    name TEXT NOT NULL,
    text TEXT NOT NULL
) WITHOUT ROWID;

CREATE TABLE pulses (
    id INTEGER PRIMARY KEY,
    trace TEXT NOT NULL UNIQUE,
    verdict TEXT NOT NULL,
    reasons TEXT NOT NULL,
{_NUMBERS},
    overrides TEXT NOT NULL DEFAULT '{{}}',
    trace_sha256 TEXT,
    chamber_sha256 TEXT,
    set_outside TEXT NOT NULL DEFAULT '{{}}',
    version TEXT NOT NULL,
    size INTEGER,
    mtime_ns INTEGER,
    ctime_ns INTEGER,
    read_ns INTEGER,
    recorded_utc TEXT,
    fitted_utc TEXT NOT NULL,
    fit_seconds REAL
);

CREATE TABLE details (
    pulse INTEGER PRIMARY KEY REFERENCES pulses (id) ON DELETE CASCADE,
    result TEXT NOT NULL,
    thinned TEXT NOT NULL
);

CREATE TABLE exclusions (
    id INTEGER PRIMARY KEY,
    trace TEXT NOT NULL,
    excluded INTEGER NOT NULL,
    author TEXT NOT NULL,
    note TEXT NOT NULL,
    at_utc TEXT NOT NULL
);
CREATE INDEX exclusions_by_trace ON exclusions (trace, id);

CREATE TABLE queue (
    trace TEXT PRIMARY KEY,
    path BLOB,
    why TEXT NOT NULL,
    seen REAL NOT NULL,
    claimed_by TEXT,
    claimed_until REAL
) WITHOUT ROWID;
CREATE INDEX queue_free ON queue (trace) WHERE claimed_by IS NULL;
CREATE INDEX queue_claimed ON queue (claimed_until) WHERE claimed_by IS NOT NULL;

{VIEW};
"""
"""Statements that make a new ledger."""
