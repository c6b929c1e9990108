//! A document read back, for programs that use the service: the command line's tables and its demo.

use serde_json::{Map, Value, json};

/// A view of a JSON value. What is missing reads as nothing, so that a table never fails.
#[derive(Debug, Clone, Copy)]
pub struct View<'a>(&'a Value);

/// A JSON document.
#[derive(Debug, Clone)]
pub struct Parsed(Value);

static NOTHING: Value = Value::Null;

impl Parsed {
    /// Reads a document; none if it is not JSON.
    pub fn read(bytes: &[u8]) -> Option<Parsed> {
        serde_json::from_slice(bytes).ok().map(Parsed)
    }

    /// The document as a view.
    pub fn view(&self) -> View<'_> {
        View(&self.0)
    }
}

impl<'a> View<'a> {
    /// The value at a JSON pointer below this one.
    pub fn at(self, pointer: &str) -> View<'a> {
        View(self.0.pointer(pointer).unwrap_or(&NOTHING))
    }

    /// Its number, if it is one.
    pub fn number(self) -> Option<f64> {
        self.0.as_f64()
    }

    /// Its text, if it is text.
    pub fn text(self) -> Option<&'a str> {
        self.0.as_str()
    }

    /// Its truth value, if it has one.
    pub fn truth(self) -> Option<bool> {
        self.0.as_bool()
    }

    /// True where there is nothing.
    pub fn is_nothing(self) -> bool {
        self.0.is_null()
    }

    /// Its elements; none if it is no array.
    pub fn items(self) -> impl Iterator<Item = View<'a>> {
        self.0.as_array().into_iter().flatten().map(View)
    }

    /// Its elements as numbers, those that are.
    pub fn numbers(self) -> Vec<f64> {
        self.items().filter_map(View::number).collect()
    }
}

/// The same request as a controller would put it that takes the ground for rigid: every law
/// `rigid`, and momentum at its first rate.
///
/// With `L_ddot = second_rate + g2 (rate - L_dot) + g1 (reference - L) + g0 m (center - c)` the
/// first-rate law is what is left when the fastest derivative is neglected:
/// `L_dot = rate + g1/g2 (reference - L) + g0/g2 m (center - c)`, and a residual of `scale` in
/// L_ddot is one of `scale/g2` in L_dot. Where `g2` is zero the feedforward alone is left. What needs the present wrench, which
/// rigid ground does not tell, goes: approaching a wrench becomes asking for it, smoothness and rate limits are
/// dropped, and limits that decay become hard.
///
/// None if `request` is no solve request.
pub fn rigid_twin(request: &[u8]) -> Option<Vec<u8>> {
    let mut document: Value = serde_json::from_slice(request).ok()?;
    for contact in document.get_mut("contacts")?.as_array_mut()? {
        let contact = contact.as_object_mut()?;
        contact.insert("law".to_owned(), json!({ "kind": "rigid" }));
        for name in ["rest", "rest_velocity", "measured_wrench", "wrench_rate"] {
            contact.remove(name);
        }
        for name in ["friction", "normal_force"] {
            let limit = contact.get_mut(name);
            if let Some(limit) = limit.and_then(Value::as_object_mut)
                && limit.get("treatment").and_then(|t| t.get("kind")) == Some(&json!("decay"))
            {
                limit.remove("treatment");
            }
        }
    }
    let tasks = document.get_mut("tasks")?.as_array_mut()?;
    tasks.retain(|task| task.get("kind") != Some(&json!("wrench_smoothness")));
    for task in tasks {
        let task = task.as_object_mut()?;
        task.remove("approach");
        if task.get("kind") == Some(&json!("momentum_second_rate")) {
            first_rate(task);
        }
    }
    serde_json::to_vec_pretty(&document).ok()
}

/// Turns a second-rate momentum task into the first-rate one.
fn first_rate(task: &mut Map<String, Value>) {
    task.insert("kind".to_owned(), json!("momentum_rate"));
    task.remove("second_rate");
    let rate_gain = task.remove("rate_gain").unwrap_or_default();
    let gain = |part: &str| rate_gain.get(part).and_then(Value::as_f64).unwrap_or(0.0);
    let over = |value: f64, gain: f64| if gain > 0.0 { value / gain } else { 0.0 };
    let (linear, angular) = (gain("linear"), gain("angular"));
    if let Some(position) = task.get("position_gain").and_then(Value::as_f64) {
        task.insert("position_gain".to_owned(), json!(over(position, linear)));
    }
    if let Some(gains) = task.get_mut("momentum_gain").and_then(Value::as_object_mut) {
        for (part, rate_gain) in [("linear", linear), ("angular", angular)] {
            if let Some(value) = gains.get(part).and_then(Value::as_f64) {
                gains.insert(part.to_owned(), json!(over(value, rate_gain)));
            }
        }
    }
    for (name, rate_gain) in [("scale", linear), ("scale_angular", angular)] {
        if rate_gain > 0.0 {
            let scale = task.get(name).and_then(Value::as_f64).unwrap_or(1.0);
            task.insert(name.to_owned(), json!(scale / rate_gain));
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn what_is_missing_reads_as_nothing() {
        let parsed = Parsed::read(br#"{"a":[1,2.5,"x"],"b":{"c":"y"}}"#).unwrap();
        let view = parsed.view();
        assert_eq!(view.at("/a").numbers(), [1.0, 2.5]);
        assert_eq!(view.at("/b/c").text(), Some("y"));
        assert!(view.at("/no/where").is_nothing());
        assert_eq!(view.at("/b").items().count(), 0);
        assert!(Parsed::read(b"{").is_none());
    }

    #[test]
    fn the_rigid_twin_asks_for_the_same_without_compliance() {
        let request = br#"{"contacts":[{"sole":"left","law":{"kind":"bonded","stiffness":1,"damping":1,"per":"area"},
            "rest":{"kind":"measured"},"measured_wrench":{"force":[0,0,1]},
            "friction":{"set":"vertex","coefficient":0.5,"treatment":{"kind":"decay","rate":1}}}],
            "tasks":[{"name":"m","kind":"momentum_second_rate","priority":1,"scale":100,"rate_gain":{"linear":24,"angular":30},
            "momentum_gain":{"linear":192,"angular":200},"position_gain":512},
            {"name":"s","kind":"wrench_smoothness","priority":2},{"name":"w","kind":"wrench","approach":30}]}"#;
        let twin = rigid_twin(request).unwrap();
        let twin: Value = serde_json::from_slice(&twin).unwrap();
        assert_eq!(twin["contacts"][0], json!({"sole":"left","law":{"kind":"rigid"},"friction":{"set":"vertex","coefficient":0.5}}));
        assert_eq!(twin["tasks"].as_array().unwrap().len(), 2);
        assert_eq!(twin["tasks"][0]["kind"], "momentum_rate");
        assert_eq!(twin["tasks"][0]["momentum_gain"], json!({"linear": 8.0, "angular": 200.0 / 30.0}));
        assert_eq!(twin["tasks"][0]["position_gain"], json!(512.0 / 24.0));
        assert_eq!(twin["tasks"][0]["scale"], json!(100.0 / 24.0));
        assert_eq!(twin["tasks"][1], json!({"name":"w","kind":"wrench"}));
        for not_a_request in [&b""[..], b"[]", b"{}", br#"{"contacts":{}}"#, br#"{"contacts":[1],"tasks":[]}"#] {
            assert!(rigid_twin(not_a_request).is_none());
        }
    }
}
