//! Tokens as text: made, read, hashed.
//!
//! A token is `cpt_` and 256 random bits in base64url (RFC 4648, section 5)
//! without padding. What cannot be guessed needs no slow hash: SHA-256 is what
//! is kept of it, and digests are compared in constant time.

use base64::Engine;
use base64::engine::general_purpose::URL_SAFE_NO_PAD;
use sha2::{Digest, Sha256};
use std::fmt;
use subtle::ConstantTimeEq;

/// How every token begins, so that one is known where it should not be.
pub const PREFIX: &str = "cpt_";

/// Characters after the prefix: 256 bits, six in each.
pub const LENGTH: usize = 43;

/// A token. `Debug` does not show it, and nothing else but [`Token::reveal`].
#[derive(Clone)]
pub struct Token(String);

/// SHA-256 of a token.
pub type TokenDigest = [u8; 32];

impl Token {
    /// A new one from the random source of the operating system.
    ///
    /// # Errors
    ///
    /// Where that gives nothing.
    pub fn random() -> Result<Self, getrandom::Error> {
        let mut bits = [0; 32];
        getrandom::fill(&mut bits)?;
        Ok(Token::of_bits(bits))
    }

    fn of_bits(bits: [u8; 32]) -> Self {
        Token(format!("{PREFIX}{}", URL_SAFE_NO_PAD.encode(bits)))
    }

    /// Reads a token; `None` where the text is none.
    pub fn parse(text: &str) -> Option<Self> {
        let characters = text.strip_prefix(PREFIX)?;
        let bits = URL_SAFE_NO_PAD.decode(characters).ok()?;
        (bits.len() == 32).then(|| Token(text.to_owned()))
    }

    /// Reads the token of an `Authorization` header (RFC 6750, section 2.1).
    pub fn of_header(value: &[u8]) -> Option<Self> {
        let text = std::str::from_utf8(value).ok()?;
        let (scheme, token) = text.trim().split_once(' ')?;
        scheme.eq_ignore_ascii_case("Bearer").then_some(())?;
        Token::parse(token.trim_start())
    }

    /// What is kept of it: SHA-256 of its text.
    pub fn digest(&self) -> TokenDigest {
        Sha256::digest(self.0.as_bytes()).into()
    }

    /// The token itself, to be shown once to whoever asked for it.
    pub fn reveal(&self) -> &str {
        &self.0
    }
}

impl fmt::Debug for Token {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str("Token(..)")
    }
}

/// Whether two digests are the same, in a time that does not depend on where
/// they differ.
pub fn same(a: &TokenDigest, b: &TokenDigest) -> bool {
    a.ct_eq(b).into()
}

/// Text with every token in it made unreadable, for logs.
pub fn masked(text: &str) -> std::borrow::Cow<'_, str> {
    let is_part = |byte: &u8| byte.is_ascii_alphanumeric() || matches!(byte, b'-' | b'_');
    let mut shown = String::new();
    let mut rest = text;
    while let Some(at) = rest.find(PREFIX) {
        let after = at + PREFIX.len();
        shown.push_str(&rest[..after]);
        rest = &rest[after..];
        let length = rest.bytes().take_while(is_part).count();
        // Half a token is no token, but more than should be read.
        if length >= LENGTH / 2 {
            shown.push_str("...");
            rest = &rest[length..];
        }
    }
    if shown.is_empty() {
        return text.into();
    }
    shown.push_str(rest);
    shown.into()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tokens_are_read_as_they_are_written() {
        let token = Token::random().expect("random bits");
        let text = token.reveal();
        assert_eq!(text.len(), PREFIX.len() + LENGTH);
        let read = Token::parse(text).expect("a token");
        assert!(same(&read.digest(), &token.digest()));
        assert_eq!(format!("{token:?}"), "Token(..)");
        let other = Token::random().expect("random bits");
        assert!(!same(&other.digest(), &token.digest()));
        // Made with `printf %s cpt_AAA... | sha256sum`.
        let zeros = Token::of_bits([0; 32]);
        assert_eq!(zeros.reveal(), format!("cpt_{}", "A".repeat(43)));
        assert_eq!(zeros.digest()[..4], [0x81, 0xC9, 0xD4, 0x8E]);
    }

    #[test]
    fn what_is_no_token_is_none() {
        let good = format!("cpt_{}", "A".repeat(43));
        assert!(Token::parse(&good).is_some());
        for bad in [
            String::new(),
            "cpt_".to_owned(),
            "A".repeat(43),
            format!("{good}A"),
            format!("{good}="),
            good[..46].to_owned(),
            // The last character holds four bits: the rest must be zero, or one
            // token had several texts.
            format!("cpt_{}B", "A".repeat(42)),
            format!("cpt_{}+", "A".repeat(42)),
            format!("CPT_{}", "A".repeat(43)),
        ] {
            assert!(Token::parse(&bad).is_none(), "{bad}");
        }
    }

    #[test]
    fn the_header_is_bearer_and_a_token() {
        let good = format!("cpt_{}", "A".repeat(43));
        for value in [format!("Bearer {good}"), format!("bearer  {good} ")] {
            assert!(Token::of_header(value.as_bytes()).is_some(), "{value}");
        }
        for value in [
            good.clone(),
            format!("Basic {good}"),
            "Bearer".to_owned(),
            format!("Bearer {good} x"),
        ] {
            assert!(Token::of_header(value.as_bytes()).is_none(), "{value}");
        }
        assert!(Token::of_header(b"Bearer \xff").is_none());
    }

    #[test]
    fn no_token_is_left_in_a_text() {
        let token = Token::random().expect("random bits");
        let text = format!("a {}, b {}x", token.reveal(), token.reveal());
        assert_eq!(masked(&text), "a cpt_..., b cpt_...");
        for harmless in ["", "cpt_", "a plant cpt_short of b", "nothing"] {
            assert_eq!(masked(harmless), harmless);
        }
    }
}
