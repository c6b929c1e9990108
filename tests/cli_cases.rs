//! Cases in files and folders: judged, reported, pinned and renewed by the built command.

use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Command, Output, Stdio};
use std::sync::atomic::{AtomicU32, Ordering};

use serde_json::{Value, json};
use underfoot::wire::schema;

const REQUEST: &str = concat!(env!("CARGO_MANIFEST_DIR"), "/schemas/example-solve.json");
const AUDIT: &str = include_str!("../schemas/example-audit.json");
const PINNED: &str = include_str!("data/cases/standing.json");

/// A folder that goes when the test ends.
struct Folder(PathBuf);

impl Folder {
    fn new() -> Folder {
        static NUMBER: AtomicU32 = AtomicU32::new(0);
        let number = NUMBER.fetch_add(1, Ordering::Relaxed);
        let path = std::env::temp_dir().join(format!("underfoot-cases-{}-{number}", std::process::id()));
        fs::create_dir_all(&path).expect("a folder");
        Folder(path)
    }

    fn at(&self, name: &str) -> String {
        self.0.join(name).to_string_lossy().into_owned()
    }

    fn write(&self, name: &str, text: impl AsRef<[u8]>) -> String {
        let path = self.0.join(name);
        fs::create_dir_all(path.parent().expect("a parent")).expect("a folder");
        fs::write(&path, text).expect("written");
        self.at(name)
    }

    fn root(&self) -> String {
        self.0.to_string_lossy().into_owned()
    }
}

impl Drop for Folder {
    fn drop(&mut self) {
        let _ = fs::remove_dir_all(&self.0);
    }
}

fn underfoot(arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_underfoot")).args(arguments).stdin(Stdio::null()).output().expect("starts")
}

fn code(output: &Output) -> i32 {
    output.status.code().expect("no signal")
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8_lossy(bytes).into_owned()
}

/// A document, changed.
fn changed(document: &str, change: impl FnOnce(&mut Value)) -> String {
    let mut document: Value = serde_json::from_str(document).expect("JSON");
    change(&mut document);
    document.to_string()
}

/// The audit example with the sign of the left knee's torque flipped.
fn flipped() -> String {
    changed(AUDIT, |case| {
        let joints = case["answer"]["joints"].as_array_mut().expect("joints");
        let knee = joints.iter_mut().find(|joint| joint["name"] == "left_knee").expect("a knee");
        knee["torque"] = (-knee["torque"].as_f64().expect("a torque")).into();
        case["name"] = "sign <of> the \"left\" knee & more\nsecond line".into();
    })
}

/// The folder has a good case, one with a flipped sign deeper down, and what is no case.
fn mixed() -> Folder {
    let folder = Folder::new();
    folder.write("b/good.json", AUDIT);
    folder.write("b/deeper/flipped.json", flipped());
    folder.write("a.json", "{\"format\": \"underfoot/1\", ");
    folder.write("notes.txt", "no case");
    folder.write(".hidden/passed-over.json", "no case");
    folder
}

#[test]
fn a_folder_is_judged_in_order_and_a_bad_file_does_not_stop_it() {
    let folder = mixed();
    let output = underfoot(&["audit", &folder.root()]);
    let printed = text(&output.stdout);
    assert_eq!(code(&output), 2, "{printed}");
    // No terminal, no progress.
    assert!(output.stderr.is_empty(), "{}", text(&output.stderr));
    let lines: Vec<&str> = printed.lines().collect();
    assert_eq!(lines.len(), 4, "{printed}");
    assert!(lines[0].starts_with("unusable ") && lines[0].contains("a.json") && lines[0].contains("line 1"), "{printed}");
    assert!(lines[1].starts_with("fail ") && lines[1].contains("deeper/flipped.json"), "{printed}");
    assert!(lines[1].contains("does not; worst acceleration:"), "{printed}");
    assert!(lines[1].contains("cause: consistent with the torque of left_knee with its sign flipped"), "{printed}");
    assert!(lines[2].starts_with("pass ") && lines[2].ends_with("good.json"), "{printed}");
    assert_eq!(lines[3], "3 cases: 1 pass, 1 fail, 0 undecided, 1 unusable");
    // Without the bad file the failure decides, without the failure all is good.
    fs::remove_file(folder.at("a.json")).expect("removed");
    assert_eq!(code(&underfoot(&["audit", &folder.root()])), 1);
    fs::remove_file(folder.at("b/deeper/flipped.json")).expect("removed");
    assert_eq!(code(&underfoot(&["audit", &folder.root()])), 0);
    // A gate without cases would pass whatever happens.
    fs::remove_file(folder.at("b/good.json")).expect("removed");
    let empty = underfoot(&["audit", &folder.root()]);
    assert_eq!(code(&empty), 2);
    assert!(text(&empty.stdout).starts_with("unusable ") && text(&empty.stdout).contains("no *.json"), "{}", text(&empty.stdout));
    // Nor does an empty folder, or one that nests without end, keep another from being judged.
    fs::create_dir_all(folder.0.join("e/m/p/t/y")).expect("a folder");
    fs::create_dir_all(folder.0.join("deep").join(["n"; 20].join("/"))).expect("a folder");
    folder.write("good/case.json", AUDIT);
    let output = underfoot(&["audit", &folder.at("e"), &folder.at("deep"), &folder.at("good")]);
    let printed = text(&output.stdout);
    assert_eq!(code(&output), 2, "{printed}");
    assert!(printed.contains("no *.json") && printed.contains("16 deep") && printed.contains("1 pass, 0 fail, 0 undecided, 2 unusable"), "{printed}");
    // A file that is named is missed, a folder's content is not searched for beyond *.json.
    let good = folder.write("case.txt", AUDIT);
    let missing = underfoot(&["audit", &good, &folder.at("none.json")]);
    assert_eq!(code(&missing), 2);
    assert!(text(&missing.stdout).contains("1 pass, 0 fail, 0 undecided, 1 unusable"), "{}", text(&missing.stdout));
}

#[test]
fn tables_and_documents_of_many_cases() {
    let folder = mixed();
    let tables = text(&underfoot(&["audit", "--table", &folder.root()]).stdout);
    for needed in ["Verdict: fail", "Torques that differ", "pass "] {
        assert!(tables.contains(needed), "{needed} is missing in\n{tables}");
    }
    assert!(!tables.contains("Verdict: pass"), "{tables}");
    let output = underfoot(&["audit", "--json", &folder.root()]);
    assert_eq!(code(&output), 2);
    let lines: Vec<Value> = text(&output.stdout).lines().map(|line| serde_json::from_str(line).expect("JSON")).collect();
    let verdicts: Vec<&str> = lines.iter().filter_map(|line| line["verdict"].as_str()).collect();
    assert_eq!(verdicts, ["unusable", "fail", "pass"]);
    assert_eq!(lines[0]["problem"]["code"], "not-json");
    assert_eq!(lines[3]["summary"], json!({ "cases": 3, "pass": 1, "fail": 1, "undecided": 0, "unusable": 1 }));
    // Each audit is the document that the single file gets.
    let alone = underfoot(&["audit", &folder.at("b/deeper/flipped.json")]);
    assert_eq!(code(&alone), 1);
    let alone: Value = serde_json::from_slice(&alone.stdout).expect("JSON");
    assert_eq!(lines[1]["audit"], alone);
}

/// The report as an XML reader sees it: (counts of the suite, (name, element, its type, message, text) per case).
fn report(path: &Path) -> (Vec<u32>, Vec<[String; 5]>) {
    let text = fs::read_to_string(path).expect("a report");
    let document = roxmltree::Document::parse(&text).expect("XML");
    let root = document.root_element();
    assert_eq!(root.tag_name().name(), "testsuites");
    let suite = root.children().find(|node| node.has_tag_name("testsuite")).expect("a suite");
    let counts = ["tests", "failures", "errors", "skipped"].map(|name| suite.attribute(name).expect("a count").parse().expect("a number"));
    assert!(suite.attribute("time").expect("seconds").parse::<f64>().expect("a number") >= 0.0);
    let cases = suite.children().filter(|node| node.has_tag_name("testcase")).map(|case| {
        let name = case.attribute("name").expect("a name").to_owned();
        assert!(case.attribute("classname").is_some() && case.attribute("file").is_some() && case.attribute("time").is_some());
        let inner = case.children().find(|node| node.is_element());
        let of = |attribute: &str| inner.and_then(|node| node.attribute(attribute)).unwrap_or_default().to_owned();
        let element = inner.map(|node| node.tag_name().name().to_owned()).unwrap_or_default();
        let text = inner.and_then(|node| node.text()).unwrap_or_default().to_owned();
        [name, element, of("type"), of("message"), text]
    });
    (counts.to_vec(), cases.collect())
}

#[test]
fn the_junit_report_is_xml_that_names_the_cause() {
    let folder = mixed();
    let junit = folder.at("report.xml");
    assert_eq!(code(&underfoot(&["audit", &folder.root(), "--junit", &junit])), 2);
    let (counts, cases) = report(Path::new(&junit));
    assert_eq!(counts, [3, 1, 1, 0]);
    let elements: Vec<&str> = cases.iter().map(|case| case[1].as_str()).collect();
    assert_eq!(elements, ["error", "failure", ""]);
    assert_eq!((cases[0][2].as_str(), cases[1][2].as_str()), ("not-json", "claimed_physics"));
    // What marks up in XML comes through as it was written, line break included.
    assert!(cases[1][0].ends_with("flipped.json (sign <of> the \"left\" knee & more\nsecond line)"), "{}", cases[1][0]);
    for place in [3, 4] {
        assert!(cases[1][place].contains("the torque of left_knee with its sign flipped"), "{}", cases[1][place]);
    }
    assert!(cases[1][4].contains("torques differ"), "{}", cases[1][4]);
    // For one file as well, good or not.
    for (file, expected) in [("b/good.json", [1, 0, 0, 0]), ("b/deeper/flipped.json", [1, 1, 0, 0]), ("a.json", [1, 0, 1, 0])] {
        underfoot(&["audit", &folder.at(file), "--junit", &junit]);
        assert_eq!(report(Path::new(&junit)).0, expected, "{file}");
    }
    let nowhere = underfoot(&["audit", &folder.at("b"), "--junit", &folder.at("no/such/folder/report.xml")]);
    assert_eq!(code(&nowhere), 2, "a report that cannot be written is no success");
}

#[test]
fn what_is_recorded_passes_and_follows_the_schema() {
    let folder = Folder::new();
    let case = folder.at("case.json");
    let output = underfoot(&["record", REQUEST, "--out", &case, "--name", "standing"]);
    assert_eq!(code(&output), 0, "{}", text(&output.stderr));
    let audit = underfoot(&["audit", &folder.root()]);
    assert_eq!(code(&audit), 0, "{}", text(&audit.stdout));
    assert!(text(&audit.stdout).contains("case.json (standing)"), "{}", text(&audit.stdout));
    let document: Value = serde_json::from_slice(&fs::read(&case).expect("a case")).expect("JSON");
    let schema: Value = serde_json::from_str(&schema("audit-request").expect("a schema")).expect("JSON");
    let validator = jsonschema::validator_for(&schema).expect("a schema");
    assert!(validator.is_valid(&document));
    assert_eq!(document["recorded"], json!({ "version": env!("CARGO_PKG_VERSION"), "answer": "reference" }));
    // The request stands in it as it was, number for number.
    let request: Value = serde_json::from_slice(&fs::read(REQUEST).expect("a request")).expect("JSON");
    assert_eq!(document["request"], request);
    // An existing case is not written over, and an answer that is not there is not pinned.
    let before = fs::read(&case).expect("a case");
    assert_eq!(code(&underfoot(&["record", REQUEST, "--out", &case])), 2);
    assert_eq!(fs::read(&case).expect("a case"), before);
    let impossible = changed(&fs::read_to_string(REQUEST).expect("a request"), |request| {
        request["contacts"][0]["normal_force"]["least"] = json!(4000.0);
        request["contacts"][1]["normal_force"]["least"] = json!(4000.0);
    });
    let impossible = folder.write("impossible.txt", impossible);
    let lost = folder.at("lost.json");
    let output = underfoot(&["record", &impossible, "--out", &lost]);
    assert_eq!(code(&output), 1, "{}", text(&output.stderr));
    assert!(!Path::new(&lost).exists() && text(&output.stderr).contains("nothing was pinned"), "{}", text(&output.stderr));
    let by_id = folder.write("by-id.txt", changed(&request.to_string(), |request| request["model"] = "some-id".into()));
    assert_eq!(code(&underfoot(&["record", &by_id, "--out", &lost])), 2, "a case holds its model");
}

#[test]
fn a_controllers_answer_is_pinned_as_it_is() {
    let folder = Folder::new();
    let audit: Value = serde_json::from_str(&flipped()).expect("JSON");
    let answer = folder.write("answer.txt", audit["answer"].to_string());
    let case = folder.at("flipped.json");
    let output = underfoot(&["record", REQUEST, "--answer", &answer, "--out", &case, "--relative", "1e-3"]);
    assert_eq!(code(&output), 1, "{}", text(&output.stderr));
    assert!(text(&output.stdout).contains("left_knee with its sign flipped"), "{}", text(&output.stdout));
    let document: Value = serde_json::from_slice(&fs::read(&case).expect("a case")).expect("JSON");
    assert_eq!((&document["answer"], &document["tolerances"]), (&audit["answer"], &json!({ "relative": 1e-3 })));
    assert_eq!(document["recorded"]["answer"], "controller");
    // Renewing is for the reference's answers.
    let before = fs::read(&case).expect("a case");
    let update = underfoot(&["record", "--update", &folder.root()]);
    assert_eq!(code(&update), 0);
    assert!(text(&update.stdout).starts_with("left alone "), "{}", text(&update.stdout));
    assert_eq!(fs::read(&case).expect("a case"), before);
    // The document that answers a solve request will do in place of a controller's.
    let solved = folder.write("solved.txt", underfoot(&["solve", REQUEST]).stdout);
    assert_eq!(code(&underfoot(&["record", REQUEST, "--answer", &solved, "--out", &folder.at("solved.json")])), 0);
}

#[test]
fn another_version_alone_is_no_change() {
    let folder = Folder::new();
    let older = changed(PINNED, |case| case["recorded"]["version"] = "0.0.0-older".into());
    let case = folder.write("older.json", &older);
    let audit = underfoot(&["audit", &folder.root()]);
    assert_eq!(code(&audit), 0, "{}", text(&audit.stdout));
    let update = underfoot(&["record", "--update", &folder.root()]);
    assert_eq!(code(&update), 0, "{}", text(&update.stdout));
    assert!(text(&update.stdout).starts_with("unchanged ") && text(&update.stdout).contains("0 changed, 1 unchanged"), "{}", text(&update.stdout));
    assert_eq!(fs::read_to_string(&case).expect("a case"), older, "the file is left as it is");
}

/// A row of the table of changes: (was, is, change, unit).
fn row(printed: &str, name: &str) -> (f64, f64, f64, String) {
    let line = printed.lines().find(|line| line.split_whitespace().next() == Some(name)).unwrap_or_else(|| panic!("no {name} in\n{printed}"));
    let cells: Vec<&str> = line.split_whitespace().collect();
    let cell = |i: usize| cells[i].parse::<f64>().expect("a number");
    (cell(1), cell(2), cell(3), cells[5..].join(" "))
}

/// The figures shown are the differences between the two files.
#[test]
fn update_says_what_changed_in_physical_units() {
    let folder = Folder::new();
    let case = folder.write("gravity.json", changed(PINNED, |case| case["request"]["gravity"] = json!([0.0, 0.0, -10.0])));
    assert_eq!(code(&underfoot(&["audit", &case])), 1, "the pinned answer is no answer to the changed request");
    let update = underfoot(&["record", "--update", &folder.root()]);
    let printed = text(&update.stdout);
    assert_eq!(code(&update), 0, "{printed}");
    assert!(printed.starts_with("changed ") && printed.contains("gravity.json") && printed.contains("1 changed"), "{printed}");
    let new: Value = serde_json::from_slice(&fs::read(&case).expect("a case")).expect("JSON");
    let old: Value = serde_json::from_str(PINNED).expect("JSON");
    let torque = |case: &Value| {
        let joints = case["answer"]["joints"].as_array().expect("joints").clone();
        joints.iter().find(|joint| joint["name"] == "left_knee").expect("a knee")["torque"].as_f64().expect("a torque")
    };
    let (was, is, change, unit) = row(&printed, "torque:left_knee");
    assert_eq!(unit, "N m");
    for (shown, exact) in [(was, torque(&old)), (is, torque(&new)), (change, torque(&new) - torque(&old))] {
        assert!((shown - exact).abs() <= 0.5001e-4, "{shown} {exact}");
    }
    assert!(change.abs() > 1e-3, "{change}");
    for (name, unit) in [("acceleration:base:vz", "m/s^2"), ("wrench:left:fz", "N"), ("acceleration:left_knee", "rad/s^2")] {
        let (was, is, change, shown) = row(&printed, name);
        assert_eq!(shown, unit, "{name}");
        assert!((is - was - change).abs() < 2e-4, "{name}");
    }
    // What was written passes, and a second time nothing changes.
    assert_eq!(code(&underfoot(&["audit", &case])), 0);
    assert!(text(&underfoot(&["record", "--update", &folder.root()]).stdout).starts_with("unchanged "));
}

#[test]
fn update_keeps_what_it_cannot_renew() {
    let folder = Folder::new();
    let lost = changed(PINNED, |case| {
        for contact in 0..2 {
            case["request"]["contacts"][contact]["normal_force"]["least"] = json!(4000.0);
        }
    });
    let case = folder.write("lost.json", &lost);
    let output = underfoot(&["record", "--update", &folder.root()]);
    assert_eq!(code(&output), 1, "{}", text(&output.stdout));
    assert!(text(&output.stdout).starts_with("not solved "), "{}", text(&output.stdout));
    assert_eq!(fs::read_to_string(&case).expect("a case"), lost);
    folder.write("bad.json", changed(PINNED, |case| case["request"]["tick"]["length"] = (-1.0).into()));
    folder.write("good.json", PINNED);
    let output = underfoot(&["record", "--update", &folder.root()]);
    let printed = text(&output.stdout);
    assert_eq!(code(&output), 2, "{printed}");
    assert!(printed.contains("/request/tick/length"), "{printed}");
    assert!(printed.contains("3 cases: 0 changed, 1 unchanged, 0 left alone, 1 not solved, 1 unusable"), "{printed}");
}

/// No answer obeys a request that asks two soles for ten times the weight each, so that nothing can be said of one; a gate takes
/// that for no success.
#[test]
fn undecided_is_no_success() {
    let folder = Folder::new();
    folder.write("lost.json", changed(AUDIT, |case| {
        for contact in 0..2 {
            case["request"]["contacts"][contact]["normal_force"]["least"] = json!(4000.0);
        }
    }));
    let junit = folder.at("report.xml");
    let output = underfoot(&["audit", &folder.root(), "--junit", &junit]);
    assert_eq!(code(&output), 1, "{}", text(&output.stdout));
    assert!(text(&output.stdout).starts_with("undecided  "), "{}", text(&output.stdout));
    let (counts, cases) = report(Path::new(&junit));
    assert_eq!(counts, [1, 1, 0, 0]);
    assert!(cases[0][4].starts_with("undecided: "), "{}", cases[0][4]);
}

#[test]
fn faults_in_what_a_case_holds_besides_are_named() {
    let folder = Folder::new();
    for (change, pointer) in [
        (json!({ "name": "" }), "/name"),
        (json!({ "name": "x".repeat(201) }), "/name"),
        (json!({ "name": 7 }), "/name"),
        (json!({ "recorded": { "answer": "reference" } }), "/recorded/version"),
        (json!({ "recorded": { "version": "1", "answer": "somebody" } }), "/recorded/answer"),
        (json!({ "recorded": { "version": "1", "answer": "reference", "by": "me" } }), "/recorded/by"),
        (json!({ "expected": "pass" }), "/expected"),
    ] {
        folder.write("case.json", changed(AUDIT, |case| {
            for (name, value) in change.as_object().expect("an object") {
                case[name] = value.clone();
            }
        }));
        let output = underfoot(&["audit", &folder.root()]);
        let printed = text(&output.stdout);
        assert!(code(&output) == 2 && printed.starts_with("unusable ") && printed.contains(pointer), "{change}: {printed}");
    }
    // Neither changes what is found.
    folder.write("case.json", changed(AUDIT, |case| case["name"] = "x".repeat(200).into()));
    assert_eq!(code(&underfoot(&["audit", &folder.root()])), 0);
}

/// A log of a controller as lines of a batch: the exit code is that of the verdicts.
#[test]
fn a_batch_of_audits_ends_with_its_verdicts() {
    let folder = Folder::new();
    let mut template: Value = serde_json::from_str(AUDIT).expect("JSON");
    let answer = template.as_object_mut().expect("an object").remove("answer").expect("an answer");
    let head = json!({ "format": "underfoot/1", "operation": "audit", "template": template, "members": ["verdict"] });
    let good = json!({ "answer": answer });
    let bad = json!({ "answer": serde_json::from_str::<Value>(&flipped()).expect("JSON")["answer"], "causes": false });
    for (lines, expected) in [(vec![&good, &good], 0), (vec![&good, &bad], 1)] {
        let text: String = [&head].into_iter().chain(lines).map(|line| format!("{line}\n")).collect();
        let output = underfoot(&["batch", &folder.write("log.ndjson", text)]);
        assert_eq!(code(&output), expected, "{}", String::from_utf8_lossy(&output.stdout));
    }
}

#[test]
fn arguments_that_do_not_go_together_are_refused() {
    for arguments in [
        &["audit"][..],
        &["record"],
        &["record", REQUEST],
        &["record", "--out", "x.json"],
        &["record", REQUEST, "--out", "x.json", "--update", "x"],
        &["record", "--update", "/no/such/folder"],
        &["record", "--update", "x", "--answer", "y"],
        &["audit", REQUEST, "--json", "--table"],
    ] {
        assert_eq!(code(&underfoot(arguments)), 2, "{arguments:?}");
    }
    assert!(!Path::new("x.json").exists());
}
