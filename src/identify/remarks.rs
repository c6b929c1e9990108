//! Everything a reader should know about the log, counted, with the first lines it happened on.

use super::report::Remark;

/// Most lines listed for one remark.
pub const MOST_LINES: usize = 20;
/// Most different remarks.
const MOST_REMARKS: usize = 100;
const LAST: usize = MOST_REMARKS - 1;

/// The remarks so far.
#[derive(Debug, Clone, Default)]
pub struct Remarks {
    list: Vec<Remark>,
}

impl Remarks {
    /// Notes something on a line (0: no line in particular). `text` is made the first time only; the same code with another
    /// `subject` is another remark.
    pub fn note(&mut self, code: &'static str, line: u64, skipped: u64, text: impl FnOnce() -> String) {
        self.note_about(code, "", line, skipped, text);
    }

    /// The same, told apart by a subject (a column, a sole) that begins the text.
    pub fn note_about(&mut self, code: &'static str, subject: &str, line: u64, skipped: u64, text: impl FnOnce() -> String) {
        let found = self.list.iter_mut().find(|remark| remark.code == code && remark.text.starts_with(subject));
        let remark = match found {
            Some(remark) => remark,
            None => {
                // The last place is for all that found none.
                let (code, text) = match self.list.len() {
                    MOST_REMARKS => return self.further(line, skipped),
                    LAST => ("further-remarks", "further remarks of other kinds are counted here only".to_owned()),
                    _ => (code, format!("{subject}{}", text())),
                };
                self.list.push(Remark { code, text, count: 0, lines: Vec::new(), skipped: 0 });
                let Some(last) = self.list.last_mut() else { return };
                last
            }
        };
        remark.count += 1;
        remark.skipped += skipped;
        if line > 0 && remark.lines.len() < MOST_LINES && remark.lines.last() != Some(&line) {
            remark.lines.push(line);
        }
    }

    fn further(&mut self, line: u64, skipped: u64) {
        let Some(last) = self.list.last_mut() else { return };
        last.count += 1;
        last.skipped += skipped;
        if last.lines.len() < MOST_LINES {
            last.lines.push(line);
        }
    }

    /// The list, in the order in which they first came up.
    pub fn into_list(self) -> Vec<Remark> {
        self.list
    }
}
