//! HTTP message signatures (RFC 9421) with HMAC-SHA256 (RFC 2104), and the
//! digest of a body (RFC 9530).
//!
//! Signed are the method, the address, the digest of the body and its type. The
//! signature base is one line for each, `"name": value`, and a last line
//! `"@signature-params"` with the list of names, the time and the key's name, with
//! line feeds between them and none at the end (RFC 9421, section 2.5).

use super::target::{Key, Target};
use base64::Engine;
use base64::engine::general_purpose::STANDARD;
use hmac::{Hmac, KeyInit, Mac};
use sha2::{Digest, Sha256};
use time::OffsetDateTime;

/// The media type of a body.
pub(super) const JSON: &str = "application/json";

/// Our name for the signature: there may be others on a request.
const LABEL: &str = "counterpoise";

/// A body with what proves where it comes from.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Signed {
    /// Address.
    pub target: Target,
    /// Body, of type `application/json`.
    pub body: Vec<u8>,
    /// Value of `Content-Digest`.
    pub content_digest: String,
    /// Value of `Signature-Input`.
    pub signature_input: String,
    /// Value of `Signature`.
    pub signature: String,
    /// Headers that tell which trace it belongs to; they are not signed, since
    /// whatever passes it on may change them.
    pub trace: Vec<(&'static str, String)>,
}

/// Signs a POST of a JSON body.
pub fn sign(target: &Target, key: &Key, body: &[u8], created: OffsetDateTime) -> Signed {
    let content_digest = content_digest(body);
    let components = [
        ("@method", "POST"),
        ("@target-uri", target.as_str()),
        ("content-digest", content_digest.as_str()),
        ("content-type", JSON),
    ];
    let parameters = format!(
        ";created={};keyid=\"{}\";alg=\"hmac-sha256\"",
        created.unix_timestamp(),
        escaped(key.id()),
    );
    let base = signature_base(&components, &parameters);
    let signature = STANDARD.encode(hmac_sha256(key.secret(), base.as_bytes()));
    Signed {
        target: target.clone(),
        body: body.to_vec(),
        signature_input: format!("{LABEL}={}{parameters}", covered(&components)),
        signature: format!("{LABEL}=:{signature}:"),
        content_digest,
        trace: Vec::new(),
    }
}

/// The value of `Content-Digest` of a body.
pub fn content_digest(body: &[u8]) -> String {
    format!("sha-256=:{}:", STANDARD.encode(Sha256::digest(body)))
}

/// What is signed: components with their values, and the parameters with the
/// `;` that they start with.
pub fn signature_base(components: &[(&str, &str)], parameters: &str) -> String {
    let lines = components.iter();
    let lines: String = lines
        .map(|(name, value)| format!("\"{name}\": {value}\n"))
        .collect();
    format!(
        "{lines}\"@signature-params\": {}{parameters}",
        covered(components)
    )
}

/// The list of names (RFC 8941).
fn covered(components: &[(&str, &str)]) -> String {
    let names = components.iter().map(|(name, _)| format!("\"{name}\""));
    format!("({})", names.collect::<Vec<_>>().join(" "))
}

/// A text in a string of a structured field (RFC 8941).
fn escaped(text: &str) -> String {
    text.replace('\\', "\\\\").replace('"', "\\\"")
}

fn hmac_sha256(secret: &[u8], message: &[u8]) -> Vec<u8> {
    // HMAC takes secrets of every length; `new_from_slice` cannot fail.
    let Ok(mut mac) = Hmac::<Sha256>::new_from_slice(secret) else {
        return Vec::new();
    };
    mac.update(message);
    mac.finalize().into_bytes().to_vec()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn hex(bytes: &[u8]) -> String {
        bytes.iter().map(|b| format!("{b:02x}")).collect()
    }

    /// RFC 4231, test cases 1 and 2 (from memory).
    #[test]
    fn hmac_of_rfc_4231() {
        assert_eq!(
            hex(&hmac_sha256(&[0x0b; 20], b"Hi There")),
            "b0344c61d8db38535ca8afceaf0bf12b881dc200c9833da726e9376c2e32cff7"
        );
        assert_eq!(
            hex(&hmac_sha256(b"Jefe", b"what do ya want for nothing?")),
            "5bdcc146bf60754e6a042426089575c75a003f089d2739839dec58b964ec3843"
        );
    }

    /// RFC 9421, appendix B.2.5 (from memory; that key, base and signature agree
    /// was worked out by another program too).
    #[test]
    fn signature_of_rfc_9421() {
        let secret = STANDARD
            .decode(
                "uzvJfB4u3N0Jy4T7NZ75MDVcr8zSTInedJtkgcu46YW4XByzNJjxBdtjUkdJPBtbmHhIDi6pcl8jsasjlTMtDQ==",
            )
            .unwrap();
        let components = [
            ("date", "Tue, 20 Apr 2021 02:07:55 GMT"),
            ("@authority", "example.com"),
            ("content-type", "application/json"),
        ];
        let parameters = ";created=1618884473;keyid=\"test-shared-secret\"";
        let base = signature_base(&components, parameters);
        assert_eq!(
            base,
            "\"date\": Tue, 20 Apr 2021 02:07:55 GMT\n\
             \"@authority\": example.com\n\
             \"content-type\": application/json\n\
             \"@signature-params\": (\"date\" \"@authority\" \"content-type\")\
             ;created=1618884473;keyid=\"test-shared-secret\""
        );
        assert_eq!(
            STANDARD.encode(hmac_sha256(&secret, base.as_bytes())),
            "pxcQw6G3AjtMBQjwo8XzkZf/bws5LelbaMk5rGIGtE8="
        );
    }

    /// The example of RFC 9530 (from memory): the body ends with a line feed.
    #[test]
    fn digest_of_rfc_9530() {
        assert_eq!(
            content_digest(b"{\"hello\": \"world\"}\n"),
            "sha-256=:RK/0qy18MlBSVnWgjwz6lZEWjP/lF5HF9bvEF8FabDg=:"
        );
    }

    /// The whole request against its pieces, put together by hand.
    #[test]
    fn request() {
        let target = Target::new("http://alarms.example/in?plant=1").unwrap();
        let key = Key::new("hook \"1\"", &[7; 32]).unwrap();
        let created = OffsetDateTime::from_unix_timestamp(1_900_000_000).unwrap();
        let signed = sign(&target, &key, b"{}", created);
        let parameters = "(\"@method\" \"@target-uri\" \"content-digest\" \"content-type\")\
             ;created=1900000000;keyid=\"hook \\\"1\\\"\";alg=\"hmac-sha256\"";
        assert_eq!(signed.signature_input, format!("counterpoise={parameters}"));
        let base = format!(
            "\"@method\": POST\n\"@target-uri\": http://alarms.example/in?plant=1\n\
             \"content-digest\": {}\n\"content-type\": application/json\n\
             \"@signature-params\": {parameters}",
            content_digest(b"{}")
        );
        let signature = STANDARD.encode(hmac_sha256(&[7; 32], base.as_bytes()));
        assert_eq!(signed.signature, format!("counterpoise=:{signature}:"));
        // Every part counts.
        let others = [
            sign(&target, &key, b"{ }", created),
            sign(&target, &key, b"{}", created + time::Duration::SECOND),
            sign(
                &target,
                &Key::new("hook \"1\"", &[8; 32]).unwrap(),
                b"{}",
                created,
            ),
            sign(
                &Target::new("http://alarms.example/").unwrap(),
                &key,
                b"{}",
                created,
            ),
        ];
        for other in others {
            assert_ne!(other.signature, signed.signature);
        }
    }
}
