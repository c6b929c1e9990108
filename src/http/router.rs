//! The whole interface on one page.

use std::sync::Arc;

use axum::Router;
use axum::middleware::{from_fn, from_fn_with_state};
use axum::routing::{get, post};
use tower_http::catch_panic::CatchPanicLayer;
use tower_http::trace::{DefaultMakeSpan, DefaultOnFailure, DefaultOnRequest, DefaultOnResponse, TraceLayer};
use tracing::Level;

use super::desk::Desk;
use super::documents::Work;
use super::settings::Settings;
use super::{batch, guard, handlers, problem};

/// What all handlers share.
pub struct Shared {
    /// The bounds.
    pub settings: Settings,
    /// Permits and queue.
    pub desk: Desk,
    /// What turns requests into documents.
    pub work: Arc<dyn Work>,
}

/// Paths, and the layers around them, innermost first.
pub fn router(settings: Settings, work: Arc<dyn Work>) -> Router {
    let shared = Arc::new(Shared { desk: Desk::new(&settings), settings, work });
    Router::new()
        .route("/v1/models", post(handlers::register))
        .route("/v1/models/{id}", get(handlers::show_model))
        .route("/v1/dynamics", post(handlers::dynamics))
        .route("/v1/solve", post(handlers::solve))
        .route("/v1/compare", post(handlers::compare))
        .route("/v1/export", post(handlers::export))
        .route("/v1/batch", post(batch::batch))
        .route("/v1/identify", post(handlers::identify))
        .route("/v1/audit", post(handlers::audit))
        .route("/health", get(handlers::health))
        .route("/schemas", get(handlers::schemas))
        .route("/schemas/{name}", get(handlers::schema))
        .route("/openapi.json", get(handlers::openapi))
        .fallback(problem::unknown_path)
        .method_not_allowed_fallback(problem::wrong_method)
        .layer(from_fn_with_state(Arc::clone(&shared), guard::check))
        .layer(CatchPanicLayer::custom(problem::after_panic))
        .layer(from_fn(problem::write_out))
        .layer(access_log())
        .with_state(shared)
}

type AccessLog = TraceLayer<tower_http::classify::SharedClassifier<tower_http::classify::ServerErrorsAsFailures>>;

/// One line per response at `info`: method, path, status, time taken.
fn access_log() -> AccessLog {
    TraceLayer::new_for_http()
        .make_span_with(DefaultMakeSpan::new().level(Level::INFO))
        .on_request(DefaultOnRequest::new().level(Level::DEBUG))
        .on_response(DefaultOnResponse::new().level(Level::INFO))
        .on_failure(DefaultOnFailure::new().level(Level::WARN))
}
