//! Every statement, in one place: a test prepares each against the newest
//! schema.

mod access;
mod copies;
mod history;
mod readings;
mod records;
mod replays;

pub(super) use access::*;
pub(super) use copies::*;
pub(super) use history::*;
pub(super) use readings::*;
pub(super) use records::*;
pub(super) use replays::*;

pub(in crate::store::sqlite) const SQLITE_VERSION: &str = "SELECT sqlite_version()";
pub(in crate::store::sqlite) const QUICK_CHECK: &str = "PRAGMA quick_check(1)";
pub(in crate::store::sqlite) const CHECKPOINT: &str = "PRAGMA wal_checkpoint(TRUNCATE)";
pub(in crate::store::sqlite) const BEGIN: &str = "BEGIN IMMEDIATE";
pub(in crate::store::sqlite) const COMMIT: &str = "COMMIT";

/// Pages, free pages, bytes of a page, accepted batches without a result, open
/// periods.
pub(in crate::store::sqlite) const ROOM: &str = "
    SELECT (SELECT page_count FROM pragma_page_count),
           (SELECT freelist_count FROM pragma_freelist_count),
           (SELECT page_size FROM pragma_page_size),
           (SELECT COUNT(*) FROM pending),
           (SELECT COUNT(*) FROM open_periods)";

pub(in crate::store::sqlite) const COUNT_START: &str = "
    INSERT INTO starts (id, count) VALUES (1, 1)
    ON CONFLICT (id) DO UPDATE SET count = starts.count + 1";

pub(in crate::store::sqlite) const INSERT_PLANT: &str = "
    INSERT INTO plants (name) VALUES (?1) ON CONFLICT (name) DO NOTHING";

pub(in crate::store::sqlite) const INSERT_REVISION: &str = "
    INSERT INTO revisions (plant_id, revision, title, digest, media_type, source, canonical, created_ns)
    VALUES ((SELECT id FROM plants WHERE name = ?1), ?2, ?3, ?4, ?5, ?6, ?7, ?8)";

pub(in crate::store::sqlite) const CURRENT_REVISION: &str = "
    SELECT r.revision, r.digest, r.media_type, r.source, r.canonical, r.created_ns
    FROM revisions r JOIN plants p ON p.id = r.plant_id
    WHERE p.name = ?1
    ORDER BY r.revision DESC LIMIT 1";

pub(in crate::store::sqlite) const ONE_REVISION: &str = "
    SELECT r.revision, r.digest, r.media_type, r.source, r.canonical, r.created_ns
    FROM revisions r JOIN plants p ON p.id = r.plant_id
    WHERE p.name = ?1 AND r.revision = ?2";

pub(in crate::store::sqlite) const PLANTS: &str = "
    SELECT p.name, r.title, r.revision, r.created_ns
    FROM plants p JOIN revisions r ON r.plant_id = p.id
    WHERE p.name > ?1
      AND r.revision = (SELECT MAX(c.revision) FROM revisions c WHERE c.plant_id = p.id)
    ORDER BY p.name LIMIT ?2";

pub(in crate::store::sqlite) const PLANT_FOR_BATCH: &str = "
    SELECT p.id, MAX(r.revision)
    FROM plants p JOIN revisions r ON r.plant_id = p.id
    WHERE p.name = ?1
    GROUP BY p.id";

pub(in crate::store::sqlite) const KNOWN_BATCH: &str = "
    SELECT i.id, i.revision, COALESCE(b.version, 1), COALESCE(b.digest, i.digest)
    FROM inbox i
    LEFT JOIN inbox_bodies b ON b.inbox_id = i.id
      AND b.version = (SELECT MAX(n.version) FROM inbox_bodies n WHERE n.inbox_id = i.id)
    WHERE i.plant_id = ?1 AND i.batch = ?2";

pub(in crate::store::sqlite) const INSERT_BATCH: &str = "
    INSERT INTO inbox (plant_id, batch, revision, digest, start_ns, end_ns, received_ns, body)
    VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8)
    RETURNING id";

pub(in crate::store::sqlite) const INSERT_PENDING: &str =
    "INSERT INTO pending (inbox_id, backfill) VALUES (?1, ?2)";

pub(in crate::store::sqlite) const DELETE_PENDING: &str = "DELETE FROM pending WHERE inbox_id = ?1";

pub(in crate::store::sqlite) const FIND_LAYOUT: &str = "SELECT id FROM layouts WHERE digest = ?1";

pub(in crate::store::sqlite) const INSERT_LAYOUT: &str = "
    INSERT INTO layouts (digest, channels) VALUES (?1, ?2) RETURNING id";

pub(in crate::store::sqlite) const READ_LAYOUT: &str = "SELECT channels FROM layouts WHERE id = ?1";

pub(in crate::store::sqlite) const INSERT_RESULT: &str = "
    INSERT INTO results (inbox_id, verdict, statistic, degrees_of_freedom, layout_id, numbers, report, body)
    VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8)
    ON CONFLICT (inbox_id) DO NOTHING";

pub(in crate::store::sqlite) const INSERT_CRITICAL_VALUE: &str = "
    INSERT INTO critical_values (plant_id, revision, class_set, test)
    SELECT v.plant_id, v.revision, ?3, ?4
    FROM inbox i JOIN revisions v ON v.plant_id = i.plant_id
    WHERE i.id = ?1 AND v.revision = ?2
    ON CONFLICT DO NOTHING";

pub(in crate::store::sqlite) const CRITICAL_VALUES: &str = "
    SELECT c.test
    FROM critical_values c JOIN plants p ON p.id = c.plant_id
    WHERE p.name = ?1 AND c.revision = ?2";

pub(in crate::store::sqlite) const ONE_BATCH: &str = "
    SELECT i.id, i.revision,
           COALESCE((SELECT MAX(b.version) FROM inbox_bodies b WHERE b.inbox_id = i.id), 1),
           r.report, i.removed_ns, r.verdict
    FROM inbox i JOIN plants p ON p.id = i.plant_id
    LEFT JOIN results r ON r.inbox_id = i.id
    WHERE p.name = ?1 AND i.batch = ?2";

/// With the newest body, and whether there is a result already.
pub(in crate::store::sqlite) const UNFINISHED: &str = "
    SELECT i.id, p.name AS plant, i.batch, i.revision, COALESCE(b.version, 1) AS version,
           COALESCE(b.received_ns, i.received_ns) AS received_ns,
           COALESCE(b.body, i.body) AS body, w.again, 1 AS pending, w.backfill
    FROM (SELECT inbox_id, 0 AS again, backfill FROM pending WHERE inbox_id > ?1
          UNION ALL
          SELECT inbox_id, 1, backfill FROM pending_again WHERE inbox_id > ?1
          ORDER BY inbox_id LIMIT ?2) w
    JOIN inbox i ON i.id = w.inbox_id JOIN plants p ON p.id = i.plant_id
    LEFT JOIN inbox_bodies b ON b.inbox_id = i.id
      AND b.version = (SELECT MAX(n.version) FROM inbox_bodies n WHERE n.inbox_id = i.id)
    ORDER BY i.id";

pub(in crate::store::sqlite) const BATCHES: &str = "
    SELECT i.id, i.batch, i.start_ns, i.end_ns, i.revision,
           r.verdict, r.statistic, r.degrees_of_freedom
    FROM inbox i LEFT JOIN results r ON r.inbox_id = i.id
    WHERE i.plant_id = (SELECT id FROM plants WHERE name = ?1)
      AND i.start_ns >= ?2 AND i.start_ns < ?3
      AND (i.start_ns, i.id) < (?4, ?5)
      AND (?6 IS NULL OR r.verdict = ?6)
    ORDER BY i.start_ns DESC, i.id DESC LIMIT ?7";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_BATCHES: &[&str] = &[
    SQLITE_VERSION,
    QUICK_CHECK,
    CHECKPOINT,
    BEGIN,
    COMMIT,
    ROOM,
    COUNT_START,
    INSERT_PLANT,
    INSERT_REVISION,
    CURRENT_REVISION,
    ONE_REVISION,
    PLANTS,
    PLANT_FOR_BATCH,
    KNOWN_BATCH,
    INSERT_BATCH,
    INSERT_PENDING,
    DELETE_PENDING,
    FIND_LAYOUT,
    INSERT_LAYOUT,
    READ_LAYOUT,
    INSERT_RESULT,
    INSERT_CRITICAL_VALUE,
    CRITICAL_VALUES,
    ONE_BATCH,
    UNFINISHED,
    BATCHES,
];
