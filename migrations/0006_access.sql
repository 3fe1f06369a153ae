-- Who may do what, and who changed what: tokens and the audit log.
--
-- Times are nanoseconds since 1970 in UTC. Of a token only the SHA-256 is kept.

CREATE TABLE tokens (
    id         INTEGER PRIMARY KEY,
    name       TEXT    NOT NULL,
    digest     BLOB    NOT NULL UNIQUE CHECK (length(digest) = 32),
    scopes     TEXT    NOT NULL, -- names, with commas between
    plants     TEXT,             -- JSON list of names; null: every plant
    expires_ns INTEGER,
    rate       REAL CHECK (rate > 0), -- requests a second
    made_ns    INTEGER NOT NULL,
    revoked_ns INTEGER
) STRICT;

-- A name can be given again when the token that had it is revoked.
CREATE UNIQUE INDEX tokens_in_force ON tokens (name) WHERE revoked_ns IS NULL;

-- A table of its own: what is noted every minute must not look like a change of
-- the token.
CREATE TABLE token_uses (
    token_id INTEGER PRIMARY KEY REFERENCES tokens (id),
    used_ns  INTEGER NOT NULL
) STRICT;

-- One row that counts changes of tokens, by whichever program: what is
-- remembered of them is good as long as it stands.
CREATE TABLE tokens_version (
    id      INTEGER PRIMARY KEY CHECK (id = 1),
    version INTEGER NOT NULL
) STRICT;

INSERT INTO tokens_version (id, version) VALUES (1, 0);

CREATE TRIGGER tokens_made AFTER INSERT ON tokens BEGIN
    UPDATE tokens_version SET version = version + 1;
END;

CREATE TRIGGER tokens_changed AFTER UPDATE ON tokens BEGIN
    UPDATE tokens_version SET version = version + 1;
END;

CREATE TRIGGER tokens_stay BEFORE DELETE ON tokens BEGIN
    SELECT RAISE(ABORT, 'a token is revoked, never deleted');
END;

-- Each entry is written in the transaction of the change that it tells of.
CREATE TABLE deeds (
    id    INTEGER PRIMARY KEY AUTOINCREMENT,
    at_ns INTEGER NOT NULL,
    actor TEXT    NOT NULL, -- JSON
    kind  TEXT    NOT NULL,
    plant TEXT,
    what  TEXT    NOT NULL  -- JSON
) STRICT;

CREATE INDEX deeds_of_plant ON deeds (plant, id);

CREATE TRIGGER deeds_stand BEFORE UPDATE ON deeds BEGIN
    SELECT RAISE(ABORT, 'the audit log is only added to');
END;

CREATE TRIGGER deeds_stay BEFORE DELETE ON deeds BEGIN
    SELECT RAISE(ABORT, 'the audit log is only added to');
END;
