//! Statements on samples, periods and backfills.
//!
//! Lists of whole numbers go in as JSON, so that one statement asks for all
//! tags; values of samples never do, because text would round them.

use std::sync::LazyLock;

/// Inserts of so many samples together, the most first: few enough to be
/// prepared once each, and a sample costs little of a round trip.
pub(in crate::store::sqlite) static INSERT_SAMPLES: LazyLock<[(usize, String); 4]> =
    LazyLock::new(|| {
        [256, 32, 4, 1].map(|count| {
            let rows = vec!["(?, ?, ?, ?, ?)"; count].join(", ");
            let sql =
                format!("INSERT INTO samples (tag_id, time_ns, value, grade, code) VALUES {rows}");
            (count, sql)
        })
    });

/// Numbers of the tags of a plant by their names.
pub(in crate::store::sqlite) const SAMPLE_TAGS: &str = "
    SELECT t.tag, t.id
    FROM json_each(?2) j CROSS JOIN sample_tags t
    WHERE t.plant_id = ?1 AND t.tag = j.value";

pub(in crate::store::sqlite) const INSERT_SAMPLE_TAG: &str = "
    INSERT INTO sample_tags (plant_id, tag) VALUES (?1, ?2) RETURNING id";

/// Samples of stretches, each `[tag, first, last, ...]`, with the place of the
/// stretch, in no order.
pub(in crate::store::sqlite) const SAMPLES_OF_STRETCHES: &str = "
    SELECT j.key, s.time_ns, s.value, s.grade, s.code
    FROM json_each(?1) j CROSS JOIN samples s
    WHERE s.tag_id = j.value ->> 0 AND s.time_ns BETWEEN j.value ->> 1 AND j.value ->> 2
    LIMIT ?2";

/// The samples before and after stretches, each `[tag, first, last, no earlier
/// than, no later than]`.
pub(in crate::store::sqlite) const NEIGHBOURS: &str = "
    SELECT (SELECT MAX(s.time_ns) FROM samples s
            WHERE s.tag_id = j.value ->> 0
              AND s.time_ns >= j.value ->> 3 AND s.time_ns < j.value ->> 1),
           (SELECT MIN(s.time_ns) FROM samples s
            WHERE s.tag_id = j.value ->> 0
              AND s.time_ns > j.value ->> 2 AND s.time_ns <= j.value ->> 4)
    FROM json_each(?1) j
    ORDER BY j.key";

/// Periods of a plant that are made or open and have to do with a stretch of
/// time. Periods do not overlap, so that before it there is one at most of each.
pub(in crate::store::sqlite) const KNOWN_PERIODS: &str = "
    SELECT start_ns, end_ns FROM made_periods
    WHERE plant_id = ?1 AND start_ns < ?3
      AND start_ns >= COALESCE((SELECT MAX(start_ns) FROM made_periods
                                WHERE plant_id = ?1 AND start_ns <= ?2), ?2)
    UNION
    SELECT start_ns, end_ns FROM open_periods
    WHERE plant_id = ?1 AND start_ns < ?3
      AND start_ns >= COALESCE((SELECT MAX(start_ns) FROM open_periods
                                WHERE plant_id = ?1 AND start_ns <= ?2), ?2)";

pub(in crate::store::sqlite) const NEXT_GENERATION: &str = "
    INSERT INTO generations (id, count) VALUES (1, 1)
    ON CONFLICT (id) DO UPDATE SET count = generations.count + 1
    RETURNING count";

/// Opens periods, each `[start, end]`, or has them grow.
pub(in crate::store::sqlite) const OPEN_PERIODS: &str = "
    INSERT INTO open_periods (plant_id, start_ns, end_ns, generation, backfill, touched_ns)
    SELECT ?1, j.value ->> 0, j.value ->> 1, ?3, ?4, ?5 FROM json_each(?2) j WHERE true
    ON CONFLICT (plant_id, start_ns) DO UPDATE
    SET generation = excluded.generation,
        backfill = MIN(open_periods.backfill, excluded.backfill),
        touched_ns = MAX(open_periods.touched_ns, excluded.touched_ns)";

/// A tag's samples over a stretch of time, with the one before and the one after
/// it where they are near enough.
pub(in crate::store::sqlite) const SAMPLES: &str = "
    SELECT t.tag, s.time_ns, s.value, s.grade, s.code
    FROM sample_tags t CROSS JOIN samples s
    WHERE t.plant_id = (SELECT id FROM plants WHERE name = ?1)
      AND s.tag_id = t.id
      AND s.time_ns >= COALESCE((SELECT MAX(b.time_ns) FROM samples b
                                 WHERE b.tag_id = t.id AND b.time_ns >= ?4 AND b.time_ns < ?2), ?2)
      AND s.time_ns <= COALESCE((SELECT MIN(a.time_ns) FROM samples a
                                 WHERE a.tag_id = t.id AND a.time_ns >= ?3 AND a.time_ns <= ?5),
                                ?3 - 1)
    ORDER BY t.tag, s.time_ns";

pub(in crate::store::sqlite) const DUE_PERIODS: &str = "
    SELECT start_ns, end_ns, generation, backfill, touched_ns
    FROM open_periods
    WHERE plant_id = (SELECT id FROM plants WHERE name = ?1) AND end_ns <= ?2
    ORDER BY backfill, start_ns LIMIT ?3";

pub(in crate::store::sqlite) const PLANTS_WITH_OPEN_PERIODS: &str = "
    SELECT p.name FROM plants p
    WHERE EXISTS (SELECT 1 FROM open_periods o WHERE o.plant_id = p.id)
    ORDER BY p.name";

pub(in crate::store::sqlite) const ONE_OPEN_PERIOD: &str = "
    SELECT generation, backfill FROM open_periods WHERE plant_id = ?1 AND start_ns = ?2";

pub(in crate::store::sqlite) const DELETE_OPEN_PERIOD: &str = "
    DELETE FROM open_periods WHERE plant_id = ?1 AND start_ns = ?2";

pub(in crate::store::sqlite) const DROP_PERIOD: &str = "
    DELETE FROM open_periods
    WHERE plant_id = (SELECT id FROM plants WHERE name = ?1) AND start_ns = ?2 AND generation = ?3";

pub(in crate::store::sqlite) const MADE_PERIOD: &str = "
    SELECT i.id, i.batch, i.revision, COALESCE(b.version, 1), COALESCE(b.digest, i.digest)
    FROM made_periods m JOIN inbox i ON i.id = m.inbox_id
    LEFT JOIN inbox_bodies b ON b.inbox_id = i.id
      AND b.version = (SELECT MAX(n.version) FROM inbox_bodies n WHERE n.inbox_id = i.id)
    WHERE m.plant_id = ?1 AND m.start_ns = ?2";

pub(in crate::store::sqlite) const INSERT_MADE_PERIOD: &str = "
    INSERT INTO made_periods (plant_id, start_ns, end_ns, inbox_id) VALUES (?1, ?2, ?3, ?4)";

pub(in crate::store::sqlite) const INSERT_BODY: &str = "
    INSERT INTO inbox_bodies (inbox_id, version, digest, received_ns, body)
    VALUES (?1, ?2, ?3, ?4, ?5)";

pub(in crate::store::sqlite) const ONE_BODY: &str = "
    SELECT i.body
    FROM inbox i JOIN plants p ON p.id = i.plant_id
    WHERE p.name = ?1 AND i.batch = ?2 AND ?3 = 1
    UNION ALL
    SELECT b.body
    FROM inbox_bodies b JOIN inbox i ON i.id = b.inbox_id JOIN plants p ON p.id = i.plant_id
    WHERE p.name = ?1 AND i.batch = ?2 AND b.version = ?3";

/// A live sample that has come since counts more than a backfill.
pub(in crate::store::sqlite) const LOWER_PENDING_BACKFILL: &str = "
    UPDATE pending SET backfill = MIN(backfill, ?2) WHERE inbox_id = ?1";

pub(in crate::store::sqlite) const INSERT_PENDING_AGAIN: &str = "
    INSERT INTO pending_again (inbox_id, backfill)
    SELECT inbox_id, ?2 FROM results WHERE inbox_id = ?1
    ON CONFLICT (inbox_id) DO UPDATE
    SET backfill = MIN(pending_again.backfill, excluded.backfill)";

/// What waited for its first result and got one of an older body waits on.
pub(in crate::store::sqlite) const PENDING_TO_AGAIN: &str = "
    INSERT INTO pending_again (inbox_id, backfill)
    SELECT w.inbox_id, w.backfill FROM pending w
    WHERE w.inbox_id = ?1
      AND EXISTS (SELECT 1 FROM inbox_bodies b WHERE b.inbox_id = ?1 AND b.version > ?2)";

pub(in crate::store::sqlite) const DELETE_PENDING_AGAIN: &str = "
    DELETE FROM pending_again
    WHERE inbox_id = ?1
      AND NOT EXISTS (SELECT 1 FROM inbox_bodies b WHERE b.inbox_id = ?1 AND b.version > ?2)";

pub(in crate::store::sqlite) const BEGIN_BACKFILL: &str = "
    INSERT INTO backfills
        (plant_id, name, bytes, lines, refused, header, begun_ns, touched_ns, complete, new)
    VALUES (?1, ?2, 0, 0, 0, NULL, ?3, ?3, 0, 0)
    ON CONFLICT (plant_id, name) DO NOTHING";

/// Samples that are new count wherever they came from; the mark itself only
/// goes on.
pub(in crate::store::sqlite) const MARK_BACKFILL: &str = "
    INSERT INTO backfills
        (plant_id, name, bytes, lines, refused, header, begun_ns, touched_ns, complete, new)
    VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?7, 0, ?8)
    ON CONFLICT (plant_id, name) DO UPDATE
    SET new = backfills.new + excluded.new,
        touched_ns = MAX(backfills.touched_ns, excluded.touched_ns),
        header = COALESCE(backfills.header, excluded.header),
        lines = CASE WHEN excluded.bytes < backfills.bytes THEN backfills.lines ELSE excluded.lines END,
        refused = CASE WHEN excluded.bytes < backfills.bytes THEN backfills.refused ELSE excluded.refused END,
        bytes = MAX(backfills.bytes, excluded.bytes)";

pub(in crate::store::sqlite) const END_BACKFILL: &str = "
    UPDATE backfills SET complete = 1, touched_ns = MAX(touched_ns, ?3)
    WHERE plant_id = (SELECT id FROM plants WHERE name = ?1) AND name = ?2";

/// Backfills of a plant: the one named, or those after a name.
pub(in crate::store::sqlite) const BACKFILLS: &str = "
    SELECT b.name, b.bytes, b.lines, b.refused, b.header, b.begun_ns, b.touched_ns, b.complete,
           b.new,
           (SELECT COUNT(*) FROM open_periods o WHERE o.plant_id = p.id AND o.backfill = 1)
             AS periods_open
    FROM backfills b JOIN plants p ON p.id = b.plant_id
    WHERE p.name = ?1 AND (?2 IS NULL OR b.name = ?2) AND (?3 IS NULL OR b.name > ?3)
    ORDER BY b.name LIMIT ?4";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_READINGS: &[&str] = &[
    SAMPLE_TAGS,
    INSERT_SAMPLE_TAG,
    SAMPLES_OF_STRETCHES,
    NEIGHBOURS,
    KNOWN_PERIODS,
    NEXT_GENERATION,
    OPEN_PERIODS,
    SAMPLES,
    DUE_PERIODS,
    PLANTS_WITH_OPEN_PERIODS,
    ONE_OPEN_PERIOD,
    DELETE_OPEN_PERIOD,
    DROP_PERIOD,
    MADE_PERIOD,
    INSERT_MADE_PERIOD,
    INSERT_BODY,
    ONE_BODY,
    LOWER_PENDING_BACKFILL,
    INSERT_PENDING_AGAIN,
    PENDING_TO_AGAIN,
    DELETE_PENDING_AGAIN,
    BEGIN_BACKFILL,
    MARK_BACKFILL,
    END_BACKFILL,
    BACKFILLS,
];
