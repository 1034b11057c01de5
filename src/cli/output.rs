//! Standard output, for results only. A broken pipe is not worth a scan: what cannot be written is dropped.

use std::io::Write;

/// Prints one JSON object on one line.
pub fn json(value: &serde_json::Value) {
    text(&format!("{value}\n"));
}

/// Prints text as it is.
pub fn text(text: &str) {
    let mut output = std::io::stdout().lock();
    let _ = output.write_all(text.as_bytes());
    let _ = output.flush();
}
