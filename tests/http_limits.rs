//! How much, how fast, how long: sizes, time limits, the queue, hang-ups and the end of the service.

mod http_support;

use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};
use std::sync::{Arc, Condvar, Mutex};
use std::time::{Duration, Instant};

use http_support::{Line, PATIENCE, get, post, posting, settings, start};
use underfoot::http::{Document, Errand, LineWork, Settings, Work};
use underfoot::wire::Refusal;

/// What the injected work does with a body.
#[derive(Default)]
struct Bench {
    /// Jobs that have begun.
    begun: AtomicUsize,
    /// Jobs that noticed the flag.
    cancelled: AtomicUsize,
    /// Most jobs at the same time.
    most: AtomicUsize,
    now: AtomicUsize,
    /// Set to let `wait` jobs go.
    open: Mutex<bool>,
    opened: Condvar,
}

impl Bench {
    fn release(&self) {
        *self.open.lock().unwrap() = true;
        self.opened.notify_all();
    }

    fn wait_for(&self, what: impl Fn(&Bench) -> bool) {
        let begin = Instant::now();
        while !what(self) {
            assert!(begin.elapsed() < PATIENCE, "waited in vain");
            std::thread::sleep(Duration::from_millis(2));
        }
    }
}

/// `echo` gives the body back, `wait` waits for release or the flag, `deaf` for release only, `panic` panics.
struct Injected(Arc<Bench>);

impl Work for Injected {
    fn run(&self, _: Errand, body: &[u8], cancel: &Arc<AtomicBool>) -> Result<Document, Refusal> {
        let bench = &self.0;
        bench.begun.fetch_add(1, Ordering::SeqCst);
        let now = bench.now.fetch_add(1, Ordering::SeqCst) + 1;
        bench.most.fetch_max(now, Ordering::SeqCst);
        if body.starts_with(b"panic") {
            bench.now.fetch_sub(1, Ordering::SeqCst);
            panic!("a test asked for this");
        }
        let listens = body.starts_with(b"wait");
        if listens || body.starts_with(b"deaf") {
            let mut open = bench.open.lock().unwrap();
            while !*open {
                if listens && cancel.load(Ordering::Relaxed) {
                    bench.cancelled.fetch_add(1, Ordering::SeqCst);
                    break;
                }
                open = bench.opened.wait_timeout(open, Duration::from_millis(2)).unwrap().0;
            }
        }
        bench.now.fetch_sub(1, Ordering::SeqCst);
        Ok(Document { body: body.to_vec(), model: None, timings: vec![("solve", Duration::from_millis(1))] })
    }

    fn open(&self, _: &[u8]) -> Result<Arc<dyn LineWork>, Refusal> {
        Err(Refusal::new(404, "unknown-path", "No batches here", "this work answers single requests"))
    }

    fn log(
        &self,
        _: Option<&[u8]>,
        log: &mut dyn std::io::BufRead,
        _: underfoot::wire::LogForm,
        cancel: &Arc<AtomicBool>,
        _: &mut dyn FnMut(u64),
    ) -> Result<Document, Refusal> {
        let mut body = Vec::new();
        let read = std::io::Read::read_to_end(log, &mut body);
        read.map_err(|error| Refusal::new(400, "broken", "Broken", error.to_string()))?;
        self.run(Errand::Identify, &body, cancel)
    }

    fn model(&self, _: &str) -> Option<Vec<u8>> {
        None
    }
}

fn bench() -> (Arc<Bench>, Injected) {
    let bench = Arc::new(Bench::default());
    (Arc::clone(&bench), Injected(bench))
}

#[test]
fn the_limit_holds_with_an_announced_length() {
    let (bench, work) = bench();
    let service = start(Settings { body_limit: 1000, ..settings() }, work);
    assert_eq!(post(service.address(), "/v1/solve", &[b'x'; 1000]).body, [b'x'; 1000]);
    // Refused by the head alone: not a byte of the body is sent.
    let mut line = Line::open(service.address());
    line.send(b"POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: 1001\r\n\r\n");
    assert_eq!(line.reply().problem(413), "body-too-large");
    assert_eq!(bench.begun.load(Ordering::SeqCst), 1);
}

#[test]
fn expect_continue_is_refused_before_the_body() {
    let (_, work) = bench();
    let service = start(Settings { body_limit: 1000, ..settings() }, work);
    let head = |length: usize| {
        format!(
            "POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nExpect: 100-continue\r\nContent-Length: {length}\r\n\r\n"
        )
    };
    assert_eq!(Line::open(service.address()).send(head(1001).as_bytes()).reply().status, 413);
    let mut line = Line::open(service.address());
    line.send(head(2).as_bytes()).send(b"{}");
    assert_eq!(line.reply().body, b"{}");
}

#[test]
fn the_limit_holds_for_chunks() {
    let (_, work) = bench();
    let service = start(Settings { body_limit: 1000, ..settings() }, work);
    let head = b"POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nTransfer-Encoding: chunked\r\n\r\n";
    let mut line = Line::open(service.address());
    line.send(head).send(b"5\r\nhello\r\n6\r\n world\r\n0\r\n\r\n");
    assert_eq!(line.reply().body, b"hello world");
    // The same connection goes on.
    line.send(head).send(b"2\r\n{}\r\n0\r\n\r\n");
    assert_eq!(line.reply().body, b"{}");
    // Too much in chunks, without an end in sight.
    let mut line = Line::open(service.address());
    line.send(head);
    for _ in 0..3 {
        line.send(format!("190\r\n{}\r\n", "x".repeat(400)).as_bytes());
    }
    assert_eq!(line.reply().problem(413), "body-too-large");
    // Chunks that are none.
    let mut line = Line::open(service.address());
    line.send(head).send(b"zz\r\nhello\r\n0\r\n\r\n");
    assert_eq!(line.reply().problem(400), "broken-body");
}

#[test]
fn a_hundred_megabytes_are_refused_and_the_sender_learns_it() {
    let (_, work) = bench();
    let service = start(settings(), work);
    let mut line = Line::open(service.address());
    let length = 100 << 20;
    line.send(format!("POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: {length}\r\n\r\n").as_bytes());
    // A client that sends first and reads after, as most libraries do.
    std::thread::sleep(Duration::from_millis(20));
    let piece = vec![b' '; 1 << 20];
    for _ in 0..100 {
        line.send(&piece);
    }
    assert_eq!(line.reply().problem(413), "body-too-large");
}

#[test]
fn slow_clients_are_let_go() {
    let (bench, work) = bench();
    let limits = Settings {
        body_time: Duration::from_millis(150),
        header_time: Duration::from_millis(300),
        ..settings()
    };
    let service = start(limits, work);
    // A body that does not come.
    let mut line = Line::open(service.address());
    line.send(b"POST /v1/solve HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: 10\r\n\r\n{");
    assert_eq!(line.reply().problem(408), "slow-body");
    assert!(line.is_closed());
    // A head that comes byte by byte.
    let begin = Instant::now();
    let mut line = Line::open(service.address());
    line.stream.set_read_timeout(Some(Duration::from_millis(1))).unwrap();
    let mut ended = false;
    for byte in b"GET /health HTTP/1.1\r\nHost: localhost\r\nX-Long: xxxxxxxxxxxxxxxxxxxxxxxxxxxxxxxx\r\n".iter().cycle() {
        use std::io::{Read, Write};
        let mut space = [0u8; 256];
        let sent = line.stream.write_all(&[*byte]);
        if sent.is_err() || matches!(line.stream.read(&mut space), Ok(0)) {
            ended = true;
            break;
        }
        if begin.elapsed() > Duration::from_secs(10) {
            break;
        }
        std::thread::sleep(Duration::from_millis(10));
    }
    assert!(ended, "the connection is still open");
    // An idle connection, before and after a request.
    assert!(Line::open(service.address()).is_closed());
    let mut line = Line::open(service.address());
    assert_eq!(line.send(b"GET /health HTTP/1.1\r\nHost: localhost\r\n\r\n").reply().status, 200);
    assert!(line.is_closed());
    assert_eq!(bench.begun.load(Ordering::SeqCst), 0);
}

#[test]
fn a_client_that_never_reads_is_let_go() {
    let (bench, work) = bench();
    let service = start(Settings { stall_time: Duration::from_millis(200), workers: 1, ..settings() }, work);
    let mut line = Line::open(service.address());
    // Answers of 4 MB each pile up unread until neither side's buffers take more.
    let body = vec![b'y'; 4 << 20];
    let mut failed = false;
    line.stream.set_write_timeout(Some(Duration::from_secs(10))).unwrap();
    for _ in 0..40 {
        use std::io::Write;
        if line.stream.write_all(&posting("/v1/solve", &body)).is_err() {
            failed = true;
            break;
        }
    }
    assert!(failed, "the service went on taking requests");
    assert!(bench.begun.load(Ordering::SeqCst) < 40);
    assert_eq!(get(service.address(), "/health").status, 200);
}

#[test]
fn requests_in_one_write_are_answered_in_order() {
    let (_, work) = bench();
    let service = start(settings(), work);
    let mut bytes = Vec::new();
    for i in 0..50 {
        bytes.extend(posting("/v1/solve", format!("[{i}]").as_bytes()));
        bytes.extend(b"GET /health HTTP/1.1\r\nHost: localhost\r\n\r\n");
    }
    let mut line = Line::open(service.address());
    line.send(&bytes);
    for i in 0..50 {
        assert_eq!(line.reply().text(), format!("[{i}]"));
        assert_eq!(line.reply().status, 200);
    }
}

#[test]
fn a_full_queue_is_said_and_health_still_answers() {
    let (bench, work) = bench();
    let service = start(Settings { workers: 2, queue: 3, ..settings() }, work);
    let mut lines: Vec<Line> = (0..5)
        .map(|_| {
            let mut line = Line::open(service.address());
            line.send(&posting("/v1/solve", b"wait"));
            line
        })
        .collect();
    bench.wait_for(|b| b.begun.load(Ordering::SeqCst) == 2);
    // The three others sit in the queue as soon as their bodies are read.
    let begin = Instant::now();
    let refused = loop {
        let mut line = Line::open(service.address());
        line.send(&posting("/v1/solve", b"wait"));
        line.stream.set_read_timeout(Some(Duration::from_millis(500))).unwrap();
        let mut peeked = [0u8; 1];
        match line.stream.peek(&mut peeked) {
            Ok(n) if n > 0 => break line.reply(),
            _ => lines.push(line),
        }
        assert!(begin.elapsed() < PATIENCE);
    };
    assert_eq!(refused.problem(503), "busy");
    let seconds: u64 = refused.header("retry-after").expect("Retry-After").parse().unwrap();
    assert!((1..=60).contains(&seconds));
    let begin = Instant::now();
    assert_eq!(get(service.address(), "/health").status, 200);
    assert!(begin.elapsed() < Duration::from_secs(5));
    assert_eq!(lines.len(), 5, "more requests were taken than there are seats");
    bench.release();
    for line in &mut lines {
        assert_eq!(line.reply().text(), "wait");
    }
    assert_eq!(bench.most.load(Ordering::SeqCst), 2);
    assert_eq!(post(service.address(), "/v1/solve", b"echo").status, 200);
}

#[test]
fn the_time_limit_calls_off_the_work() {
    let (bench, work) = bench();
    let service = start(Settings { time_limit: Duration::from_millis(100), ..settings() }, work);
    assert_eq!(post(service.address(), "/v1/solve", b"wait").problem(504), "time-limit");
    bench.wait_for(|b| b.cancelled.load(Ordering::SeqCst) == 1);
    assert_eq!(post(service.address(), "/v1/solve", b"echo").status, 200);
}

#[test]
fn a_job_that_does_not_listen_keeps_its_permit() {
    let (bench, work) = bench();
    let limits = Settings { time_limit: Duration::from_millis(100), workers: 1, queue: 1, ..settings() };
    let service = start(limits, work);
    assert_eq!(post(service.address(), "/v1/solve", b"deaf").problem(504), "time-limit");
    // Its permit is still out: the next one waits, and never runs beside it.
    assert_eq!(post(service.address(), "/v1/solve", b"echo").problem(504), "time-limit");
    assert_eq!(bench.begun.load(Ordering::SeqCst), 1);
    bench.release();
    bench.wait_for(|b| b.now.load(Ordering::SeqCst) == 0);
    let begin = Instant::now();
    while post(service.address(), "/v1/solve", b"echo").status != 200 {
        assert!(begin.elapsed() < PATIENCE);
    }
}

#[test]
fn a_hang_up_calls_off_the_work() {
    let (bench, work) = bench();
    let service = start(Settings { time_limit: PATIENCE, workers: 1, ..settings() }, work);
    let mut line = Line::open(service.address());
    line.send(&posting("/v1/solve", b"wait"));
    bench.wait_for(|b| b.begun.load(Ordering::SeqCst) == 1);
    // One that hangs up while it waits for the permit never begins.
    let mut waiting = Line::open(service.address());
    waiting.send(&posting("/v1/solve", b"wait"));
    std::thread::sleep(Duration::from_millis(50));
    drop(waiting);
    std::thread::sleep(Duration::from_millis(50));
    drop(line);
    bench.wait_for(|b| b.cancelled.load(Ordering::SeqCst) == 1);
    assert_eq!(post(service.address(), "/v1/solve", b"echo").status, 200);
    assert_eq!(bench.begun.load(Ordering::SeqCst), 2);
}

#[test]
fn stopping_finishes_what_runs() {
    let (bench, work) = bench();
    let mut service = start(settings(), work);
    let address = service.address();
    let mut line = Line::open(address);
    line.send(&posting("/v1/solve", b"wait"));
    let mut idle = Line::open(address);
    bench.wait_for(|b| b.begun.load(Ordering::SeqCst) == 1);
    service.ask_to_stop();
    // No new connection is taken, an idle one is closed.
    assert!(idle.is_closed());
    let begin = Instant::now();
    while std::net::TcpStream::connect(address).is_ok() {
        assert!(begin.elapsed() < PATIENCE, "the service still listens");
    }
    bench.release();
    let reply = line.reply();
    assert_eq!((reply.status, reply.text().as_str()), (200, "wait"));
    assert!(line.is_closed());
    service.wait();
    assert_eq!(bench.cancelled.load(Ordering::SeqCst), 0);
}

#[test]
fn stopping_has_an_end() {
    let (bench, work) = bench();
    let mut service = start(Settings { grace: Duration::from_millis(200), time_limit: PATIENCE, ..settings() }, work);
    let mut line = Line::open(service.address());
    line.send(&posting("/v1/solve", b"wait"));
    bench.wait_for(|b| b.begun.load(Ordering::SeqCst) == 1);
    let begin = Instant::now();
    service.ask_to_stop();
    service.wait();
    assert!(begin.elapsed() < Duration::from_secs(10));
    bench.wait_for(|b| b.cancelled.load(Ordering::SeqCst) == 1);
    assert!(line.is_closed());
}

#[test]
fn connections_are_bounded() {
    let (_, work) = bench();
    let limits = Settings { workers: 1, queue: 0, ..settings() };
    let most = limits.connections();
    let service = start(limits, work);
    let held: Vec<Line> = (0..most)
        .map(|_| {
            let mut line = Line::open(service.address());
            assert_eq!(line.send(b"GET /health HTTP/1.1\r\nHost: localhost\r\n\r\n").reply().status, 200);
            line
        })
        .collect();
    let mut late = Line::open(service.address());
    late.send(b"GET /health HTTP/1.1\r\nHost: localhost\r\n\r\n");
    late.stream.set_read_timeout(Some(Duration::from_millis(300))).unwrap();
    assert!(late.stream.peek(&mut [0u8; 1]).is_err(), "answered beyond the bound");
    late.stream.set_read_timeout(Some(PATIENCE)).unwrap();
    drop(held);
    assert_eq!(late.reply().status, 200);
}

#[test]
fn a_panic_is_answered_and_the_service_goes_on() {
    let (_, work) = bench();
    let service = start(Settings { workers: 1, queue: 0, ..settings() }, work);
    for _ in 0..5 {
        let reply = post(service.address(), "/v1/solve", b"panic");
        assert_eq!(reply.problem(500), "defect");
        assert!(!reply.text().contains("asked for this"), "the panic's text belongs in the log");
    }
    assert_eq!(post(service.address(), "/v1/solve", b"echo").status, 200);
}

#[test]
fn timings_travel_in_a_header() {
    let (_, work) = bench();
    let service = start(settings(), work);
    let reply = post(service.address(), "/v1/solve", b"{}");
    let timing = reply.header("server-timing").expect("Server-Timing");
    assert!(timing.starts_with("wait;dur=") && timing.ends_with(", solve;dur=1.000"), "{timing}");
}
