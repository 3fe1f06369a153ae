-- What becomes of results with time: chunks by quantity and day, means, and what
-- retention has removed.
--
-- A day is a number of days since 1970, UTC; a batch belongs to the day in which
-- its period starts. From here on the numbers of a new result stand in
-- `hot_numbers` and `results.numbers` is empty: chunking a day then frees whole
-- pages and rewrites no report. `report`, `body` and `numbers` are empty (no
-- bytes at all, which no frame is) where retention has removed them.

-- When retention removed body and report.
ALTER TABLE inbox ADD COLUMN removed_ns INTEGER;

-- Numbers of results of days that are not chunked, or were changed since.
CREATE TABLE hot_numbers (
    inbox_id INTEGER PRIMARY KEY REFERENCES inbox (id),
    numbers  BLOB NOT NULL -- doubles, little endian, NaN for none
) STRICT;

-- How far numbers have been moved out of `results`: those up to `last` are older
-- than this schema.
CREATE TABLE old_numbers (
    id   INTEGER PRIMARY KEY CHECK (id = 1),
    done INTEGER NOT NULL,
    last INTEGER NOT NULL
) STRICT;

INSERT INTO old_numbers (id, done, last)
SELECT 1, 0, COALESCE(MAX(inbox_id), 0) FROM results;

-- What has numbers: a tag or assumption, a quantity, an imbalance, in one unit.
CREATE TABLE channels (
    id       INTEGER PRIMARY KEY,
    plant_id INTEGER NOT NULL REFERENCES plants (id),
    name     TEXT    NOT NULL,
    kind     TEXT    NOT NULL,
    unit     TEXT    NOT NULL,
    UNIQUE (plant_id, name, kind, unit)
) STRICT;

-- Days that have results which are not in their chunks. Whoever keeps a result
-- raises the generation, so that a day which changes while it is chunked is seen.
CREATE TABLE dirty_days (
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    day        INTEGER NOT NULL,
    generation INTEGER NOT NULL,
    PRIMARY KEY (plant_id, day)
) STRICT, WITHOUT ROWID;

INSERT INTO dirty_days (plant_id, day, generation)
SELECT plant_id, start_ns / 86400000000000 - (start_ns % 86400000000000 < 0) AS day, 1
FROM inbox GROUP BY plant_id, day;

-- Days that have been chunked.
CREATE TABLE days (
    id       INTEGER PRIMARY KEY,
    plant_id INTEGER NOT NULL REFERENCES plants (id),
    day      INTEGER NOT NULL,
    side     INTEGER NOT NULL CHECK (side IN (0, 1)), -- of its chunks: a day is done anew on the other
    swept    INTEGER NOT NULL CHECK (swept IN (0, 1)), -- nothing of it is left in `hot_numbers` or on the other side
    whole    INTEGER NOT NULL CHECK (whole IN (0, 1)), -- it has bodies and reports
    closed   INTEGER NOT NULL CHECK (closed IN (0, 1)), -- retention has removed its numbers: its means stand
    batches  BLOB    NOT NULL, -- which batches its chunks are of, in their order
    verdicts BLOB    NOT NULL, -- how many of each, by hour
    UNIQUE (plant_id, day)
) STRICT;

CREATE INDEX days_to_sweep ON days (id) WHERE swept = 0;
CREATE INDEX days_whole ON days (plant_id, day) WHERE whole = 1;
CREATE INDEX days_bare ON days (plant_id, day) WHERE whole = 0 AND length(batches) > 0;

-- The numbers of one channel over one day. The number of a row is made of day,
-- side and channel, so that the rows of a day lie together.
CREATE TABLE chunks (
    id      INTEGER PRIMARY KEY,
    numbers BLOB NOT NULL
) STRICT;

-- Means of one channel over one day; the number of a row is made of day and
-- channel. Never removed.
CREATE TABLE means (
    id     INTEGER PRIMARY KEY,
    daily  BLOB NOT NULL,
    hourly BLOB NOT NULL
) STRICT;
