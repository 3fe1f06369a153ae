//! Statements on replays.
//!
//! A report that is kept no longer is empty: its batch cannot be compared.

pub(in crate::store::sqlite) const INSERT_REPLAY: &str = "
    INSERT INTO replays
        (plant_id, from_ns, to_ns, revision, media_type, source, who, reason, at_ns, state,
         batches, made)
    SELECT p.id, ?2, ?3, ?4, ?5, ?6, ?7, ?8, ?9, 'running',
           (SELECT COUNT(*) FROM inbox i JOIN results r ON r.inbox_id = i.id
            WHERE i.plant_id = p.id AND i.start_ns >= ?2 AND i.start_ns < ?3
              AND LENGTH(r.report) > 0),
           0
    FROM plants p
    WHERE p.name = ?1
      AND (?4 IS NULL
           OR EXISTS (SELECT 1 FROM revisions v WHERE v.plant_id = p.id AND v.revision = ?4))
    RETURNING id";

/// Replays of a plant, or of all: the one of a number, or those before a number.
pub(in crate::store::sqlite) const REPLAYS: &str = "
    SELECT r.id, p.name AS plant, r.from_ns, r.to_ns, r.revision, r.media_type, r.source, r.who,
           r.reason, r.at_ns, r.state, r.batches, r.made, r.ended_ns
    FROM replays r JOIN plants p ON p.id = r.plant_id
    WHERE r.plant_id = (SELECT id FROM plants WHERE name = ?1)
      AND (?2 IS NULL OR r.id = ?2) AND (?3 IS NULL OR r.id < ?3)
    ORDER BY r.id DESC LIMIT ?4";

pub(in crate::store::sqlite) const RUNNING_REPLAYS: &str = "
    SELECT r.id, p.name AS plant, r.from_ns, r.to_ns, r.revision, r.media_type, r.source, r.who,
           r.reason, r.at_ns, r.state, r.batches, r.made, r.ended_ns
    FROM replays r JOIN plants p ON p.id = r.plant_id
    WHERE r.state = 'running'
    ORDER BY r.id";

pub(in crate::store::sqlite) const ONE_REPLAY: &str = "
    SELECT r.id, p.name AS plant, r.from_ns, r.to_ns, r.revision, r.media_type, r.source, r.who,
           r.reason, r.at_ns, r.state, r.batches, r.made, r.ended_ns
    FROM replays r JOIN plants p ON p.id = r.plant_id
    WHERE r.id = ?1";

pub(in crate::store::sqlite) const UNREPLAYED: &str = "
    SELECT i.batch
    FROM replays p JOIN inbox i ON i.plant_id = p.plant_id JOIN results r ON r.inbox_id = i.id
    WHERE p.id = ?1 AND p.state = 'running'
      AND i.start_ns >= p.from_ns AND i.start_ns < p.to_ns
      AND LENGTH(r.report) > 0
      AND NOT EXISTS (SELECT 1 FROM replayed d
                      WHERE d.replay_id = ?1 AND d.start_ns = i.start_ns AND d.inbox_id = i.id)
    ORDER BY i.start_ns, i.id LIMIT ?2";

/// Nothing is added to a replay that has ended.
pub(in crate::store::sqlite) const INSERT_REPLAYED: &str = "
    INSERT INTO replayed (replay_id, start_ns, inbox_id, report)
    SELECT p.id, i.start_ns, i.id, ?3
    FROM replays p JOIN inbox i ON i.plant_id = p.plant_id AND i.batch = ?2
    WHERE p.id = ?1 AND p.state = 'running'
      AND i.start_ns >= p.from_ns AND i.start_ns < p.to_ns
    ON CONFLICT DO NOTHING";

/// A batch whose result came after the replay was asked for counts too.
pub(in crate::store::sqlite) const COUNT_REPLAYED: &str = "
    UPDATE replays SET made = made + 1, batches = MAX(batches, made + 1) WHERE id = ?1";

pub(in crate::store::sqlite) const END_REPLAY: &str = "
    UPDATE replays SET state = ?2, ended_ns = ?3 WHERE id = ?1 AND state = 'running'";

pub(in crate::store::sqlite) const REPLAYED: &str = "
    SELECT i.id, i.batch, i.start_ns, i.end_ns, i.revision, r.verdict, r.statistic,
           r.degrees_of_freedom, r.report AS before, d.report AS after
    FROM replayed d JOIN inbox i ON i.id = d.inbox_id JOIN results r ON r.inbox_id = d.inbox_id
    WHERE d.replay_id = ?1 AND (d.start_ns, d.inbox_id) > (?2, ?3) AND LENGTH(r.report) > 0
    ORDER BY d.start_ns, d.inbox_id LIMIT ?4";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_REPLAYS: &[&str] = &[
    INSERT_REPLAY,
    REPLAYS,
    RUNNING_REPLAYS,
    ONE_REPLAY,
    UNREPLAYED,
    INSERT_REPLAYED,
    COUNT_REPLAYED,
    END_REPLAY,
    REPLAYED,
];
