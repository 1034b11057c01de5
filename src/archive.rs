//! The archive of a run: `run.h5`, a netCDF-4 file built whole from the journal, so that anyone can open it.
//!
//! Owns its layout and its building, by [`build`] in a process of its own ([`spawn_build`]) because the HDF5
//! library has one global lock and a state that an error may poison. Never writes to a finished archive, never
//! writes to a journal, never computes an answer. `docs/archive.md` lays the file out.

mod codes;
mod netcdf;
mod points;
mod survey;
mod texts;
mod traces;
mod words;

use std::collections::BTreeSet;
use std::fs::File;
use std::io;
use std::path::{Path, PathBuf};

use darkline_core::entry::{EntryKind, PointRecord};
use darkline_core::trace::Trace;
use rustix::fs::{FlockOperation, flock};
use thiserror::Error;

use crate::journal::{self, JOURNAL, JournalError, Records};
use netcdf::NetcdfFile;
use points::Points;
use survey::Survey;
use texts::Entries;
use traces::Traces;

/// Name of the archive in its run folder.
pub const ARCHIVE: &str = "run.h5";
/// Version of the archive's layout.
const LAYOUT: i32 = 1;
/// Name of the archive while it is being built.
const UNFINISHED: &str = "run.h5.tmp";

/// Why an archive cannot be built.
#[derive(Debug, Error)]
pub enum ArchiveError {
    /// The journal cannot be read.
    #[error(transparent)]
    Journal(#[from] JournalError),
    /// Nothing was recorded.
    #[error("the journal in `{}` has no entry; there is nothing to build an archive from", folder.display())]
    Empty {
        /// The run folder.
        folder: PathBuf,
    },
    /// The HDF5 library refused.
    #[error("cannot write `{}`: {source}", path.display())]
    Hdf5 {
        /// The file.
        path: PathBuf,
        /// What the library says.
        source: hdf5_metno::Error,
    },
    /// The system refused.
    #[error("cannot {doing} `{}`: {source}", path.display())]
    Io {
        /// What was being done.
        doing: &'static str,
        /// With what.
        path: PathBuf,
        /// What the system says.
        source: io::Error,
    },
    /// The building process failed.
    #[error("building the archive of `{}` failed: {said}", folder.display())]
    Child {
        /// The run folder.
        folder: PathBuf,
        /// Its last words and exit status.
        said: String,
    },
}

/// How an archive is built.
#[derive(Debug, Clone, Copy, Default)]
pub struct Options {
    /// Compress large variables, 1 (fast) to 9; costs 2 to 5 times the time. `None` leaves them plain.
    pub deflate: Option<u8>,
}

/// Build `run.h5` of run folder `folder` from its journal, in this process, and return its path.
///
/// The file appears complete and on the medium, or not at all; one that is there is replaced. The run may be
/// going on. The same journal gives the same bytes. A torn tail or damage of the journal is named in the
/// attribute `journal_damage`.
pub fn build(folder: &Path) -> Result<PathBuf, ArchiveError> {
    build_with(folder, Options::default())
}

/// As [`build`], with options.
pub fn build_with(folder: &Path, options: Options) -> Result<PathBuf, ArchiveError> {
    let unfinished = folder.join(UNFINISHED);
    let finished = folder.join(ARCHIVE);
    let failed = |doing, path: &Path| {
        let path = path.to_owned();
        move |source: io::Error| ArchiveError::Io {
            doing,
            path,
            source,
        }
    };
    // Two builders would write to one file. This lock is not the writer's, which is on the folder.
    let journal = folder.join(JOURNAL);
    let lock = File::open(&journal).map_err(failed("open", &journal))?;
    flock(&lock, FlockOperation::LockExclusive)
        .map_err(|error| failed("lock", &journal)(error.into()))?;

    let survey = Survey::of(folder)?;
    if survey.entries == 0 {
        return Err(ArchiveError::Empty {
            folder: folder.to_owned(),
        });
    }
    write(folder, &unfinished, &survey, options)?;
    File::open(&unfinished)
        .and_then(|file| file.sync_all())
        .map_err(failed("sync", &unfinished))?;
    std::fs::rename(&unfinished, &finished).map_err(failed("rename", &unfinished))?;
    File::open(folder)
        .and_then(|folder| folder.sync_all())
        .map_err(failed("sync", folder))?;
    Ok(finished)
}

/// As [`build`], by a child process `darkline rebuild FOLDER` of this very program.
pub async fn spawn_build(folder: &Path) -> Result<PathBuf, ArchiveError> {
    // Not by a path that an upgrade may have changed meanwhile.
    let output = tokio::process::Command::new("/proc/self/exe")
        .arg("rebuild")
        .arg(folder)
        // A second Ctrl-C, typed while the archive is built, must not cost the archive.
        .process_group(0)
        .kill_on_drop(true)
        .output()
        .await
        .map_err(|source| ArchiveError::Io {
            doing: "start a process to build the archive of",
            path: folder.to_owned(),
            source,
        })?;
    if output.status.success() {
        return Ok(folder.join(ARCHIVE));
    }
    let words = String::from_utf8_lossy(&output.stderr);
    Err(ArchiveError::Child {
        folder: folder.to_owned(),
        said: format!("{} ({})", words.trim(), output.status),
    })
}

/// The completed points of run folder `folder` in the order of the journal, each with its samples, one in memory
/// at a time.
pub fn read_points(folder: &Path) -> Result<PointRecords, JournalError> {
    Ok(PointRecords {
        records: journal::records(folder)?,
    })
}

/// The points of a journal. An iterator; after a [`JournalError::Damaged`] it goes on with the next point.
#[derive(Debug)]
pub struct PointRecords {
    records: Records,
}

impl Iterator for PointRecords {
    type Item = Result<(PointRecord, Option<Trace>), JournalError>;

    fn next(&mut self) -> Option<Self::Item> {
        loop {
            let record = match self.records.next()? {
                Ok(record) => record,
                Err(error) => return Some(Err(error)),
            };
            if let EntryKind::Point(point) = record.entry.kind {
                return Some(Ok((*point, record.trace)));
            }
        }
    }
}

fn write(
    folder: &Path,
    path: &Path,
    survey: &Survey,
    options: Options,
) -> Result<(), ArchiveError> {
    let failed = |source| ArchiveError::Hdf5 {
        path: path.to_owned(),
        source,
    };
    let mut file = NetcdfFile::create(path, options.deflate).map_err(failed)?;
    let mut layout = Layout::of(&mut file, survey).map_err(failed)?;
    for record in Records::new(journal::frames(folder)?.until(survey.end)) {
        match record {
            Ok(record) => {
                layout.entries.put(&record.entry).map_err(failed)?;
                if let EntryKind::Point(point) = &record.entry.kind {
                    layout
                        .put_point(point, record.trace.as_ref())
                        .map_err(failed)?;
                }
            }
            // Named in the archive already, by the survey.
            Err(error) if error.can_go_on() => {}
            Err(error) => return Err(error.into()),
        }
    }
    layout.finish().map_err(failed)?;
    file.close().map_err(failed)
}

/// Everything that is filled while the journal is read a second time.
struct Layout {
    entries: Entries,
    points: Option<Points>,
    traces: Option<Traces>,
}

impl Layout {
    fn of(file: &mut NetcdfFile, survey: &Survey) -> Result<Self, hdf5_metno::Error> {
        let mut names = Names::default();
        for taken in ["point", "direction", "sample", "step", "begun", "ended"] {
            names.free(taken);
        }
        for taken in [
            "detuning",
            "detuning_zero",
            "flags",
            "attempts",
            "which",
            "grid",
        ] {
            names.free(taken);
        }
        texts::put_root(file, survey)?;
        let (mut points, mut traces) = (None, None);
        // A dimension of length zero would be an unlimited one.
        if survey.points > 0 {
            let (laid_out, along) = Points::lay_out(file, survey, &mut names)?;
            points = Some(laid_out);
            if survey.has_traces() {
                traces = Some(Traces::lay_out(file, survey, &mut names, &along)?);
            }
        }
        texts::put_instruments(file, survey)?;
        if let Some(answer) = &survey.answer {
            texts::put_answer(file, answer)?;
        }
        Ok(Self {
            entries: Entries::lay_out(file, survey)?,
            points,
            traces,
        })
    }

    fn put_point(
        &mut self,
        point: &PointRecord,
        trace: Option<&Trace>,
    ) -> Result<(), hdf5_metno::Error> {
        if let Some(points) = &mut self.points {
            points.put(point)?;
        }
        if let Some(traces) = &mut self.traces {
            traces.put(trace)?;
        }
        Ok(())
    }

    fn finish(self) -> Result<(), hdf5_metno::Error> {
        self.entries.finish()?;
        if let Some(points) = self.points {
            points.finish()?;
        }
        if let Some(traces) = self.traces {
            traces.finish()?;
        }
        Ok(())
    }
}

/// Names of variables that are taken in a group.
#[derive(Debug, Default)]
struct Names {
    taken: BTreeSet<String>,
}

impl Names {
    /// `wanted` in letters, digits and underscores, with a number after it if that is taken.
    fn free(&mut self, wanted: &str) -> String {
        let mut name: String = wanted
            .chars()
            .map(|c| if c.is_ascii_alphanumeric() { c } else { '_' })
            .collect();
        if !name.starts_with(|c: char| c.is_ascii_alphabetic()) {
            name.insert(0, 'v');
        }
        let plain = name.clone();
        let mut again = 2;
        while !self.taken.insert(name.clone()) {
            name = format!("{plain}_{again}");
            again += 1;
        }
        name
    }
}

/// The numbers of a point's fit by name, as `centre`, `centre_sigma`, `chi2`.
///
/// Names are the paths within the fit, without `found`, `peak` and `value`, which say nothing in a table.
fn fit_values(point: &PointRecord) -> Vec<(String, f64)> {
    let mut values = Vec::new();
    if let Some(line) = &point.line
        && let Ok(line) = serde_json::to_value(line)
    {
        flatten("", &line, &mut values);
    }
    values
}

fn flatten(path: &str, value: &serde_json::Value, values: &mut Vec<(String, f64)>) {
    match value {
        serde_json::Value::Number(number) => {
            if let Some(number) = number.as_f64() {
                values.push((path.to_owned(), number));
            }
        }
        serde_json::Value::Object(members) => {
            for (name, value) in members {
                match (path, name.as_str()) {
                    (_, "found" | "peak" | "value") => flatten(path, value, values),
                    ("", name) => flatten(name, value, values),
                    (path, name) => flatten(&format!("{path}_{name}"), value, values),
                }
            }
        }
        _ => {}
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_words_and_never_taken_twice() {
        let mut names = Names::default();
        assert_eq!(names.free("coil.current_setpoint"), "coil_current_setpoint");
        assert_eq!(
            names.free("coil_current_setpoint"),
            "coil_current_setpoint_2"
        );
        assert_eq!(names.free("2nd µ"), "v2nd__");
        assert_eq!(names.free(""), "v");
    }

    #[test]
    fn a_fit_becomes_flat_numbers() {
        let fit = serde_json::json!({
            "found": {"peak": {"centre": {"value": 1.0, "sigma": 0.5}}},
            "covariance": [[1.0]],
            "chi2": 3,
            "tests": {"runs": 0.25}
        });
        let mut values = Vec::new();
        flatten("", &fit, &mut values);
        values.sort_by(|a, b| a.0.cmp(&b.0));
        let expected = [
            ("centre", 1.0),
            ("centre_sigma", 0.5),
            ("chi2", 3.0),
            ("tests_runs", 0.25),
        ];
        assert_eq!(values.len(), expected.len());
        for ((name, value), (wanted, number)) in values.iter().zip(expected) {
            assert_eq!((name.as_str(), *value), (wanted, number));
        }
    }
}
