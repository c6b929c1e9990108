//! Finding case files: what was named, and every `*.json` within folders that were.

use std::{fs, io};
use std::path::{Path, PathBuf};

/// The deepest nesting of folders that is gone into.
const MAX_DEPTH: usize = 16;
/// The most case files of one run.
const MAX_FILES: usize = 10_000;

/// A place where cases were looked for in vain.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Lost {
    /// The folder.
    pub folder: PathBuf,
    /// Why.
    pub why: String,
}

/// What was found, in order.
pub type Found = Result<PathBuf, Lost>;

/// The case files under `paths`, in the order of `paths`, those of a folder sorted by name. A file that is named is taken whatever it is
/// called and whether or not it exists; within folders, hidden entries and links to folders are passed over. A folder that cannot be
/// read, nests too deep or holds no case where it was named is in the list as well: it must not pass for an empty one.
///
/// # Errors
/// A sentence for the user where there are too many files.
pub fn find(paths: &[PathBuf]) -> Result<Vec<Found>, String> {
    let mut found = Vec::new();
    for path in paths {
        if path.is_dir() {
            let before = found.len();
            walk(path, 0, &mut found)?;
            if found.len() == before {
                found.push(lost(path, "no *.json in this folder"));
            }
        } else {
            found.push(Ok(path.clone()));
        }
        enough(&found)?;
    }
    Ok(found)
}

fn enough(found: &[Found]) -> Result<(), String> {
    if found.len() > MAX_FILES { Err(format!("more than {MAX_FILES} case files")) } else { Ok(()) }
}

fn lost(folder: &Path, why: impl ToString) -> Found {
    Err(Lost { folder: folder.to_owned(), why: why.to_string() })
}

fn walk(folder: &Path, depth: usize, found: &mut Vec<Found>) -> Result<(), String> {
    if depth > MAX_DEPTH {
        found.push(lost(folder, format!("folders nest more than {MAX_DEPTH} deep")));
        return enough(found);
    }
    let mut entries = match entries(folder) {
        Ok(entries) => entries,
        Err(error) => {
            found.push(lost(folder, error));
            return enough(found);
        }
    };
    entries.sort();
    for (path, is_folder) in entries {
        if is_folder {
            walk(&path, depth + 1, found)?;
        } else {
            found.push(Ok(path));
        }
        enough(found)?;
    }
    Ok(())
}

/// Folders and case files in a folder, with true for folders.
fn entries(folder: &Path) -> io::Result<Vec<(PathBuf, bool)>> {
    let mut out = Vec::new();
    for entry in fs::read_dir(folder)? {
        let entry = entry?;
        let is_folder = entry.file_type()?.is_dir();
        if entry.file_name().to_string_lossy().starts_with('.') {
            continue;
        }
        let path = entry.path();
        let is_case = path.extension().is_some_and(|extension| extension == "json") && !path.is_dir();
        if is_folder || is_case {
            out.push((path, is_folder));
        }
    }
    Ok(out)
}
