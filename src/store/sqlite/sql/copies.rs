//! Statements that copy a database and look over a copy.
//!
//! Those that look a copy over ask for nothing that the first schema lacks: a
//! copy may be older than this program.

pub(in crate::store::sqlite) const COPY_INTO: &str = "VACUUM INTO ?1";
pub(in crate::store::sqlite) const BEGIN_EXCLUSIVE: &str = "BEGIN EXCLUSIVE";
pub(in crate::store::sqlite) const ROLLBACK: &str = "ROLLBACK";
pub(in crate::store::sqlite) const INTEGRITY_CHECK: &str = "PRAGMA integrity_check(10)";

pub(in crate::store::sqlite) const DANGLING: &str = r#"
    SELECT "table", parent, COUNT(*) FROM pragma_foreign_key_check GROUP BY 1, 2 ORDER BY 1, 2"#;

pub(in crate::store::sqlite) const TABLES_OF_OURS: &str = "
    SELECT COUNT(*) FROM sqlite_schema
    WHERE type = 'table' AND name IN ('_sqlx_migrations', 'plants', 'inbox', 'results')";

pub(in crate::store::sqlite) const MIGRATIONS: &str = "
    SELECT version, success, checksum FROM _sqlx_migrations ORDER BY version";

/// An accepted batch waits or has a result: never neither, never both.
pub(in crate::store::sqlite) const HALF_BATCHES: &str = "
    SELECT COUNT(*) FROM inbox i
    WHERE EXISTS (SELECT 1 FROM pending w WHERE w.inbox_id = i.id)
        = EXISTS (SELECT 1 FROM results r WHERE r.inbox_id = i.id)";

pub(in crate::store::sqlite) const TOTALS: &str = "
    SELECT (SELECT COUNT(*) FROM plants), (SELECT COUNT(*) FROM revisions),
           (SELECT COUNT(*) FROM inbox), (SELECT COUNT(*) FROM pending)";

pub(in crate::store::sqlite) const TICKETS: &str = "
    SELECT COALESCE((SELECT MIN(id) FROM inbox), 0), COALESCE((SELECT MAX(id) FROM inbox), 0)";

pub(in crate::store::sqlite) const NEWEST_BATCH: &str = "
    SELECT p.name, i.batch, i.end_ns, i.received_ns
    FROM inbox i JOIN plants p ON p.id = i.plant_id
    ORDER BY i.id DESC LIMIT 1";

/// The first batch from a ticket number on, whole.
pub(in crate::store::sqlite) const SAMPLE: &str = "
    SELECT i.id, i.batch, i.body, r.verdict, r.report
    FROM inbox i LEFT JOIN results r ON r.inbox_id = i.id
    WHERE i.id >= ?1
    ORDER BY i.id LIMIT 1";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_COPIES: &[&str] = &[
    COPY_INTO,
    BEGIN_EXCLUSIVE,
    ROLLBACK,
    INTEGRITY_CHECK,
    DANGLING,
    TABLES_OF_OURS,
    MIGRATIONS,
    HALF_BATCHES,
    TOTALS,
    TICKETS,
    NEWEST_BATCH,
    SAMPLE,
];
