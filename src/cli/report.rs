//! An answer as a table to read.

/// The answer in `document` as text.
pub fn answer(document: &[u8]) -> String {
    String::from_utf8_lossy(document).into_owned()
}
