//! The routes with their OpenAPI 3.1 document: one table gives both.

use super::access::{Need, ROUTES};
use super::{
    App, Problem, accusations, again, alarms, audit, backfills, batches, by_hand, events, field,
    means, metrics, operation, plants, readings, replays, series,
};
use utoipa::OpenApi;
use utoipa::openapi::path::{Operation, PathItem};
use utoipa::openapi::security::{HttpAuthScheme, HttpBuilder, SecurityRequirement, SecurityScheme};
use utoipa_axum::router::OpenApiRouter;
use utoipa_axum::routes;

#[derive(OpenApi)]
#[openapi(
    info(
        title = "Counterpoise",
        description = "Reconciles the measurements of steam and power plants: the nearest set of \
            flows, pressures and temperatures that conserve mass and energy, each with its \
            uncertainty, and whether a batch of readings is consistent.\n\nUncertainties are \
            half-widths at 95 % coverage. Tags come in their own units; streams in kg/s, bar \
            (absolute), Cel and kJ/kg; heat, work and power in kW. Times are RFC 3339: any offset \
            in, UTC out. Every error is a problem document (RFC 9457).\n\nAdvisory only: never \
            for protection or safety functions.",
        license(name = "MIT", identifier = "MIT"),
    ),
    tags(
        (name = "plants", description = "Plant files and what their tags can determine"),
        (name = "batches", description = "Readings in, reports out"),
        (name = "readings", description = "Single values as historians send them; batches are made of them"),
        (name = "replays", description = "What another revision would have made of a past period"),
        (name = "again", description = "Batches reconciled again: with decisions by hand, field readings, another revision"),
        (name = "alarms", description = "What stays wrong over several batches, and who knows of it"),
        (name = "accusations", description = "What suspects stood for, and what was found"),
        (name = "by hand", description = "Tags out of service, and known offsets"),
        (name = "operation", description = "For whoever keeps the service running"),
    ),
    components(schemas(Problem)),
)]
struct Document;

/// Every route with its description.
pub(super) fn routes() -> OpenApiRouter<App> {
    let mut routes = OpenApiRouter::with_openapi(Document::openapi())
        .routes(routes!(plants::list))
        .routes(routes!(plants::put, plants::get))
        .routes(routes!(plants::assessment))
        .routes(routes!(batches::post, batches::list))
        .routes(routes!(batches::get))
        .routes(routes!(readings::post))
        .routes(routes!(backfills::list))
        .routes(routes!(backfills::post, backfills::get))
        .routes(routes!(replays::start, replays::list))
        .routes(routes!(replays::get, replays::cancel))
        .routes(routes!(replays::comparison))
        .routes(routes!(replays::batches))
        .routes(routes!(series::get))
        .routes(routes!(means::get))
        .routes(routes!(again::influences))
        .routes(routes!(again::batch))
        .routes(routes!(again::period))
        .routes(routes!(again::versions))
        .routes(routes!(again::version))
        .routes(routes!(field::enter, field::list))
        .routes(routes!(alarms::list))
        .routes(routes!(events::listen))
        .routes(routes!(alarms::acknowledge))
        .routes(routes!(alarms::shelve))
        .routes(routes!(alarms::unshelve))
        .routes(routes!(alarms::remove_from_service))
        .routes(routes!(alarms::return_to_service))
        .routes(routes!(accusations::list))
        .routes(routes!(accusations::get_record))
        .routes(routes!(accusations::close))
        .routes(routes!(by_hand::decide, by_hand::list))
        .routes(routes!(by_hand::end))
        .routes(routes!(audit::list))
        .routes(routes!(operation::live))
        .routes(routes!(operation::ready))
        .routes(routes!(metrics::get));
    secure(routes.get_openapi_mut());
    routes
}

/// Says of each route which scope it needs, from the table that is held to.
fn secure(document: &mut utoipa::openapi::OpenApi) {
    let scheme = HttpBuilder::new()
        .scheme(HttpAuthScheme::Bearer)
        .description(Some(
            "Made by `counterpoise token make`; the names beside it are the scopes that a route \
             needs. A service without tokens answers its own machine alone, without one.",
        ))
        .build();
    let components = document.components.get_or_insert_default();
    components.add_security_scheme(TOKEN, SecurityScheme::Http(scheme));
    for (method, template, need) in ROUTES {
        let Need::Scope(scope) = need else {
            continue;
        };
        let item = document.paths.paths.get_mut(*template);
        if let Some(operation) = item.and_then(|item| operation(item, method)) {
            let needed = SecurityRequirement::new(TOKEN, [scope.name()]);
            operation.security = Some(vec![needed]);
        }
    }
}

/// Name of the security scheme.
const TOKEN: &str = "token";

fn operation<'d>(item: &'d mut PathItem, method: &str) -> Option<&'d mut Operation> {
    match method {
        "GET" => item.get.as_mut(),
        "PUT" => item.put.as_mut(),
        "POST" => item.post.as_mut(),
        "DELETE" => item.delete.as_mut(),
        _ => None,
    }
}

/// The templates of all routes.
pub(super) fn paths() -> Vec<String> {
    let docs = ["/openapi.json", "/docs", "/docs/", "/docs/{*rest}"];
    let documented = document().paths.paths.into_keys();
    documented.chain(docs.map(str::to_owned)).collect()
}

/// The OpenAPI document.
pub fn document() -> utoipa::openapi::OpenApi {
    routes().into_openapi()
}
