//! Paths, methods and errors; and bytes that no client would send.

mod http_support;

use std::io::Read;
use std::time::Duration;

use http_support::{Line, exchange, get, post, settings, start};
use proptest::prelude::*;
use underfoot::http::{Catalogue, Running};

fn service() -> Running {
    start(settings(), Catalogue::default())
}

#[test]
fn health_answers() {
    let service = service();
    let reply = get(service.address(), "/health");
    assert_eq!(reply.status, 200);
    assert_eq!(reply.header("content-type"), Some("application/json"));
    assert_eq!(reply.json()["status"], "ok");
    assert_eq!(reply.json()["version"], env!("CARGO_PKG_VERSION"));
    let mut line = Line::open(service.address());
    line.send(b"HEAD /health HTTP/1.1\r\nHost: localhost\r\nConnection: close\r\n\r\n");
    let mut text = String::new();
    line.stream.read_to_string(&mut text).unwrap();
    assert!(text.starts_with("HTTP/1.1 200") && text.ends_with("\r\n\r\n"), "{text}");
}

#[test]
fn unknown_paths_are_404() {
    let service = service();
    for path in ["/", "/v1", "/v1/solve/", "/v2/solve", "//health", "/health/", "/v1/models/a/b", "/%00", "/..", "/HEALTH", "/health%2f"] {
        assert_eq!(get(service.address(), path).problem(404), "unknown-path", "{path}");
        assert_eq!(post(service.address(), path, b"{}").problem(404), "unknown-path", "{path}");
    }
    let reply = get(service.address(), "/no/such?x=1");
    assert_eq!(reply.json()["instance"], "/no/such");
}

#[test]
fn wrong_methods_are_405_and_say_what_is_allowed() {
    let service = service();
    for (method, path, allow) in [
        ("GET", "/v1/solve", "POST"),
        ("PUT", "/v1/dynamics", "POST"),
        ("DELETE", "/v1/models", "POST"),
        ("OPTIONS", "/v1/solve", "POST"),
        ("PATCH", "/v1/models/abc", "GET,HEAD"),
        ("POST", "/health", "GET,HEAD"),
        ("POST", "/schemas", "GET,HEAD"),
        ("DELETE", "/schemas/solve", "GET,HEAD"),
        ("BREW", "/openapi.json", "GET,HEAD"),
    ] {
        let reply = exchange(service.address(), format!("{method} {path} HTTP/1.1\r\nHost: localhost\r\n\r\n").as_bytes());
        assert_eq!(reply.problem(405), "wrong-method", "{method} {path}");
        assert_eq!(reply.header("allow"), Some(allow), "{method} {path}");
    }
}

#[test]
fn unknown_models_and_schemas_are_404() {
    let service = service();
    for id in ["x", "%7B%7D", "..", "%ff%fe", "a%00b", "%F0%9F%A6%BF", &"y".repeat(5000)] {
        let reply = get(service.address(), &format!("/v1/models/{id}"));
        assert!(matches!(reply.status, 404 | 400), "{id}: {}", reply.status);
        reply.problem(reply.status);
        let reply = get(service.address(), &format!("/schemas/{id}"));
        assert!(matches!(reply.status, 404 | 400), "{id}: {}", reply.status);
        reply.problem(reply.status);
    }
}

#[test]
fn every_schema_that_is_listed_is_served() {
    let service = service();
    let list = get(service.address(), "/schemas");
    assert_eq!(list.status, 200);
    let names = list.json()["schemas"].as_array().expect("a list").clone();
    assert!(!names.is_empty());
    for name in names {
        let name = name.as_str().expect("a name").to_owned();
        let reply = get(service.address(), &format!("/schemas/{name}"));
        assert_eq!(reply.status, 200, "{name}");
        assert_eq!(reply.header("content-type"), Some("application/schema+json"));
        assert_eq!(reply.json()["$schema"], "https://json-schema.org/draft/2020-12/schema");
    }
}

/// Paths and methods in the description are the ones that are served, none more, none less.
#[test]
fn the_description_lists_what_is_served() {
    let service = service();
    let reply = get(service.address(), "/openapi.json");
    assert_eq!(reply.status, 200);
    let described = reply.json();
    assert!(described["openapi"].as_str().is_some_and(|version| version.starts_with("3.1")));
    let mut found: Vec<String> = Vec::new();
    for (path, methods) in described["paths"].as_object().expect("paths") {
        for method in methods.as_object().expect("methods").keys() {
            if matches!(method.as_str(), "get" | "post" | "put" | "delete" | "patch") {
                found.push(format!("{method} {path}"));
            }
        }
    }
    found.sort();
    let served = [
        "get /health", "get /openapi.json", "get /schemas", "get /schemas/{name}", "get /v1/models/{id}",
        "post /v1/audit", "post /v1/batch", "post /v1/compare", "post /v1/dynamics", "post /v1/export", "post /v1/identify",
        "post /v1/models", "post /v1/solve",
    ];
    assert_eq!(found, served);
    for line in served {
        let (method, path) = line.split_once(' ').unwrap();
        let request = format!(
            "{} {path} HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: 2\r\n\r\n{{}}",
            method.to_uppercase()
        );
        let reply = exchange(service.address(), request.as_bytes());
        assert_ne!(reply.status, 405, "{line}");
        if reply.status == 404 {
            assert_ne!(reply.problem(404), "unknown-path", "{line}");
        }
    }
}

#[test]
fn all_responses_forbid_guessing_their_type() {
    let service = service();
    for path in ["/health", "/nothing"] {
        assert_eq!(get(service.address(), path).header("x-content-type-options"), Some("nosniff"));
    }
}

/// Requests that break HTTP itself. The library below answers those, without a document.
#[test]
fn broken_requests_end_the_connection() {
    let service = service();
    let long = format!("GET /{} HTTP/1.1\r\nHost: localhost\r\n\r\n", "a".repeat(100_000));
    let many = format!("GET /health HTTP/1.1\r\nHost: localhost\r\n{}\r\n", "X-A: b\r\n".repeat(500));
    let wide = format!("GET /health HTTP/1.1\r\nHost: localhost\r\nX-A: {}\r\n\r\n", "b".repeat(100_000));
    for bytes in [
        b"\x16\x03\x01\x02\x00\x01\x00\x01\xfc\x03\x03".as_slice(),
        b"\0\0\0\0\r\n\r\n",
        b"GET\r\n\r\n",
        b"GET /health HTTP/9.9\r\nHost: localhost\r\n\r\n",
        b"GET /health HTTP/1.1\r\nHost localhost\r\n\r\n",
        b"GET /health HTTP/1.1\r\nHost: local\0host\r\n\r\n",
        b"POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: -1\r\n\r\n",
        b"POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: 99999999999999999999999\r\n\r\n",
        b"POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: 2\r\nContent-Length: 3\r\n\r\n{}",
        long.as_bytes(),
        many.as_bytes(),
        wide.as_bytes(),
    ] {
        let mut line = Line::open(service.address());
        line.send(bytes);
        if let Some(reply) = line.try_reply() {
            assert!((400..500).contains(&reply.status), "{:?}: {}", String::from_utf8_lossy(bytes), reply.status);
        }
        assert_eq!(get(service.address(), "/health").status, 200);
    }
}

fn talk(bytes: &[u8]) {
    thread_local! {
        static SERVICE: Running = service();
    }
    SERVICE.with(|service| {
        let mut line = Line::open(service.address());
        use std::io::Write;
        // The service may close before it has seen everything.
        let _ = line.stream.write_all(bytes);
        let _ = line.stream.shutdown(std::net::Shutdown::Write);
        line.stream.set_read_timeout(Some(Duration::from_secs(20))).unwrap();
        let mut answer = Vec::new();
        let ended = line.stream.read_to_end(&mut answer);
        assert!(!answer.starts_with(b"HTTP/1.1 5"), "{}", String::from_utf8_lossy(&answer));
        assert!(
            ended.is_ok() || ended.as_ref().is_err_and(|e| e.kind() == std::io::ErrorKind::ConnectionReset),
            "{ended:?}"
        );
        assert_eq!(get(service.address(), "/health").status, 200);
    });
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 300, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn any_bytes_leave_the_service_well(bytes in proptest::collection::vec(any::<u8>(), 0..600)) {
        talk(&bytes);
    }

    #[test]
    fn any_head_leaves_the_service_well(
        method in "(GET|POST|HEAD|[A-Z]{1,8})",
        path in "/(v1/(solve|models|dynamics|models/[ -~]{0,20})|health|schemas/[!-~]{0,20}|[!-~]{0,40})",
        lines in proptest::collection::vec("(Host: localhost|Host: [!-~]{0,20}|Content-Type: application/json|Content-Length: [0-9]{1,3}|Transfer-Encoding: chunked|Origin: [!-~]{0,20}|Expect: 100-continue|[A-Za-z-]{1,12}: [ -~]{0,30})", 0..8),
        body in proptest::collection::vec(any::<u8>(), 0..300),
    ) {
        let mut bytes = format!("{method} {path} HTTP/1.1\r\n{}\r\n\r\n", lines.join("\r\n")).into_bytes();
        bytes.extend(body);
        talk(&bytes);
    }

    #[test]
    fn any_body_leaves_the_service_well(
        path in "/v1/(solve|models|dynamics)",
        body in prop_oneof![
            proptest::collection::vec(any::<u8>(), 0..300),
            "[\\[\\]{}\",:0-9eE.+-truefalsn ]{0,300}".prop_map(String::into_bytes),
            "(\\[){0,3000}".prop_map(String::into_bytes),
            "(\\{\"a\":){0,3000}".prop_map(String::into_bytes),
        ],
    ) {
        talk(&http_support::posting(&path, &body));
    }
}
