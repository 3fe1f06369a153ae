//! The routes with their OpenAPI 3.1 document: one table gives both.

use super::{
    App, Problem, accusations, again, alarms, batches, by_hand, events, field, operation, plants,
    series,
};
use utoipa::OpenApi;
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
    OpenApiRouter::with_openapi(Document::openapi())
        .routes(routes!(plants::list))
        .routes(routes!(plants::put, plants::get))
        .routes(routes!(plants::assessment))
        .routes(routes!(batches::post, batches::list))
        .routes(routes!(batches::get))
        .routes(routes!(series::get))
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
        .routes(routes!(operation::live))
        .routes(routes!(operation::ready))
}

/// The OpenAPI document.
pub fn document() -> utoipa::openapi::OpenApi {
    routes().into_openapi()
}
