//! What an archive says in words and single numbers: the two files as run, entries, identities, settings, answer.

use darkline_core::answer::{Answer, Stated};
use darkline_core::entry::{Entry, State};
use hdf5_metno::{Error, Group};

use super::netcdf::{Char, NetcdfFile, Rows, put_number, put_numbers, put_text};
use super::points::TIME;
use super::survey::Survey;
use super::{LAYOUT, words};

/// Attributes of the root and the texts of both files.
pub fn put_root(file: &mut NetcdfFile, survey: &Survey) -> Result<(), Error> {
    let root = file.root().clone();
    let header = &survey.header;
    let source = match header.commit.as_str() {
        "" => format!("darkline {}", header.version),
        commit => format!("darkline {} ({commit})", header.version),
    };
    let ended = survey.state.as_ref();
    let (state, reason) = match ended {
        Some((state, reason)) if state.is_end() => (state.word(), reason.as_str()),
        // Whoever reads a journal cannot know whether its writer still lives.
        Some((State::Held, reason)) => ("held", reason.as_str()),
        _ => ("open", "the journal had no last entry when this was built"),
    };
    for (name, text) in [
        ("Conventions", "CF-1.11"),
        ("title", &*header.title),
        ("source", &source),
        ("state", state),
        ("reason", reason),
        ("journal_damage", &survey.damage.join("; ")),
    ] {
        put_text(&root, name, text)?;
    }
    put_number(&root, "layout", LAYOUT)?;
    put_number(&root, "points_planned", header.points.cast_signed())?;
    put_number(&root, "points_recorded", survey.points as i64)?;
    put_number(&root, "started", header.started_utc)?;
    put_text(&root, "started_units", TIME[0].1)?;
    for (name, text, words) in [
        ("bench_toml", &header.bench, "the bench file as run"),
        (
            "sequence_toml",
            &header.sequence,
            "the sequence file as run",
        ),
    ] {
        let variable = file.text(&root, name, text)?;
        put_text(&variable, "long_name", words)?;
    }
    Ok(())
}

/// The entries in words, being filled.
pub struct Entries {
    seq: Rows<i64>,
    at: Rows<i64>,
    utc: Rows<i64>,
    kind: Rows<Char>,
    words: Rows<Char>,
}

impl Entries {
    /// Lay them out in a group of their own.
    pub fn lay_out(file: &mut NetcdfFile, survey: &Survey) -> Result<Self, Error> {
        let group = file.group("entries")?;
        let (along, seq) = file.coordinate::<i64>(&group, "entry", survey.entries)?;
        seq.describe(&[("long_name", "number of the entry")])?;
        let at = file.variable(&group, "at", &[&along], 0i64)?;
        at.describe(&[(
            "long_name",
            "time since the run opened, by a clock that never goes back, in nanoseconds",
        )])?;
        let utc = file.variable(&group, "utc", &[&along], 0i64)?;
        utc.describe(&[("long_name", "time by the system's clock")])?;
        utc.describe(&TIME)?;
        let kind = file.texts(&group, "kind", &along, survey.longest_kind)?;
        let words = file.texts(&group, "words", &along, survey.longest_words)?;
        words.describe(&[("long_name", "what happened")])?;
        Ok(Self {
            seq,
            at,
            utc,
            kind,
            words,
        })
    }

    /// Put the next entry.
    pub fn put(&mut self, entry: &Entry) -> Result<(), Error> {
        self.seq.put(entry.seq.cast_signed())?;
        self.at.put(entry.at.cast_signed())?;
        self.utc.put(entry.utc)?;
        self.kind.put_text(words::kind(&entry.kind))?;
        self.words.put_text(&words::words(&entry.kind))
    }

    /// Write what is left.
    pub fn finish(self) -> Result<(), Error> {
        for rows in [self.seq, self.at, self.utc] {
            rows.finish()?;
        }
        self.kind.finish()?;
        self.words.finish().map(drop)
    }
}

/// Identities of the instruments and what they granted.
pub fn put_instruments(file: &mut NetcdfFile, survey: &Survey) -> Result<(), Error> {
    let group = file.group("instruments")?;
    if !survey.identities.is_empty() {
        let along = file.dimension(&group, "identified", survey.identities.len())?;
        for (column, name) in ["instrument", "identity", "serial"].iter().enumerate() {
            let texts = survey.identities.iter().map(|row| row[column].as_str());
            put_column(file, &group, name, &along, texts)?;
        }
    }
    if survey.settings.is_empty() {
        return Ok(());
    }
    let along = file.dimension(&group, "granted", survey.settings.len())?;
    let settings = &survey.settings;
    put_column(
        file,
        &group,
        "setting_instrument",
        &along,
        settings.iter().map(|row| &*row.0),
    )?;
    put_column(
        file,
        &group,
        "setting",
        &along,
        settings.iter().map(|row| &*row.1),
    )?;
    put_column(
        file,
        &group,
        "setting_unit",
        &along,
        settings.iter().map(|row| &*row.2),
    )?;
    let mut asked = file.variable(&group, "setting_asked", &[&along], f64::NAN)?;
    asked.describe(&[("long_name", "as asked, in setting_unit")])?;
    let mut granted = file.variable(&group, "setting_granted", &[&along], f64::NAN)?;
    granted.describe(&[("long_name", "as read back, in setting_unit")])?;
    for row in settings {
        asked.put(row.3)?;
        granted.put(row.4)?;
    }
    asked.finish()?;
    granted.finish().map(drop)
}

/// The answer: one variable without dimension per number, what is said about it as attributes.
pub fn put_answer(file: &NetcdfFile, answer: &Answer) -> Result<(), Error> {
    let group = file.group("answer")?;
    for (name, stated) in answer.statements() {
        put_stated(file, &group, name, stated)?;
    }
    file.scalar(&group, "chi2", answer.chi2.unwrap_or(f64::NAN))?;
    file.scalar(&group, "dof", answer.dof.map_or(-1, u64::cast_signed))?;
    file.scalar(&group, "used", answer.used.cast_signed())?;
    Ok(())
}

fn put_stated(file: &NetcdfFile, group: &Group, name: &str, stated: &Stated) -> Result<(), Error> {
    let value = file.scalar(group, name, stated.value.unwrap_or(f64::NAN))?;
    put_text(&value, "units", &stated.unit)?;
    for (attribute, text) in [("reason", &stated.reason), ("qualifier", &stated.qualifier)] {
        if let Some(text) = text {
            put_text(&value, attribute, text)?;
        }
    }
    for (attribute, number) in [
        ("systematic", stated.systematic),
        ("upper_limit", stated.upper_limit),
    ] {
        if let Some(number) = number {
            put_numbers(&value, attribute, &[number])?;
        }
    }
    let sigma = file.scalar(
        group,
        &format!("{name}_sigma"),
        stated.sigma.unwrap_or(f64::NAN),
    )?;
    put_text(&sigma, "units", &stated.unit)
}

fn put_column<'a>(
    file: &mut NetcdfFile,
    group: &Group,
    name: &str,
    along: &super::netcdf::Dimension,
    texts: impl Iterator<Item = &'a str> + Clone,
) -> Result<(), Error> {
    let longest = texts.clone().map(str::len).max().unwrap_or(0);
    let mut rows = file.texts(group, name, along, longest)?;
    for text in texts {
        rows.put_text(text)?;
    }
    rows.finish().map(drop)
}
