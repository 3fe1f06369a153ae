//! Clients on connections that are kept, and what they measure.

use crate::plant::Batches;
use http_body_util::{BodyExt, Full};
use hyper::body::Bytes;
use hyper::client::conn::http1::{SendRequest, handshake};
use hyper_util::rt::TokioIo;
use std::fmt;
use std::net::SocketAddr;
use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};
use std::time::{Duration, Instant};
use tokio::net::TcpStream;

/// What came of a post.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Answer {
    /// 200 or 202.
    Done,
    /// 429.
    Refused,
    /// Another status, or a connection that broke.
    Broken,
}

/// What was measured.
#[derive(Clone, Debug, Default)]
pub struct Measured {
    answers: [usize; 3],
    /// How long each took that was done, sorted.
    latencies: Vec<Duration>,
    lasted: Duration,
}

impl Measured {
    /// Done a second.
    pub fn rate(&self) -> f64 {
        self.of(Answer::Done) as f64 / self.lasted.as_secs_f64()
    }

    pub fn of(&self, answer: Answer) -> usize {
        self.answers[answer as usize]
    }

    fn quantile(&self, part: f64) -> f64 {
        let at = (self.latencies.len() as f64 * part) as usize;
        let latency = self.latencies.get(at).or(self.latencies.last());
        latency.map_or(f64::NAN, |latency| latency.as_secs_f64() * 1e3)
    }

    fn take(&mut self, other: Measured) {
        for (sum, more) in self.answers.iter_mut().zip(other.answers) {
            *sum += more;
        }
        self.latencies.extend(other.latencies);
    }
}

impl fmt::Display for Measured {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let (half, most) = (self.quantile(0.5), self.quantile(0.99));
        write!(
            f,
            "{:8.0} a second, p50 {half:.1} ms, p99 {most:.1} ms",
            self.rate()
        )
    }
}

/// How batches are posted.
#[derive(Clone, Copy)]
pub struct Load {
    clients: usize,
    later: bool,
    /// All clients together, a second; as many as can be where there is none.
    offered: Option<f64>,
}

impl Load {
    pub fn new(clients: usize) -> Load {
        Load {
            clients,
            later: false,
            offered: None,
        }
    }

    /// Prefers not to wait for reports.
    pub fn later(self) -> Load {
        Load {
            later: true,
            ..self
        }
    }

    /// Posts so many a second, whatever becomes of them.
    pub fn at(self, offered: f64) -> Load {
        Load {
            offered: Some(offered),
            ..self
        }
    }

    /// Posts for a while.
    pub async fn run(self, address: SocketAddr, batches: &Batches, lasting: Duration) -> Measured {
        // Names go on from one measurement to the next.
        static NEXT: AtomicUsize = AtomicUsize::new(0);
        let next = Arc::new(|| NEXT.fetch_add(1, Ordering::Relaxed));
        let started = Instant::now();
        let until = started + lasting;
        let clients = (0..self.clients).map(|one| {
            let next = Arc::clone(&next);
            async move { self.client(one, address, batches, until, &*next).await }
        });
        let mut measured = Measured::default();
        for one in futures::future::join_all(clients).await {
            measured.take(one);
        }
        measured.lasted = started.elapsed();
        measured.latencies.sort_unstable();
        measured
    }

    async fn client(
        self,
        one: usize,
        address: SocketAddr,
        batches: &Batches,
        until: Instant,
        next: &impl Fn() -> usize,
    ) -> Measured {
        let mut measured = Measured::default();
        let mut connection = None;
        let pace = self
            .offered
            .map(|all| Duration::from_secs_f64(self.clients as f64 / all));
        let mut due = Instant::now()
            + pace
                .unwrap_or_default()
                .mul_f64(one as f64 / self.clients as f64);
        while Instant::now() < until {
            if let Some(pace) = pace {
                tokio::time::sleep_until(due.into()).await;
                due += pace;
            }
            let body = batches.body(next());
            let sent = Instant::now();
            let answer = self.post(&mut connection, address, body).await;
            measured.answers[answer as usize] += 1;
            match answer {
                Answer::Done => measured.latencies.push(sent.elapsed()),
                // As a client would that is told to come again later, though sooner.
                Answer::Refused if pace.is_none() => {
                    tokio::time::sleep(Duration::from_millis(50)).await;
                }
                Answer::Refused => {}
                Answer::Broken => connection = None,
            }
        }
        measured
    }

    async fn post(
        self,
        connection: &mut Option<SendRequest<Full<Bytes>>>,
        address: SocketAddr,
        body: String,
    ) -> Answer {
        if connection.is_none() {
            *connection = connect(address).await;
        }
        let Some(sender) = connection else {
            return Answer::Broken;
        };
        let mut request = hyper::Request::post("/v1/plants/string/batches")
            .header("host", "localhost")
            .header("content-type", "application/json");
        if self.later {
            request = request.header("prefer", "respond-async");
        }
        let request = request
            .body(Full::new(Bytes::from(body)))
            .expect("a request");
        let Ok(answer) = sender.send_request(request).await else {
            return Answer::Broken;
        };
        let status = answer.status().as_u16();
        if answer.into_body().collect().await.is_err() {
            return Answer::Broken;
        }
        match status {
            200 | 202 => Answer::Done,
            429 => Answer::Refused,
            _ => Answer::Broken,
        }
    }
}

async fn connect(address: SocketAddr) -> Option<SendRequest<Full<Bytes>>> {
    let stream = TcpStream::connect(address).await.ok()?;
    stream.set_nodelay(true).ok()?;
    let (sender, connection) = handshake(TokioIo::new(stream)).await.ok()?;
    tokio::spawn(connection);
    Some(sender)
}
