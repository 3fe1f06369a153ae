-- Replays: past periods reconciled under another revision or a plant file that
-- is not accepted yet, kept beside the results.
--
-- Times are nanoseconds since 1970 in UTC. Blobs named `report` are zstd frames.

CREATE TABLE replays (
    id         INTEGER PRIMARY KEY AUTOINCREMENT,
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    from_ns    INTEGER NOT NULL,
    to_ns      INTEGER NOT NULL,
    revision   INTEGER, -- null: the plant file below
    media_type TEXT,    -- of `source`
    source     TEXT,    -- as sent
    who        TEXT    NOT NULL,
    reason     TEXT    NOT NULL,
    at_ns      INTEGER NOT NULL,
    state      TEXT    NOT NULL CHECK (state IN ('running', 'done', 'cancelled')),
    batches    INTEGER NOT NULL, -- with a result when it was asked for
    made       INTEGER NOT NULL, -- rows of `replayed`
    ended_ns   INTEGER,
    CHECK ((revision IS NULL) = (source IS NOT NULL AND media_type IS NOT NULL)),
    FOREIGN KEY (plant_id, revision) REFERENCES revisions (plant_id, revision)
) STRICT;

CREATE INDEX replays_of_plant ON replays (plant_id, id);
CREATE INDEX replays_by_state ON replays (state, id);

-- What batches would be.
CREATE TABLE replayed (
    replay_id INTEGER NOT NULL REFERENCES replays (id),
    start_ns  INTEGER NOT NULL, -- of the batch
    inbox_id  INTEGER NOT NULL REFERENCES inbox (id),
    report    BLOB    NOT NULL, -- JSON
    PRIMARY KEY (replay_id, start_ns, inbox_id)
) STRICT;
