//! Just enough of an HTTP/1.1 client to ask our own service over a real socket.

use std::io::{self, Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::time::Duration;

/// Longest wait for the service.
const PATIENCE: Duration = Duration::from_secs(60);
/// Longest response read (bytes).
const LONGEST: u64 = 64 << 20;

/// A response.
#[derive(Debug, Clone)]
pub struct Response {
    /// Status code.
    pub status: u16,
    /// Value of Server-Timing, if any.
    pub timing: Option<String>,
    /// Body.
    pub body: Vec<u8>,
}

/// Posts a JSON document and reads the response to its end.
///
/// # Errors
/// When the service cannot be reached or does not speak HTTP.
pub fn post(address: SocketAddr, path: &str, body: &[u8]) -> io::Result<Response> {
    let mut stream = TcpStream::connect_timeout(&address, PATIENCE)?;
    stream.set_read_timeout(Some(PATIENCE))?;
    stream.set_write_timeout(Some(PATIENCE))?;
    let head = format!(
        "POST {path} HTTP/1.1\r\nHost: {address}\r\nContent-Type: application/json\r\nContent-Length: {}\r\n\
         Connection: close\r\n\r\n",
        body.len()
    );
    stream.write_all(head.as_bytes())?;
    stream.write_all(body)?;
    let mut bytes = Vec::new();
    stream.take(LONGEST).read_to_end(&mut bytes)?;
    parse(&bytes).ok_or_else(|| io::Error::new(io::ErrorKind::InvalidData, "not an HTTP response"))
}

/// Takes a whole response apart. The service always sends Content-Length, so chunks are not read.
fn parse(bytes: &[u8]) -> Option<Response> {
    let end = bytes.windows(4).position(|window| window == b"\r\n\r\n")?;
    let (head, rest) = bytes.split_at_checked(end)?;
    let head = std::str::from_utf8(head).ok()?;
    let status = head.strip_prefix("HTTP/1.1 ")?.get(..3)?.parse().ok()?;
    let header = |name: &str| {
        head.split("\r\n")
            .filter_map(|line| line.split_once(':'))
            .find(|(given, _)| given.eq_ignore_ascii_case(name))
            .map(|(_, value)| value.trim().to_owned())
    };
    let length: usize = header("content-length")?.parse().ok()?;
    let body = rest.get(4..4usize.checked_add(length)?)?.to_vec();
    Some(Response { status, timing: header("server-timing"), body })
}

#[cfg(test)]
mod tests {
    use super::parse;

    #[test]
    fn responses_are_taken_apart() {
        let response =
            parse(b"HTTP/1.1 200 OK\r\nContent-Length: 2\r\nserver-timing: solve;dur=1\r\n\r\n{}").unwrap();
        assert_eq!((response.status, response.body.as_slice()), (200, b"{}".as_slice()));
        assert_eq!(response.timing.as_deref(), Some("solve;dur=1"));
        let short = b"HTTP/1.1 200 OK\r\nContent-Length: 3\r\n\r\n{}";
        for broken in [&b""[..], b"HTTP/1.1 200 OK\r\n\r\n", short, b"x\r\n\r\n"] {
            assert!(parse(broken).is_none());
        }
    }
}
