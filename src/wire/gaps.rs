//! What was left out of a request so that the rest could be read: a member of the wrong type takes itself out, or the
//! object it belongs to where it cannot be missing. Faults found in the rest are said in the places of the whole
//! request, and left unsaid where the missing part may be their cause.

use std::collections::{BTreeMap, BTreeSet};

use serde_json::Value;

use super::gate::push_token;

/// Rounds of leaving out: a required member takes out the object around it, one level a round.
const MAX_ROUNDS: usize = 16;
/// Parts left out of one request.
const MAX_GAPS: usize = 200;

/// Parts left out.
#[derive(Debug, Default)]
pub(super) struct Gaps {
    /// Their pointers in the whole request.
    left_out: BTreeSet<String>,
    /// By the pointer of an array in the whole request: the elements it lost.
    lost: BTreeMap<String, BTreeSet<usize>>,
}

/// Something in a request that does not have the form of its schema.
#[derive(Debug)]
pub(super) struct Misfit {
    /// Where it stands: for a missing member, where it would.
    pub(super) pointer: String,
    /// True for a member that nobody knows: the rest can do without it.
    pub(super) unknown: bool,
}

impl Gaps {
    /// True while nothing was left out.
    pub(super) fn is_empty(&self) -> bool {
        self.left_out.is_empty()
    }

    /// A place in what is left, as a place in the whole request.
    pub(super) fn original(&self, pointer: &str) -> String {
        if self.lost.is_empty() {
            return pointer.to_string();
        }
        let mut whole = String::with_capacity(pointer.len());
        for token in pointer.split('/').skip(1) {
            let lost = self.lost.get(&whole);
            whole.push('/');
            match (lost, token.parse::<usize>()) {
                (Some(lost), Ok(mut index)) => {
                    // Ascending: each lost element at or before the place moves it on by one.
                    lost.iter().for_each(|gone| index += usize::from(*gone <= index));
                    whole.push_str(&index.to_string());
                }
                _ => whole.push_str(token),
            }
        }
        whole
    }

    /// True where a left-out part is this place, around it or in it.
    pub(super) fn touch(&self, pointer: &str) -> bool {
        self.left_out.iter().any(|gap| inside(gap, pointer) || inside(pointer, gap))
    }

    /// True where a left-out part is this place or in it.
    pub(super) fn within(&self, pointer: &str) -> bool {
        self.left_out.iter().any(|gap| inside(gap, pointer))
    }

    /// True where this list, or one of its elements, was left out.
    pub(super) fn shortened(&self, pointer: &str) -> bool {
        self.left_out.contains(pointer) || self.lost.contains_key(pointer)
    }

    /// Takes parts out of `value` until `misfits` finds no more; none where that leads nowhere. `stand_ins` take
    /// the place of members that the rest cannot be read without.
    pub(super) fn make(
        value: &mut Value,
        stand_ins: &[(&str, Value)],
        misfits: impl Fn(&Value) -> Vec<Misfit>,
    ) -> Option<Gaps> {
        let mut gaps = Gaps::default();
        for _ in 0..MAX_ROUNDS {
            let found = misfits(value);
            if found.is_empty() {
                return Some(gaps);
            }
            gaps.round(value, &found, stand_ins)?;
            if gaps.left_out.len() > MAX_GAPS {
                return None;
            }
        }
        None
    }

    /// Takes out every part found, the last elements of an array first.
    fn round(&mut self, value: &mut Value, found: &[Misfit], stand_ins: &[(&str, Value)]) -> Option<()> {
        let mut parts: Vec<(Vec<String>, bool)> = Vec::new();
        for misfit in found {
            let mut path = tokens(&misfit.pointer);
            let needed = stand_ins.iter().any(|(place, _)| *place == misfit.pointer);
            if value.pointer(&misfit.pointer).is_none() && !needed {
                path.pop();
            }
            if path.is_empty() {
                return None;
            }
            parts.push((path, misfit.unknown));
        }
        parts.sort_by(|a, b| later_first(&a.0, &b.0));
        parts.dedup_by(|a, b| a.0 == b.0);
        let mut moved = Vec::new();
        for (path, unknown) in &parts {
            let whole = self.original(&pointer(path));
            let element = take(value, path, stand_ins)?;
            if !unknown {
                moved.push((whole, element));
            }
        }
        for (whole, element) in moved {
            let (array, last) = whole.rsplit_once('/')?;
            if let (true, Ok(index)) = (element, last.parse()) {
                self.lost.entry(array.to_string()).or_default().insert(index);
            }
            self.left_out.insert(whole);
        }
        Some(())
    }
}

/// True where `inner` is `outer` or stands in it.
fn inside(inner: &str, outer: &str) -> bool {
    inner.strip_prefix(outer).is_some_and(|rest| rest.is_empty() || rest.starts_with('/'))
}

/// Puts a stand-in where there is one, takes the part out otherwise; says whether it was an element of an array.
fn take(value: &mut Value, path: &[String], stand_ins: &[(&str, Value)]) -> Option<bool> {
    let (last, parents) = path.split_last()?;
    let stand_in = stand_ins.iter().find(|(place, _)| *place == pointer(path));
    match value.pointer_mut(&pointer(parents)) {
        Some(Value::Object(members)) => {
            match stand_in {
                Some((_, stand_in)) => members.insert(last.clone(), stand_in.clone()),
                None => members.shift_remove(last),
            };
            Some(false)
        }
        Some(Value::Array(elements)) => {
            let index = last.parse::<usize>().ok().filter(|index| *index < elements.len())?;
            elements.remove(index);
            Some(true)
        }
        _ => Some(false),
    }
}

/// Deeper and later parts before those around and before them.
fn later_first(a: &[String], b: &[String]) -> std::cmp::Ordering {
    for (a, b) in a.iter().zip(b) {
        let order = match (a.parse::<usize>(), b.parse::<usize>()) {
            (Ok(a), Ok(b)) => b.cmp(&a),
            _ => b.cmp(a),
        };
        if order.is_ne() {
            return order;
        }
    }
    b.len().cmp(&a.len())
}

fn tokens(pointer: &str) -> Vec<String> {
    pointer.split('/').skip(1).map(|token| token.replace("~1", "/").replace("~0", "~")).collect()
}

fn pointer(tokens: &[String]) -> String {
    let mut text = String::new();
    tokens.iter().for_each(|token| push_token(&mut text, token));
    text
}
