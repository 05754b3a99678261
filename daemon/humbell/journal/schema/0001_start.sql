-- The first form of the journal. One sequence number, `seq`, counts everything that is stored; `feed` lists it.
-- Times are UTC in ns since 1970 unless the name says otherwise; `boot` and `mono_ns` say when on the monotonic clock.

CREATE TABLE boot (
    boot TEXT NOT NULL,
    mono_ns INTEGER NOT NULL,
    utc_ns INTEGER NOT NULL,
    clock_known INTEGER NOT NULL
) STRICT;

CREATE TABLE configuration (
    digest TEXT PRIMARY KEY,
    utc_ns INTEGER NOT NULL,
    content TEXT NOT NULL
) STRICT, WITHOUT ROWID;

-- Points, and their measures, are stored by number, so that a row of readings stays small: bytes are wear.
CREATE TABLE point (
    id INTEGER PRIMARY KEY,
    machine TEXT NOT NULL,
    point TEXT NOT NULL,
    UNIQUE (machine, point)
) STRICT;

CREATE TABLE series (
    id INTEGER PRIMARY KEY,
    point INTEGER NOT NULL,
    measure TEXT NOT NULL,
    UNIQUE (point, measure)
) STRICT;

CREATE TABLE feed (
    seq INTEGER PRIMARY KEY,
    kind TEXT NOT NULL CHECK (kind IN ('chunks', 'transition', 'audit')),
    boot TEXT NOT NULL,
    mono_ns INTEGER NOT NULL,
    utc_ns INTEGER NOT NULL,
    clock_known INTEGER NOT NULL,
    configuration TEXT NOT NULL
) STRICT;

-- Summary of the readings of one series between two commits. `id` is seq * 4096 + series: ascending row ids are appended
-- without touching other pages, which an index would do. The same holds for the values, which are in a table of their
-- own so that shedding the oldest gives whole pages back.
CREATE TABLE chunk (
    id INTEGER PRIMARY KEY,
    start_ns INTEGER NOT NULL,
    end_ns INTEGER NOT NULL,
    good_s REAL NOT NULL,
    mean_square REAL,
    maximum REAL,
    worst INTEGER NOT NULL -- 0 good, 1 uncertain, 2 bad
) STRICT;

CREATE TABLE chunk_values (
    id INTEGER PRIMARY KEY,
    readings BLOB NOT NULL
) STRICT;

CREATE TABLE hour (
    start_ns INTEGER NOT NULL,
    series INTEGER NOT NULL,
    good_s REAL NOT NULL,
    mean_square REAL,
    maximum REAL,
    worst INTEGER NOT NULL, -- 0 good, 1 uncertain, 2 bad
    PRIMARY KEY (start_ns, series)
) STRICT, WITHOUT ROWID;

CREATE TABLE coverage (
    id INTEGER PRIMARY KEY,
    start_ns INTEGER NOT NULL,
    point INTEGER NOT NULL,
    category INTEGER NOT NULL, -- by precedence: 0 out of service ... 6 measured
    seconds REAL NOT NULL,
    judged_s REAL NOT NULL,
    unsure_s REAL NOT NULL
) STRICT;

-- `state` is all that is needed to go on from here after a restart.
CREATE TABLE transition (
    seq INTEGER PRIMARY KEY,
    time_ns INTEGER NOT NULL,
    machine TEXT NOT NULL,
    point TEXT NOT NULL,
    measure TEXT NOT NULL,
    type TEXT NOT NULL,
    before TEXT NOT NULL,
    after TEXT NOT NULL,
    verified INTEGER NOT NULL,
    value REAL,
    limit_value REAL NOT NULL,
    occurrence TEXT,
    state TEXT NOT NULL
) STRICT;

-- The states of all alarms at a commit; one row.
CREATE TABLE checkpoint (
    id INTEGER PRIMARY KEY CHECK (id = 1),
    seq INTEGER NOT NULL,
    time_ns INTEGER NOT NULL,
    states BLOB NOT NULL
) STRICT;

CREATE TABLE audit (
    seq INTEGER PRIMARY KEY,
    who TEXT NOT NULL,
    origin TEXT NOT NULL,
    action TEXT NOT NULL,
    target TEXT NOT NULL,
    note TEXT NOT NULL,
    outcome TEXT NOT NULL
) STRICT;

-- How far each outlet has got in each lane, and what it still owes.
CREATE TABLE cursor (
    outlet TEXT NOT NULL,
    lane TEXT NOT NULL,
    seq INTEGER NOT NULL,
    PRIMARY KEY (outlet, lane)
) STRICT, WITHOUT ROWID;

CREATE TABLE backlog (
    outlet TEXT NOT NULL,
    first_seq INTEGER NOT NULL,
    last_seq INTEGER NOT NULL,
    PRIMARY KEY (outlet, first_seq)
) STRICT, WITHOUT ROWID;
