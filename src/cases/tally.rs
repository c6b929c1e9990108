//! What became of the lines of a batch, counted.

/// Why a batch ended.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum End {
    /// Every line was read.
    Complete,
    /// No whole line came for too long.
    Idle,
    /// What was sent broke off.
    Broken,
}

/// What became of one line.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Fate {
    /// It has an answer with this status.
    Answered(String),
    /// It was refused.
    Refused,
}

/// Counts by status. The statuses are a handful of fixed words, so the list stays short.
#[derive(Debug, Clone, Default, PartialEq, Eq)]
pub struct Tally {
    /// Answered lines by status, in the order in which the statuses first came.
    pub statuses: Vec<(String, u64)>,
    /// Lines that were refused.
    pub refused: u64,
}

impl Tally {
    /// Counts one line.
    pub fn count(&mut self, fate: Fate) {
        match fate {
            Fate::Refused => self.refused += 1,
            Fate::Answered(status) => match self.statuses.iter_mut().find(|(known, _)| *known == status) {
                Some((_, count)) => *count += 1,
                None => self.statuses.push((status, 1)),
            },
        }
    }

    /// Lines that were answered.
    pub fn answered(&self) -> u64 {
        self.statuses.iter().map(|(_, count)| count).sum()
    }
}
