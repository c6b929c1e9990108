//! The browser guard: a page on some web site must not talk to this service through its reader's
//! browser, neither directly nor by a name that was made to resolve to the loopback.
//!
//! - `Host` must name the loopback or a host that was allowed at the start: 421. This also holds
//!   when the attacker's own name resolves to 127.0.0.1, which a check of `Origin` alone misses.
//! - An `Origin` other than that very host is foreign: 403.

use std::net::{Ipv4Addr, Ipv6Addr};
use std::str::FromStr;
use std::sync::Arc;

use axum::extract::{Request, State};
use axum::http::{HeaderMap, StatusCode, Uri, header};
use axum::middleware::Next;
use axum::response::{IntoResponse, Response};

use super::problem::Problem;
use super::router::Shared;

/// Longest host name accepted (bytes).
const LONGEST_NAME: usize = 255;

/// A host as the `Host` header names it, without port: lower case, addresses in their plain form.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum HostName {
    /// A name or an IPv4 address.
    Name(String),
    /// An IPv6 address, written in brackets.
    V6(Ipv6Addr),
}

/// Why a host name was not understood.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error("{0:?} is not a host name: expected a name, an IPv4 address or [IPv6], without scheme, user or port")]
pub struct NotAHost(String);

impl FromStr for HostName {
    type Err = NotAHost;

    fn from_str(text: &str) -> Result<Self, NotAHost> {
        let refused = || NotAHost(text.chars().take(80).collect());
        if let Some(inner) = text.strip_prefix('[').and_then(|rest| rest.strip_suffix(']')) {
            return inner.parse().map(HostName::V6).map_err(|_| refused());
        }
        let plain = |c: char| c.is_ascii_alphanumeric() || matches!(c, '-' | '.' | '_');
        if text.is_empty() || text.len() > LONGEST_NAME || !text.chars().all(plain) {
            return Err(refused());
        }
        Ok(HostName::Name(text.to_ascii_lowercase()))
    }
}

impl HostName {
    /// `localhost`, `127.0.0.1` or `[::1]`.
    pub fn is_loopback(&self) -> bool {
        match self {
            HostName::Name(name) => name == "localhost" || *name == Ipv4Addr::LOCALHOST.to_string(),
            HostName::V6(address) => *address == Ipv6Addr::LOCALHOST,
        }
    }
}

/// Host and port of an authority; no user part.
fn parse_authority(text: &str) -> Result<(HostName, Option<u16>), NotAHost> {
    let refused = || NotAHost(text.chars().take(80).collect());
    let split = match text.rfind(']') {
        Some(end) => end + 1,
        None => text.find(':').unwrap_or(text.len()),
    };
    let (host, rest) = text.split_at_checked(split).ok_or_else(refused)?;
    let port = match rest.strip_prefix(':') {
        None if rest.is_empty() => None,
        Some(digits) if !digits.is_empty() && digits.bytes().all(|b| b.is_ascii_digit()) => {
            Some(digits.parse().map_err(|_| refused())?)
        }
        _ => return Err(refused()),
    };
    Ok((host.parse()?, port))
}

/// The layer.
pub async fn check(State(shared): State<Arc<Shared>>, request: Request, next: Next) -> Response {
    match admit(&shared.settings.allowed_hosts, request.uri(), request.headers()) {
        Ok(()) => next.run(request).await,
        Err(problem) => problem.into_response(),
    }
}

fn admit(allowed: &[HostName], uri: &Uri, headers: &HeaderMap) -> Result<(), Problem> {
    let mut hosts = headers.get_all(header::HOST).iter();
    let host = match (hosts.next(), hosts.next()) {
        (Some(host), None) => host.to_str().map_err(|_| bad_host("the Host header is not plain text"))?,
        (None, _) => return Err(bad_host("the Host header is missing")),
        _ => return Err(bad_host("there is more than one Host header")),
    };
    let named = parse_authority(host).map_err(|_| bad_host("the Host header is not a host with an optional port"))?;
    check_host(allowed, &named.0)?;
    if let Some(authority) = uri.authority() {
        // An absolute request target overrides Host (RFC 9112, 3.2.2), so it has to pass as well.
        let target = parse_authority(authority.as_str()).map_err(|_| bad_host("the request target names no plain host"))?;
        check_host(allowed, &target.0)?;
    }
    for origin in headers.get_all(header::ORIGIN) {
        if !origin.to_str().is_ok_and(|text| same_origin(text, &named)) {
            return Err(Problem::new(
                StatusCode::FORBIDDEN,
                "foreign-origin",
                "Foreign origin",
                "requests that pages of other sites make through a browser are refused",
            ));
        }
    }
    Ok(())
}

fn check_host(allowed: &[HostName], host: &HostName) -> Result<(), Problem> {
    if host.is_loopback() || allowed.contains(host) {
        return Ok(());
    }
    Err(Problem::new(
        StatusCode::MISDIRECTED_REQUEST,
        "foreign-host",
        "Foreign host name",
        "this service answers to localhost, 127.0.0.1 and [::1]; start it with --allow-host NAME to add a name",
    ))
}

/// True where `origin` is the page of the very host and port that was asked.
fn same_origin(origin: &str, host: &(HostName, Option<u16>)) -> bool {
    let (authority, default) = match origin.split_once("://") {
        Some(("http", authority)) => (authority, 80),
        Some(("https", authority)) => (authority, 443),
        _ => return false,
    };
    parse_authority(authority).is_ok_and(|(name, port)| {
        name == host.0 && port.unwrap_or(default) == host.1.unwrap_or(default)
    })
}

fn bad_host(detail: &str) -> Problem {
    Problem::new(StatusCode::BAD_REQUEST, "bad-host", "Host not understood", detail)
}
