//! The built command: exit codes, documents, tables.

mod http_support;

use std::io::{BufRead, BufReader, Write};
use std::process::{Child, Command, Output, Stdio};
use std::time::{Duration, Instant};

use http_support::{PATIENCE, get, post, settings, start};
use underfoot::http::Catalogue;

const REQUEST: &str = include_str!("../src/cli/demo/request.json");

fn underfoot(arguments: &[&str], input: &[u8]) -> Output {
    let mut child = Command::new(env!("CARGO_BIN_EXE_underfoot"))
        .args(arguments)
        .stdin(Stdio::piped())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("starts");
    // A command that does not read its input closes the pipe.
    let _ = child.stdin.take().expect("a pipe").write_all(input);
    child.wait_with_output().expect("ends")
}

fn code(output: &Output) -> i32 {
    output.status.code().expect("no signal")
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8_lossy(bytes).into_owned()
}

/// A document, changed.
fn changed(document: &str, change: impl FnOnce(&mut serde_json::Value)) -> Vec<u8> {
    let mut value: serde_json::Value = serde_json::from_str(document).expect("JSON");
    change(&mut value);
    serde_json::to_vec(&value).expect("JSON")
}

/// The demo's request, changed.
fn request(change: impl FnOnce(&mut serde_json::Value)) -> Vec<u8> {
    changed(REQUEST, change)
}

#[test]
fn solve_prints_what_the_service_answers() {
    let service = start(settings(), Catalogue::default());
    let over_http = post(service.address(), "/v1/solve", REQUEST.as_bytes());
    assert_eq!(over_http.status, 200, "{}", over_http.text());
    let printed = underfoot(&["solve", "-"], REQUEST.as_bytes());
    assert_eq!(code(&printed), 0, "{}", text(&printed.stderr));
    assert!(printed.stdout == over_http.body, "the documents differ");
    // Again, and from a file.
    let file = concat!(env!("CARGO_MANIFEST_DIR"), "/src/cli/demo/request.json");
    assert!(underfoot(&["solve", file], b"").stdout == over_http.body);
}

#[test]
fn dynamics_prints_what_the_service_answers() {
    let body = request(|request| {
        let request = request.as_object_mut().expect("an object");
        request.retain(|name, _| matches!(name.as_str(), "format" | "model" | "state"));
    });
    let service = start(settings(), Catalogue::default());
    let over_http = post(service.address(), "/v1/dynamics", &body);
    assert_eq!(over_http.status, 200, "{}", over_http.text());
    let printed = underfoot(&["dynamics", "-"], &body);
    assert_eq!(code(&printed), 0);
    assert!(printed.stdout == over_http.body);
    assert_eq!(code(&underfoot(&["dynamics", "-"], REQUEST.as_bytes())), 2, "a solve request is no dynamics request");
}

const AUDIT: &str = include_str!("../schemas/example-audit.json");

/// The audit example, changed.
fn audit(change: impl FnOnce(&mut serde_json::Value)) -> Vec<u8> {
    changed(AUDIT, change)
}

#[test]
fn audit_prints_what_the_service_answers() {
    let service = start(settings(), Catalogue::default());
    let over_http = post(service.address(), "/v1/audit", AUDIT.as_bytes());
    assert_eq!(over_http.status, 200, "{}", over_http.text());
    assert_eq!(over_http.json()["verdict"], "pass");
    let printed = underfoot(&["audit", "-"], AUDIT.as_bytes());
    assert_eq!(code(&printed), 0, "{}", text(&printed.stderr));
    assert!(printed.stdout == over_http.body, "the documents differ");
    // An answer with the sign of a torque flipped is bad news, and the table says what is wrong with it.
    let flipped = audit(|request| {
        let torque = request["answer"]["joints"][3]["torque"].as_f64().expect("a torque");
        request["answer"]["joints"][3]["torque"] = (-torque).into();
    });
    assert_eq!(code(&underfoot(&["audit", "-"], &flipped)), 1);
    let table = text(&underfoot(&["audit", "-", "--table"], &flipped).stdout);
    for needed in ["Verdict: fail", "BROKEN", "not_comparable", "Torques that differ", "consistent with the torque of left_knee with its sign flipped"] {
        assert!(table.contains(needed), "{needed} is missing in\n{table}");
    }
    assert!(table.lines().all(|line| line.chars().count() <= 100), "{table}");
}

#[test]
fn unusable_audits_name_the_member() {
    let service = start(settings(), Catalogue::default());
    let cases: [(Vec<u8>, u16, &str); 8] = [
        (audit(|r| r["request"]["tick"]["length"] = (-1.0).into()), 422, "/request/tick/length"),
        (audit(|r| r["request"]["model"] = "no-such-model".into()), 404, "/request/model"),
        (audit(|r| r["answer"]["joints"][2]["name"] = "no such joint".into()), 422, "/answer/joints/2/name"),
        (audit(|r| r["answer"]["joints"][2]["torque"] = "many".into()), 422, "/answer/joints/2/torque"),
        (audit(|r| r["answer"]["soles"][1]["name"] = "middle".into()), 422, "/answer/soles/1/name"),
        (audit(|r| r["answer"]["tasks"] = serde_json::json!([{ "name": "base", "desired": [1.0] }])), 422, "/answer/tasks"),
        (audit(|r| r["tolerances"]["relative"] = 0.0.into()), 422, "/tolerances/relative"),
        (audit(|r| drop(r.as_object_mut().expect("an object").remove("answer"))), 422, "/answer"),
    ];
    for (body, status, pointer) in cases {
        let reply = post(service.address(), "/v1/audit", &body);
        let problem = reply.problem(status);
        assert_eq!(reply.json()["faults"][0]["pointer"], pointer, "{problem:?}");
    }
    let lacking = audit(|r| drop(r["answer"]["joints"].as_array_mut().expect("an array").pop()));
    assert_eq!(code(&underfoot(&["audit", "-"], &lacking)), 2);
}

#[test]
fn a_registered_model_answers_like_an_inline_one() {
    let service = start(settings(), Catalogue::default());
    let inline = post(service.address(), "/v1/solve", REQUEST.as_bytes());
    let model = request(|request| {
        let mut model = request["model"].take();
        model["format"] = "underfoot/1".into();
        *request = model;
    });
    let registered = post(service.address(), "/v1/models", &model);
    assert_eq!(registered.status, 200, "{}", registered.text());
    let location = registered.header("location").expect("Location").to_owned();
    let shown = get(service.address(), &location);
    assert_eq!((shown.status, &shown.body), (200, &registered.body));
    let id = location.rsplit('/').next().expect("an id").to_owned();
    let by_id = post(service.address(), "/v1/solve", &request(|request| request["model"] = id.into()));
    assert_eq!(by_id.status, 200, "{}", by_id.text());
    for member in ["joints", "soles", "tasks", "certificate"] {
        assert_eq!(by_id.json()[member], inline.json()[member], "{member}");
    }
    let unknown = post(service.address(), "/v1/solve", &request(|request| request["model"] = "no-such-model".into()));
    assert_eq!(unknown.problem(404), get(service.address(), "/v1/models/no-such-model").problem(404));
}

#[test]
fn bad_news_is_1() {
    // A normal force of ten times the weight on one sole cannot come about.
    let body = request(|request| {
        request["contacts"][0]["law"] = serde_json::json!({ "kind": "rigid" });
        request["contacts"][1]["law"] = serde_json::json!({ "kind": "rigid" });
        for contact in 0..2 {
            request["contacts"][contact].as_object_mut().expect("a contact").remove("rest");
            request["contacts"][contact]["normal_force"] = serde_json::json!({ "least": 4000.0 });
        }
        request["tasks"] = serde_json::json!([]);
        request["limits"] = serde_json::json!([{ "kind": "torque" }]);
        request["include"] = serde_json::json!(["explain"]);
    });
    let output = underfoot(&["solve", "-"], &body);
    assert_eq!(code(&output), 1, "{}{}", text(&output.stdout), text(&output.stderr));
    let answer: serde_json::Value = serde_json::from_slice(&output.stdout).expect("a document");
    assert_eq!(answer["status"], "infeasible");
    let table = underfoot(&["solve", "-", "--table"], &body);
    assert_eq!(code(&table), 1);
    let table = text(&table.stdout);
    assert!(table.starts_with("Status: infeasible"), "{table}");
    let share = format!("{:.1} %", 100.0 * answer["explained"]["relaxation"]["groups"][0]["share"].as_f64().expect("a share"));
    for needed in ["who carries the proof", "alone would need", &share, "Cannot hold together: "] {
        assert!(table.contains(needed), "{needed} is missing in\n{table}");
    }
    assert!(table.lines().all(|line| line.chars().count() <= 100), "{table}");
}

#[test]
fn unusable_input_is_2_and_names_the_member() {
    for (body, expected) in [
        (b"".to_vec(), ""),
        (b"[]".to_vec(), ""),
        (b"\xff\xfe{".to_vec(), ""),
        (request(|request| request["tick"]["length"] = (-1.0).into()), "/tick/length"),
        (request(|request| request["contacts"][1]["sole"] = "middle".into()), "/contacts/1/sole"),
        (request(|request| request["state"]["joints"][3]["position"] = serde_json::Value::Null), "/state/joints/3/position"),
        (vec![b' '; (4 << 20) + 1], "longer than"),
    ] {
        let output = underfoot(&["solve", "-"], &body);
        assert_eq!(code(&output), 2, "{}", text(&output.stderr));
        assert!(output.stdout.is_empty());
        assert!(!output.stderr.is_empty() && text(&output.stderr).contains(expected), "{}", text(&output.stderr));
    }
    for arguments in [
        &["solve", "/no/such/file.json"][..],
        &["solve", "/"],
        &["solve"],
        &["schemas", "no-such-schema"],
        &["no-such-command"],
        &["serve", "--time-limit", "nan"],
        &["serve", "--listen", "nowhere"],
        &["serve", "--allow-host", "http://x"],
        &["serve", "--workers", "0"],
        &[],
    ] {
        let output = underfoot(arguments, b"");
        assert_eq!(code(&output), 2, "{arguments:?}");
        assert!(!output.stderr.is_empty());
    }
}

#[test]
fn schemas_are_listed_and_printed() {
    let list = text(&underfoot(&["schemas"], b"").stdout);
    assert!(list.lines().count() > 2);
    for name in list.lines() {
        let output = underfoot(&["schemas", name], b"");
        assert_eq!(code(&output), 0, "{name}");
        serde_json::from_slice::<serde_json::Value>(&output.stdout).expect("JSON");
    }
}

#[test]
fn the_table_fits_the_page() {
    let output = underfoot(&["solve", "-", "--table"], REQUEST.as_bytes());
    assert_eq!(code(&output), 0);
    let table = text(&output.stdout);
    for needed in ["Joints (", "left_knee", "Wrench of the ground", "friction used", "Tasks (", "N m/s", "Margins", "Certificate", "dynamics", "optimality, priority"] {
        assert!(table.contains(needed), "{needed} is missing in\n{table}");
    }
    assert!(table.lines().all(|line| line.chars().count() <= 100), "{table}");
    assert!(!table.contains('\u{1b}'), "no colours into a pipe");
}

#[test]
fn the_demo_shows_both_answers() {
    let output = underfoot(&["demo"], b"");
    assert_eq!(code(&output), 0, "{}{}", text(&output.stdout), text(&output.stderr));
    let shown = text(&output.stdout);
    for needed in [
        "Status: solved",
        "POST http://127.0.0.1:",
        "Certificate, recomputed without the solver: holds",
        "THE SAME REQUEST WITH THE FLOOR TAKEN FOR RIGID",
        "Torques that differ most",
        "What that means",
        "curl -s http://127.0.0.1:7878/v1/solve",
        "schemas/example-solve.json",
        "never wire its torques to actuators",
        "emergency stop",
    ] {
        assert!(shown.contains(needed), "{needed} is missing in\n{shown}");
    }
    assert!(shown.lines().all(|line| line.chars().count() <= 100));
    assert!(!shown.contains('\u{1b}'));
}

/// A reader that has seen enough closes the pipe; that is no failure and no panic.
#[test]
fn a_closed_pipe_is_no_panic() {
    for arguments in [&["schemas", "solve-request"][..], &["schemas"], &["demo"]] {
        let mut child = Command::new(env!("CARGO_BIN_EXE_underfoot"))
            .args(arguments)
            .stdin(Stdio::null())
            .stdout(Stdio::piped())
            .stderr(Stdio::piped())
            .spawn()
            .expect("starts");
        drop(child.stdout.take());
        let output = child.wait_with_output().expect("ends");
        assert_eq!(output.status.code(), Some(0), "{arguments:?}: {}", text(&output.stderr));
        assert!(!text(&output.stderr).contains("panic"));
    }
}

fn serving(arguments: &[&str]) -> (Child, String) {
    let mut child = Command::new(env!("CARGO_BIN_EXE_underfoot"))
        .args(arguments)
        .stdin(Stdio::null())
        .stdout(Stdio::piped())
        .stderr(Stdio::piped())
        .spawn()
        .expect("starts");
    let mut line = String::new();
    BufReader::new(child.stdout.as_mut().expect("a pipe")).read_line(&mut line).expect("a line");
    (child, line)
}

fn end(mut child: Child, signal: &str) -> Output {
    let sent = Command::new("kill").args([signal, &child.id().to_string()]).status().expect("kill");
    assert!(sent.success());
    let begin = Instant::now();
    while child.try_wait().expect("waits").is_none() {
        if begin.elapsed() > PATIENCE {
            let _ = child.kill();
            panic!("the service did not end");
        }
        std::thread::sleep(Duration::from_millis(5));
    }
    child.wait_with_output().expect("ends")
}

#[test]
fn serve_says_where_and_ends_on_signals() {
    for signal in ["-TERM", "-INT"] {
        let (child, line) = serving(&["serve", "--port", "0"]);
        let address = line.trim().strip_prefix("underfoot listens on http://").expect("an address").to_owned();
        let address: std::net::SocketAddr = address.parse().expect("an address");
        assert!(address.ip().is_loopback());
        assert_eq!(get(address, "/health").status, 200);
        let output = end(child, signal);
        assert_eq!(output.status.code(), Some(0));
        let log = text(&output.stderr);
        assert!(log.contains("/health") && log.contains("200"), "{log}");
        assert!(!log.contains("authentication"));
    }
}

#[test]
fn off_the_loopback_it_says_there_is_no_authentication() {
    let (child, line) = serving(&["serve", "--listen", "0.0.0.0:0", "--log", "off"]);
    assert!(line.contains("http://0.0.0.0:"), "{line}");
    let log = text(&end(child, "-TERM").stderr);
    assert!(log.contains("no authentication"), "{log}");
}

#[test]
fn a_taken_port_is_2() {
    let taken = std::net::TcpListener::bind("127.0.0.1:0").expect("a port");
    let port = taken.local_addr().expect("an address").port().to_string();
    for command in ["serve", "demo"] {
        let output = underfoot(&[command, "--port", &port], b"");
        assert_eq!(code(&output), 2, "{command}");
        assert!(text(&output.stderr).contains("cannot serve on"));
    }
}
