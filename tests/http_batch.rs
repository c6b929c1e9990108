//! Batches over HTTP: order, bounds, other requests beside them, hang-ups and silence. The work is injected; what the
//! lines mean is tested in `wire_batch.rs`.

mod http_support;

use std::io::{Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::sync::Arc;
use std::time::{Duration, Instant};

use http_support::{Line, PATIENCE, post, settings, start};
use serde_json::Value;
use underfoot::cases::tally::Fate;
use underfoot::http::{Document, Errand, LineDone, LineWork, Settings, Work};
use underfoot::wire::Refusal;

#[derive(Default)]
struct Bench {
    begun: AtomicUsize,
    cancelled: AtomicUsize,
    now: AtomicUsize,
    most: AtomicUsize,
}

impl Bench {
    fn wait_for(&self, what: impl Fn(&Bench) -> bool) {
        let begin = Instant::now();
        while !what(self) {
            assert!(begin.elapsed() < PATIENCE, "waited in vain");
            std::thread::sleep(Duration::from_millis(2));
        }
    }

    /// `wait` waits for the flag, `slow` sleeps a little, `panic` panics; anything else comes back at once.
    fn work(&self, body: &[u8], cancel: &AtomicBool) {
        self.begun.fetch_add(1, Ordering::SeqCst);
        let now = self.now.fetch_add(1, Ordering::SeqCst) + 1;
        self.most.fetch_max(now, Ordering::SeqCst);
        if body.starts_with(b"panic") {
            self.now.fetch_sub(1, Ordering::SeqCst);
            panic!("a test asked for this");
        }
        if body.starts_with(b"slow") {
            std::thread::sleep(Duration::from_millis(20));
        }
        if body.starts_with(b"wait") {
            while !cancel.load(Ordering::Relaxed) {
                std::thread::sleep(Duration::from_millis(2));
            }
            self.cancelled.fetch_add(1, Ordering::SeqCst);
        }
        self.now.fetch_sub(1, Ordering::SeqCst);
    }
}

struct Injected(Arc<Bench>);
struct Lines(Arc<Bench>);

impl Work for Injected {
    fn run(&self, _: Errand, body: &[u8], cancel: &Arc<AtomicBool>) -> Result<Document, Refusal> {
        self.0.work(body, cancel);
        Ok(Document { body: body.to_vec(), model: None, timings: Vec::new() })
    }

    fn open(&self, head: &[u8]) -> Result<Arc<dyn LineWork>, Refusal> {
        if head.starts_with(b"no") {
            return Err(Refusal::new(422, "unusable-request", "The request cannot be used", "a test asked for this"));
        }
        Ok(Arc::new(Lines(Arc::clone(&self.0))))
    }

    fn log(
        &self,
        _: Option<&[u8]>,
        _: &mut dyn std::io::BufRead,
        _: underfoot::wire::LogForm,
        _: &Arc<AtomicBool>,
        _: &mut dyn FnMut(u64),
    ) -> Result<Document, Refusal> {
        Err(Refusal::new(404, "unknown-path", "No logs here", "this work answers batches"))
    }

    fn model(&self, _: &str) -> Option<Vec<u8>> {
        None
    }
}

impl LineWork for Lines {
    fn line(&self, number: u64, line: &[u8], cancel: &Arc<AtomicBool>) -> LineDone {
        self.0.work(line, cancel);
        let text = format!("{{\"line\":{number},\"echo\":{:?}}}\n", String::from_utf8_lossy(line));
        LineDone { text: text.into_bytes(), fate: Fate::Answered("echoed".to_owned()) }
    }
}

fn bench(settings: Settings) -> (Arc<Bench>, underfoot::http::Running) {
    let bench = Arc::new(Bench::default());
    let service = start(settings, Injected(Arc::clone(&bench)));
    (bench, service)
}

/// A batch under way: chunks out, lines in.
struct Talk {
    stream: TcpStream,
    raw: Vec<u8>,
    text: Vec<u8>,
}

impl Talk {
    fn open(address: SocketAddr) -> Talk {
        let line = Line::open(address);
        let mut talk = Talk { stream: line.stream, raw: Vec::new(), text: Vec::new() };
        let head = "POST /v1/batch HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/x-ndjson\r\nTransfer-Encoding: chunked\r\n\r\n";
        talk.stream.write_all(head.as_bytes()).unwrap();
        talk.send("head\n");
        while !talk.raw.windows(4).any(|w| w == b"\r\n\r\n") {
            assert!(talk.more(), "no response");
        }
        let end = talk.raw.windows(4).position(|w| w == b"\r\n\r\n").unwrap() + 4;
        let head = String::from_utf8(talk.raw.drain(..end).collect()).unwrap();
        assert!(head.starts_with("HTTP/1.1 200"), "{head}");
        assert!(head.to_lowercase().contains("content-type: application/x-ndjson"), "{head}");
        talk
    }

    fn send(&mut self, text: &str) {
        self.stream.write_all(format!("{:x}\r\n{text}\r\n", text.len()).as_bytes()).expect("sends");
    }

    fn finish(&mut self) {
        self.stream.write_all(b"0\r\n\r\n").expect("sends");
    }

    fn more(&mut self) -> bool {
        let mut space = [0u8; 65536];
        let n = self.stream.read(&mut space).expect("reads");
        self.raw.extend_from_slice(&space[..n]);
        n > 0
    }

    /// The next line; none at the end of the response.
    fn line(&mut self) -> Option<Value> {
        loop {
            if let Some(at) = self.text.iter().position(|b| *b == b'\n') {
                let line: Vec<u8> = self.text.drain(..=at).collect();
                return Some(serde_json::from_slice(&line).unwrap_or_else(|e| panic!("{e}: {}", String::from_utf8_lossy(&line))));
            }
            let size = loop {
                if let Some(at) = self.raw.windows(2).position(|w| w == b"\r\n") {
                    let size = usize::from_str_radix(std::str::from_utf8(&self.raw[..at]).unwrap(), 16).unwrap();
                    self.raw.drain(..at + 2);
                    break size;
                }
                if !self.more() {
                    return None;
                }
            };
            while self.raw.len() < size + 2 {
                assert!(self.more(), "a chunk broke off");
            }
            self.text.extend(self.raw.drain(..size));
            self.raw.drain(..2);
            if size == 0 {
                return None;
            }
        }
    }

    fn summary(&mut self) -> Value {
        let line = self.line().expect("a summary");
        assert!(line["summary"].is_object(), "{line}");
        assert_eq!(self.line(), None);
        line["summary"].clone()
    }
}

#[test]
fn answers_come_in_order_while_lines_are_sent() {
    let (bench, service) = bench(settings());
    let mut talk = Talk::open(service.address());
    // One by one: each answer comes before the next line is sent.
    for i in 2..12 {
        talk.send(&format!("line {i}\n"));
        let answer = talk.line().unwrap();
        assert_eq!((answer["line"].as_u64(), answer["echo"].as_str()), (Some(i), Some(format!("line {i}").as_str())));
    }
    // Slow and quick ones mixed, blank lines, pieces that cut lines, and no line feed at the end.
    talk.send("slow 12\nquick 13\n\nslow 15\nqui");
    talk.send("ck 16\nquick 17");
    talk.finish();
    for i in [12, 13, 15, 16, 17] {
        let answer = talk.line().unwrap();
        assert_eq!(answer["line"].as_u64(), Some(i));
        assert!(answer["echo"].as_str().unwrap().ends_with(&i.to_string()));
    }
    let summary = talk.summary();
    assert_eq!(summary["ended"], "complete");
    assert_eq!((summary["lines"].as_u64(), summary["answered"].as_u64(), summary["bad"].as_u64()), (Some(15), Some(15), Some(0)));
    assert_eq!(summary["statuses"], serde_json::json!([{ "status": "echoed", "count": 15 }]));
    assert!(bench.most.load(Ordering::SeqCst) <= 2);
    // The connection serves further requests.
    talk.stream.write_all(b"GET /health HTTP/1.1\r\nHost: localhost\r\n\r\n").unwrap();
    assert!(talk.more() && talk.raw.starts_with(b"HTTP/1.1 200"));
}

#[test]
fn long_lines_and_panics_are_reported_where_they_stand() {
    let (_, service) = bench(Settings { line_limit: 100, ..settings() });
    let mut talk = Talk::open(service.address());
    talk.send("good\n");
    for _ in 0..50 {
        talk.send(&"x".repeat(1000));
    }
    talk.send("\npanic\ngood\n");
    talk.finish();
    assert_eq!(talk.line().unwrap()["echo"], "good");
    let long = talk.line().unwrap();
    assert_eq!((long["line"].as_u64(), long["problem"]["status"].as_u64()), (Some(3), Some(413)));
    assert_eq!(long["problem"]["code"], "line-too-long");
    let defect = talk.line().unwrap();
    assert_eq!((defect["line"].as_u64(), defect["problem"]["code"].as_str()), (Some(4), Some("defect")));
    assert!(!defect.to_string().contains("asked for this"), "the panic's text belongs in the log");
    assert_eq!(talk.line().unwrap()["echo"], "good");
    let summary = talk.summary();
    assert_eq!((summary["answered"].as_u64(), summary["bad"].as_u64()), (Some(2), Some(2)));
}

#[test]
fn a_first_line_that_cannot_be_used_refuses_the_batch() {
    let (_, service) = bench(Settings { body_limit: 1000, ..settings() });
    let posting = |media: &str, body: &str| {
        let head = format!("POST /v1/batch HTTP/1.1\r\nHost: localhost\r\nContent-Type: {media}\r\nContent-Length: {}\r\n\r\n", body.len());
        Line::open(service.address()).send((head + body).as_bytes()).reply()
    };
    let media = "application/x-ndjson";
    assert_eq!(posting(media, "no\nline\n").problem(422), "unusable-request");
    assert_eq!(posting(media, "\n\n").problem(400), "no-first-line");
    assert_eq!(posting(media, &"x".repeat(2000)).problem(413), "line-too-long");
    // A page in a browser can send plain text to any address without asking.
    for foreign in ["text/plain", "application/x-www-form-urlencoded", "application/json"] {
        assert_eq!(posting(foreign, "head\n").problem(415), "not-json");
    }
}

#[test]
fn other_requests_are_answered_beside_a_batch() {
    let (bench, service) = bench(Settings { workers: 1, queue: 1, ..settings() });
    let address = service.address();
    let batches: Vec<_> = (0..3)
        .map(|_| {
            let mut talk = Talk::open(address);
            std::thread::spawn(move || {
                let mut sender = talk.stream.try_clone().unwrap();
                let writer = std::thread::spawn(move || {
                    for _ in 0..100 {
                        sender.write_all(b"5\r\nslow\n\r\n").unwrap();
                    }
                    sender.write_all(b"0\r\n\r\n").unwrap();
                });
                let mut lines = 0;
                while let Some(line) = talk.line() {
                    lines += u64::from(line["echo"].is_string());
                }
                writer.join().unwrap();
                lines
            })
        })
        .collect();
    bench.wait_for(|b| b.begun.load(Ordering::SeqCst) > 5);
    // One permit, three batches with one line each in the queue: a request waits for three lines, not for three batches.
    let begin = Instant::now();
    for _ in 0..5 {
        assert_eq!(post(address, "/v1/solve", b"single").status, 200);
    }
    let took = begin.elapsed();
    let running = bench.begun.load(Ordering::SeqCst) < 300;
    assert!(running && took < Duration::from_secs(3), "{took:?}");
    for batch in batches {
        assert_eq!(batch.join().unwrap(), 100);
    }
    assert_eq!(bench.most.load(Ordering::SeqCst), 1);
}

#[test]
fn a_hang_up_calls_off_the_lines_under_way() {
    let (bench, service) = bench(Settings { time_limit: PATIENCE, ..settings() });
    let mut talk = Talk::open(service.address());
    talk.send(&"wait\n".repeat(50));
    bench.wait_for(|b| b.begun.load(Ordering::SeqCst) == 2);
    drop(talk);
    bench.wait_for(|b| b.cancelled.load(Ordering::SeqCst) == 2);
    // The lines behind them were never begun, and the permits are free.
    assert_eq!(post(service.address(), "/v1/solve", b"single").status, 200);
    assert_eq!(bench.begun.load(Ordering::SeqCst), 3);
}

#[test]
fn a_line_over_the_time_limit_is_called_off_and_the_rest_goes_on() {
    let (bench, service) = bench(Settings { time_limit: Duration::from_millis(100), workers: 1, ..settings() });
    let mut talk = Talk::open(service.address());
    talk.send("wait\nquick\n");
    talk.finish();
    assert_eq!(talk.line().unwrap()["line"], 2);
    assert_eq!(bench.cancelled.load(Ordering::SeqCst), 1);
    assert_eq!(talk.line().unwrap()["echo"], "quick");
    assert_eq!(talk.summary()["lines"], 2);
}

#[test]
fn silence_ends_a_batch() {
    let (_, service) = bench(Settings { line_idle: Duration::from_millis(300), ..settings() });
    let begin = Instant::now();
    let mut talk = Talk::open(service.address());
    // Lines that come in time keep it going beyond the idle time.
    for _ in 0..4 {
        std::thread::sleep(Duration::from_millis(150));
        talk.send("good\n");
        assert_eq!(talk.line().unwrap()["echo"], "good");
    }
    assert!(begin.elapsed() > Duration::from_millis(550));
    // A line that never ends does not, however steadily it comes.
    let mut dripping = talk.stream.try_clone().unwrap();
    std::thread::spawn(move || while dripping.write_all(b"1\r\nx\r\n").is_ok() && begin.elapsed() < PATIENCE {
        std::thread::sleep(Duration::from_millis(50));
    });
    let summary = talk.line().unwrap();
    assert_eq!((summary["summary"]["ended"].as_str(), summary["summary"]["lines"].as_u64()), (Some("idle"), Some(4)));
    // A silent first line.
    let mut line = Line::open(service.address());
    line.send(b"POST /v1/batch HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/x-ndjson\r\nContent-Length: 10\r\n\r\n{");
    assert_eq!(line.reply().problem(408), "slow-body");
}

#[test]
fn nothing_is_read_from_a_client_that_does_not_read() {
    let (bench, service) = bench(Settings { stall_time: Duration::from_millis(500), ..settings() });
    let mut talk = Talk::open(service.address());
    talk.stream.set_write_timeout(Some(PATIENCE)).unwrap();
    let line = format!("{}\n", "y".repeat(100_000));
    let chunk = format!("{:x}\r\n{line}\r\n", line.len());
    let mut refused = false;
    for _ in 0..2000 {
        if talk.stream.write_all(chunk.as_bytes()).is_err() {
            refused = true;
            break;
        }
    }
    assert!(refused, "the service took 200 MB without an answer being read");
    // What it took fits into the buffers of the two sockets and a few lines.
    assert!(bench.begun.load(Ordering::SeqCst) < 1000, "{}", bench.begun.load(Ordering::SeqCst));
    assert_eq!(post(service.address(), "/v1/solve", b"single").status, 200);
}
