//! Standard output, for results only. A broken pipe is not worth a scan: what cannot be written is dropped.

use std::io::{IsTerminal, Write};

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

/// Whether standard output shows colour, and how wide it is, in columns.
pub fn terminal() -> (bool, usize) {
    let output = std::io::stdout();
    let colour =
        output.is_terminal() && std::env::var_os("NO_COLOR").is_none_or(|value| value.is_empty());
    let width = rustix::termios::tcgetwinsize(&output)
        .map(|size| usize::from(size.ws_col))
        .ok()
        .filter(|columns| *columns >= 40)
        .unwrap_or(80);
    (colour, width)
}
