//! TLS: spoken with a certificate of the test's own, renewed while it runs, and
//! nothing else on its port.

use super::process::Running;
use crate::harness::{Service, Setup};
use counterpoise::http::Clock;
use counterpoise::server::{Hook, Limits, SystemClock, Tls, TlsError};
use counterpoise::webhook::{Http, Key, Post, Target, sign};
use rcgen::{BasicConstraints, CertificateParams, IsCa, Issuer, KeyPair};
use reqwest::{Certificate, Client, StatusCode};
use std::path::{Path, PathBuf};
use std::process::Command;
use std::time::Duration;
use tokio::io::{AsyncReadExt, AsyncWriteExt};
use tokio::net::TcpStream;

/// Somebody whose certificates are trusted.
struct Authority {
    issuer: Issuer<'static, KeyPair>,
    pem: String,
}

impl Authority {
    fn new() -> Authority {
        let mut params = CertificateParams::default();
        params.is_ca = IsCa::Ca(BasicConstraints::Unconstrained);
        let key = KeyPair::generate().expect("a key");
        let pem = params.self_signed(&key).expect("a certificate").pem();
        Authority {
            issuer: Issuer::new(params, key),
            pem,
        }
    }

    /// A certificate of this machine and its key.
    fn issue(&self) -> (String, String) {
        let names = ["localhost".to_owned(), "127.0.0.1".to_owned()];
        let params = CertificateParams::new(names).expect("names");
        let key = KeyPair::generate().expect("a key");
        let cert = params.signed_by(&key, &self.issuer).expect("a certificate");
        (cert.pem(), key.serialize_pem())
    }

    fn client(&self) -> Client {
        let root = Certificate::from_pem(self.pem.as_bytes()).expect("a root");
        Client::builder()
            .tls_built_in_root_certs(false)
            .add_root_certificate(root)
            .build()
            .expect("a client")
    }
}

fn write(directory: &Path, (cert, key): &(String, String)) -> (PathBuf, PathBuf) {
    let (cert_file, key_file) = (directory.join("cert.pem"), directory.join("key.pem"));
    std::fs::write(&cert_file, cert).expect("written");
    std::fs::write(&key_file, key).expect("written");
    (cert_file, key_file)
}

fn service(directory: &Path, limits: Limits) -> Service {
    let (cert, key) = (directory.join("cert.pem"), directory.join("key.pem"));
    Service::with(Setup {
        tls: Some(Tls::load(cert, key).expect("TLS")),
        limits,
        ..Setup::default()
    })
}

#[tokio::test]
async fn it_is_spoken_and_nothing_else_is() {
    let directory = tempfile::tempdir().expect("a directory");
    let authority = Authority::new();
    write(directory.path(), &authority.issue());
    let limits = Limits {
        read_timeout: Duration::from_millis(300),
        ..Limits::default()
    };
    let service = service(directory.path(), limits);
    let port = service.address.port();
    let client = authority.client();
    for host in ["localhost", "127.0.0.1"] {
        let url = format!("https://{host}:{port}/v1/plants");
        let answer = client.get(url).send().await.expect("an answer");
        assert_eq!(answer.status(), StatusCode::OK);
        assert_eq!(answer.version(), reqwest::Version::HTTP_11);
    }
    let stranger = Authority::new().client();
    let untrusted = stranger
        .get(format!("https://localhost:{port}/livez"))
        .send()
        .await;
    assert!(untrusted.is_err());

    let mut plain = TcpStream::connect(service.address)
        .await
        .expect("connected");
    let head = b"GET /livez HTTP/1.1\r\nhost: localhost\r\n\r\n";
    plain.write_all(head).await.expect("sent");
    let mut heard = Vec::new();
    // A cut may come as an end or as a reset.
    let _ = plain.read_to_end(&mut heard).await;
    assert!(!heard.starts_with(b"HTTP"), "{heard:?}");
    // Whoever says nothing is cut after as long as headers may take.
    let mut silent = TcpStream::connect(service.address)
        .await
        .expect("connected");
    let end = tokio::time::timeout(Duration::from_secs(20), silent.read(&mut [0; 8])).await;
    assert!(matches!(end.expect("cut in time"), Ok(0) | Err(_)));
}

#[tokio::test]
async fn a_renewed_certificate_is_served_and_open_connections_go_on() {
    let directory = tempfile::tempdir().expect("a directory");
    let (old, new) = (Authority::new(), Authority::new());
    write(directory.path(), &old.issue());
    let service = service(directory.path(), Limits::default());
    let url = format!("https://localhost:{}/v1/plants", service.address.port());
    let open = old.client();
    let ask = async |client: &Client| client.get(&url).send().await.map(|answer| answer.status());
    assert_eq!(ask(&open).await.expect("an answer"), StatusCode::OK);
    // Half renewed: the certificate without its key.
    let (cert, key) = new.issue();
    std::fs::write(directory.path().join("cert.pem"), &cert).expect("written");
    for _ in 0..20 {
        assert_eq!(ask(&old.client()).await.expect("an answer"), StatusCode::OK);
    }
    std::fs::write(directory.path().join("key.pem"), &key).expect("written");
    let renewed = async { while ask(&new.client()).await.is_err() {} };
    let renewed = tokio::time::timeout(Duration::from_secs(30), renewed).await;
    renewed.expect("renewed in time");
    assert!(
        ask(&old.client()).await.is_err(),
        "new connections get the new one"
    );
    // A handshake would fail now: the connection is the one from before.
    assert_eq!(ask(&open).await.expect("an answer"), StatusCode::OK);
}

#[test]
fn files_that_cannot_be_used_are_said() {
    let directory = tempfile::tempdir().expect("a directory");
    let authority = Authority::new();
    let (cert, key) = write(directory.path(), &authority.issue());
    let other = directory.path().join("other.pem");
    std::fs::write(&other, authority.issue().1).expect("written");
    let empty = directory.path().join("empty.pem");
    std::fs::write(&empty, "nothing").expect("written");
    let nowhere = directory.path().join("nowhere.pem");
    assert!(Tls::load(&cert, &key).is_ok());
    let error = |cert: &PathBuf, key: &PathBuf| Tls::load(cert, key).expect_err("a fault");
    assert!(matches!(error(&nowhere, &key), TlsError::Unreadable { file, .. } if file == nowhere));
    assert!(matches!(error(&cert, &nowhere), TlsError::Unreadable { file, .. } if file == nowhere));
    assert!(matches!(error(&empty, &key), TlsError::NotPem { file, .. } if file == empty));
    assert!(matches!(error(&cert, &empty), TlsError::NotPem { file, .. } if file == empty));
    assert!(matches!(error(&cert, &other), TlsError::Pair { .. }));
    let shown = format!("{:?} {}", Tls::load(&cert, &key), error(&cert, &other));
    assert!(!shown.contains("BEGIN"), "{shown}");
    // Before anything starts: no database is made.
    let serve = |more: &[&str]| {
        let mut command = Command::new(env!("CARGO_BIN_EXE_counterpoise"));
        command.env_clear().current_dir(directory.path()).args([
            "serve",
            "--listen",
            "127.0.0.1:0",
        ]);
        command.args(more).output().expect("an end")
    };
    let output = serve(&["--tls-cert", "cert.pem", "--tls-key", "other.pem"]);
    assert_eq!(output.status.code(), Some(3));
    let said = String::from_utf8(output.stderr).expect("text");
    assert!(
        said.contains("cert.pem") && said.contains("other.pem"),
        "{said}"
    );
    assert_eq!(serve(&["--tls-cert", "cert.pem"]).status.code(), Some(2));
    assert!(!directory.path().join("counterpoise.sqlite").exists());
}

#[tokio::test]
async fn a_process_reads_its_certificate_again_when_told() {
    let directory = tempfile::tempdir().expect("a directory");
    let authority = Authority::new();
    write(directory.path(), &authority.issue());
    let options = ["--tls-cert", "cert.pem", "--tls-key", "key.pem"];
    let service = Running::start(directory.path(), &options);
    let url = format!("https://{}/livez", service.address);
    let client = authority.client();
    let ask = async || client.get(&url).send().await.expect("an answer").status();
    assert_eq!(ask().await, StatusCode::OK);
    service.signal("HUP");
    let read_again = async {
        while !service
            .log()
            .contains("the certificate has been read again")
        {
            assert_eq!(ask().await, StatusCode::OK, "it goes on");
        }
    };
    let read_again = tokio::time::timeout(Duration::from_secs(30), read_again).await;
    assert!(read_again.is_ok(), "{}", service.log());
    service.end();
}

#[tokio::test]
async fn the_webhook_speaks_it_and_trusts_the_roots_it_is_given() {
    let directory = tempfile::tempdir().expect("a directory");
    let authority = Authority::new();
    write(directory.path(), &authority.issue());
    let service = service(directory.path(), Limits::default());
    let address = format!("https://localhost:{}/livez", service.address.port());
    let target = Target::new(&address).expect("a target");
    let key = Key::new("hook", &[7; 32]).expect("a key");
    let signed = || sign(&target, &key, b"{}", SystemClock.now());
    let roots = authority.pem.as_bytes();
    let trusting = Http::new(&target, Some(roots)).expect("a client");
    let answer = trusting.post(signed()).await.expect("an answer");
    assert_eq!(
        answer.status, 405,
        "the route takes no POST, and said so over TLS"
    );
    let other = Authority::new().pem;
    for roots in [Some(other.as_bytes()), None] {
        let wary = Http::new(&target, roots).expect("a client");
        assert!(wary.post(signed()).await.is_err());
    }
    let hook = Hook::new(&address, &[7; 32]).expect("a hook");
    assert!(hook.clone().trusting(roots).is_ok());
    for bad in [
        &b""[..],
        b"nothing",
        b"-----BEGIN CERTIFICATE-----\nAAAA\n-----END",
    ] {
        let refused = hook.clone().trusting(bad).map(|_| ()).expect_err("a fault");
        assert!(
            refused.to_string().contains("root certificates"),
            "{refused}"
        );
    }
}
