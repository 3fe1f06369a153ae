-- Samples as historians send them, the periods that have to be made from them,
-- what the batches of these periods were made from, and backfills.
--
-- Times are nanoseconds since 1970 in UTC. Digests are SHA-256. Blobs named
-- `body` are zstd frames. Periods of one plant never overlap.

-- Names of tags, so that a sample carries a short number.
CREATE TABLE sample_tags (
    id       INTEGER PRIMARY KEY,
    plant_id INTEGER NOT NULL REFERENCES plants (id),
    tag      TEXT    NOT NULL,
    UNIQUE (plant_id, tag)
) STRICT;

-- The acknowledged record of what came as samples: one value of a tag at an
-- instant, the first that came. The key holds a tag's samples together in order
-- of time.
CREATE TABLE samples (
    tag_id  INTEGER NOT NULL REFERENCES sample_tags (id),
    time_ns INTEGER NOT NULL,
    value   REAL,    -- in the tag's unit; null: the source had none
    grade   INTEGER NOT NULL, -- 0 good, 1 uncertain, 2 bad
    code    INTEGER, -- OPC UA status code as sent
    PRIMARY KEY (tag_id, time_ns)
) STRICT, WITHOUT ROWID;

-- Periods that have to be made or made again. A row goes when its batch is in
-- the inbox.
CREATE TABLE open_periods (
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    start_ns   INTEGER NOT NULL,
    end_ns     INTEGER NOT NULL,
    generation INTEGER NOT NULL, -- of the samples that matter to it
    backfill   INTEGER NOT NULL CHECK (backfill IN (0, 1)), -- only backfills touched it
    touched_ns INTEGER NOT NULL,
    PRIMARY KEY (plant_id, start_ns)
) STRICT, WITHOUT ROWID;

CREATE INDEX open_periods_in_turn ON open_periods (plant_id, backfill, start_ns);

-- One row that counts the calls that opened something: a period that is closed
-- and opened again must not come by a generation that it had before.
CREATE TABLE generations (
    id    INTEGER PRIMARY KEY CHECK (id = 1),
    count INTEGER NOT NULL
) STRICT;

-- Periods that have a batch made from samples. Batches that a client sent ready
-- made have none.
CREATE TABLE made_periods (
    plant_id INTEGER NOT NULL REFERENCES plants (id),
    start_ns INTEGER NOT NULL,
    end_ns   INTEGER NOT NULL,
    inbox_id INTEGER NOT NULL UNIQUE REFERENCES inbox (id),
    PRIMARY KEY (plant_id, start_ns)
) STRICT, WITHOUT ROWID;

-- What late samples made of a batch: body 1 stands in `inbox`, the later ones
-- here, and the highest is the one that counts.
CREATE TABLE inbox_bodies (
    inbox_id    INTEGER NOT NULL REFERENCES inbox (id),
    version     INTEGER NOT NULL CHECK (version > 1),
    digest      BLOB    NOT NULL, -- of the canonical content
    received_ns INTEGER NOT NULL,
    body        BLOB    NOT NULL,
    PRIMARY KEY (inbox_id, version)
) STRICT;

-- Which of them a result was reconciled from.
ALTER TABLE results ADD COLUMN body INTEGER NOT NULL DEFAULT 1;
ALTER TABLE former_results ADD COLUMN body INTEGER NOT NULL DEFAULT 1;

-- Batches that have a result, but from an older body than they have now.
CREATE TABLE pending_again (
    inbox_id INTEGER PRIMARY KEY REFERENCES inbox (id),
    backfill INTEGER NOT NULL CHECK (backfill IN (0, 1)) -- only a backfill brought it
) STRICT;

ALTER TABLE pending ADD COLUMN backfill INTEGER NOT NULL DEFAULT 0;

-- How far each backfill has come, moved on with its samples.
CREATE TABLE backfills (
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    name       TEXT    NOT NULL, -- the client's own
    bytes      INTEGER NOT NULL, -- settled, after decompression
    lines      INTEGER NOT NULL,
    refused    INTEGER NOT NULL, -- samples
    header     TEXT,             -- first line of a CSV
    begun_ns   INTEGER NOT NULL,
    touched_ns INTEGER NOT NULL,
    complete   INTEGER NOT NULL CHECK (complete IN (0, 1)),
    new        INTEGER NOT NULL, -- samples that were not there
    PRIMARY KEY (plant_id, name)
) STRICT;
