//! What a solve request adds over HTTP, beside its parts, in one run: `cargo bench --bench request`.
//!
//! Floor: a handler of the same framework that reads a typed body of the same size and writes one of the size of the answer.
//! Parts, in this process: reading (gate), fingerprint, dynamics and solve, certificate and report, writing. What is left of
//! the time over HTTP is the way to a thread and back, guard and log. The model is registered once and named by its id; the
//! same with the description inline is reported beside it.

mod timing;

use std::hint::black_box;
use std::io::{Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::sync::atomic::AtomicBool;
use std::sync::{Arc, mpsc};

use axum::body::{Body, Bytes};
use axum::http::header;
use axum::response::Response;
use serde::{Deserialize, Serialize};
use timing::{interleaved_at, report};
use underfoot::http::{Catalogue, Errand, Running, Settings, Work};
use underfoot::model::Model;
use underfoot::problem::question::Question;
use underfoot::problem::{assemble, scene::Scene};
use underfoot::wire::{self, ModelSource};
use underfoot::{reference, solve};

const ROUNDS: usize = 400;
/// Ten microseconds are to be seen in milliseconds: the times compared are the quickest tenth's end, not medians.
const QUANTILE: f64 = 0.1;

struct One(Arc<Model>);

impl ModelSource for One {
    fn find(&self, _: &str) -> Option<Arc<Model>> {
        Some(Arc::clone(&self.0))
    }
}

/// A typed document of named vectors, of whatever size.
#[derive(Serialize, Deserialize)]
struct Typed {
    entries: Vec<Entry>,
}

#[derive(Serialize, Deserialize)]
struct Entry {
    name: String,
    values: [f64; 3],
    weight: Option<f64>,
}

fn typed(bytes: usize) -> Typed {
    let entry = |i: usize| Entry {
        name: format!("joint {i}"),
        values: [0.1 * i as f64, 1.0 / (1 + i) as f64, -2.5],
        weight: i.is_multiple_of(2).then_some(3.0),
    };
    let mut document = Typed { entries: Vec::new() };
    while serde_json::to_vec(&document).map_or(0, |text| text.len()) < bytes {
        document.entries.push(entry(document.entries.len()));
    }
    document
}

/// The floor on a thread of its own.
fn floor(answer: usize) -> SocketAddr {
    let (tell, told) = mpsc::channel();
    std::thread::spawn(move || {
        let runtime = underfoot::http::runtime(&Settings::default()).expect("threads");
        runtime.block_on(async move {
            let reply = Arc::new(typed(answer));
            let handler = move |body: Bytes| {
                let reply = Arc::clone(&reply);
                async move {
                    let read: Typed = serde_json::from_slice(&body).expect("a typed body");
                    black_box(read.entries.iter().map(|e| e.values[0] + e.name.len() as f64 + e.weight.unwrap_or(0.0)).sum::<f64>());
                    let mut out = Vec::with_capacity(answer + answer / 4);
                    serde_json::to_writer(&mut out, &*reply).expect("it can be written");
                    Response::builder().header(header::CONTENT_TYPE, "application/json").body(Body::from(out)).expect("a response")
                }
            };
            let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.expect("a port");
            tell.send(listener.local_addr().expect("an address")).expect("the bench listens");
            let router = axum::Router::new().route("/", axum::routing::post(handler));
            use axum::serve::ListenerExt;
            let listener = listener.tap_io(|stream| drop(stream.set_nodelay(true)));
            axum::serve(listener, router).await.expect("it serves");
        });
    });
    told.recv().expect("an address")
}

/// A connection that is kept, and one request over and over.
struct Client {
    stream: TcpStream,
    request: Vec<u8>,
    buffer: Vec<u8>,
}

impl Client {
    fn new(address: SocketAddr, path: &str, body: &[u8]) -> Self {
        let stream = TcpStream::connect(address).expect("it listens");
        stream.set_nodelay(true).expect("a socket");
        let head = format!(
            "POST {path} HTTP/1.1\r\nHost: {address}\r\nContent-Type: application/json\r\nContent-Length: {}\r\n\r\n",
            body.len()
        );
        Client { stream, request: [head.as_bytes(), body].concat(), buffer: vec![0; 1 << 20] }
    }

    /// Sends the request and reads the whole response; its body.
    fn ask(&mut self) -> &[u8] {
        self.stream.write_all(&self.request).expect("sent");
        let mut filled = 0;
        loop {
            filled += self.stream.read(&mut self.buffer[filled..]).expect("read");
            let seen = &self.buffer[..filled];
            let Some(end) = seen.windows(4).position(|w| w == b"\r\n\r\n") else { continue };
            let head = std::str::from_utf8(&seen[..end]).expect("a head").to_ascii_lowercase();
            assert!(head.starts_with("http/1.1 200"), "{head}");
            let length = head.split("content-length: ").nth(1).and_then(|rest| rest.split("\r\n").next()?.parse().ok());
            let whole = end + 4 + length.unwrap_or(0usize);
            if filled >= whole {
                return &self.buffer[end + 4..whole];
            }
        }
    }
}

/// Processor time of all threads of this process so far (s), as Linux counts it; zero elsewhere.
fn processor_time() -> f64 {
    let tasks = std::fs::read_dir("/proc/self/task").into_iter().flatten().flatten();
    let spent = tasks.filter_map(|task| std::fs::read_to_string(task.path().join("schedstat")).ok());
    spent.filter_map(|text| text.split(' ').next()?.parse::<f64>().ok()).sum::<f64>() * 1e-9
}

/// Processor time per call (s): the least of several batches, in turns.
fn cpu_per_call(candidates: &mut [&mut dyn FnMut()]) -> Vec<f64> {
    const BATCHES: usize = 8;
    const CALLS: usize = 50;
    let mut least = vec![f64::INFINITY; candidates.len()];
    for _ in 0..BATCHES {
        for (candidate, least) in candidates.iter_mut().zip(&mut least) {
            let before = processor_time();
            (0..CALLS).for_each(|_| candidate());
            let spent = (processor_time() - before) / CALLS as f64;
            // A thread that ends takes its time out of the sum: such a batch says nothing.
            if spent > 0.0 {
                *least = least.min(spent);
            }
        }
    }
    least
}

fn dynamics_and_solve(question: &Question) -> f64 {
    let scene = Scene::new(question).expect("sound ground");
    let hierarchy = assemble(question, &scene, &[]).hierarchy;
    solve::solve(&hierarchy, &solve::Options::default(), None).expect("a sound hierarchy").x[0]
}

fn main() {
    let inline = include_bytes!("../../schemas/example-solve.json").to_vec();
    let mut request: serde_json::Value = serde_json::from_slice(&inline).expect("JSON");
    let mut description = request["model"].clone();
    description["format"] = request["format"].clone();
    let description = serde_json::to_vec(&description).expect("JSON");
    let never = Arc::new(AtomicBool::new(false));
    let catalogue = Catalogue::default();
    let id = catalogue.run(Errand::Register, &description, &never).expect("a good model").model.expect("an id");
    request["model"] = id.as_str().into();
    let by_id = serde_json::to_vec(&request).expect("JSON");

    let models = One(Arc::new(wire::read_model(&description).expect("a good model")));
    let kept = underfoot::http::models::Models::new(2);
    let question = wire::read_solve(&by_id, &models).expect("a good request");
    let answer = reference::solve(&question, &never).expect("an answer");
    let size = wire::write_answer(&question, &answer, &wire::fingerprint(&by_id)).len();

    let settings = Settings { address: ([127, 0, 0, 1], 0).into(), ..Settings::default() };
    let service = Running::start(settings, Arc::new(catalogue)).expect("a port");
    let echo = floor(size);
    let mut bare = Client::new(echo, "/", &serde_json::to_vec(&typed(by_id.len())).expect("JSON"));
    let mut ours = Client::new(service.address(), "/v1/solve", &by_id);
    let mut whole = Client::new(service.address(), "/v1/solve", &inline);
    assert_eq!(ours.ask().len(), size);
    println!("{} bytes in ({} with the description inline), {size} bytes out", by_id.len(), inline.len());

    let over_http = interleaved_at(
        QUANTILE,
        ROUNDS,
        &mut [
            &mut || bare.ask().len() as f64,
            &mut || ours.ask().len() as f64,
            &mut || whole.ask().len() as f64,
        ],
    );
    let in_process = interleaved_at(
        QUANTILE,
        ROUNDS,
        &mut [
            &mut || wire::read_solve(black_box(&by_id), &models).map_or(0.0, |q| q.tick.length),
            &mut || wire::read_solve(black_box(&inline), &kept).map_or(0.0, |q| q.tick.length),
            &mut || wire::fingerprint(black_box(&by_id)).len() as f64,
            &mut || dynamics_and_solve(black_box(&question)),
            &mut || reference::solve(black_box(&question), &never).map_or(0.0, |a| a.levels.len() as f64),
            &mut || wire::write_answer(black_box(&question), &answer, "00").len() as f64,
        ],
    );
    let http_cpu = cpu_per_call(&mut [
        &mut || _ = black_box(bare.ask()),
        &mut || _ = black_box(ours.ask()),
        &mut || _ = black_box(whole.ask()),
    ]);
    let reference_cpu = cpu_per_call(&mut [&mut || drop(black_box(reference::solve(black_box(&question), &never)))])[0];
    let [bare, ours, whole] = over_http[..] else { return };
    let [read, read_inline, fingerprint, solved, reference, write] = in_process[..] else { return };
    report("HTTP floor, typed, same sizes", bare, None);
    report("dynamics and solve", solved, None);
    report("certificate and report", reference - solved, None);
    report("reading (gate)", read, None);
    report("reading with the description inline", read_inline, None);
    report("canonical form and fingerprint", fingerprint, None);
    report("writing", write, None);
    report("solve request over HTTP, model by id", ours, Some(("floor + dynamics and solve", bare + solved)));
    report("  added to floor + dynamics + solve", ours - bare - solved, None);
    report("  added to floor + dynamics + solve + certificate", ours - bare - reference, None);
    report("  of that: way to a thread and back, guard, log", ours - bare - reference - read - fingerprint - write, None);
    report("solve request over HTTP, description inline", whole, Some(("by id", ours)));
    println!("processor time of all threads, client included, which waiting for a processor does not lengthen:");
    report("  floor", http_cpu[0], None);
    report("  request by id", http_cpu[1], None);
    report("  added to floor and reference", http_cpu[1] - http_cpu[0] - reference_cpu, None);
    report("  the same, description inline", http_cpu[2] - http_cpu[0] - reference_cpu, None);
}
