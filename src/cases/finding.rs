//! What became of one case, in a line, and of many, counted.

/// What is said of a case.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Word {
    /// The answer is as good as the reference's within the tolerances.
    Pass,
    /// It is not.
    Fail,
    /// Neither can be said.
    Undecided,
    /// The case cannot be read.
    Unusable,
}

impl Word {
    /// The word.
    pub fn text(self) -> &'static str {
        match self {
            Word::Pass => "pass",
            Word::Fail => "fail",
            Word::Undecided => "undecided",
            Word::Unusable => "unusable",
        }
    }
}

/// What was found in one case.
#[derive(Debug, Clone, PartialEq)]
pub struct Finding {
    /// File it stands in.
    pub file: String,
    /// Name it gives itself, if it does.
    pub name: Option<String>,
    /// Verdict.
    pub word: Word,
    /// Kind of the first thing wrong, a short code; empty where it passes.
    pub kind: String,
    /// The first thing wrong, in a sentence; empty where it passes.
    pub first: String,
    /// What may have caused it (a hypothesis), in a sentence; empty where nothing was found or looked for.
    pub cause: String,
    /// What else is wrong, a sentence each.
    pub others: Vec<String>,
    /// How long the judging took (s).
    pub seconds: f64,
}

impl Finding {
    /// A case that cannot be read.
    pub fn unusable(file: String, kind: &str, why: String) -> Finding {
        let (name, cause, others) = (None, String::new(), Vec::new());
        Finding { file, name, word: Word::Unusable, kind: kind.to_owned(), first: why, cause, others, seconds: 0.0 }
    }

    /// The case in one line: verdict, case, first thing wrong, cause. Line breaks within become spaces.
    pub fn line(&self) -> String {
        let mut line = format!("{:<9}  {}", self.word.text(), self.title());
        for (before, text) in [(": ", &self.first), ("; cause: ", &self.cause)] {
            if !text.is_empty() {
                line.push_str(before);
                line.push_str(text);
            }
        }
        line.split(['\n', '\r']).collect::<Vec<_>>().join(" ")
    }

    /// The file, and the name where it has one.
    pub fn title(&self) -> String {
        match &self.name {
            Some(name) => format!("{} ({name})", self.file),
            None => self.file.clone(),
        }
    }
}

/// Cases by verdict.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq)]
pub struct Count {
    /// Passed.
    pub pass: usize,
    /// Failed.
    pub fail: usize,
    /// Left undecided.
    pub undecided: usize,
    /// Not read.
    pub unusable: usize,
}

impl Count {
    /// Counts one case.
    pub fn add(&mut self, word: Word) {
        match word {
            Word::Pass => self.pass += 1,
            Word::Fail => self.fail += 1,
            Word::Undecided => self.undecided += 1,
            Word::Unusable => self.unusable += 1,
        }
    }

    /// All of them.
    pub fn all(self) -> usize {
        self.pass + self.fail + self.undecided + self.unusable
    }

    /// All cases in one line.
    pub fn line(self) -> String {
        let noun = if self.all() == 1 { "case" } else { "cases" };
        format!("{} {noun}: {} pass, {} fail, {} undecided, {} unusable", self.all(), self.pass, self.fail, self.undecided, self.unusable)
    }
}
