//! A run's journal and archive, from synthetic runs: what was recorded comes back, whatever befell the file.
#![expect(clippy::unwrap_used, reason = "a test fails by panicking")]

#[path = "archive/runs.rs"]
mod runs;

use std::fs;
use std::path::Path;
use std::process::Command;

use darkline::archive;
use darkline::folder::RunFolder;
use darkline::journal::disk::LocalDisk;
use darkline::journal::{self, JOURNAL, Journal, JournalError, Record};
use darkline_core::entry::{Entry, EntryKind};
use darkline_core::trace::Direction;

use runs::Shape;

fn read(folder: &Path) -> Vec<Record> {
    journal::records(folder)
        .unwrap()
        .collect::<Result<_, _>>()
        .unwrap()
}

fn note(seq: u64, text: &str) -> Entry {
    Entry {
        seq,
        at: seq,
        utc: 0,
        kind: EntryKind::Note { text: text.into() },
    }
}

#[test]
fn what_was_appended_comes_back() {
    for shape in [Shape::mixed(60), Shape::regular(20, 200)] {
        let folder = tempfile::tempdir().unwrap();
        let run = runs::run(&shape);
        runs::write(folder.path(), &run);
        let read = read(folder.path());
        assert_eq!(read.len(), run.len());
        for (record, (entry, trace)) in read.iter().zip(&run) {
            assert_eq!(&record.entry, entry);
            assert_eq!(&record.trace, trace);
        }
    }
}

#[test]
fn cut_at_every_byte_of_the_last_record_the_others_stay_and_the_cut_is_told() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join(JOURNAL);
    runs::write(folder.path(), &runs::run(&Shape::small(2)));
    let whole = fs::read(&path).unwrap();
    let before = read(folder.path());
    let last = before.last().unwrap().at as usize;
    for length in last..whole.len() {
        fs::write(&path, &whole[..length]).unwrap();
        let mut records = journal::records(folder.path()).unwrap();
        let read: Vec<_> = records.by_ref().collect::<Result<_, _>>().unwrap();
        assert_eq!(read, before[..before.len() - 1], "cut to {length} bytes");
        let dropped = records.tail().map(|tail| tail.dropped);
        let expected = (length > last).then_some((length - last) as u64);
        assert_eq!(dropped, expected, "cut to {length} bytes");

        let (mut journal, recovered) = Journal::reopen(&LocalDisk, folder.path()).unwrap();
        assert_eq!(recovered.tail.map(|tail| tail.dropped), expected);
        assert_eq!(fs::metadata(&path).unwrap().len(), last as u64);
        journal.append(&note(99, "on"), None).unwrap();
        let after = self::read(folder.path());
        assert_eq!(after.len(), before.len());
        assert_eq!(after.last().unwrap().entry, note(99, "on"));
    }
}

#[test]
fn zeros_after_a_power_cut_are_a_torn_tail() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join(JOURNAL);
    runs::write(folder.path(), &runs::run(&Shape::small(2)));
    let before = read(folder.path());
    let mut bytes = fs::read(&path).unwrap();
    bytes.extend_from_slice(&[0; 5000]);
    fs::write(&path, &bytes).unwrap();
    let mut records = journal::records(folder.path()).unwrap();
    assert_eq!(
        records.by_ref().filter_map(Result::ok).count(),
        before.len()
    );
    assert_eq!(records.tail().unwrap().dropped, 5000);
}

#[test]
fn a_flipped_bit_anywhere_is_told_and_costs_one_record() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join(JOURNAL);
    runs::write(folder.path(), &runs::run(&Shape::small(3)));
    let whole = fs::read(&path).unwrap();
    let before = read(folder.path());
    let last = before.last().unwrap().at as usize;
    for at in 0..whole.len() {
        let mut bytes = whole.clone();
        bytes[at] ^= 1 << (at % 8);
        fs::write(&path, &bytes).unwrap();
        let mut records = journal::records(folder.path()).unwrap();
        let (mut read, mut told) = (Vec::new(), 0);
        for record in records.by_ref() {
            match record {
                Ok(record) => read.push(record),
                Err(JournalError::Damaged {
                    at: from, bytes, ..
                }) => {
                    let to = from + bytes;
                    assert!((from..to.max(from + 1)).contains(&(at as u64)) || bytes == 0);
                    told += 1;
                }
                Err(other) => panic!("byte {at}: {other}"),
            }
        }
        let hit = before.iter().rposition(|record| record.at as usize <= at);
        let expected: Vec<_> = before
            .iter()
            .enumerate()
            .filter(|(i, _)| Some(*i) != hit)
            .map(|(_, record)| record.clone())
            .collect();
        assert_eq!(read, expected, "byte {at}");
        assert!(told > 0 || at >= last, "byte {at} was not told");
        assert_eq!(records.tail().is_some(), at >= last, "byte {at}");
    }
}

#[test]
fn missing_and_doubled_records_are_told() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join(JOURNAL);
    runs::write(folder.path(), &runs::run(&Shape::small(3)));
    let whole = fs::read(&path).unwrap();
    let before = read(folder.path());
    let [second, third] = [before[1].at as usize, before[2].at as usize];
    let without = [&whole[..second], &whole[third..]].concat();
    let doubled = [&whole[..third], &whole[second..third], &whole[third..]].concat();
    for (bytes, left) in [(without, before.len() - 1), (doubled, before.len())] {
        fs::write(&path, bytes).unwrap();
        let (good, bad): (Vec<_>, Vec<_>) = journal::records(folder.path())
            .unwrap()
            .partition(Result::is_ok);
        assert_eq!((good.len(), bad.len()), (left, 1));
    }
}

#[test]
fn a_foreign_file_and_a_later_version_are_refused_by_name() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join(JOURNAL);
    fs::write(
        &path,
        b"\x89HDF\r\n\x1a\nand so on, more than a header's length",
    )
    .unwrap();
    let error = journal::records(folder.path()).unwrap_err();
    assert!(matches!(error, JournalError::Foreign { .. }), "{error}");

    let mut later = journal::frame::file_header();
    later[8] = 2;
    let checksum = crc32c::crc32c(&later[..28]);
    later[28..].copy_from_slice(&checksum.to_le_bytes());
    fs::write(&path, later).unwrap();
    let error = journal::records(folder.path()).unwrap_err();
    assert!(error.to_string().contains("layout 2"), "{error}");
    assert!(Journal::reopen(&LocalDisk, folder.path()).is_err());
    assert_eq!(fs::read(&path).unwrap(), later, "left as it was");
}

#[test]
fn killed_before_its_header_was_written_a_journal_begins_anew() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join(JOURNAL);
    for length in 0..journal::frame::FILE_HEADER {
        fs::write(&path, &journal::frame::file_header()[..length]).unwrap();
        assert!(read(folder.path()).is_empty());
        let (mut journal, _) = Journal::reopen(&LocalDisk, folder.path()).unwrap();
        journal.append(&note(0, "begun"), None).unwrap();
        assert_eq!(read(folder.path()).len(), 1);
    }
}

#[test]
fn a_second_process_is_refused_while_a_run_is_written() {
    let runs = tempfile::tempdir().unwrap();
    let run = RunFolder::create(&LocalDisk, runs.path(), 0, "x").unwrap();
    assert!(RunFolder::open(&LocalDisk, run.path()).is_err());
}

#[test]
fn an_entry_that_could_not_be_read_again_is_refused() {
    let folder = tempfile::tempdir().unwrap();
    let mut journal = Journal::create(&LocalDisk, folder.path()).unwrap();
    let mut run = runs::run(&Shape::small(1));
    let point = run
        .iter_mut()
        .find_map(|(entry, _)| match &mut entry.kind {
            EntryKind::Point(_) => Some(entry),
            _ => None,
        })
        .unwrap();
    if let EntryKind::Point(record) = &mut point.kind {
        record.sweep_centre = f64::NAN;
    }
    let error = journal.append(point, None).unwrap_err();
    assert!(error.to_string().contains("not finite"), "{error}");
    journal.append(&note(1, "and on"), None).unwrap();
    assert_eq!(read(folder.path()).len(), 1);
}

#[test]
fn the_same_journal_gives_the_same_bytes_and_leaves_nothing_else() {
    let folder = tempfile::tempdir().unwrap();
    runs::write(folder.path(), &runs::run(&Shape::mixed(60)));
    fs::write(
        folder.path().join("run.h5.tmp"),
        b"left by a builder that was killed",
    )
    .unwrap();
    let first = fs::read(archive::build(folder.path()).unwrap()).unwrap();
    let second = fs::read(archive::build(folder.path()).unwrap()).unwrap();
    assert!(first == second, "two builds differ");
    let mut names: Vec<_> = fs::read_dir(folder.path())
        .unwrap()
        .map(|entry| entry.unwrap().file_name())
        .collect();
    names.sort();
    assert_eq!(names, [JOURNAL, archive::ARCHIVE]);
}

#[test]
fn points_are_read_with_their_samples() {
    let folder = tempfile::tempdir().unwrap();
    let run = runs::run(&Shape::mixed(30));
    runs::write(folder.path(), &run);
    let points: Vec<_> = archive::read_points(folder.path())
        .unwrap()
        .collect::<Result<_, _>>()
        .unwrap();
    let expected: Vec<_> = run
        .into_iter()
        .filter_map(|(entry, trace)| match entry.kind {
            EntryKind::Point(point) => Some((*point, trace)),
            _ => None,
        })
        .collect();
    assert_eq!(points, expected);
}

#[test]
fn a_journal_without_an_entry_gives_no_archive() {
    let folder = tempfile::tempdir().unwrap();
    drop(Journal::create(&LocalDisk, folder.path()).unwrap());
    let error = archive::build(folder.path()).unwrap_err();
    assert!(error.to_string().contains("no entry"), "{error}");
    assert!(!folder.path().join(archive::ARCHIVE).exists());
}

/// Every archive is opened by h5py, xarray and netCDF4 and compared with the journal, read independently.
#[test]
fn other_programs_read_what_was_recorded() {
    let Some(python) = std::env::var_os("DARKLINE_PYTHON") else {
        eprintln!("skipped: set DARKLINE_PYTHON to a python with tests/requirements.txt installed");
        return;
    };
    let runs = tempfile::tempdir().unwrap();
    let deflated = archive::Options { deflate: Some(1) };
    let plain = archive::Options::default();
    let no_points = runs::run(&Shape::small(2)).into_iter().take(2).collect();
    let mut one_way = runs::run(&Shape::regular(3, 5));
    for trace in one_way.iter_mut().filter_map(|line| line.1.as_mut()) {
        trace.retain(|acquisition| acquisition.direction == Direction::Down);
    }
    for (name, run, options) in [
        ("mixed", runs::run(&Shape::mixed(300)), plain),
        ("regular", runs::run(&Shape::regular(41, 2000)), plain),
        ("long", runs::run(&Shape::regular(3, 100_000)), deflated),
        ("no-points", no_points, plain),
        ("one-way", one_way, plain),
        ("torn", runs::run(&Shape::regular(5, 50)), deflated),
    ] {
        let folder = runs.path().join(name);
        fs::create_dir(&folder).unwrap();
        runs::write(&folder, &run);
        if name == "torn" {
            let path = folder.join(JOURNAL);
            let length = fs::metadata(&path).unwrap().len() - 3;
            let file = fs::File::options().write(true).open(&path).unwrap();
            file.set_len(length).unwrap();
        }
        archive::build_with(&folder, options).unwrap();
        let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/readers.py");
        let output = Command::new(&python)
            .args(["-W", "error"])
            .arg(script)
            .arg(&folder)
            .output()
            .unwrap();
        let said = String::from_utf8_lossy(&output.stderr);
        assert!(output.status.success(), "{name}: {said}");
        assert!(said.is_empty(), "{name}: {said}");
    }
}
