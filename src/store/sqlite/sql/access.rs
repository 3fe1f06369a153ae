//! Statements on tokens and the audit log.

pub(in crate::store::sqlite) const INSERT_TOKEN: &str = "
    INSERT INTO tokens (name, digest, scopes, plants, expires_ns, rate, made_ns)
    VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)
    ON CONFLICT DO NOTHING
    RETURNING id";

/// All of them, or the one of a number.
pub(in crate::store::sqlite) const TOKENS: &str = "
    SELECT t.id, t.name, t.digest, t.scopes, t.plants, t.expires_ns, t.rate, t.made_ns,
           t.revoked_ns, u.used_ns
    FROM tokens t LEFT JOIN token_uses u ON u.token_id = t.id
    WHERE ?1 IS NULL OR t.id = ?1
    ORDER BY t.id";

pub(in crate::store::sqlite) const REVOKE_TOKEN: &str = "
    UPDATE tokens SET revoked_ns = ?2 WHERE name = ?1 AND revoked_ns IS NULL
    RETURNING id";

pub(in crate::store::sqlite) const TOKEN_USED: &str = "
    INSERT INTO token_uses (token_id, used_ns) SELECT id, ?2 FROM tokens WHERE id = ?1
    ON CONFLICT (token_id) DO UPDATE SET used_ns = MAX(token_uses.used_ns, excluded.used_ns)";

pub(in crate::store::sqlite) const TOKENS_VERSION: &str = "SELECT version FROM tokens_version";

pub(in crate::store::sqlite) const INSERT_DEED: &str = "
    INSERT INTO deeds (at_ns, actor, kind, plant, what) VALUES (?1, ?2, ?3, ?4, ?5)";

/// Of every plant and of none, or of the plants in a JSON list.
pub(in crate::store::sqlite) const DEEDS: &str = "
    SELECT id, at_ns, actor, kind, plant, what
    FROM deeds
    WHERE id < ?2 AND (?1 IS NULL OR plant IN (SELECT value FROM json_each(?1)))
    ORDER BY id DESC LIMIT ?3";

/// All of this file.
#[cfg(test)]
pub(in crate::store::sqlite) const OF_ACCESS: &[&str] = &[
    INSERT_TOKEN,
    TOKENS,
    REVOKE_TOKEN,
    TOKEN_USED,
    TOKENS_VERSION,
    INSERT_DEED,
    DEEDS,
];
