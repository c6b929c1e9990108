//! A service on a free port and a client that speaks raw TCP, so that tests can send what no HTTP
//! library would.
#![allow(dead_code)]

use std::io::{Read, Write};
use std::net::{Shutdown, SocketAddr, TcpStream};
use std::sync::Arc;
use std::time::Duration;

use underfoot::http::{Running, Settings, Work};

/// Longest time any test waits for bytes.
pub const PATIENCE: Duration = Duration::from_secs(30);

/// Settings for a test: a free port on the loopback.
pub fn settings() -> Settings {
    Settings { address: SocketAddr::from(([127, 0, 0, 1], 0)), workers: 2, ..Settings::default() }
}

pub fn start(settings: Settings, work: impl Work) -> Running {
    Running::start(settings, Arc::new(work)).expect("the service starts")
}

/// A response taken apart.
#[derive(Debug, Clone)]
pub struct Reply {
    pub status: u16,
    pub headers: Vec<(String, String)>,
    pub body: Vec<u8>,
}

impl Reply {
    pub fn header(&self, name: &str) -> Option<&str> {
        self.headers.iter().find(|(n, _)| n.eq_ignore_ascii_case(name)).map(|(_, v)| v.as_str())
    }

    pub fn text(&self) -> String {
        String::from_utf8_lossy(&self.body).into_owned()
    }

    /// The body as JSON.
    pub fn json(&self) -> serde_json::Value {
        serde_json::from_slice(&self.body).unwrap_or_else(|e| panic!("{e}: {}", self.text()))
    }

    /// Checks that this is a problem document with this status, and gives its code.
    pub fn problem(&self, status: u16) -> String {
        assert_eq!(self.status, status, "{}", self.text());
        assert_eq!(self.header("content-type"), Some("application/problem+json"));
        let json = self.json();
        assert_eq!(json["status"], status);
        for member in ["title", "detail", "instance"] {
            assert!(json[member].is_string(), "{member} in {json}");
        }
        json["code"].as_str().expect("a code").to_owned()
    }
}

/// A connection.
pub struct Line {
    pub stream: TcpStream,
    rest: Vec<u8>,
}

impl Line {
    pub fn open(address: SocketAddr) -> Line {
        let stream = TcpStream::connect(address).expect("connects");
        stream.set_read_timeout(Some(PATIENCE)).expect("time-out");
        stream.set_nodelay(true).expect("no delay");
        Line { stream, rest: Vec::new() }
    }

    pub fn send(&mut self, bytes: &[u8]) -> &mut Self {
        self.stream.write_all(bytes).expect("sends");
        self
    }

    pub fn end_of_sending(&mut self) -> &mut Self {
        self.stream.shutdown(Shutdown::Write).expect("half-closes");
        self
    }

    fn more(&mut self) -> bool {
        let mut space = [0u8; 16384];
        match self.stream.read(&mut space) {
            Ok(0) => false,
            Ok(n) => {
                self.rest.extend_from_slice(&space[..n]);
                true
            }
            Err(e) => panic!("while reading: {e}; so far {:?}", String::from_utf8_lossy(&self.rest)),
        }
    }

    /// The next response; interim ones (100) are skipped.
    pub fn reply(&mut self) -> Reply {
        self.try_reply().expect("a response before the end of the connection")
    }

    /// The next response, or none if the connection ended before one.
    pub fn try_reply(&mut self) -> Option<Reply> {
        loop {
            let end = loop {
                if let Some(at) = self.rest.windows(4).position(|w| w == b"\r\n\r\n") {
                    break at + 4;
                }
                if !self.more() {
                    assert!(self.rest.is_empty(), "a broken head");
                    return None;
                }
            };
            let head = String::from_utf8(self.rest.drain(..end).collect()).expect("a head in ASCII");
            let mut lines = head.split("\r\n");
            let status: u16 = lines.next().unwrap().split(' ').nth(1).unwrap().parse().unwrap();
            let headers: Vec<(String, String)> = lines
                .filter_map(|l| l.split_once(':'))
                .map(|(n, v)| (n.to_owned(), v.trim().to_owned()))
                .collect();
            if status == 100 {
                continue;
            }
            let mut reply = Reply { status, headers, body: Vec::new() };
            let length: usize = reply.header("content-length").map_or(0, |l| l.parse().unwrap());
            while self.rest.len() < length {
                assert!(self.more(), "the body broke off");
            }
            reply.body = self.rest.drain(..length).collect();
            return Some(reply);
        }
    }

    /// True if the service closes the connection.
    pub fn is_closed(&mut self) -> bool {
        let mut space = [0u8; 64];
        match self.stream.read(&mut space) {
            Ok(n) => n == 0,
            Err(e) => e.kind() == std::io::ErrorKind::ConnectionReset,
        }
    }
}

/// One exchange on a connection of its own.
pub fn exchange(address: SocketAddr, bytes: &[u8]) -> Reply {
    Line::open(address).send(bytes).reply()
}

pub fn get(address: SocketAddr, path: &str) -> Reply {
    exchange(address, format!("GET {path} HTTP/1.1\r\nHost: localhost\r\n\r\n").as_bytes())
}

pub fn post(address: SocketAddr, path: &str, body: &[u8]) -> Reply {
    exchange(address, &posting(path, body))
}

/// The bytes of a well-formed POST.
pub fn posting(path: &str, body: &[u8]) -> Vec<u8> {
    let mut bytes = format!(
        "POST {path} HTTP/1.1\r\nHost: localhost\r\nContent-Type: application/json\r\nContent-Length: {}\r\n\r\n",
        body.len()
    )
    .into_bytes();
    bytes.extend_from_slice(body);
    bytes
}
