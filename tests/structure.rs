//! The import table of DEVELOPERS.md, enforced: data flows one way, and each outside crate has its rooms.

use std::fs;
use std::path::{Path, PathBuf};

/// Modules in order; each may use only those above it.
const ORDER: [&str; 17] = [
    "spatial", "conic", "model", "dynamics", "contact", "identify", "problem", "solve", "certify", "explain", "reference", "audit", "compare", "cases",
    "wire", "http", "cli",
];

/// Modules that stand above but must not be used all the same: (user, used).
const FORBIDDEN: [(&str, &str); 9] = [
    ("contact", "model"),
    ("contact", "dynamics"),
    ("solve", "model"),
    ("solve", "dynamics"),
    ("solve", "contact"),
    ("solve", "problem"),
    ("solve", "spatial"),
    ("certify", "solve"),
    ("certify", "dynamics"),
];

/// Outside crates and the places (prefixes under src/) that may name them.
const ROOMS: [(&str, &[&str]); 9] = [
    ("serde", &["wire/"]),
    ("serde_json", &["wire/", "cli/"]),
    ("schemars", &["wire/"]),
    ("jsonschema", &["wire/"]),
    ("axum", &["http/", "cli/serve.rs"]),
    ("tokio", &["http/", "cli/serve.rs", "cli/demo"]),
    ("tower_http", &["http/"]),
    ("roxmltree", &["model/"]),
    ("clarabel", &["solve/engine.rs"]),
];

fn sources(dir: &Path, out: &mut Vec<PathBuf>) {
    for entry in fs::read_dir(dir).unwrap() {
        let path = entry.unwrap().path();
        if path.is_dir() {
            sources(&path, out);
        } else if path.extension().is_some_and(|e| e == "rs") {
            out.push(path);
        }
    }
}

/// (path under src, code without comments and test modules).
fn code() -> Vec<(String, String)> {
    let root = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let mut files = Vec::new();
    sources(&root, &mut files);
    assert!(files.len() > 20, "the walk over src found only {} files", files.len());
    files
        .into_iter()
        .map(|path| {
            let text = fs::read_to_string(&path).unwrap();
            let code: String = text
                .lines()
                .take_while(|line| !line.starts_with("#[cfg(test)]"))
                .map(|line| line.split("//").next().unwrap_or(""))
                .collect::<Vec<_>>()
                .join("\n");
            (path.strip_prefix(&root).unwrap().to_string_lossy().into_owned(), code)
        })
        .collect()
}

fn module_of(path: &str) -> &str {
    path.split(['/', '.']).next().unwrap()
}

#[test]
fn data_flows_one_way() {
    let mut faults = Vec::new();
    for (path, code) in code() {
        let user = module_of(&path);
        let Some(place) = ORDER.iter().position(|m| *m == user) else {
            assert!(user == "lib" || user == "main", "src/{path} is in no room of the table");
            continue;
        };
        for (at, used) in ORDER.iter().enumerate() {
            let named = code.contains(&format!("crate::{used}::"))
                || code.contains(&format!("crate::{used};"))
                || code.contains(&format!("crate::{used}}}"))
                || code.contains(&format!("crate::{used},"));
            let forbidden = FORBIDDEN.contains(&(user, used));
            if named && (at > place || forbidden) {
                faults.push(format!("src/{path} uses {used}"));
            }
        }
    }
    assert!(faults.is_empty(), "{faults:#?}");
}

#[test]
fn outside_crates_stay_in_their_rooms() {
    let mut faults = Vec::new();
    for (path, code) in code() {
        for (name, rooms) in ROOMS {
            let named = code.contains(&format!("use {name}::")) || code.contains(&format!("{name}::")) && !code.contains(&format!("crate::{name}::"));
            if named && !rooms.iter().any(|room| path.starts_with(room)) {
                faults.push(format!("src/{path} names {name}"));
            }
        }
    }
    assert!(faults.is_empty(), "{faults:#?}");
}

#[test]
fn files_stay_short_and_safe() {
    let mut faults = Vec::new();
    for (path, code) in code() {
        let root = Path::new(env!("CARGO_MANIFEST_DIR")).join("src").join(&path);
        let lines = fs::read_to_string(root).unwrap().lines().count();
        if lines > 600 {
            faults.push(format!("src/{path} has {lines} lines"));
        }
        if code.contains("unsafe ") {
            faults.push(format!("src/{path} has unsafe code"));
        }
        let physics = [
            "spatial", "conic", "model", "dynamics", "contact", "identify", "problem", "solve", "certify", "explain", "reference", "audit", "compare",
            "cases",
        ];
        if physics.contains(&module_of(&path)) {
            for word in ["println!", "eprintln!", "std::fs", "std::net", "std::time", "SystemTime"] {
                if code.contains(word) {
                    faults.push(format!("src/{path} knows {word}"));
                }
            }
        }
    }
    assert!(faults.is_empty(), "{faults:#?}");
}
