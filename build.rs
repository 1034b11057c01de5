//! Tells the program which revision of its source it was built from, where that is known.

use std::path::Path;
use std::process::Command;

fn main() {
    println!("cargo::rerun-if-changed=build.rs");
    if Path::new(".git/logs/HEAD").exists() {
        println!("cargo::rerun-if-changed=.git/logs/HEAD");
    }
    let revision = Command::new("git")
        .args(["rev-parse", "--short=12", "HEAD"])
        .output()
        .ok()
        .filter(|output| output.status.success())
        .and_then(|output| String::from_utf8(output.stdout).ok());
    if let Some(revision) = revision {
        println!("cargo::rustc-env=DARKLINE_COMMIT={}", revision.trim());
    }
}
