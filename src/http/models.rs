//! Registered models: a bounded cache, least recently used goes first.

use std::collections::VecDeque;
use std::sync::{Arc, Mutex, MutexGuard, PoisonError};

use crate::model::Model;
use crate::wire::ModelSource;

/// Models by id, most recently used last.
#[derive(Debug)]
pub struct Models {
    kept: Mutex<VecDeque<Arc<Model>>>,
    most: usize,
}

impl Models {
    /// An empty cache for at most `most` models.
    pub fn new(most: usize) -> Self {
        Models { kept: Mutex::new(VecDeque::new()), most: most.max(1) }
    }

    /// Keeps a model; one with the same id has the same content, and only moves up.
    pub fn keep(&self, model: Arc<Model>) {
        let mut kept = self.lock();
        kept.retain(|other| other.id != model.id);
        kept.push_back(model);
        while kept.len() > self.most {
            kept.pop_front();
        }
    }

    /// No code panics while it holds the lock; were it to happen, the list is whole all the same.
    fn lock(&self) -> MutexGuard<'_, VecDeque<Arc<Model>>> {
        self.kept.lock().unwrap_or_else(PoisonError::into_inner)
    }
}

impl ModelSource for Models {
    /// The model with this id, which thereby becomes the most recently used.
    fn find(&self, id: &str) -> Option<Arc<Model>> {
        let mut kept = self.lock();
        let at = kept.iter().position(|model| model.id == id)?;
        let model = kept.remove(at)?;
        kept.push_back(Arc::clone(&model));
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
    fn keeping_twice_takes_one_place() {
        let models = Models::new(2);
        models.keep(model("a"));
        models.keep(model("b"));
        models.keep(model("b"));
        assert!(models.find("a").is_some() && models.find("b").is_some());
    }
}
