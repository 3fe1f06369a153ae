//! `token`: making, listing and revoking tokens, on the database file itself, beside
//! a service that may be running on it.

use super::output::print;
use super::table::Table;
use crate::access::{Actor, Deed, DeedKind, Rate, Scope, Scopes, Token};
use crate::store::{AccessStore, NewToken, SqliteOptions, SqliteStore, Store, TokenRow};
use anyhow::{Context, anyhow, bail};
use clap::{Args, Subcommand};
use serde_json::json;
use std::path::PathBuf;
use std::process::ExitCode;
use time::format_description::well_known::Rfc3339;
use time::{Duration, OffsetDateTime, UtcOffset};

/// Make, list and revoke tokens.
#[derive(Args, Debug)]
pub struct Tokens {
    #[command(subcommand)]
    what: What,
}

#[derive(Debug, Subcommand)]
enum What {
    /// Make a token and print it: this once, and never again.
    Make(Make),
    /// List the tokens, without what they are.
    List(At),
    /// Refuse a token from now on.
    Revoke(Revoke),
}

/// The database.
#[derive(Args, Debug)]
struct At {
    /// The database; a service may be running on it.
    #[arg(
        long,
        env = "COUNTERPOISE_DATABASE",
        default_value = "counterpoise.sqlite"
    )]
    database: PathBuf,
}

#[derive(Args, Debug)]
struct Make {
    #[command(flatten)]
    at: At,

    /// A name for people; it stands in the audit log.
    #[arg(long, value_parser = name)]
    name: String,

    /// What it allows: send, read, operate, administer; none implies another.
    #[arg(long, required = true, value_delimiter = ',', value_parser = scope)]
    scopes: Vec<Scope>,

    /// The plants that it reaches; every plant unless set.
    #[arg(long, value_delimiter = ',', value_parser = name)]
    plants: Option<Vec<String>>,

    /// When it ends by itself: 12h, 90d, 52w, or a time as in RFC 3339; never
    /// unless set.
    #[arg(long, value_parser = Expiry::read)]
    expires: Option<Expiry>,

    /// Requests a second, and as many at once; as the service allows unless set.
    #[arg(long)]
    rate: Option<Rate>,
}

#[derive(Args, Debug)]
struct Revoke {
    #[command(flatten)]
    at: At,

    /// The name of the token.
    #[arg(long)]
    name: String,
}

/// An end, from now or by itself.
#[derive(Clone, Copy, Debug, PartialEq)]
enum Expiry {
    In(Duration),
    At(OffsetDateTime),
}

impl Expiry {
    fn read(text: &str) -> Result<Self, String> {
        let whole = |digits: &str| digits.parse::<u32>().ok().filter(|&number| number > 0);
        let span = [('h', 1), ('d', 24), ('w', 7 * 24)];
        let span = span.into_iter().find_map(|(unit, hours)| {
            let number = whole(text.strip_suffix(unit)?)?;
            Some(Duration::hours(i64::from(number) * hours))
        });
        if let Some(span) = span {
            return Ok(Expiry::In(span));
        }
        OffsetDateTime::parse(text, &Rfc3339)
            .map(|time| Expiry::At(time.to_offset(UtcOffset::UTC)))
            .map_err(|_| "write 12h, 90d, 52w or 2031-04-02T12:00:00Z".to_owned())
    }

    /// The time that it stands for; the store reckons in nanoseconds since 1970
    /// with 64 bits.
    fn after(self, now: OffsetDateTime) -> anyhow::Result<OffsetDateTime> {
        let end = match self {
            Expiry::In(span) => now.checked_add(span),
            Expiry::At(time) => Some(time),
        };
        let end = end.filter(|end| i64::try_from(end.unix_timestamp_nanos()).is_ok());
        let end = end.context("--expires lies too far off: give an earlier time")?;
        if end <= now {
            bail!("--expires is over already: give a time ahead");
        }
        Ok(end)
    }
}

fn name(text: &str) -> Result<String, String> {
    let length = text.chars().count();
    if !(1..=128).contains(&length) || text.trim() != text || text.contains(char::is_control) {
        return Err("1 to 128 characters are needed, without spaces around".to_owned());
    }
    Ok(text.to_owned())
}

fn scope(text: &str) -> Result<Scope, String> {
    let known = || Scope::ALL.map(Scope::name).join(", ");
    Scope::of_name(text).ok_or_else(|| format!("there is no such scope: {}", known()))
}

/// Does what was asked for.
///
/// # Errors
///
/// Where the database cannot be used, a name is taken, or there is no such token.
pub async fn tokens(tokens: Tokens) -> anyhow::Result<ExitCode> {
    let at = match &tokens.what {
        What::Make(make) => &make.at,
        What::List(at) => at,
        What::Revoke(revoke) => &revoke.at,
    };
    let options = SqliteOptions::new(&at.database);
    let opened = match tokens.what {
        // What was never there has no tokens to show: no file is made for that.
        What::Make(_) => SqliteStore::open_beside(options, true).await,
        What::List(_) | What::Revoke(_) => SqliteStore::open_beside(options, false).await,
    };
    let store =
        opened.with_context(|| format!("cannot use the database {}", at.database.display()))?;
    let now = OffsetDateTime::now_utc();
    let done = match tokens.what {
        What::Make(make) => made(&store, make, now).await,
        What::List(_) => listed(&store, now).await,
        What::Revoke(revoke) => revoked(&store, &revoke.name, now).await,
    };
    let closed = store.close().await;
    done?;
    closed?;
    Ok(ExitCode::SUCCESS)
}

fn deed(kind: DeedKind, what: serde_json::Value, at: OffsetDateTime) -> Deed {
    Deed {
        actor: Actor::CommandLine,
        at,
        kind,
        plant: None,
        what,
    }
}

async fn made(store: &SqliteStore, make: Make, now: OffsetDateTime) -> anyhow::Result<()> {
    let token = Token::random();
    let token = token.map_err(|error| anyhow!("the system gives no random bits: {error}"))?;
    let scopes: Scopes = make.scopes.into_iter().collect();
    let expires = make.expires.map(|expiry| expiry.after(now)).transpose()?;
    let what = json!({
        "token": make.name,
        "scopes": scopes.iter().map(Scope::name).collect::<Vec<_>>(),
        "plants": make.plants,
        "expires": expires.map(shown),
        "rate": make.rate.map(Rate::a_second),
    });
    let new = NewToken {
        name: make.name.clone(),
        digest: token.digest(),
        scopes,
        plants: make.plants,
        expires,
        rate: make.rate,
    };
    let kept = store.add_token(new, deed(DeedKind::TokenMade, what, now));
    if kept.await?.is_none() {
        bail!(
            "there is a token \"{0}\": take another name, or revoke that one first \
             (`counterpoise token revoke --name {0}`)",
            make.name
        );
    }
    print(format!("{}\n", token.reveal()))?;
    eprintln!(
        "This is token \"{}\". It is not kept and cannot be shown again.",
        make.name
    );
    Ok(())
}

async fn listed(store: &SqliteStore, now: OffsetDateTime) -> anyhow::Result<()> {
    let rows = store.tokens().await?;
    if rows.is_empty() {
        return print("no tokens: the service answers its own machine alone\n");
    }
    let headings = [
        "<Name",
        "<State",
        "<Scopes",
        "<Plants",
        "Rate",
        "<Expires",
        "<Made",
        "<Last used",
    ];
    let mut table = Table::new(&headings);
    for row in rows {
        table.row(line(row, now));
    }
    print(table.to_string())
}

fn line(row: TokenRow, now: OffsetDateTime) -> Vec<String> {
    let TokenRow {
        token,
        made,
        revoked,
        last_used,
        ..
    } = row;
    let state = match (revoked, token.expires) {
        (Some(at), _) => format!("revoked {}", shown(at)),
        (None, Some(end)) if end <= now => "expired".to_owned(),
        (None, _) => "in force".to_owned(),
    };
    vec![
        token.name,
        state,
        token.scopes.to_string(),
        token
            .plants
            .map_or("all".to_owned(), |names| names.join(",")),
        token.rate.map_or("-".to_owned(), |rate| rate.to_string()),
        token.expires.map_or("never".to_owned(), shown),
        shown(made),
        last_used.map_or("never".to_owned(), shown),
    ]
}

async fn revoked(store: &SqliteStore, name: &str, now: OffsetDateTime) -> anyhow::Result<()> {
    let deed = deed(DeedKind::TokenRevoked, json!({"token": name}), now);
    if store.revoke_token(name, deed).await?.is_none() {
        bail!("no token \"{name}\" is in force: `counterpoise token list` shows what there is");
    }
    print(format!("token \"{name}\" is revoked\n"))
}

/// To the second: nobody reads more.
fn shown(time: OffsetDateTime) -> String {
    let whole = time.replace_nanosecond(0).unwrap_or(time);
    whole.format(&Rfc3339).unwrap_or_default()
}

#[cfg(test)]
mod tests {
    use super::*;
    use time::macros::datetime;

    #[test]
    fn ends_are_read() {
        let now = datetime!(2031-04-02 12:00 UTC);
        let end = |text: &str| Expiry::read(text).map(|expiry| expiry.after(now).ok());
        assert_eq!(end("90d"), Ok(Some(datetime!(2031-07-01 12:00 UTC))));
        assert_eq!(end("12h"), Ok(Some(datetime!(2031-04-03 0:00 UTC))));
        assert_eq!(end("1w"), Ok(Some(datetime!(2031-04-09 12:00 UTC))));
        let time = datetime!(2031-04-02 13:00 UTC);
        assert_eq!(end("2031-04-02T15:00:00+02:00"), Ok(Some(time)));
        for over in [
            "2031-04-02T12:00:00Z",
            "2400-01-01T00:00:00Z",
            "4000000000w",
        ] {
            assert_eq!(end(over), Ok(None), "{over}");
        }
        for bad in ["", "d", "0d", "-1d", "90", "90 d", "1.5h", "tomorrow"] {
            assert!(Expiry::read(bad).is_err(), "{bad}");
        }
    }

    #[test]
    fn names_can_be_printed() {
        assert!(name("historian of unit 2").is_ok());
        for bad in ["", " a", "a\n", "\u{7}", &"x".repeat(129)] {
            assert!(name(bad).is_err(), "{bad:?}");
        }
    }
}
