//! Posting over the network.

use super::sender::{Answer, Post};
use super::signature::{JSON, Signed};
use reqwest::header::{CONTENT_TYPE, RETRY_AFTER};
use reqwest::redirect::Policy;
use std::time::Duration;

/// Time for one attempt, from connecting to the answer's head.
const PATIENCE: Duration = Duration::from_secs(10);

/// Posts by HTTP/1.1; follows no redirection and uses no proxy of the
/// environment.
#[derive(Clone, Debug)]
pub struct Http(reqwest::Client);

impl Http {
    /// A client of its own.
    ///
    /// # Errors
    ///
    /// Where the system gives it no means.
    pub fn new() -> Result<Self, reqwest::Error> {
        let client = reqwest::Client::builder()
            .user_agent(concat!("counterpoise/", env!("CARGO_PKG_VERSION")))
            .redirect(Policy::none())
            .no_proxy()
            .timeout(PATIENCE);
        client.build().map(Http)
    }
}

impl Post for Http {
    async fn post(&self, request: Signed) -> Result<Answer, String> {
        let answer = self
            .0
            .post(request.target.url())
            .header(CONTENT_TYPE, JSON)
            .header("content-digest", request.content_digest)
            .header("signature-input", request.signature_input)
            .header("signature", request.signature)
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
