//! The guard before every route: who asks, whether they may, and of which plant.
//!
//! The order is: known at all (401), within the rate (429), a route that is
//! listed, the scope (403), the plant (404, as if there were none). Nothing of
//! the request but its head has been looked at by then.

mod gate;
mod open;
mod table;
mod who;

pub(super) use gate::Gate;
pub use open::{Peer, is_loopback};
pub(super) use table::{Need, ROUTES};
pub(super) use who::Who;

use super::App;
use super::engine::no_plant;
use super::error::{Kind, Problem};
use crate::access::Scope;
use axum::RequestExt;
use axum::extract::{MatchedPath, RawPathParams, Request, State};
use axum::http::header;
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};
use table::{Ruling, ruling};

/// See the module.
pub(super) async fn guard(State(app): State<App>, mut request: Request, next: Next) -> Response {
    match admit(&app, &mut request).await {
        Ok(()) => next.run(request).await,
        Err(problem) => problem.into_response(),
    }
}

async fn admit(app: &App, request: &mut Request) -> Result<(), Problem> {
    let template = request.extensions().get::<MatchedPath>().cloned();
    let ruling = template
        .as_ref()
        .map(|template| ruling(request.method(), template.as_str()));
    if ruling == Some(Ruling::Needs(Need::Open)) {
        return Ok(());
    }
    // The document, which is open, tells the methods too.
    if let Some(Ruling::OtherMethod(methods)) = &ruling {
        return Err(Problem::new(
            Kind::MethodNotAllowed,
            format!("this address takes {methods}"),
        )
        .with_header(header::ALLOW, methods.clone()));
    }
    let peer = request.extensions().get::<Peer>();
    let who = app.gate.who(peer, request.uri(), request.headers()).await?;
    match ruling {
        // What has no template is no route of ours.
        None => return Err(Problem::new(Kind::NotFound, "there is nothing here")),
        Some(Ruling::Needs(Need::Open) | Ruling::OtherMethod(_)) => {}
        Some(Ruling::Needs(Need::Scope(scope))) => {
            if !who.may(scope) {
                return Err(lacks(scope));
            }
        }
        Some(Ruling::Unlisted) => {
            tracing::error!(?template, "a route that is not in the table of scopes");
            return Err(Problem::new(Kind::Forbidden, "nobody may ask this"));
        }
    }
    if who.plants().is_some() {
        within_reach(&who, request).await?;
    }
    request.extensions_mut().insert(who);
    Ok(())
}

/// RFC 6750, section 3.1.
fn lacks(scope: Scope) -> Problem {
    let scope = scope.name();
    Problem::new(
        Kind::Forbidden,
        format!("this takes a token with the scope \"{scope}\""),
    )
    .with_header(
        header::WWW_AUTHENTICATE,
        format!("Bearer error=\"insufficient_scope\", scope=\"{scope}\""),
    )
}

/// Whether the plant in the path, if there is one, is one of theirs.
async fn within_reach(who: &Who, request: &mut Request) -> Result<(), Problem> {
    let names = request.extract_parts::<RawPathParams>().await;
    let names = names.map_err(|_| super::params::no_name())?;
    let plant = names.iter().find(|(key, _)| *key == "plant");
    match plant {
        Some((_, plant)) if !who.reaches(plant) => Err(no_plant(plant)),
        _ => Ok(()),
    }
}
