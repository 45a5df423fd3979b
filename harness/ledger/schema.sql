-- The ledger, format 1. One writer; readers at any time (write-ahead log).
-- Keys are 16-byte digests, graphs are JSON over positions in the network's order, times are UTC in ISO 8601.

CREATE TABLE plan (
    id INTEGER PRIMARY KEY,
    digest BLOB NOT NULL UNIQUE,
    text TEXT NOT NULL,
    expansion TEXT NOT NULL,        -- JSON: conditions with their networks' keys, rows, labels, requirement
    first_started TEXT NOT NULL,
    last_started TEXT NOT NULL
) STRICT;

CREATE TABLE session (
    id INTEGER PRIMARY KEY,
    host TEXT NOT NULL,
    cpu TEXT NOT NULL,
    versions TEXT NOT NULL,         -- JSON: package -> version
    workers INTEGER NOT NULL,
    started TEXT NOT NULL,
    ended TEXT,                     -- null: still going, or killed
    ending TEXT                     -- how it ended, in a word
) STRICT;

CREATE TABLE network (
    id INTEGER PRIMARY KEY,
    key BLOB NOT NULL UNIQUE,
    factors TEXT NOT NULL,          -- JSON: the effective [networks] keys
    replicate INTEGER NOT NULL,
    graph TEXT NOT NULL,            -- JSON: {"names": [...], "edges": [[i, j, 1], ...]}
    strengths TEXT,                 -- JSON: one number per arc, where computed
    cpts_digest BLOB NOT NULL
) STRICT;

CREATE TABLE dataset (
    id INTEGER PRIMARY KEY,
    key BLOB NOT NULL,
    network INTEGER NOT NULL REFERENCES network (id),
    "index" INTEGER NOT NULL,
    distortions TEXT NOT NULL,      -- JSON: the effective [data] keys that change cells
    view_digest BLOB NOT NULL,
    UNIQUE (key, distortions)
) STRICT;

CREATE TABLE learner (
    id INTEGER PRIMARY KEY,
    key BLOB NOT NULL UNIQUE,
    method TEXT NOT NULL,
    settings TEXT NOT NULL,         -- JSON: those that differ from the defaults
    origin TEXT NOT NULL,           -- empty for built-in methods
    origin_digest TEXT NOT NULL,
    revision INTEGER NOT NULL,
    returns TEXT NOT NULL
) STRICT;

CREATE TABLE label (
    plan INTEGER NOT NULL REFERENCES plan (id),
    label TEXT NOT NULL,
    learner INTEGER NOT NULL REFERENCES learner (id),
    PRIMARY KEY (plan, label)
) STRICT, WITHOUT ROWID;

CREATE TABLE run (
    id INTEGER PRIMARY KEY,
    dataset INTEGER NOT NULL REFERENCES dataset (id),
    rows INTEGER NOT NULL,
    learner INTEGER NOT NULL REFERENCES learner (id),
    status TEXT NOT NULL,
    cause TEXT NOT NULL,
    graph TEXT,                     -- JSON: [[i, j, 1 directed or 0 undirected], ...]
    extendable INTEGER,
    wall_seconds REAL,
    cpu_seconds REAL,
    peak_rss_mb REAL,
    limits TEXT NOT NULL,           -- JSON: seconds, memory_mb
    threads INTEGER NOT NULL,
    load REAL,
    session INTEGER NOT NULL REFERENCES session (id),
    started TEXT NOT NULL,
    asked_by TEXT NOT NULL,
    UNIQUE (dataset, rows, learner)
) STRICT;

CREATE TABLE attempt (              -- earlier outcomes of runs that were asked again
    run INTEGER NOT NULL REFERENCES run (id),
    status TEXT NOT NULL,
    cause TEXT NOT NULL,
    wall_seconds REAL,
    limits TEXT NOT NULL,
    session INTEGER NOT NULL REFERENCES session (id),
    started TEXT NOT NULL
) STRICT;

CREATE TABLE measure (
    run INTEGER PRIMARY KEY REFERENCES run (id),
    scorer_revision INTEGER NOT NULL,
    class_shd REAL,
    dag_shd REAL,
    shd_per_arc REAL,
    skeleton_precision REAL,
    skeleton_recall REAL,
    skeleton_f1 REAL,
    direction_precision REAL,
    direction_recall REAL,
    collider_precision REAL,
    collider_recall REAL,
    imap REAL,
    minimal_imap REAL,
    perfect_map REAL,
    undefined TEXT NOT NULL         -- JSON: measure -> reason
) STRICT;

CREATE TABLE audit (
    dataset INTEGER NOT NULL REFERENCES dataset (id),
    rows INTEGER NOT NULL,
    name TEXT NOT NULL,
    value REAL,
    PRIMARY KEY (dataset, rows, name)
) STRICT, WITHOUT ROWID;
