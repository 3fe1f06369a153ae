//! Tokens as they are remembered, and who is let in by them.
//!
//! All tokens in force are in memory. Whoever is let in is let in by what the
//! store said no longer than [`PATIENCE`] ago, so that a token that another
//! program revokes is refused within that time; past the freshness that is asked
//! for, one request looks whether anything has changed while others go on. Where
//! the store cannot be asked, nobody is let in.

use super::open::{self, Peer};
use super::who::Who;
use crate::access::{Rate, Token, TokenDigest, same};
use crate::http::ambient::Clock;
use crate::http::error::{Kind, Problem};
use crate::store::{NewToken, Store, StoreError};
use axum::http::{HeaderMap, Uri, header};
use governor::clock::Clock as _;
use governor::{DefaultDirectRateLimiter, Quota, RateLimiter};
use std::num::NonZeroU32;
use std::sync::atomic::{AtomicI64, Ordering};
use std::sync::{Arc, PoisonError, RwLock};
use std::time::{Duration, Instant};
use time::OffsetDateTime;
use tokio::sync::Mutex;

/// How old what is known of the tokens may get at most.
const PATIENCE: Duration = Duration::from_secs(1);

/// How soon a stream asks again at the soonest.
const SOONEST: Duration = Duration::from_millis(20);

const MINUTE: i64 = 60;

/// See the module.
pub(in crate::http) struct Gate {
    store: Arc<dyn Store>,
    clock: Arc<dyn Clock>,
    /// Of tokens that have none of their own.
    rate: Rate,
    freshness: Duration,
    known: RwLock<Arc<Known>>,
    turn: Mutex<()>,
}

/// A token in force.
pub(in crate::http) struct Kept {
    pub id: i64,
    pub token: NewToken,
    limiter: DefaultDirectRateLimiter,
    /// Minute of the last use that was noted, since 1970.
    used: AtomicI64,
}

/// What the store said.
#[derive(Clone, Default)]
struct Known {
    asked: Option<Instant>,
    version: i64,
    /// There is one, or was.
    any: bool,
    tokens: Arc<[Arc<Kept>]>,
}

impl Known {
    fn is_fresher_than(&self, age: Duration) -> bool {
        self.asked.is_some_and(|asked| asked.elapsed() < age)
    }
}

impl Gate {
    pub fn new(
        store: Arc<dyn Store>,
        clock: Arc<dyn Clock>,
        rate: Rate,
        freshness: Duration,
    ) -> Self {
        Gate {
            store,
            clock,
            rate,
            freshness: freshness.min(PATIENCE),
            known: RwLock::default(),
            turn: Mutex::default(),
        }
    }

    /// Whether there are no tokens: then this machine alone is answered.
    pub async fn is_open(&self) -> Result<bool, StoreError> {
        Ok(!self.known().await?.any)
    }

    /// Who sends a request, if they may send any at all now.
    pub async fn who(
        &self,
        peer: Option<&Peer>,
        uri: &Uri,
        headers: &HeaderMap,
    ) -> Result<Who, Problem> {
        let known = self.known().await?;
        if !known.any {
            open::local(peer, uri, headers)?;
            return Ok(Who::Local);
        }
        let kept = recognised(&known.tokens, headers)?;
        let now = self.clock.now();
        if kept.is_over(now) {
            return Err(unknown());
        }
        kept.count()?;
        self.note_use(&kept, now);
        Ok(Who::Token(kept))
    }

    /// Waits until whoever was let in would not be let in any more.
    pub async fn until_void(&self, who: &Who) {
        loop {
            tokio::time::sleep(self.freshness.max(SOONEST)).await;
            // Where the store cannot be asked, a stream has nothing to tell.
            if let Ok(known) = self.known().await
                && !self.still(&known, who)
            {
                return;
            }
        }
    }

    fn still(&self, known: &Known, who: &Who) -> bool {
        match who {
            Who::Local => !known.any,
            Who::Token(kept) => {
                let is_kept = known.tokens.iter().any(|token| token.id == kept.id);
                is_kept && !kept.is_over(self.clock.now())
            }
        }
    }

    async fn known(&self) -> Result<Arc<Known>, StoreError> {
        let known = self.remembered();
        if known.is_fresher_than(self.freshness) {
            return Ok(known);
        }
        let _turn = match self.turn.try_lock() {
            Ok(turn) => turn,
            // Somebody is asking already.
            Err(_) if known.is_fresher_than(PATIENCE) => return Ok(known),
            Err(_) => self.turn.lock().await,
        };
        let known = self.remembered();
        if known.is_fresher_than(self.freshness) {
            return Ok(known);
        }
        let next = Arc::new(self.ask(&known).await?);
        *self.known.write().unwrap_or_else(PoisonError::into_inner) = Arc::clone(&next);
        Ok(next)
    }

    /// The content is replaced as a whole, so a thread that broke off has left
    /// it whole.
    fn remembered(&self) -> Arc<Known> {
        Arc::clone(&self.known.read().unwrap_or_else(PoisonError::into_inner))
    }

    async fn ask(&self, known: &Known) -> Result<Known, StoreError> {
        let asked = Some(Instant::now());
        // First: tokens that are newer than this are read again next time.
        let version = self.store.tokens_version().await?;
        if known.asked.is_some() && version == known.version {
            return Ok(Known {
                asked,
                ..known.clone()
            });
        }
        let rows = self.store.tokens().await?;
        let any = !rows.is_empty();
        let in_force = rows.into_iter().filter(|row| row.revoked.is_none());
        let tokens = in_force.map(|row| {
            let same = known.tokens.iter().find(|kept| kept.id == row.id);
            same.map_or_else(|| Arc::new(self.keep(row)), Arc::clone)
        });
        Ok(Known {
            asked,
            version,
            any,
            tokens: tokens.collect(),
        })
    }

    fn keep(&self, row: crate::store::TokenRow) -> Kept {
        let rate = row.token.rate.unwrap_or(self.rate);
        Kept {
            id: row.id,
            limiter: RateLimiter::direct(quota(rate)),
            used: AtomicI64::new(row.last_used.map_or(i64::MIN, minute)),
            token: row.token,
        }
    }

    /// Once a minute, without anybody waiting for it.
    fn note_use(&self, kept: &Kept, now: OffsetDateTime) {
        let minute = minute(now);
        if kept.used.fetch_max(minute, Ordering::Relaxed) < minute
            && let Ok(at) = OffsetDateTime::from_unix_timestamp(minute * MINUTE)
        {
            // It is in the queue of the store from here on.
            drop(self.store.token_used(kept.id, at));
        }
    }
}

impl Kept {
    fn is_over(&self, now: OffsetDateTime) -> bool {
        self.token.expires.is_some_and(|end| end <= now)
    }

    /// Counts a request, or refuses it.
    fn count(&self) -> Result<(), Problem> {
        self.limiter.check().map_err(|early| {
            let wait = early.wait_time_from(self.limiter.clock().now());
            let seconds = wait.as_secs_f64().ceil().max(1.0);
            Problem::new(
                Kind::TooOften,
                format!("token \"{}\" is at its rate", self.token.name),
            )
            .with_header(header::RETRY_AFTER, format!("{seconds}"))
        })
    }
}

fn minute(time: OffsetDateTime) -> i64 {
    time.unix_timestamp().div_euclid(MINUTE)
}

/// As many at once as in one second, and at least one.
fn quota(rate: Rate) -> Quota {
    let burst = rate.a_second().ceil();
    // A rate is a million at most, so the conversion is exact.
    let burst = NonZeroU32::new(burst as u32).unwrap_or(NonZeroU32::MIN);
    let period = Duration::from_secs_f64(1.0 / rate.a_second());
    let quota = Quota::with_period(period);
    quota
        .unwrap_or(Quota::per_second(NonZeroU32::MIN))
        .allow_burst(burst)
}

/// The token of a request among those in force.
fn recognised(tokens: &[Arc<Kept>], headers: &HeaderMap) -> Result<Arc<Kept>, Problem> {
    let mut sent = headers.get_all(header::AUTHORIZATION).iter();
    let Some(first) = sent.next() else {
        return Err(Problem::new(
            Kind::Unauthorised,
            "this takes a token: send it as `Authorization: Bearer cpt_...`",
        )
        .with_header(header::WWW_AUTHENTICATE, "Bearer"));
    };
    let token = Token::of_header(first.as_bytes()).filter(|_| sent.next().is_none());
    let digest = token.ok_or_else(unknown)?.digest();
    find(tokens, &digest).ok_or_else(unknown)
}

/// Every digest is looked at, whether or not one has been found.
fn find(tokens: &[Arc<Kept>], digest: &TokenDigest) -> Option<Arc<Kept>> {
    let mut found = None;
    for kept in tokens {
        if same(&kept.token.digest, digest) {
            found = Some(Arc::clone(kept));
        }
    }
    found
}

/// RFC 6750, section 3.1. Why it does not hold is nobody's business.
fn unknown() -> Problem {
    Problem::new(
        Kind::Unauthorised,
        "this token is not known, has expired or was revoked",
    )
    .with_header(header::WWW_AUTHENTICATE, "Bearer error=\"invalid_token\"")
}
