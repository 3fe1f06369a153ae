//! The rule for as long as there are no tokens: this machine alone is answered.
//!
//! A loopback peer is not enough. A page from elsewhere can have a browser on
//! this machine ask us, by a name that it has made to stand for 127.0.0.1 (then
//! `Host` shows the name) or openly across origins (then `Origin` shows it).

use crate::http::error::{Kind, Problem};
use axum::http::uri::Authority;
use axum::http::{HeaderMap, HeaderValue, Uri, header};
use std::net::{IpAddr, SocketAddr};

/// Headers of a request that a proxy on this machine passes on for somebody
/// else: RFC 7239, its common forerunner, and RFC 9110, section 7.6.3.
const PROXIED: [&str; 3] = ["forwarded", "x-forwarded-for", "via"];

/// Who is at the other end of the connection that a request came by.
#[derive(Clone, Copy, Debug)]
pub struct Peer(pub SocketAddr);

/// Whether an address is of this machine alone, also where it is written as one
/// of IPv6 that stands for one of IPv4.
pub fn is_loopback(address: IpAddr) -> bool {
    address.to_canonical().is_loopback()
}

/// Refuses what does not come from this machine, or was not meant for it.
pub(super) fn local(peer: Option<&Peer>, uri: &Uri, headers: &HeaderMap) -> Result<(), Problem> {
    let near = peer.is_some_and(|Peer(address)| is_loopback(address.ip()));
    let mut hosts = headers.get_all(header::HOST).iter();
    let one_host = hosts.next().is_some_and(names_us) && hosts.next().is_none();
    let target = uri.authority().is_none_or(authority_is_ours);
    let mut origins = headers.get_all(header::ORIGIN).iter();
    let direct = !PROXIED.iter().any(|name| headers.contains_key(*name));
    if near && direct && one_host && target && origins.all(origin_is_ours) {
        return Ok(());
    }
    Err(Problem::new(
        Kind::Forbidden,
        "there are no tokens yet, so only this machine is answered, by a name of its own \
         (localhost, 127.0.0.1 or [::1]): make a token with `counterpoise token make`",
    ))
}

fn names_us(host: &HeaderValue) -> bool {
    let authority = Authority::try_from(host.as_bytes());
    authority.is_ok_and(|authority| authority_is_ours(&authority))
}

fn origin_is_ours(origin: &HeaderValue) -> bool {
    let uri = Uri::try_from(origin.as_bytes());
    uri.is_ok_and(|uri| uri.scheme().is_some() && uri.authority().is_some_and(authority_is_ours))
}

fn authority_is_ours(authority: &Authority) -> bool {
    let host = authority.host();
    let bare = host.trim_start_matches('[').trim_end_matches(']');
    host.eq_ignore_ascii_case("localhost") || bare.parse().is_ok_and(is_loopback)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn ask(peer: &str, target: &'static str, sent: &[(&'static str, &str)]) -> bool {
        let mut headers = HeaderMap::new();
        for (name, value) in sent {
            headers.append(*name, HeaderValue::from_str(value).expect("a value"));
        }
        let peer = Peer(peer.parse().expect("an address"));
        local(Some(&peer), &Uri::from_static(target), &headers).is_ok()
    }

    #[test]
    fn this_machine_by_a_name_of_its_own() {
        for peer in [
            "127.0.0.1:5",
            "127.9.9.9:5",
            "[::1]:5",
            "[::ffff:127.0.0.1]:5",
        ] {
            assert!(ask(peer, "/v1/plants", &[("host", "localhost")]), "{peer}");
        }
        for peer in [
            "10.0.0.1:5",
            "[fe80::1]:5",
            "[::ffff:10.0.0.1]:5",
            "0.0.0.0:5",
        ] {
            assert!(!ask(peer, "/v1/plants", &[("host", "localhost")]), "{peer}");
        }
        assert!(local(None, &Uri::from_static("/"), &HeaderMap::new()).is_err());
    }

    #[test]
    fn no_name_from_elsewhere() {
        let peer = "127.0.0.1:5";
        for host in ["LocalHost:80", "127.0.0.1:8080", "[::1]:8080", "[::1]"] {
            assert!(ask(peer, "/", &[("host", host)]), "{host}");
        }
        for host in [
            "evil.example",
            "localhost.evil.example",
            "localhost@evil.example",
            "127.0.0.1.evil.example",
            "10.0.0.1",
            "[fe80::1]",
            "",
        ] {
            assert!(!ask(peer, "/", &[("host", host)]), "{host}");
        }
        assert!(!ask(peer, "/", &[]));
        assert!(!ask(
            peer,
            "/",
            &[("host", "localhost"), ("host", "evil.example")]
        ));
        assert!(ask(peer, "http://localhost/", &[("host", "localhost")]));
        assert!(!ask(peer, "http://evil.example/", &[("host", "localhost")]));
    }

    #[test]
    fn nobody_behind_a_proxy() {
        for name in PROXIED {
            let sent = [("host", "localhost"), (name, "for=10.0.0.1")];
            assert!(!ask("127.0.0.1:5", "/", &sent), "{name}");
        }
    }

    #[test]
    fn no_page_from_elsewhere() {
        for (origin, fine) in [
            ("http://127.0.0.1:8080", true),
            ("http://localhost:3000", true),
            ("https://evil.example", false),
            ("null", false),
        ] {
            let sent = [("host", "localhost"), ("origin", origin)];
            assert_eq!(ask("127.0.0.1:5", "/", &sent), fine, "{origin}");
        }
    }
}
