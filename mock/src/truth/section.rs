//! Reads one table of a world file: quantities with units, numbers, words; collects every fault with its line.

use super::units::{Units, parse};
use toml::Spanned;
use toml::de::{DeTable, DeValue};

/// One table of the file, with the keys taken from it so far.
pub(super) struct Section<'a> {
    name: &'a str,
    table: &'a DeTable<'a>,
    text: &'a str,
    known: Vec<&'static str>,
    pub(super) faults: Vec<String>,
}

/// Key, units, least and greatest value (inclusive, SI), and where the value goes.
pub(super) type Wanted<'t> = (&'static str, Units, f64, f64, &'t mut f64);

impl<'a> Section<'a> {
    pub(super) fn new(name: &'a str, table: &'a DeTable<'a>, text: &'a str) -> Section<'a> {
        Section {
            name,
            table,
            text,
            known: Vec::new(),
            faults: Vec::new(),
        }
    }

    /// Takes quantities; those the file leaves out stay as they are.
    pub(super) fn quantities<const N: usize>(&mut self, wanted: [Wanted<'_>; N]) {
        for (key, units, least, greatest, target) in wanted {
            let Some(value) = self.take(key) else {
                continue;
            };
            let found = match value.get_ref() {
                DeValue::String(text) => parse(text, units),
                DeValue::Integer(number) if units.is_plain() => plain(number.as_str()),
                DeValue::Float(number) if units.is_plain() => plain(number.as_str()),
                other => Err(format!(
                    "is a {}; write {}",
                    other.type_str(),
                    units.example()
                )),
            };
            match found {
                Ok(number) if (least..=greatest).contains(&number) => *target = number,
                Ok(number) => {
                    let limits = format!("outside {least:e} to {greatest:e} {}", units.base());
                    self.fault(
                        key,
                        value,
                        &format!("{number:e} {} is {limits}", units.base()),
                    );
                }
                Err(message) => self.fault(key, value, &message),
            }
        }
    }

    /// Takes one word of a list; the number of the word, or `None` if left out or wrong.
    pub(super) fn word(&mut self, key: &'static str, words: &[&str]) -> Option<usize> {
        let value = self.take(key)?;
        let found = value
            .get_ref()
            .as_str()
            .and_then(|text| words.iter().position(|word| *word == text));
        if found.is_none() {
            self.fault(key, value, &format!("must be one of {}", words.join(", ")));
        }
        found
    }

    /// Takes a whole number up to `greatest`.
    pub(super) fn whole(&mut self, key: &'static str, greatest: u64) -> Option<u64> {
        let value = self.take(key)?;
        let number = value
            .get_ref()
            .as_integer()
            .and_then(|i| i.as_str().parse().ok());
        let found = number.filter(|n| *n <= greatest);
        if found.is_none() {
            self.fault(
                key,
                value,
                &format!("must be a whole number from 0 to {greatest}"),
            );
        }
        found
    }

    /// Takes a table.
    pub(super) fn table(&mut self, key: &'static str) -> Option<&'a DeTable<'a>> {
        let value = self.take(key)?;
        let table = value.get_ref().as_table();
        if table.is_none() {
            self.fault(key, value, &format!("must be a table: write [{key}]"));
        }
        table
    }

    /// Takes an array of tables.
    pub(super) fn tables(&mut self, key: &'static str) -> Option<Vec<&'a DeTable<'a>>> {
        let value = self.take(key)?;
        let tables = value
            .get_ref()
            .as_array()
            .and_then(|all| all.iter().map(|t| t.get_ref().as_table()).collect());
        if tables.is_none() {
            self.fault(
                key,
                value,
                &format!("must be tables: write [[{}{key}]]", self.prefix()),
            );
        }
        tables
    }

    /// Ends the table: every key not taken is a fault. Returns all faults.
    pub(super) fn finish(mut self) -> Vec<String> {
        for (key, _) in self.table.iter() {
            if !self.known.contains(&key.get_ref().as_ref()) {
                let line = line_of(self.text, key.span().start);
                let place = format!(
                    "line {line}: unknown key `{}{}`",
                    self.prefix(),
                    key.get_ref()
                );
                self.faults
                    .push(format!("{place}; known here: {}", self.known.join(", ")));
            }
        }
        self.faults
    }

    fn take(&mut self, key: &'static str) -> Option<&'a Spanned<DeValue<'a>>> {
        self.known.push(key);
        self.table.get(key)
    }

    fn fault(&mut self, key: &str, value: &Spanned<DeValue<'_>>, message: &str) {
        let line = line_of(self.text, value.span().start);
        self.faults
            .push(format!("line {line}: `{}{key}` {message}", self.prefix()));
    }

    fn prefix(&self) -> String {
        if self.name.is_empty() {
            String::new()
        } else {
            format!("{}.", self.name)
        }
    }
}

fn plain(text: &str) -> Result<f64, String> {
    text.replace('_', "")
        .parse()
        .map_err(|_| format!("`{text}` is not a number"))
}

fn line_of(text: &str, offset: usize) -> usize {
    1 + text
        .bytes()
        .take(offset)
        .filter(|byte| *byte == b'\n')
        .count()
}
