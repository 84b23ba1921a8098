-- First light: runs, rollups of a quarter of an hour, and what they point to.
--
-- Times are whole microseconds of UTC since 1970-01-01T00:00:00Z; every range is half-open.
-- States: 0 occupied, 1 idle, 2 unknown, 3 own. Reasons: bit n stands for the reason with code n.
-- Time without a row is unknown (not observed); it is never idle.

-- Whose history this is.
CREATE TABLE site (
    one             INTEGER PRIMARY KEY CHECK (one = 1),
    site            TEXT NOT NULL,
    node            TEXT NOT NULL,
    first_report_us INTEGER
) STRICT;

-- Which configuration and program made a stretch of history.
CREATE TABLE configuration (
    id              INTEGER PRIMARY KEY,
    sha256          TEXT NOT NULL,
    text            TEXT NOT NULL,
    program_version TEXT NOT NULL,
    level_ref       TEXT NOT NULL,
    first_used_us   INTEGER NOT NULL,
    UNIQUE (sha256, program_version)
) STRICT;

-- One identity of a channel. A changed plan makes a new row and leaves the older history as it was;
-- valid_to_us is null for the identity in force.
CREATE TABLE channel (
    id            INTEGER PRIMARY KEY,
    name          TEXT NOT NULL,
    band          TEXT NOT NULL,
    centre_hz     REAL NOT NULL,
    bandwidth_hz  REAL NOT NULL,
    valid_from_us INTEGER NOT NULL,
    valid_to_us   INTEGER,
    CHECK (valid_to_us IS NULL OR valid_from_us <= valid_to_us)
) STRICT;

CREATE UNIQUE INDEX channel_in_force ON channel (name) WHERE valid_to_us IS NULL;

-- A stretch of consecutive equal verdicts. Powers are of occupied runs, in the configuration's
-- level reference; observed_us is the part of the stretch in which samples were really taken.
CREATE TABLE run (
    channel       INTEGER NOT NULL REFERENCES channel (id),
    start_us      INTEGER NOT NULL,
    end_us        INTEGER NOT NULL,
    state         INTEGER NOT NULL CHECK (state BETWEEN 0 AND 3),
    reasons       INTEGER NOT NULL,
    power_mean_db REAL,
    power_max_db  REAL,
    observed_us   INTEGER NOT NULL,
    configuration INTEGER NOT NULL REFERENCES configuration (id),
    PRIMARY KEY (channel, start_us),
    CHECK (start_us < end_us),
    CHECK (observed_us BETWEEN 0 AND end_us - start_us)
) STRICT, WITHOUT ROWID;

-- What the runs of a channel add up to in a quarter of an hour. A quarter in which nobody looked at
-- all has no row.
CREATE TABLE quarter (
    channel     INTEGER NOT NULL REFERENCES channel (id),
    start_us    INTEGER NOT NULL CHECK (start_us % 900000000 = 0),
    occupied_us INTEGER NOT NULL,
    idle_us     INTEGER NOT NULL,
    unknown_us  INTEGER NOT NULL,
    own_us      INTEGER NOT NULL,
    observed_us INTEGER NOT NULL,
    PRIMARY KEY (channel, start_us),
    CHECK (occupied_us + idle_us + unknown_us + own_us <= 900000000)
) STRICT, WITHOUT ROWID;

-- The end of the last report on the record: from here on nobody knows.
CREATE TABLE progress (
    one               INTEGER PRIMARY KEY CHECK (one = 1),
    recorded_until_us INTEGER NOT NULL
) STRICT;
