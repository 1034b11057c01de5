//! Shows what is wrong: with a file, in rustc's manner (file, line, caret, code, help) or as JSON; with
//! the bench, in one line and its remedy. Finds nothing wrong by itself.

use std::io::{IsTerminal, Write};
use std::path::{Path, PathBuf};

use annotate_snippets::{AnnotationKind, Group, Level, Renderer, Snippet};
use darkline_core::diagnostic::{Diagnostic, Fault, FileRole, Severity};
use serde_json::json;

/// The two files of a command with their texts, so that spans can be shown.
#[derive(Debug, Clone)]
pub struct Files {
    /// Path and text of the bench file.
    pub bench: (PathBuf, String),
    /// Path and text of the sequence file; `None` for commands that read only a bench.
    pub sequence: Option<(PathBuf, String)>,
}

impl Files {
    /// Reads the files. Bytes that are no text are kept readable as far as they go, and reported.
    ///
    /// # Errors
    /// One line for the user where a file cannot be read or is not text.
    pub fn read(bench: &Path, sequence: Option<&Path>) -> Result<Self, String> {
        Ok(Self {
            bench: (bench.to_owned(), read(bench, "bench")?),
            sequence: match sequence {
                Some(path) => Some((path.to_owned(), read(path, "sequence")?)),
                None => None,
            },
        })
    }

    fn of(&self, role: FileRole) -> (&Path, &str) {
        match (role, &self.sequence) {
            (FileRole::Sequence, Some((path, text))) => (path, text),
            _ => (&self.bench.0, &self.bench.1),
        }
    }
}

/// Longest file that is read; a bench or sequence file is a few kilobytes.
const LONGEST: u64 = 4 << 20;

fn read(path: &Path, what: &str) -> Result<String, String> {
    let shown = path.display();
    let size = std::fs::metadata(path)
        .map_err(|error| format!("cannot read the {what} file {shown}: {error}"))?;
    if size.is_dir() {
        return Err(format!("the {what} file {shown} is a folder"));
    }
    if size.len() > LONGEST {
        return Err(format!(
            "the {what} file {shown} has {} bytes, over the {LONGEST} that are read; is it the right file?",
            size.len()
        ));
    }
    let bytes = std::fs::read(path)
        .map_err(|error| format!("cannot read the {what} file {shown}: {error}"))?;
    String::from_utf8(bytes).map_err(|error| {
        let at = error.utf8_error().valid_up_to();
        let line = 1 + error.as_bytes()[..at].iter().filter(|b| **b == b'\n').count();
        format!(
            "the {what} file {shown} is not UTF-8 text: byte {at} on line {line} is no part of a character; \
             is it the right file?"
        )
    })
}

/// Prints the findings on standard error, in the manner of rustc.
pub fn show(files: &Files, findings: &[Diagnostic]) {
    let renderer = if colour() {
        Renderer::styled()
    } else {
        Renderer::plain()
    };
    let mut error = std::io::stderr().lock();
    for finding in findings {
        let _ = writeln!(error, "{}\n", draw(&renderer, files, finding));
    }
    let errors = count(findings, Severity::Error);
    let warnings = count(findings, Severity::Warning);
    if errors + warnings > 0 {
        let _ = writeln!(error, "{}", tally(errors, warnings));
    }
}

/// The same findings as JSON values, with path, line and column besides the span.
pub fn as_json(files: &Files, findings: &[Diagnostic]) -> serde_json::Value {
    let one = |finding: &Diagnostic| {
        let (path, text) = files.of(finding.file);
        json!({
            "code": finding.code,
            "severity": finding.severity,
            "message": finding.message,
            "help": finding.help,
            "label": finding.label,
            "file": path.display().to_string(),
            "which": finding.file,
            "line": finding.line(text),
            "column": finding.span.as_ref().map(|span| column(text, span.start)),
            "span": finding.span.as_ref().map(|span| [span.start, span.end]),
        })
    };
    findings.iter().map(one).collect()
}

/// Prints a fault of the bench on standard error.
pub fn show_fault(fault: &Fault) {
    let mut error = std::io::stderr().lock();
    let (bold, end) = if colour() {
        ("\u{1b}[1;31m", "\u{1b}[0m")
    } else {
        ("", "")
    };
    let _ = writeln!(error, "{bold}fault[{}]{end}: {}", fault.code, fault.message);
    if let Some(help) = &fault.help {
        let _ = writeln!(error, "  = help: {help}");
    }
}

/// Prints one line about the command line or a file as a whole.
pub fn show_error(message: &str) {
    let _ = writeln!(std::io::stderr(), "error: {message}");
}

/// Prints one line that is no error.
pub fn note(message: &str) {
    let _ = writeln!(std::io::stderr(), "{message}");
}

/// Whether standard error shows colour: a terminal, and NO_COLOR unset or empty.
pub fn colour() -> bool {
    std::io::stderr().is_terminal() && std::env::var_os("NO_COLOR").is_none_or(|v| v.is_empty())
}

fn draw(renderer: &Renderer, files: &Files, finding: &Diagnostic) -> String {
    let (path, text) = files.of(finding.file);
    let shown = path.display().to_string();
    let level = match finding.severity {
        Severity::Error => Level::ERROR,
        Severity::Warning => Level::WARNING,
    };
    let title = level
        .primary_title(finding.message.as_str())
        .id(finding.code.as_ref());
    let mut group = match whole_span(text, finding) {
        Some(span) => {
            let mark = AnnotationKind::Primary.span(span);
            let mark = match finding.label.as_str() {
                "" => mark,
                label => mark.label(label),
            };
            title.element(Snippet::source(text).path(shown.as_str()).annotation(mark))
        }
        None => Group::with_title(title).element(annotate_snippets::Origin::path(shown.as_str())),
    };
    if let Some(help) = &finding.help {
        group = group.element(Level::HELP.message(help.as_str()));
    }
    renderer.render(&[group])
}

/// The span, kept inside the text and on character boundaries.
fn whole_span(text: &str, finding: &Diagnostic) -> Option<std::ops::Range<usize>> {
    let span = finding.span.as_ref()?;
    let start = text.floor_char_boundary(span.start.min(text.len()));
    let end = text.ceil_char_boundary(span.end.clamp(start, text.len()));
    Some(start..end)
}

fn column(text: &str, at: usize) -> usize {
    let at = text.floor_char_boundary(at.min(text.len()));
    let line = text[..at].rfind('\n').map_or(0, |end| end + 1);
    1 + text[line..at].chars().count()
}

fn count(findings: &[Diagnostic], severity: Severity) -> usize {
    findings.iter().filter(|f| f.severity == severity).count()
}

fn tally(errors: usize, warnings: usize) -> String {
    let word = |count: usize, one: &str| match count {
        1 => format!("1 {one}"),
        _ => format!("{count} {one}s"),
    };
    match (errors, warnings) {
        (0, _) => format!("{}; a scan would start", word(warnings, "warning")),
        (_, 0) => format!("{}; nothing was started", word(errors, "error")),
        _ => format!(
            "{} and {}; nothing was started",
            word(errors, "error"),
            word(warnings, "warning")
        ),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn files(text: &str) -> Files {
        Files {
            bench: ("bench.toml".into(), text.to_owned()),
            sequence: None,
        }
    }

    #[test]
    fn a_finding_shows_file_line_caret_code_and_help() {
        let files = files("title = \"x\"\nslew = \"5 mA\"\n");
        let finding = Diagnostic::error("D0102", FileRole::Bench, "wrong unit")
            .at(19..25)
            .label("not a rate")
            .help("write `mA/s`");
        let drawn = draw(&Renderer::plain(), &files, &finding);
        for part in [
            "error[D0102]: wrong unit",
            "bench.toml:2:8",
            "^^^^^^ not a rate",
            "write `mA/s`",
        ] {
            assert!(drawn.contains(part), "{part} is missing in\n{drawn}");
        }
        assert_eq!(as_json(&files, &[finding])[0]["line"], 2);
    }

    #[test]
    fn a_span_outside_the_text_or_inside_a_character_does_not_panic() {
        let files = files("µ");
        for span in [0..1, 1..2, 5..9, 2..99] {
            let finding = Diagnostic::error("D0001", FileRole::Bench, "odd").at(span);
            draw(&Renderer::plain(), &files, &finding);
            as_json(&files, &[finding]);
        }
    }
}
