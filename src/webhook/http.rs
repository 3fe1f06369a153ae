//! Posting over the network.

use super::sender::{Answer, Post};
use super::signature::{JSON, Signed};
use super::target::{Target, Unusable};
use reqwest::Certificate;
use reqwest::header::{CONTENT_TYPE, RETRY_AFTER};
use reqwest::redirect::Policy;
use std::time::Duration;

/// Time for one attempt, from connecting to the answer's head.
const PATIENCE: Duration = Duration::from_secs(10);

/// Posts by HTTP/1.1, over TLS where the target asks for it; follows no redirection and uses no proxy of the
/// environment.
#[derive(Clone, Debug)]
pub struct Http(reqwest::Client);

impl Http {
    /// A client of its own for a target. Over TLS the other end is held to the
    /// root certificates in PEM, where there are some, else to the system's.
    ///
    /// # Errors
    ///
    /// Where the system gives it no means, or the root certificates cannot be
    /// read.
    pub fn new(target: &Target, roots: Option<&[u8]>) -> Result<Self, Unusable> {
        let roots = roots.map(certificates).transpose()?;
        // Reading those of the system takes time.
        let asks_the_system = target.is_tls() && roots.is_none();
        let client = reqwest::Client::builder()
            .user_agent(concat!("counterpoise/", env!("CARGO_PKG_VERSION")))
            .redirect(Policy::none())
            .no_proxy()
            .tls_built_in_root_certs(asks_the_system)
            .timeout(PATIENCE);
        let client = roots
            .into_iter()
            .flatten()
            .fold(client, reqwest::ClientBuilder::add_root_certificate);
        let client = client.build();
        client
            .map(Http)
            .map_err(|error| Unusable::Means(reasons(&error)))
    }
}

fn certificates(pem: &[u8]) -> Result<Vec<Certificate>, Unusable> {
    let read = Certificate::from_pem_bundle(pem);
    let read = read.map_err(|error| Unusable::Roots(reasons(&error)))?;
    if read.is_empty() {
        return Err(Unusable::Roots("there is none".to_owned()));
    }
    Ok(read)
}

impl Post for Http {
    async fn post(&self, request: Signed) -> Result<Answer, String> {
        let mut post = self
            .0
            .post(request.target.url())
            .header(CONTENT_TYPE, JSON)
            .header("content-digest", request.content_digest)
            .header("signature-input", request.signature_input)
            .header("signature", request.signature);
        for (name, value) in request.trace {
            post = post.header(name, value);
        }
        let answer = post
            .body(request.body)
            .send()
            .await
            // Path and query are nothing for a log.
            .map_err(|error| reasons(&error.without_url()))?;
        let retry_after = answer.headers().get(RETRY_AFTER);
        Ok(Answer {
            status: answer.status().as_u16(),
            retry_after: retry_after.and_then(|v| v.to_str().ok()).map(str::to_owned),
        })
    }
}

/// An error with what caused it.
fn reasons(error: &dyn std::error::Error) -> String {
    let causes = std::iter::successors(Some(error), |error| error.source());
    let causes: Vec<String> = causes.map(ToString::to_string).collect();
    causes.join(": ")
}
