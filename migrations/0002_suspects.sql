-- What stands beside the results: older versions of a result, the watch over a
-- plant with its events and accusations, decisions by hand, field readings.
--
-- Times are nanoseconds since 1970 in UTC. Blobs named `watch` and `report` are
-- zstd frames. Nothing is ever deleted; `watches`, `accusations` and `results`
-- alone are rewritten, and what is lost to `watches` stands in `events`.

-- Results that another has taken the place of; `results` holds the present one.
CREATE TABLE former_results (
    inbox_id           INTEGER NOT NULL REFERENCES inbox (id),
    version            INTEGER NOT NULL CHECK (version > 0),
    verdict            TEXT    NOT NULL,
    statistic          REAL,
    degrees_of_freedom INTEGER,
    layout_id          INTEGER NOT NULL REFERENCES layouts (id),
    numbers            BLOB    NOT NULL, -- doubles, little endian, NaN for none
    report             BLOB    NOT NULL, -- JSON
    PRIMARY KEY (inbox_id, version)
) STRICT;

-- Why there is a version beyond the first.
CREATE TABLE reconciled_again (
    inbox_id INTEGER NOT NULL REFERENCES inbox (id),
    version  INTEGER NOT NULL CHECK (version > 1),
    at_ns    INTEGER NOT NULL,
    who      TEXT    NOT NULL,
    reason   TEXT    NOT NULL,
    PRIMARY KEY (inbox_id, version)
) STRICT;

-- The state of the alarms of a plant and the counts that lead to them.
CREATE TABLE watches (
    plant_id INTEGER PRIMARY KEY REFERENCES plants (id),
    watch    BLOB NOT NULL -- JSON
) STRICT;

-- One sequence over all plants, in which no number comes twice: a listener that
-- has seen one asks for those beyond it.
CREATE TABLE events (
    id       INTEGER PRIMARY KEY AUTOINCREMENT,
    plant_id INTEGER NOT NULL REFERENCES plants (id),
    alarm    INTEGER NOT NULL, -- the watch's number for it
    event    TEXT    NOT NULL  -- JSON
) STRICT;

CREATE INDEX events_of_plant ON events (plant_id, id);

-- Suspects that stood long enough, open until a person closes them.
CREATE TABLE accusations (
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    id         INTEGER NOT NULL, -- the watch's number for it
    open       INTEGER NOT NULL CHECK (open IN (0, 1)),
    accusation TEXT    NOT NULL, -- JSON
    PRIMARY KEY (plant_id, id)
) STRICT;

-- Accusations as they were closed before somebody closed them otherwise.
CREATE TABLE former_closings (
    id            INTEGER PRIMARY KEY,
    plant_id      INTEGER NOT NULL,
    accusation_id INTEGER NOT NULL,
    accusation    TEXT    NOT NULL, -- JSON
    FOREIGN KEY (plant_id, accusation_id) REFERENCES accusations (plant_id, id)
) STRICT;

-- Decisions by hand as they were entered.
CREATE TABLE by_hand (
    id         INTEGER PRIMARY KEY,
    plant_id   INTEGER NOT NULL REFERENCES plants (id),
    tag        TEXT    NOT NULL,
    added      REAL, -- to the reading, in the tag's unit; null: out of service
    from_ns    INTEGER NOT NULL,
    until_ns   INTEGER, -- null: until it is ended
    reason     TEXT    NOT NULL,
    who        TEXT    NOT NULL,
    entered_ns INTEGER NOT NULL
) STRICT;

CREATE INDEX by_hand_of_plant ON by_hand (plant_id, id);

-- Other ends that people put to them; the latest holds.
CREATE TABLE by_hand_ends (
    id         INTEGER PRIMARY KEY,
    by_hand_id INTEGER NOT NULL REFERENCES by_hand (id),
    until_ns   INTEGER NOT NULL,
    who        TEXT    NOT NULL,
    at_ns      INTEGER NOT NULL
) STRICT;

CREATE INDEX by_hand_ends_of_decision ON by_hand_ends (by_hand_id, id);

-- Readings taken in the field for one batch.
CREATE TABLE field_readings (
    id       INTEGER PRIMARY KEY,
    inbox_id INTEGER NOT NULL REFERENCES inbox (id),
    reading  TEXT    NOT NULL, -- JSON
    who      TEXT    NOT NULL,
    at_ns    INTEGER NOT NULL
) STRICT;

CREATE INDEX field_readings_of_batch ON field_readings (inbox_id, id);
