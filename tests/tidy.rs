//! The repository reads itself: the arrows between parts, the heads of files, their sizes, words we avoid.
//! Runs nothing of the program.
#![allow(
    clippy::unwrap_used,
    reason = "a check may panic: that is how it fails"
)]

use std::fs;
use std::path::{Path, PathBuf};

/// Lines of a file without its tests may not exceed this.
const LONGEST_FILE: usize = 500;

#[test]
fn every_file_opens_with_what_it_owns() {
    let bare: Vec<_> = rust_files()
        .into_iter()
        .filter(|(_, text)| !text.starts_with("//! "))
        .map(|(name, _)| name)
        .collect();
    assert!(bare.is_empty(), "no `//!` head in {bare:#?}");
}

#[test]
fn no_file_outgrows_its_reader() {
    let long: Vec<_> = rust_files()
        .into_iter()
        .filter(|(name, _)| !is_test(name))
        .map(|(name, text)| (name, without_tests(&text).lines().count()))
        .filter(|(_, lines)| *lines > LONGEST_FILE)
        .collect();
    assert!(
        long.is_empty(),
        "over {LONGEST_FILE} lines without tests: {long:#?}"
    );
}

/// Who may not name whom. The compiler keeps the packages apart; this keeps the modules apart.
#[test]
fn the_arrows_between_parts_hold() {
    let forbidden: [(&str, &[&str]); 7] = [
        (
            "src/core/",
            &["tokio", "std::fs", "std::net", "std::thread", "SystemTime"],
        ),
        ("drivers/src/", &["darkline_mock", "darkline::"]),
        (
            "mock/src/",
            &[
                "darkline_drivers",
                "darkline_core::fit",
                "darkline_core::wire",
            ],
        ),
        (
            "src/archive",
            &["crate::conductor", "crate::api", "crate::cli"],
        ),
        (
            "src/journal",
            &["crate::conductor", "crate::api", "crate::cli", "hdf5"],
        ),
        (
            "src/conductor",
            &["crate::cli", "crate::archive", "hdf5", "darkline_mock"],
        ),
        ("src/report", &["crate::cli", "crate::conductor"]),
    ];
    let mut broken = Vec::new();
    for (name, text) in rust_files() {
        for (place, words) in forbidden {
            let inside = name.starts_with(place) && !is_test(&name);
            for word in words.iter().filter(|_| inside) {
                if mentions(&text, word) {
                    broken.push(format!("{name} names {word}"));
                }
            }
        }
    }
    assert!(broken.is_empty(), "{broken:#?}");
}

#[test]
fn the_shipped_files_stand_where_the_readme_says() {
    for name in [
        "mock/bench.toml",
        "mock/world.toml",
        "sequences/coil-constant.toml",
        "README.md",
        "DEVELOPERS.md",
        "CHANGELOG.md",
        "LICENSE",
        "docs/archive.md",
    ] {
        assert!(root().join(name).is_file(), "{name} is missing");
    }
}

fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
}

fn rust_files() -> Vec<(String, String)> {
    let mut found = Vec::new();
    for folder in ["src", "drivers", "mock", "tests", "benches"] {
        collect(&root().join(folder), &mut found);
    }
    assert!(found.len() > 20, "found only {} files", found.len());
    found
}

fn collect(folder: &Path, found: &mut Vec<(String, String)>) {
    let Ok(entries) = fs::read_dir(folder) else {
        return;
    };
    for entry in entries.flatten() {
        let path = entry.path();
        if path.is_dir() {
            collect(&path, found);
        } else if path.extension().is_some_and(|e| e == "rs") {
            let name = path.strip_prefix(root()).unwrap().display().to_string();
            found.push((name, fs::read_to_string(&path).unwrap()));
        }
    }
}

fn is_test(name: &str) -> bool {
    [
        "tests/",
        "tests.rs",
        "simulation.rs",
        "benches/",
        "examples/",
    ]
    .iter()
    .any(|place| name.contains(place))
}

/// The part of a file before its unit tests.
fn without_tests(text: &str) -> &str {
    text.split("#[cfg(test)]\nmod ").next().unwrap_or(text)
}

/// True where non-test code, comments left out, has the word.
fn mentions(text: &str, word: &str) -> bool {
    without_tests(text)
        .lines()
        .map(|line| line.split("//").next().unwrap_or(""))
        .any(|line| line.contains(word))
}
