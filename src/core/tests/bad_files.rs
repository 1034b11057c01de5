//! The folder of bad files: each says at its head what `check` must find in it, no more and no less.
//!
//! `#! bench` or `#! sequence` names the file's role; it is checked beside the shipped file of the other
//! role. `#! expect D0501 line 15 "words"` is one finding: its code, the line it points to, words of its
//! message; `elsewhere` instead of a line where the finding lies in the other file.
//!
//! The good files are then broken in every way that costs little, and nothing may panic.

#![expect(
    clippy::expect_used,
    clippy::panic,
    reason = "a test says what is wrong by panicking"
)]

use std::path::{Path, PathBuf};

use darkline_core::diagnostic::{Diagnostic, FileRole};
use darkline_core::itinerary::check_bytes;
use proptest::prelude::*;

fn root() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("../..")
}

#[expect(clippy::disallowed_methods, reason = "the test reads files")]
fn read(path: &Path) -> Vec<u8> {
    std::fs::read(path).unwrap_or_else(|e| panic!("{}: {e}", path.display()))
}

fn good() -> (Vec<u8>, Vec<u8>) {
    let bench = read(&root().join("mock/bench.toml"));
    (bench, read(&root().join("sequences/coil-constant.toml")))
}

fn findings(bench: &[u8], sequence: &[u8]) -> Vec<Diagnostic> {
    match check_bytes(bench, sequence) {
        Ok((_, _, itinerary)) => itinerary.warnings().to_vec(),
        Err(findings) => findings,
    }
}

#[derive(Debug)]
struct Expected {
    code: String,
    elsewhere: bool,
    line: Option<usize>,
    words: String,
}

fn expected(line: &str) -> Expected {
    let (head, words) = line.split_once('"').expect("words in quotes");
    let parts: Vec<&str> = head.split_whitespace().collect();
    Expected {
        code: parts[0].to_owned(),
        elsewhere: parts.contains(&"elsewhere"),
        line: parts
            .iter()
            .position(|p| *p == "line")
            .map(|i| parts[i + 1].parse().expect("a line number")),
        words: words.trim_end().trim_end_matches('"').to_owned(),
    }
}

fn line_of(bytes: &[u8], finding: &Diagnostic) -> Option<usize> {
    let start = finding.span.as_ref()?.start;
    Some(1 + bytes.get(..start)?.iter().filter(|b| **b == b'\n').count())
}

/// What is wrong with the diagnosis of one file, in words; empty where it is as expected.
fn judge(path: &Path) -> String {
    let bytes = read(path);
    let head = String::from_utf8_lossy(&bytes).into_owned();
    let heads: Vec<&str> = head.lines().map_while(|l| l.strip_prefix("#! ")).collect();
    let role = match heads[0] {
        "bench" => FileRole::Bench,
        "sequence" => FileRole::Sequence,
        other => panic!("{}: role {other}", path.display()),
    };
    let wanted: Vec<Expected> = heads[1..]
        .iter()
        .map(|l| expected(l.strip_prefix("expect ").expect("expect")))
        .collect();
    assert!(!wanted.is_empty(), "{} expects nothing", path.display());
    let (bench, sequence) = good();
    let mut left = match role {
        FileRole::Bench => findings(&bytes, &sequence),
        FileRole::Sequence => findings(&bench, &bytes),
    };
    let mut wrong = String::new();
    for want in wanted {
        let found = left.iter().position(|d| {
            d.code == want.code
                && d.message.contains(&want.words)
                && (d.file != role) == want.elsewhere
                && (want.line.is_none() || line_of(&bytes, d) == want.line)
        });
        match found {
            Some(i) => drop(left.remove(i)),
            None => wrong += &format!("  missing {want:?}\n"),
        }
    }
    for d in left {
        wrong += &format!(
            "  too much: {d} ({:?} line {:?})\n",
            d.file,
            line_of(&bytes, &d)
        );
    }
    wrong
}

#[test]
fn every_bad_file_is_diagnosed_as_it_says() {
    let folder = root().join("tests/bad_files");
    let mut files: Vec<PathBuf> = std::fs::read_dir(folder)
        .unwrap()
        .map(|entry| entry.unwrap().path())
        .collect();
    files.sort();
    assert!(files.len() >= 30, "{} files", files.len());
    let mut wrong = String::new();
    for path in &files {
        let found = judge(path);
        if !found.is_empty() {
            wrong += &format!("{}\n{found}", path.display());
        }
    }
    assert!(wrong.is_empty(), "\n{wrong}");
}

#[test]
fn nothing_at_all_is_an_empty_file() {
    let codes: Vec<String> = findings(b"", b"")
        .iter()
        .map(|d| d.code.to_string())
        .collect();
    assert_eq!(codes, ["D0102", "D0102"]);
}

#[test]
fn faults_of_both_files_are_found_at_once() {
    let bench = read(&root().join("tests/bad_files/bench-bad-link.toml"));
    let sequence = read(&root().join("tests/bad_files/wrong-unit.toml"));
    let found = findings(&bench, &sequence);
    let codes: Vec<&str> = found.iter().map(|d| d.code.as_ref()).collect();
    assert_eq!(codes, ["D0304", "D0201"]);
}

/// Checks both ways round and looks at every span.
fn survives(bench: &[u8], sequence: &[u8]) {
    for d in findings(bench, sequence) {
        let bytes = match d.file {
            FileRole::Bench => bench,
            FileRole::Sequence => sequence,
        };
        if let Some(span) = &d.span {
            assert!(
                span.start <= span.end && span.end <= bytes.len(),
                "{d} {span:?}"
            );
        }
    }
}

#[test]
fn a_file_cut_off_anywhere_does_not_panic() {
    let (bench, sequence) = good();
    for end in 0..sequence.len() {
        survives(&bench, &sequence[..end]);
    }
    for end in (0..bench.len()).step_by(3) {
        survives(&bench[..end], &sequence);
    }
}

#[test]
fn a_file_without_any_one_line_does_not_panic() {
    let (bench, sequence) = good();
    let without = |bytes: &[u8], gone: usize| {
        let lines = bytes.split_inclusive(|b| *b == b'\n').enumerate();
        lines
            .filter(|(i, _)| *i != gone)
            .flat_map(|(_, l)| l.to_vec())
            .collect::<Vec<u8>>()
    };
    for gone in 0..sequence.split(|b| *b == b'\n').count() {
        survives(&bench, &without(&sequence, gone));
    }
    for gone in 0..bench.split(|b| *b == b'\n').count() {
        survives(&without(&bench, gone), &sequence);
    }
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(512))]

    #[test]
    fn flipped_bytes_do_not_panic(
        flips in prop::collection::vec((any::<prop::sample::Index>(), any::<u8>()), 1..8),
        of_bench in any::<bool>(),
    ) {
        let (mut bench, mut sequence) = good();
        let bytes = if of_bench { &mut bench } else { &mut sequence };
        for (at, value) in flips {
            let at = at.index(bytes.len());
            bytes[at] = value;
        }
        survives(&bench, &sequence);
    }

    #[test]
    fn swapped_words_do_not_panic(
        at in any::<prop::sample::Index>(),
        word in prop::sample::select(vec![
            "1e308 A", "-1e308 A", "\"\"", "[]", "{}", "[[]]", "0", "-1", "18446744073709551616", "nan",
            "inf", "true", "1979-05-27", "\"\u{b5}A\"", "\"1e-320 mA\"", "\"9e15 ns\"", "\"..\"",
            "\"5 mA .. 5 mA\"", "\"a.b\"", "0xffffffffffffffffffff", "['x', 1]", "\"-274 degC\"",
        ]),
        of_bench in any::<bool>(),
    ) {
        let (mut bench, mut sequence) = good();
        let bytes = if of_bench { &mut bench } else { &mut sequence };
        let text = String::from_utf8(bytes.clone()).unwrap();
        let places: Vec<usize> = text.match_indices("= ").map(|(i, _)| i + 2).collect();
        let start = places[at.index(places.len())];
        let end = text[start..].find('\n').map_or(text.len(), |i| start + i);
        *bytes = format!("{}{word}{}", &text[..start], &text[end..]).into_bytes();
        survives(&bench, &sequence);
    }
}
