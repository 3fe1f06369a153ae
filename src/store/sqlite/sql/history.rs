//! Statements on what becomes of results with time.
//!
//! A day has 86400000000000 nanoseconds; the division rounds down also before
//! 1970.

pub(in crate::store::sqlite) const PUT_HOT_NUMBERS: &str = "
    INSERT INTO hot_numbers (inbox_id, numbers) VALUES (?1, ?2)
    ON CONFLICT (inbox_id) DO UPDATE SET numbers = excluded.numbers";

pub(in crate::store::sqlite) const MARK_DIRTY: &str = "
    INSERT INTO dirty_days (plant_id, day, generation)
    SELECT plant_id, start_ns / 86400000000000 - (start_ns % 86400000000000 < 0), 1
    FROM inbox WHERE id = ?1
    ON CONFLICT (plant_id, day) DO UPDATE SET generation = dirty_days.generation + 1";

/// A batch that is reconciled again after it was removed is whole again.
pub(in crate::store::sqlite) const UNREMOVE: &str = "
    UPDATE inbox SET removed_ns = NULL WHERE id = ?1 AND removed_ns IS NOT NULL";

pub(in crate::store::sqlite) const OLD_NUMBERS: &str = "
    SELECT done, last FROM old_numbers WHERE done < last";

/// The last result of the next few old ones.
pub(in crate::store::sqlite) const OLD_STEP: &str = "
    SELECT COALESCE(MAX(inbox_id), 0), COUNT(*)
    FROM (SELECT inbox_id FROM results WHERE inbox_id > ?1 AND inbox_id <= ?2
          ORDER BY inbox_id LIMIT ?3)";

pub(in crate::store::sqlite) const COPY_OLD_NUMBERS: &str = "
    INSERT INTO hot_numbers (inbox_id, numbers)
    SELECT inbox_id, numbers FROM results
    WHERE inbox_id > ?1 AND inbox_id <= ?2 AND length(numbers) > 0
    ON CONFLICT (inbox_id) DO NOTHING";

pub(in crate::store::sqlite) const EMPTY_OLD_NUMBERS: &str = "
    UPDATE results SET numbers = x''
    WHERE inbox_id > ?1 AND inbox_id <= ?2 AND length(numbers) > 0";

pub(in crate::store::sqlite) const SET_OLD_NUMBERS: &str = "
    UPDATE old_numbers SET done = ?1 WHERE id = 1";

/// The first day that is over and has to be chunked.
pub(in crate::store::sqlite) const NEXT_DIRTY: &str = "
    SELECT w.plant_id, w.day, w.generation, d.side, COALESCE(d.closed, 0), d.batches
    FROM dirty_days w LEFT JOIN days d ON d.plant_id = w.plant_id AND d.day = w.day
    WHERE w.day <= ?1
    ORDER BY w.day, w.plant_id LIMIT 1";

/// Days of a plant that have anything, in order; without a generation they are
/// wholly in their chunks.
pub(in crate::store::sqlite) const DAYS: &str = "
    SELECT e.day, w.generation, d.side, COALESCE(d.closed, 0), d.batches, d.verdicts
    FROM (SELECT day FROM days WHERE plant_id = ?1 AND day >= ?2 AND day <= ?3
          UNION
          SELECT day FROM dirty_days WHERE plant_id = ?1 AND day >= ?2 AND day <= ?3
          ORDER BY day LIMIT ?4) e
    LEFT JOIN days d ON d.plant_id = ?1 AND d.day = e.day
    LEFT JOIN dirty_days w ON w.plant_id = ?1 AND w.day = e.day
    ORDER BY e.day";

/// Results within a day that is not chunked or not any more, beyond a place.
/// Their numbers where they are not in the day's chunks.
pub(in crate::store::sqlite) const HOT_ROWS: &str = "
    SELECT i.id, i.batch, i.start_ns, i.end_ns, r.verdict, r.layout_id,
           COALESCE(n.numbers, r.numbers)
    FROM inbox i JOIN results r ON r.inbox_id = i.id
    LEFT JOIN hot_numbers n ON n.inbox_id = i.id
    WHERE i.plant_id = ?1 AND i.start_ns >= ?2 AND i.start_ns < ?3
      AND (i.start_ns, i.id) > (?4, ?5)
    ORDER BY i.start_ns, i.id LIMIT ?6";

/// The same without the numbers: whether there are any.
pub(in crate::store::sqlite) const HOT_BATCHES: &str = "
    SELECT i.id, i.batch, i.start_ns, i.end_ns, r.verdict, r.layout_id,
           length(COALESCE(n.numbers, r.numbers)) > 0
    FROM inbox i JOIN results r ON r.inbox_id = i.id
    LEFT JOIN hot_numbers n ON n.inbox_id = i.id
    WHERE i.plant_id = ?1 AND i.start_ns >= ?2 AND i.start_ns <= ?3
    ORDER BY i.start_ns, i.id";

pub(in crate::store::sqlite) const HOT_NUMBERS: &str = "
    SELECT i.id, COALESCE(n.numbers, r.numbers)
    FROM inbox i JOIN results r ON r.inbox_id = i.id
    LEFT JOIN hot_numbers n ON n.inbox_id = i.id
    WHERE i.plant_id = ?1 AND i.start_ns >= ?2 AND i.start_ns <= ?3";

pub(in crate::store::sqlite) const CHANNELS: &str = "
    SELECT id, name, kind, unit FROM channels WHERE plant_id = ?1";

pub(in crate::store::sqlite) const CHANNELS_NAMED: &str = "
    SELECT id, name, kind, unit FROM channels
    WHERE plant_id = ?1 AND name IN (SELECT value FROM json_each(?2))
    ORDER BY id";

pub(in crate::store::sqlite) const INSERT_CHANNEL: &str = "
    INSERT INTO channels (plant_id, name, kind, unit) VALUES (?1, ?2, ?3, ?4)
    ON CONFLICT DO NOTHING";

pub(in crate::store::sqlite) const CHUNKS: &str = "
    SELECT c.id, c.numbers FROM json_each(?1) j JOIN chunks c ON c.id = j.value";

pub(in crate::store::sqlite) const PUT_CHUNK: &str = "
    INSERT INTO chunks (id, numbers) VALUES (?1, ?2)
    ON CONFLICT (id) DO UPDATE SET numbers = excluded.numbers";

pub(in crate::store::sqlite) const PUT_MEANS: &str = "
    INSERT INTO means (id, daily, hourly) VALUES (?1, ?2, ?3)
    ON CONFLICT (id) DO UPDATE SET daily = excluded.daily, hourly = excluded.hourly";

pub(in crate::store::sqlite) const DAILY_MEANS: &str = "
    SELECT m.id, m.daily FROM json_each(?1) j JOIN means m ON m.id = j.value";

pub(in crate::store::sqlite) const HOURLY_MEANS: &str = "
    SELECT m.id, m.hourly FROM json_each(?1) j JOIN means m ON m.id = j.value";

pub(in crate::store::sqlite) const CLEAN: &str = "
    DELETE FROM dirty_days WHERE plant_id = ?1 AND day = ?2 AND generation = ?3";

pub(in crate::store::sqlite) const PUT_DAY: &str = "
    INSERT INTO days (plant_id, day, side, swept, whole, closed, batches, verdicts)
    VALUES (?1, ?2, ?3, 0, 1, 0, ?4, ?5)
    ON CONFLICT (plant_id, day) DO UPDATE
    SET side = excluded.side, swept = 0, whole = 1, batches = excluded.batches,
        verdicts = CASE days.closed WHEN 0 THEN excluded.verdicts ELSE days.verdicts END";

pub(in crate::store::sqlite) const NEXT_TO_SWEEP: &str = "
    SELECT d.id, d.plant_id, d.day, d.side FROM days d
    WHERE d.swept = 0 AND NOT EXISTS (
        SELECT 1 FROM dirty_days w WHERE w.plant_id = d.plant_id AND w.day = d.day)
    ORDER BY d.id LIMIT 1";

/// Of a day that is not dirty; a day that has become so keeps them.
pub(in crate::store::sqlite) const SWEEP_NUMBERS: &str = "
    DELETE FROM hot_numbers WHERE inbox_id IN (
        SELECT n.inbox_id FROM inbox i JOIN hot_numbers n ON n.inbox_id = i.id
        WHERE i.plant_id = ?1 AND i.start_ns >= ?2 AND i.start_ns <= ?3
        LIMIT ?4)";

/// The chunks of a day's side that are a plant's.
pub(in crate::store::sqlite) const DELETE_CHUNKS: &str = "
    DELETE FROM chunks WHERE id IN (
        SELECT ?2 + c.id FROM channels c WHERE c.plant_id = ?1)";

pub(in crate::store::sqlite) const SET_SWEPT: &str = "
    UPDATE days SET swept = 1 WHERE id = ?1";

/// Batches of whole days up to one, finished and in their chunks, that nothing
/// holds: no field readings, and none of the span of an open accusation.
pub(in crate::store::sqlite) const REMOVABLE: &str = "
    SELECT i.id, d.day FROM days d
    CROSS JOIN inbox i ON i.plant_id = d.plant_id
        AND i.start_ns >= d.day * 86400000000000
        AND i.start_ns < (d.day + 1) * 86400000000000
    WHERE d.plant_id = ?1 AND d.day <= ?2 AND d.whole = 1 AND i.removed_ns IS NULL
      AND NOT EXISTS (SELECT 1 FROM dirty_days w WHERE w.plant_id = d.plant_id AND w.day = d.day)
      AND EXISTS (SELECT 1 FROM results r WHERE r.inbox_id = i.id)
      AND NOT EXISTS (SELECT 1 FROM pending p WHERE p.inbox_id = i.id)
      AND NOT EXISTS (SELECT 1 FROM pending_again p WHERE p.inbox_id = i.id)
      AND NOT EXISTS (SELECT 1 FROM field_readings f WHERE f.inbox_id = i.id)
      AND NOT EXISTS (
        SELECT 1 FROM json_each(?3) h
        WHERE i.start_ns >= json_extract(h.value, '$[0]')
          AND i.start_ns <= json_extract(h.value, '$[1]'))
    LIMIT ?4";

/// From the batch that raised each open accusation to the newest in which it
/// stood. What an accusation is, others know; of its JSON these two names are
/// read.
pub(in crate::store::sqlite) const HELD_SPANS: &str = "
    SELECT COALESCE(json_group_array(json_array(
        COALESCE(o.start_ns, l.start_ns), COALESCE(l.start_ns, o.start_ns))), '[]')
    FROM accusations a
    LEFT JOIN inbox o ON o.plant_id = a.plant_id
        AND o.batch = json_extract(a.accusation, '$.opened_batch')
    LEFT JOIN inbox l ON l.plant_id = a.plant_id
        AND l.batch = json_extract(a.accusation, '$.last_batch')
    WHERE a.plant_id = ?1 AND a.open = 1 AND json_valid(a.accusation)
      AND (o.id IS NOT NULL OR l.id IS NOT NULL)";

pub(in crate::store::sqlite) const REMOVE_BODY: &str = "
    UPDATE inbox SET body = x'', removed_ns = ?2 WHERE id = ?1";

pub(in crate::store::sqlite) const REMOVE_LATER_BODIES: &str = "
    UPDATE inbox_bodies SET body = x'' WHERE inbox_id = ?1";

pub(in crate::store::sqlite) const REMOVE_REPORT: &str = "
    UPDATE results SET report = x'', numbers = x'' WHERE inbox_id = ?1";

pub(in crate::store::sqlite) const REMOVE_FORMER: &str = "
    UPDATE former_results SET report = x'', numbers = x'' WHERE inbox_id = ?1";

/// Days, of some, of which retention has left no body.
pub(in crate::store::sqlite) const SET_BARE: &str = "
    UPDATE days SET whole = 0
    WHERE plant_id = ?1 AND day >= ?2 AND day <= ?3 AND whole = 1 AND NOT EXISTS (
        SELECT 1 FROM inbox i
        WHERE i.plant_id = days.plant_id
          AND i.start_ns >= days.day * 86400000000000
          AND i.start_ns < (days.day + 1) * 86400000000000
          AND i.removed_ns IS NULL)";

pub(in crate::store::sqlite) const NEXT_BARE: &str = "
    SELECT id, day, side FROM days
    WHERE plant_id = ?1 AND day <= ?2 AND whole = 0 AND swept = 1 AND length(batches) > 0
    ORDER BY day LIMIT 1";

pub(in crate::store::sqlite) const CLOSE_DAY: &str = "
    UPDATE days SET closed = 1, batches = x'' WHERE id = ?1";

/// Samples before a time, but not the newest of a tag: it may still hold. And
/// none that an open period looks back to, which is a month at most.
pub(in crate::store::sqlite) const REMOVE_SAMPLES: &str = "
    DELETE FROM samples WHERE (tag_id, time_ns) IN (
        SELECT s.tag_id, s.time_ns
        FROM sample_tags t CROSS JOIN samples s ON s.tag_id = t.id
        WHERE t.plant_id = (SELECT id FROM plants WHERE name = ?1)
          AND s.time_ns < MIN(?2, COALESCE(
            (SELECT MIN(o.start_ns) FROM open_periods o WHERE o.plant_id = t.plant_id)
                - 31 * 86400000000000, ?2))
          AND s.time_ns < (SELECT MAX(n.time_ns) FROM samples n WHERE n.tag_id = t.id)
        LIMIT ?3)";

pub(in crate::store::sqlite) const FREE_PAGES: &str = "
    SELECT (SELECT freelist_count FROM pragma_freelist_count),
           (SELECT page_count FROM pragma_page_count),
           (SELECT page_size FROM pragma_page_size),
           (SELECT auto_vacuum FROM pragma_auto_vacuum)";

pub(in crate::store::sqlite) const GIVE_BACK: &str = "PRAGMA incremental_vacuum(128)";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_HISTORY: &[&str] = &[
    PUT_HOT_NUMBERS,
    MARK_DIRTY,
    UNREMOVE,
    OLD_NUMBERS,
    OLD_STEP,
    COPY_OLD_NUMBERS,
    EMPTY_OLD_NUMBERS,
    SET_OLD_NUMBERS,
    NEXT_DIRTY,
    DAYS,
    HOT_ROWS,
    HOT_BATCHES,
    HOT_NUMBERS,
    CHANNELS,
    CHANNELS_NAMED,
    INSERT_CHANNEL,
    CHUNKS,
    PUT_CHUNK,
    PUT_MEANS,
    DAILY_MEANS,
    HOURLY_MEANS,
    CLEAN,
    PUT_DAY,
    NEXT_TO_SWEEP,
    SWEEP_NUMBERS,
    DELETE_CHUNKS,
    SET_SWEPT,
    REMOVABLE,
    HELD_SPANS,
    REMOVE_BODY,
    REMOVE_LATER_BODIES,
    REMOVE_REPORT,
    REMOVE_FORMER,
    SET_BARE,
    NEXT_BARE,
    CLOSE_DAY,
    REMOVE_SAMPLES,
    FREE_PAGES,
    GIVE_BACK,
];
