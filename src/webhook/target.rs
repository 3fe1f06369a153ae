//! Where events go, and the key they are signed with.

use reqwest::Url;
use std::fmt;

/// Shortest secret, in bytes: that of the hash, as RFC 2104 (section 3) advises.
const SHORTEST_SECRET: usize = 32;

/// An address that events can be posted to.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Target(Url);

/// A shared secret and its name.
#[derive(Clone, PartialEq, Eq)]
pub struct Key {
    id: String,
    secret: Vec<u8>,
}

/// Why a webhook cannot work.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Unusable {
    /// No address.
    #[error("`{0}` is no address: write https://host:port/path")]
    Address(String),
    /// Another scheme.
    #[error("`{0}:` is not spoken: write http:// or https://")]
    Scheme(String),
    /// Root certificates that cannot be read.
    #[error("no root certificates in PEM: {0}")]
    Roots(String),
    /// Nothing to send with.
    #[error("the system gives no means to send: {0}")]
    Means(String),
    /// A name or password in the address.
    #[error("the address holds a user: leave it out, requests are signed")]
    User,
    /// A key's name that cannot stand in a header.
    #[error("the key's name has to be 1 to 128 printable ASCII characters")]
    KeyName,
    /// A secret that could be guessed.
    #[error("the secret has {0} bytes: give {SHORTEST_SECRET} random ones or more")]
    Secret(usize),
}

impl Target {
    /// Reads an address.
    ///
    /// # Errors
    ///
    /// Where it is none, is neither `http:` nor `https:`, or holds a user.
    pub fn new(address: &str) -> Result<Self, Unusable> {
        let mut url = Url::parse(address).map_err(|_| Unusable::Address(address.to_owned()))?;
        if !["http", "https"].contains(&url.scheme()) {
            return Err(Unusable::Scheme(url.scheme().to_owned()));
        }
        if !url.username().is_empty() || url.password().is_some() {
            return Err(Unusable::User);
        }
        // A fragment is not sent.
        url.set_fragment(None);
        Ok(Target(url))
    }

    /// Whether TLS is spoken.
    pub fn is_tls(&self) -> bool {
        self.0.scheme() == "https"
    }

    /// The whole of it, as it is signed.
    pub fn as_str(&self) -> &str {
        self.0.as_str()
    }

    /// Its host, for logs: path and query may hold what nobody should read.
    pub fn host(&self) -> &str {
        self.0.host_str().unwrap_or_default()
    }

    pub(super) fn url(&self) -> Url {
        self.0.clone()
    }
}

impl Key {
    /// A key.
    ///
    /// # Errors
    ///
    /// Where its name cannot stand in a header, or the secret is short.
    pub fn new(id: &str, secret: &[u8]) -> Result<Self, Unusable> {
        let is_printable = id.bytes().all(|b| (0x20..0x7f).contains(&b));
        if id.is_empty() || id.len() > 128 || !is_printable {
            return Err(Unusable::KeyName);
        }
        if secret.len() < SHORTEST_SECRET {
            return Err(Unusable::Secret(secret.len()));
        }
        Ok(Key {
            id: id.to_owned(),
            secret: secret.to_vec(),
        })
    }

    /// Its name.
    pub fn id(&self) -> &str {
        &self.id
    }

    pub(super) fn secret(&self) -> &[u8] {
        &self.secret
    }
}

/// Without the secret.
impl fmt::Debug for Key {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.debug_struct("Key").field("id", &self.id).finish()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn addresses() {
        let target = Target::new("http://Alarms.Example:8080/in?plant=1#top").unwrap();
        assert_eq!(target.as_str(), "http://alarms.example:8080/in?plant=1");
        assert_eq!(target.host(), "alarms.example");
        // The empty path is `/` in what is sent and in what is signed.
        assert_eq!(Target::new("http://a").unwrap().as_str(), "http://a/");
        for (address, fault) in [
            ("nowhere", Unusable::Address("nowhere".to_owned())),
            ("ftp://a/", Unusable::Scheme("ftp".to_owned())),
            ("http://me:secret@a/", Unusable::User),
        ] {
            assert_eq!(Target::new(address), Err(fault));
        }
    }

    #[test]
    fn keys() {
        let secret = [7; 32];
        let key = Key::new("hook-1", &secret).unwrap();
        assert_eq!(format!("{key:?}"), "Key { id: \"hook-1\" }");
        assert_eq!(Key::new("hook-1", &secret[1..]), Err(Unusable::Secret(31)));
        for name in ["", "h\u{e9}", "a\nb"] {
            assert_eq!(Key::new(name, &secret), Err(Unusable::KeyName));
        }
    }
}
