//! A text in pieces, cut into lines. Memory is bounded: at most one line within the limit and one piece are held,
//! however long the text or any line of it is.

/// One line of the text.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Line {
    /// A line that is not blank, without its line feed.
    Text {
        /// Its number in the text, from 1; blank lines count.
        number: u64,
        /// Its bytes.
        bytes: Vec<u8>,
    },
    /// A line longer than the limit; its bytes are gone.
    TooLong {
        /// Its number in the text, from 1.
        number: u64,
    },
}

/// Cuts pieces into lines.
#[derive(Debug)]
pub struct Splitter {
    held: Vec<u8>,
    /// Bytes of `held` that earlier lines used up.
    used: usize,
    /// Bytes of `held` known to hold no line feed.
    searched: usize,
    limit: usize,
    number: u64,
    /// The rest of a line that was too long is thrown away up to its line feed.
    skipping: bool,
}

impl Splitter {
    /// A splitter for lines of at most `limit` bytes.
    pub fn new(limit: usize) -> Self {
        Splitter { held: Vec::new(), used: 0, searched: 0, limit, number: 0, skipping: false }
    }

    /// Changes the limit for the lines that have not been given out yet.
    pub fn set_limit(&mut self, limit: usize) {
        self.limit = limit;
    }

    /// The limit in force (bytes).
    pub fn limit(&self) -> usize {
        self.limit
    }

    /// Takes the next piece. Take all lines out before the next one.
    pub fn push(&mut self, piece: &[u8]) {
        self.held.drain(..self.used);
        self.searched -= self.used;
        self.used = 0;
        self.held.extend_from_slice(piece);
    }

    /// The next whole line; none until more is pushed. Blank lines are left out.
    pub fn next_line(&mut self) -> Option<Line> {
        loop {
            let fresh = self.held.get(self.searched..).unwrap_or_default();
            let Some(at) = fresh.iter().position(|byte| *byte == b'\n') else {
                self.searched = self.held.len();
                return self.overflow();
            };
            let end = self.searched + at;
            let line = self.cut(end);
            self.used = end + 1;
            self.searched = end + 1;
            if line.is_some() {
                return line;
            }
        }
    }

    /// What is left where the text ends without a line feed.
    pub fn last_line(&mut self) -> Option<Line> {
        let end = self.held.len();
        if end == self.used && !self.skipping {
            return None;
        }
        let line = self.cut(end);
        self.used = end;
        self.searched = end;
        line
    }

    /// The line that ends before `end`; none if it is blank, or the end of one that was reported before.
    fn cut(&mut self, end: usize) -> Option<Line> {
        if std::mem::take(&mut self.skipping) {
            return None;
        }
        self.number += 1;
        let bytes = self.held.get(self.used..end).unwrap_or_default();
        if bytes.iter().all(u8::is_ascii_whitespace) {
            return None;
        }
        if bytes.len() > self.limit {
            return Some(Line::TooLong { number: self.number });
        }
        Some(Line::Text { number: self.number, bytes: bytes.to_vec() })
    }

    /// Reports a line as soon as it is too long, and forgets what came of it.
    fn overflow(&mut self) -> Option<Line> {
        let long = self.held.len() - self.used > self.limit;
        if !long && !self.skipping {
            return None;
        }
        self.used = self.held.len();
        if self.skipping {
            return None;
        }
        self.skipping = true;
        self.number += 1;
        Some(Line::TooLong { number: self.number })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn text(number: u64, bytes: &str) -> Line {
        Line::Text { number, bytes: bytes.as_bytes().to_vec() }
    }

    /// All lines of a text that comes in pieces of the given size.
    fn split(input: &[u8], piece: usize, limit: usize) -> Vec<Line> {
        let mut splitter = Splitter::new(limit);
        let mut lines = Vec::new();
        for part in input.chunks(piece) {
            splitter.push(part);
            while let Some(line) = splitter.next_line() {
                lines.push(line);
            }
            assert!(splitter.held.len() - splitter.used <= limit, "more than a line is held");
        }
        lines.extend(splitter.last_line());
        lines
    }

    #[test]
    fn lines_are_the_same_however_the_pieces_fall() {
        let input = b"one\n\n  \r\nfour\r\nfive";
        let expected = [text(1, "one"), text(4, "four\r"), text(5, "five")];
        for piece in 1..=input.len() {
            assert_eq!(split(input, piece, 10), expected, "pieces of {piece}");
        }
        assert_eq!(split(b"one\n", 4, 10), [text(1, "one")]);
        assert_eq!(split(b"", 1, 10), []);
        assert_eq!(split(b"\n\n", 1, 10), []);
    }

    #[test]
    fn a_line_too_long_is_reported_once_and_the_next_is_read() {
        let input = b"ok\n0123456789\nafter\n01234567890123456789";
        let expected = [text(1, "ok"), Line::TooLong { number: 2 }, text(3, "after"), Line::TooLong { number: 4 }];
        for piece in 1..=input.len() {
            assert_eq!(split(input, piece, 5), expected, "pieces of {piece}");
        }
    }
}
