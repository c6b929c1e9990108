//! Registered models: a bounded cache, least recently used goes first.

use std::collections::VecDeque;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use crate::model::Model;
use crate::wire::ModelSource;

/// Models by id, and by the hash of the description in a request; most recently used last.
#[derive(Debug)]
pub struct Models {
    kept: Mutex<VecDeque<Arc<Model>>>,
    described: Mutex<VecDeque<(Key, Arc<Model>)>>,
    most: usize,
}

/// Hash of a description as a request gave it.
type Key = [u8; 32];

impl Models {
    /// An empty cache for at most `most` models of either kind.
    pub fn new(most: usize) -> Self {
        Models { kept: Mutex::default(), described: Mutex::default(), most: most.max(1) }
    }

    /// Keeps a model; one with the same id has the same content, and only moves up.
    pub fn keep(&self, model: Arc<Model>) {
        let mut kept = lock(&self.kept);
        kept.retain(|other| other.id != model.id);
        kept.push_back(model);
        while kept.len() > self.most {
            kept.pop_front();
        }
    }
}

/// No code panics while it holds a lock; were it to happen, the list is whole all the same.
fn lock<T>(list: &Mutex<T>) -> MutexGuard<'_, T> {
    list.lock().unwrap_or_else(PoisonError::into_inner)
}

impl ModelSource for Models {
    /// The model with this id, which thereby becomes the most recently used.
    fn find(&self, id: &str) -> Option<Arc<Model>> {
        let mut kept = lock(&self.kept);
        let at = kept.iter().position(|model| model.id == id)?;
        let model = kept.remove(at)?;
        kept.push_back(Arc::clone(&model));
        Some(model)
    }

    /// Kept for the next request that describes the same robot; it is not registered by that.
    fn described(&self, key: &Key, make: &mut dyn FnMut() -> Option<Arc<Model>>) -> Option<Arc<Model>> {
        let known = {
            let mut list = lock(&self.described);
            let at = list.iter().position(|(other, _)| other == key);
            at.and_then(|at| list.remove(at))
        };
        // Made without the lock: others need not wait for it.
        let model = match known {
            Some((_, model)) => model,
            None => make()?,
        };
        let mut list = lock(&self.described);
        list.retain(|(other, _)| other != key);
        list.push_back((*key, Arc::clone(&model)));
        while list.len() > self.most {
            list.pop_front();
        }
        Some(model)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::model::BaseKind;

    fn model(id: &str) -> Arc<Model> {
        Arc::new(Model {
            name: String::new(),
            id: id.to_owned(),
            base: BaseKind::Fixed,
            bodies: Vec::new(),
            joints: Vec::new(),
            frames: Vec::new(),
            soles: Vec::new(),
            remarks: Vec::new(),
        })
    }

    #[test]
    fn least_recently_used_goes_first() {
        let models = Models::new(2);
        models.keep(model("a"));
        models.keep(model("b"));
        assert!(models.find("a").is_some());
        models.keep(model("c"));
        assert!(models.find("b").is_none());
        assert!(models.find("a").is_some() && models.find("c").is_some());
    }

    #[test]
    fn a_description_is_read_once() {
        let models = Models::new(2);
        let mut made = 0;
        let mut ask = |key: u8| {
            let found = models.described(&[key; 32], &mut || {
                made += 1;
                Some(model("described"))
            });
            (found.is_some(), made)
        };
        assert_eq!([ask(1), ask(1), ask(2), ask(1)], [(true, 1), (true, 1), (true, 2), (true, 2)]);
        // The third takes the place of the second, which was used least recently.
        assert_eq!([ask(3), ask(1), ask(2)], [(true, 3), (true, 3), (true, 4)]);
        assert!(models.described(&[9; 32], &mut || None).is_none());
        assert!(models.find("described").is_none(), "a described model is not registered");
    }

    #[test]
    fn keeping_twice_takes_one_place() {
        let models = Models::new(2);
        models.keep(model("a"));
        models.keep(model("b"));
        models.keep(model("b"));
        assert!(models.find("a").is_some() && models.find("b").is_some());
    }
}
