//! Reading a request body: JSON only, within a size and a time.

use std::future::poll_fn;
use std::pin::Pin;
use std::sync::Arc;
use std::time::Duration;

use axum::body::{Body, Bytes, HttpBody};
use axum::extract::{FromRequest, Request};
use axum::http::{HeaderMap, StatusCode, header};

use super::problem::Problem;
use super::router::Shared;

/// The bytes of a JSON request body.
#[derive(Debug)]
pub struct JsonBytes(pub Bytes);

impl FromRequest<Arc<Shared>> for JsonBytes {
    type Rejection = Problem;

    async fn from_request(request: Request, shared: &Arc<Shared>) -> Result<Self, Problem> {
        check_type(request.headers(), "application/json")?;
        let limit = shared.settings.body_limit;
        check_length(request.headers(), limit as u64)?;
        let reading = read(request.into_body(), limit);
        match tokio::time::timeout(shared.settings.body_time, reading).await {
            Ok(result) => result.map(JsonBytes),
            Err(_) => Err(too_slow("the body", shared.settings.body_time)),
        }
    }
}

/// A page in a browser can send a form or plain text to any address without asking; JSON it cannot.
///
/// # Errors
/// 415 unless the one Content-Type is `wanted` and nothing is encoded.
pub fn check_type(headers: &HeaderMap, wanted: &str) -> Result<(), Problem> {
    if !media_type(headers).is_some_and(|value| is(value, wanted)) {
        return Err(Problem::new(
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
            "not-json",
            &format!("Content-Type is not {wanted}"),
            format!("send one Content-Type header with {wanted}"),
        ));
    }
    check_encoding(headers)
}

/// The one Content-Type header, if there is just one.
pub(super) fn media_type(headers: &HeaderMap) -> Option<&str> {
    let mut given = headers.get_all(header::CONTENT_TYPE).iter();
    match (given.next(), given.next()) {
        (Some(value), None) => value.to_str().ok(),
        _ => None,
    }
}

/// Compressed bodies are not taken.
pub(super) fn check_encoding(headers: &HeaderMap) -> Result<(), Problem> {
    let encoded = headers.get_all(header::CONTENT_ENCODING).iter().any(|value| value != "identity");
    if encoded {
        return Err(Problem::new(
            StatusCode::UNSUPPORTED_MEDIA_TYPE,
            "encoded-body",
            "Content-Encoding is not supported",
            "send the body as it is, without compression",
        ));
    }
    Ok(())
}

/// Whether a Content-Type names this media type, parameters aside.
pub(super) fn is(value: &str, wanted: &str) -> bool {
    let essence = value.split(';').next().unwrap_or_default();
    essence.trim_matches([' ', '\t']).eq_ignore_ascii_case(wanted)
}

/// Refuses by the announced length, before a byte of the body is read.
pub(super) fn check_length(headers: &HeaderMap, limit: u64) -> Result<(), Problem> {
    let announced = headers
        .get(header::CONTENT_LENGTH)
        .and_then(|value| value.to_str().ok())
        .and_then(|text| text.parse::<u64>().ok());
    match announced {
        Some(length) if length > limit => Err(too_large(limit)),
        _ => Ok(()),
    }
}

/// Reads frame by frame, so that a body without an announced length stops at the limit as well.
async fn read(mut body: Body, limit: usize) -> Result<Bytes, Problem> {
    let mut bytes = Vec::with_capacity(usize::try_from(body.size_hint().lower()).unwrap_or(0).min(limit));
    while let Some(frame) = poll_fn(|context| Pin::new(&mut body).poll_frame(context)).await {
        let frame = frame.map_err(|_| broken())?;
        if let Ok(data) = frame.into_data() {
            if data.len() > limit - bytes.len() {
                return Err(too_large(limit as u64));
            }
            bytes.extend_from_slice(&data);
        }
    }
    Ok(Bytes::from(bytes))
}

pub(super) fn too_large(limit: u64) -> Problem {
    Problem::new(
        StatusCode::PAYLOAD_TOO_LARGE,
        "body-too-large",
        "Body too large",
        format!("a request body may have at most {limit} bytes"),
    )
}

/// A client that keeps a worker waiting.
pub(super) fn too_slow(what: &str, within: Duration) -> Problem {
    Problem::new(
        StatusCode::REQUEST_TIMEOUT,
        "slow-body",
        "Body came too slowly",
        format!("{what} must arrive within {} s", within.as_secs_f64()),
    )
}

pub(super) fn broken() -> Problem {
    Problem::new(
        StatusCode::BAD_REQUEST,
        "broken-body",
        "Body broke off",
        "the request body ended early or its chunks are malformed",
    )
}

#[cfg(test)]
mod tests {
    use super::is;

    #[test]
    fn json_types_are_told_from_the_rest() {
        for good in ["application/json", "Application/JSON", "application/json; charset=utf-8", "application/json ;x=y"] {
            assert!(is(good, "application/json"), "{good}");
        }
        let form = "application/x-www-form-urlencoded";
        let trick = "text/plain; application/json";
        for bad in ["", "text/plain", "application/jsonp", "application/json+x", trick, ";application/json", form] {
            assert!(!is(bad, "application/json"), "{bad}");
        }
    }
}
