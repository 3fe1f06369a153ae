//! Statements on what stands beside the results.

pub(in crate::store::sqlite) const FIND_PLANT: &str = "
    SELECT id FROM plants WHERE name = ?1";

pub(in crate::store::sqlite) const PLANT_OF_BATCH: &str = "
    SELECT plant_id FROM inbox WHERE id = ?1";

/// Unless it is of a newer body than the one named.
pub(in crate::store::sqlite) const KEEP_FORMER_RESULT: &str = "
    INSERT INTO former_results
        (inbox_id, version, verdict, statistic, degrees_of_freedom, layout_id, numbers, report, body)
    SELECT r.inbox_id, 1 + (SELECT COUNT(*) FROM former_results f WHERE f.inbox_id = r.inbox_id),
           r.verdict, r.statistic, r.degrees_of_freedom, r.layout_id, r.numbers, r.report, r.body
    FROM results r WHERE r.inbox_id = ?1 AND r.body <= ?2
    RETURNING version";

pub(in crate::store::sqlite) const REPLACE_RESULT: &str = "
    UPDATE results
    SET verdict = ?2, statistic = ?3, degrees_of_freedom = ?4, layout_id = ?5, numbers = ?6,
        report = ?7, body = ?8
    WHERE inbox_id = ?1";

pub(in crate::store::sqlite) const INSERT_AGAIN: &str = "
    INSERT INTO reconciled_again (inbox_id, version, at_ns, who, reason)
    VALUES (?1, ?2, ?3, ?4, ?5)";

pub(in crate::store::sqlite) const VERSIONS: &str = "
    WITH one (id) AS (
        SELECT i.id FROM inbox i JOIN plants p ON p.id = i.plant_id
        WHERE p.name = ?1 AND i.batch = ?2),
    every (inbox_id, version, verdict, statistic, body) AS (
        SELECT f.inbox_id, f.version, f.verdict, f.statistic, f.body
        FROM former_results f JOIN one ON one.id = f.inbox_id
        UNION ALL
        SELECT r.inbox_id,
               1 + (SELECT COUNT(*) FROM former_results c WHERE c.inbox_id = r.inbox_id),
               r.verdict, r.statistic, r.body
        FROM results r JOIN one ON one.id = r.inbox_id)
    SELECT e.version, a.at_ns, a.who, a.reason, e.verdict, e.statistic, e.body
    FROM every e
    LEFT JOIN reconciled_again a ON a.inbox_id = e.inbox_id AND a.version = e.version
    ORDER BY e.version";

pub(in crate::store::sqlite) const ONE_VERSION: &str = "
    WITH one (id) AS (
        SELECT i.id FROM inbox i JOIN plants p ON p.id = i.plant_id
        WHERE p.name = ?1 AND i.batch = ?2)
    SELECT f.report
    FROM former_results f JOIN one ON one.id = f.inbox_id
    WHERE f.version = ?3
    UNION ALL
    SELECT r.report
    FROM results r JOIN one ON one.id = r.inbox_id
    WHERE ?3 = 1 + (SELECT COUNT(*) FROM former_results c WHERE c.inbox_id = r.inbox_id)";

/// With the newest body, whether there is a result, and whether it waits.
pub(in crate::store::sqlite) const INBOX: &str = "
    SELECT i.id, p.name AS plant, i.batch, i.revision, COALESCE(b.version, 1) AS version,
           COALESCE(b.received_ns, i.received_ns) AS received_ns,
           COALESCE(b.body, i.body) AS body,
           EXISTS (SELECT 1 FROM results r WHERE r.inbox_id = i.id) AS again,
           w.inbox_id IS NOT NULL OR a.inbox_id IS NOT NULL AS pending,
           COALESCE(w.backfill, a.backfill, 0) AS backfill
    FROM inbox i JOIN plants p ON p.id = i.plant_id
    LEFT JOIN pending w ON w.inbox_id = i.id
    LEFT JOIN pending_again a ON a.inbox_id = i.id
    LEFT JOIN inbox_bodies b ON b.inbox_id = i.id
      AND b.version = (SELECT MAX(n.version) FROM inbox_bodies n WHERE n.inbox_id = i.id)
    WHERE p.name = ?1 AND i.batch = ?2";

pub(in crate::store::sqlite) const PUT_WATCH: &str = "
    INSERT INTO watches (plant_id, watch) VALUES (?1, ?2)
    ON CONFLICT (plant_id) DO UPDATE SET watch = excluded.watch";

pub(in crate::store::sqlite) const READ_WATCH: &str = "
    SELECT w.watch FROM watches w JOIN plants p ON p.id = w.plant_id WHERE p.name = ?1";

pub(in crate::store::sqlite) const INSERT_EVENT: &str = "
    INSERT INTO events (plant_id, alarm, event) VALUES (?1, ?2, ?3) RETURNING id";

pub(in crate::store::sqlite) const EVENTS: &str = "
    SELECT id, event FROM events
    WHERE plant_id = (SELECT id FROM plants WHERE name = ?1) AND id > ?2
    ORDER BY id LIMIT ?3";

pub(in crate::store::sqlite) const EVENTS_OF_ALL: &str = "
    SELECT id, event FROM events WHERE id > ?1 ORDER BY id LIMIT ?2";

pub(in crate::store::sqlite) const NEWEST_EVENT: &str = "
    SELECT COALESCE(MAX(id), 0) FROM events";

pub(in crate::store::sqlite) const DELIVERED: &str = "
    SELECT event FROM delivered WHERE id = 1";

pub(in crate::store::sqlite) const SET_DELIVERED: &str = "
    INSERT INTO delivered (id, event) VALUES (1, ?1)
    ON CONFLICT (id) DO UPDATE SET event = MAX(delivered.event, excluded.event)";

pub(in crate::store::sqlite) const KEEP_FORMER_CLOSING: &str = "
    INSERT INTO former_closings (plant_id, accusation_id, accusation)
    SELECT plant_id, id, accusation FROM accusations
    WHERE plant_id = ?1 AND id = ?2 AND open = 0 AND (open, accusation) <> (?3, ?4)";

pub(in crate::store::sqlite) const PUT_ACCUSATION: &str = "
    INSERT INTO accusations (plant_id, id, open, accusation) VALUES (?1, ?2, ?3, ?4)
    ON CONFLICT (plant_id, id) DO UPDATE SET open = excluded.open, accusation = excluded.accusation";

pub(in crate::store::sqlite) const ACCUSATIONS: &str = "
    SELECT id, open, accusation FROM accusations
    WHERE plant_id = (SELECT id FROM plants WHERE name = ?1)
      AND (?2 IS NULL OR open = ?2) AND id > ?3
    ORDER BY id LIMIT ?4";

pub(in crate::store::sqlite) const ONE_ACCUSATION: &str = "
    SELECT id, open, accusation FROM accusations
    WHERE plant_id = (SELECT id FROM plants WHERE name = ?1) AND id = ?2";

pub(in crate::store::sqlite) const INSERT_BY_HAND: &str = "
    INSERT INTO by_hand (plant_id, tag, added, from_ns, until_ns, reason, who, entered_ns)
    SELECT id, ?2, ?3, ?4, ?5, ?6, ?7, ?8 FROM plants WHERE name = ?1
    RETURNING id";

pub(in crate::store::sqlite) const INSERT_BY_HAND_END: &str = "
    INSERT INTO by_hand_ends (by_hand_id, until_ns, who, at_ns)
    SELECT b.id, ?3, ?4, ?5 FROM by_hand b JOIN plants p ON p.id = b.plant_id
    WHERE p.name = ?1 AND b.id = ?2";

/// Of one plant: all of them, the one of a number, or those that hold at a time.
pub(in crate::store::sqlite) const BY_HAND: &str = "
    SELECT b.id, b.tag, b.added, b.from_ns, COALESCE(e.until_ns, b.until_ns), b.reason, b.who,
           b.entered_ns, e.who, e.at_ns
    FROM by_hand b
    LEFT JOIN by_hand_ends e
      ON e.id = (SELECT MAX(l.id) FROM by_hand_ends l WHERE l.by_hand_id = b.id)
    WHERE b.plant_id = (SELECT id FROM plants WHERE name = ?1)
      AND (?2 IS NULL OR b.id = ?2)
      AND (?3 IS NULL OR (b.from_ns <= ?3
           AND (COALESCE(e.until_ns, b.until_ns) IS NULL
                OR COALESCE(e.until_ns, b.until_ns) > ?3)))
    ORDER BY b.id";

pub(in crate::store::sqlite) const INSERT_FIELD_READING: &str = "
    INSERT INTO field_readings (inbox_id, reading, who, at_ns)
    SELECT i.id, ?3, ?4, ?5 FROM inbox i JOIN plants p ON p.id = i.plant_id
    WHERE p.name = ?1 AND i.batch = ?2
    RETURNING id";

pub(in crate::store::sqlite) const FIELD_READINGS: &str = "
    SELECT f.id, f.reading, f.who, f.at_ns
    FROM field_readings f JOIN inbox i ON i.id = f.inbox_id JOIN plants p ON p.id = i.plant_id
    WHERE p.name = ?1 AND i.batch = ?2
    ORDER BY f.id";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_RECORDS: &[&str] = &[
    FIND_PLANT,
    PLANT_OF_BATCH,
    KEEP_FORMER_RESULT,
    REPLACE_RESULT,
    INSERT_AGAIN,
    VERSIONS,
    ONE_VERSION,
    INBOX,
    PUT_WATCH,
    READ_WATCH,
    INSERT_EVENT,
    EVENTS,
    EVENTS_OF_ALL,
    NEWEST_EVENT,
    DELIVERED,
    SET_DELIVERED,
    KEEP_FORMER_CLOSING,
    PUT_ACCUSATION,
    ACCUSATIONS,
    ONE_ACCUSATION,
    INSERT_BY_HAND,
    INSERT_BY_HAND_END,
    BY_HAND,
    INSERT_FIELD_READING,
    FIELD_READINGS,
];
