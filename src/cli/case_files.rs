//! Finding case files: what was named, and every `*.json` within folders that were.

use std::fs;
use std::path::{Path, PathBuf};

/// The deepest nesting of folders that is gone into.
const MAX_DEPTH: usize = 16;
/// The most case files of one run.
const MAX_FILES: usize = 10_000;

/// The case files under `paths`, in the order of `paths`, those of a folder sorted by name. A file that is named is taken whatever it is
/// called and whether or not it exists; within folders, hidden entries and links to folders are passed over.
///
/// # Errors
/// A sentence for the user: a folder that cannot be read or holds no case, too many files, too deep.
pub fn find(paths: &[PathBuf]) -> Result<Vec<PathBuf>, String> {
    let mut files = Vec::new();
    for path in paths {
        if path.is_dir() {
            let before = files.len();
            walk(path, 0, &mut files)?;
            if files.len() == before {
                return Err(format!("{}: no *.json in this folder", path.display()));
            }
        } else {
            files.push(path.clone());
        }
        enough(&files)?;
    }
    Ok(files)
}

fn enough(files: &[PathBuf]) -> Result<(), String> {
    if files.len() > MAX_FILES { Err(format!("more than {MAX_FILES} case files")) } else { Ok(()) }
}

fn walk(folder: &Path, depth: usize, files: &mut Vec<PathBuf>) -> Result<(), String> {
    if depth > MAX_DEPTH {
        return Err(format!("{}: folders nest more than {MAX_DEPTH} deep", folder.display()));
    }
    let said = |error: std::io::Error| format!("{}: {error}", folder.display());
    let mut entries = Vec::new();
    for entry in fs::read_dir(folder).map_err(said)? {
        let entry = entry.map_err(said)?;
        let kind = entry.file_type().map_err(said)?;
        if entry.file_name().to_string_lossy().starts_with('.') {
            continue;
        }
        let path = entry.path();
        let is_case = path.extension().is_some_and(|extension| extension == "json") && path.is_file();
        if kind.is_dir() || is_case {
            entries.push((path, kind.is_dir()));
        }
    }
    entries.sort();
    for (path, is_folder) in entries {
        if is_folder {
            walk(&path, depth + 1, files)?;
        } else {
            files.push(path);
        }
        enough(files)?;
    }
    Ok(())
}
