-- The first tables: plants with their revisions, the inbox, one result per batch.
--
-- Times are nanoseconds since 1970 in UTC. Digests are SHA-256. Blobs named
-- `body`, `report` and `channels` are zstd frames.

CREATE TABLE plants (
    id   INTEGER PRIMARY KEY,
    name TEXT NOT NULL UNIQUE
) STRICT;

-- One accepted plant file each; never changed, never deleted.
CREATE TABLE revisions (
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    revision   INTEGER NOT NULL CHECK (revision > 0),
    title      TEXT    NOT NULL,
    digest     BLOB    NOT NULL, -- of `canonical`
    media_type TEXT    NOT NULL, -- of `source`
    source     TEXT    NOT NULL, -- as sent
    canonical  TEXT    NOT NULL, -- as JSON
    created_ns INTEGER NOT NULL,
    PRIMARY KEY (plant_id, revision)
) STRICT;

-- The acknowledged record: whatever stands here has been promised.
CREATE TABLE inbox (
    id          INTEGER PRIMARY KEY,
    plant_id    INTEGER NOT NULL REFERENCES plants (id),
    batch       TEXT    NOT NULL, -- the client's own name
    revision    INTEGER NOT NULL, -- current when it came
    digest      BLOB    NOT NULL, -- of the canonical content
    start_ns    INTEGER NOT NULL,
    end_ns      INTEGER NOT NULL,
    received_ns INTEGER NOT NULL,
    body        BLOB    NOT NULL, -- as sent
    UNIQUE (plant_id, batch),
    FOREIGN KEY (plant_id, revision) REFERENCES revisions (plant_id, revision)
) STRICT;

CREATE INDEX inbox_by_time ON inbox (plant_id, start_ns, id);

-- Accepted and not finished. A table of its own, so that a start finds them
-- without reading the inbox, and finishing does not rewrite a row with a body.
CREATE TABLE pending (
    inbox_id INTEGER PRIMARY KEY REFERENCES inbox (id)
) STRICT;

-- Which number of `results.numbers` belongs to what: few rows, many results.
CREATE TABLE layouts (
    id       INTEGER PRIMARY KEY,
    digest   BLOB NOT NULL UNIQUE, -- of the channels before compression
    channels BLOB NOT NULL         -- JSON
) STRICT;

CREATE TABLE results (
    inbox_id           INTEGER PRIMARY KEY REFERENCES inbox (id),
    verdict            TEXT    NOT NULL,
    statistic          REAL,
    degrees_of_freedom INTEGER,
    layout_id          INTEGER NOT NULL REFERENCES layouts (id),
    numbers            BLOB    NOT NULL, -- doubles, little endian, NaN for none
    report             BLOB    NOT NULL  -- JSON
) STRICT;

-- Critical values of the single tests, each worked out at the first batch of its
-- class set and kept, so that every later batch and every replay of the revision
-- is held against the same.
CREATE TABLE critical_values (
    plant_id  INTEGER NOT NULL REFERENCES plants (id),
    revision  INTEGER NOT NULL,
    class_set TEXT    NOT NULL,
    test      TEXT    NOT NULL, -- JSON
    PRIMARY KEY (plant_id, revision, class_set),
    FOREIGN KEY (plant_id, revision) REFERENCES revisions (plant_id, revision)
) STRICT;

-- One row, rewritten at every start: proves that this file takes a durable write.
CREATE TABLE starts (
    id    INTEGER PRIMARY KEY CHECK (id = 1),
    count INTEGER NOT NULL
) STRICT;
