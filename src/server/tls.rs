//! TLS from two files: a chain of certificates and its key, both PEM.
//!
//! They are read before anything starts, and again on SIGHUP and whenever they
//! change, so that a renewed certificate needs no restart: connections that are
//! open go on with what they have. Files that cannot be used, half renewed ones
//! too, leave the certificate that is served as it was.

use sha2::{Digest, Sha256};
use std::fmt;
use std::path::{Path, PathBuf};
use std::sync::{Arc, PoisonError, RwLock};
use std::time::Duration;
use tokio::signal::unix::{Signal, SignalKind, signal};
use tokio_rustls::TlsAcceptor;
use tokio_rustls::rustls::ServerConfig;
use tokio_rustls::rustls::crypto::ring;
use tokio_rustls::rustls::pki_types::pem::PemObject;
use tokio_rustls::rustls::pki_types::{CertificateDer, PrivateKeyDer};
use tokio_rustls::rustls::server::{ClientHello, ResolvesServerCert};
use tokio_rustls::rustls::sign::CertifiedKey;

/// Why TLS cannot be spoken with two files.
#[derive(Debug, thiserror::Error)]
pub enum TlsError {
    /// A file cannot be read.
    #[error("cannot read {file}: {error}")]
    Unreadable {
        /// The file.
        file: PathBuf,
        /// What the operating system says.
        error: std::io::Error,
    },
    /// A file does not hold what it should.
    #[error("{file} holds no {what} in PEM: {reason}")]
    NotPem {
        /// The file.
        file: PathBuf,
        /// What it should hold.
        what: &'static str,
        /// What is wrong.
        reason: String,
    },
    /// The two do not belong together, or are of a kind that is not spoken.
    #[error("the certificate {cert} cannot be served with the key {key}: {reason}")]
    Pair {
        /// The file of the chain.
        cert: PathBuf,
        /// The file of the key.
        key: PathBuf,
        /// What is wrong.
        reason: String,
    },
}

/// TLS as it is spoken.
#[derive(Clone)]
pub struct Tls {
    cert: PathBuf,
    key: PathBuf,
    config: Arc<ServerConfig>,
    served: Arc<Served>,
}

/// The certificate that new connections get.
#[derive(Debug)]
struct Served(RwLock<Arc<CertifiedKey>>);

impl ResolvesServerCert for Served {
    fn resolve(&self, _: ClientHello<'_>) -> Option<Arc<CertifiedKey>> {
        let served = self.0.read().unwrap_or_else(PoisonError::into_inner);
        Some(Arc::clone(&served))
    }
}

/// What the files held when they were last looked at; `None` where they could
/// not be read.
type Seen = Option<[u8; 32]>;

impl Tls {
    /// TLS with the chain of certificates in one file, the server's own first,
    /// and the key of that in another.
    ///
    /// # Errors
    ///
    /// Where a file cannot be read, does not hold what it should, or the two do
    /// not belong together.
    pub fn load(cert: impl Into<PathBuf>, key: impl Into<PathBuf>) -> Result<Self, TlsError> {
        let (cert, key) = (cert.into(), key.into());
        let first = Arc::new(pair(&cert, &key, &contents(&cert, &key)?)?);
        let served = Arc::new(Served(RwLock::new(first)));
        let config = ServerConfig::builder_with_provider(Arc::new(ring::default_provider()))
            .with_safe_default_protocol_versions()
            .map_err(|error| TlsError::Pair {
                cert: cert.clone(),
                key: key.clone(),
                reason: error.to_string(),
            })?;
        let served_too: Arc<dyn ResolvesServerCert> = served.clone();
        let mut config = config.with_no_client_auth().with_cert_resolver(served_too);
        config.alpn_protocols = vec![b"http/1.1".to_vec()];
        Ok(Tls {
            cert,
            key,
            config: Arc::new(config),
            served,
        })
    }

    /// What takes a connection.
    pub(super) fn acceptor(&self) -> TlsAcceptor {
        TlsAcceptor::from(Arc::clone(&self.config))
    }

    /// Reads the files again on SIGHUP and when they change, looking every
    /// `tick`; for ever. From the call on, SIGHUP does not end the process.
    pub(super) fn keep_up(self, tick: Duration) -> impl Future<Output = ()> + Send {
        let hangups = match signal(SignalKind::hangup()) {
            Ok(hangups) => Some(hangups),
            Err(error) => {
                tracing::warn!(%error, "SIGHUP cannot be listened to");
                None
            }
        };
        self.follow(hangups, tick)
    }

    async fn follow(self, mut hangups: Option<Signal>, tick: Duration) {
        let mut seen: Option<Seen> = None;
        loop {
            let look = self.clone();
            let before = seen;
            let now = tokio::task::spawn_blocking(move || look.look(before));
            seen = now.await.ok().or(seen);
            let asked = async {
                match &mut hangups {
                    Some(hangups) => drop(hangups.recv().await),
                    None => std::future::pending().await,
                }
            };
            tokio::select! {
                () = asked => seen = Some(None),
                () = tokio::time::sleep(tick) => {}
            }
        }
    }

    /// Serves what the files hold, where they hold something else than before.
    fn look(&self, before: Option<Seen>) -> Seen {
        let read = contents(&self.cert, &self.key);
        let seen = read.as_ref().ok().map(digest);
        if before == Some(seen) && seen.is_some() {
            return seen;
        }
        match read.and_then(|contents| pair(&self.cert, &self.key, &contents)) {
            Ok(pair) => {
                let mut served = self
                    .served
                    .0
                    .write()
                    .unwrap_or_else(PoisonError::into_inner);
                *served = Arc::new(pair);
                if before.is_some() {
                    tracing::info!(file = %self.cert.display(), "the certificate has been read again");
                }
            }
            // Said once for each state of the files.
            Err(error) if before != Some(seen) => {
                tracing::error!(%error, "the certificate that is served stays as it is");
            }
            Err(_) => {}
        }
        seen
    }
}

/// Without the key.
impl fmt::Debug for Tls {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Tls")
            .field("cert", &self.cert)
            .field("key", &self.key)
            .finish_non_exhaustive()
    }
}

fn contents(cert: &Path, key: &Path) -> Result<[Vec<u8>; 2], TlsError> {
    let read = |file: &Path| {
        std::fs::read(file).map_err(|error| TlsError::Unreadable {
            file: file.to_owned(),
            error,
        })
    };
    Ok([read(cert)?, read(key)?])
}

fn digest(contents: &[Vec<u8>; 2]) -> [u8; 32] {
    let [cert, key] = contents.each_ref().map(Sha256::digest);
    Sha256::digest([cert, key].concat()).into()
}

fn pair(cert: &Path, key: &Path, [chain, secret]: &[Vec<u8>; 2]) -> Result<CertifiedKey, TlsError> {
    let not = |file: &Path, what| {
        let file = file.to_owned();
        move |reason: String| TlsError::NotPem { file, what, reason }
    };
    let chain: Result<Vec<_>, _> = CertificateDer::pem_slice_iter(chain).collect();
    let chain = chain.map_err(|error| not(cert, "certificate")(error.to_string()))?;
    if chain.is_empty() {
        return Err(not(cert, "certificate")("there is none".to_owned()));
    }
    let secret = PrivateKeyDer::from_pem_slice(secret)
        .map_err(|error| not(key, "private key")(error.to_string()))?;
    let pair = CertifiedKey::from_der(chain, secret, &ring::default_provider());
    pair.map_err(|error| TlsError::Pair {
        cert: cert.to_owned(),
        key: key.to_owned(),
        reason: error.to_string(),
    })
}
