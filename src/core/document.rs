//! A TOML document read key by key, with the place of everything, collecting every fault on the way.
//!
//! A [`Table`] remembers which keys were asked for: those are the keys that exist, and
//! [`Table::finish`] reports the others. It knows nothing of benches and sequences.

use std::ops::Range;

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use crate::diagnostic::{Diagnostic, FileRole};
use crate::quantity::Dimension;

mod findings;

pub(crate) use findings::{Findings, fault, suggestion};

/// Bytes of a file.
pub(crate) type Span = Range<usize>;

/// A text of a file and its place.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Text {
    pub text: String,
    pub span: Span,
    pub file: FileRole,
}

/// A number of a file and its place.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(crate) struct Whole {
    pub value: u64,
    pub span: Span,
}

/// Parses a whole file. Where its syntax is broken, every syntax fault is found and nothing returned:
/// reading on in half a file would report keys missing that are there.
pub(crate) fn open<'d>(
    text: &'d str,
    file: FileRole,
    findings: &mut Findings,
) -> Option<Spanned<DeTable<'d>>> {
    let (table, errors) = DeTable::parse_recoverable(text);
    if errors.is_empty() && table.get_ref().is_empty() {
        let message = match file {
            FileRole::Bench => "the bench file is empty",
            FileRole::Sequence => "the sequence file is empty",
        };
        findings.push(
            Diagnostic::error("D0102", file, message)
                .help("start from a shipped file: mock/bench.toml, sequences/coil-constant.toml"),
        );
        return None;
    }
    if errors.is_empty() {
        return Some(table);
    }
    for error in errors {
        let message = format!("not valid TOML: {}", error.message().replace('\n', "; "));
        let span = error.span().unwrap_or(0..0);
        findings.push(Diagnostic::error("D0103", file, message).at(clamp(span, text)));
    }
    None
}

/// Bytes to text; not UTF-8 is a finding.
pub(crate) fn decode<'d>(
    bytes: &'d [u8],
    file: FileRole,
    findings: &mut Findings,
) -> Option<&'d str> {
    match std::str::from_utf8(bytes) {
        Ok(text) => Some(text),
        Err(error) => {
            let at = error.valid_up_to();
            let line = 1 + bytes.iter().take(at).filter(|b| **b == b'\n').count();
            let message = format!("not a text file: byte {at} (line {line}) is not UTF-8");
            findings.push(
                Diagnostic::error("D0101", file, message)
                    .at(at..(at + 1).min(bytes.len()))
                    .help("is this the right file? save it as UTF-8"),
            );
            None
        }
    }
}

fn clamp(span: Span, text: &str) -> Span {
    let end = span.end.min(text.len());
    span.start.min(end)..end
}

/// One table of a file.
pub(crate) struct Table<'d> {
    pub file: FileRole,
    /// Its header's or braces' place.
    pub span: Span,
    /// As messages name it, "[sweep]"; empty for the file itself.
    pub title: String,
    entries: &'d DeTable<'d>,
    asked: Vec<&'static str>,
    taken: Vec<String>,
}

impl<'d> Table<'d> {
    pub fn root(table: &'d Spanned<DeTable<'d>>, file: FileRole) -> Self {
        Self {
            file,
            span: 0..0,
            title: String::new(),
            entries: table.get_ref(),
            asked: Vec::new(),
            taken: Vec::new(),
        }
    }

    fn inner(&self, title: String, span: Span, entries: &'d DeTable<'d>) -> Self {
        Self {
            file: self.file,
            span,
            title,
            entries,
            asked: Vec::new(),
            taken: Vec::new(),
        }
    }

    /// Whether the key is there; does not count as asking for it.
    pub fn has(&self, key: &str) -> bool {
        self.entries.contains_key(key)
    }

    /// Whether the key holds a table.
    pub fn holds_table(&self, key: &str) -> bool {
        self.entries
            .get(key)
            .is_some_and(|value| value.get_ref().is_table())
    }

    /// The place of a key's value, or of the table where it is missing.
    pub fn place(&self, key: &str) -> Span {
        self.entries
            .get(key)
            .map_or_else(|| self.span.clone(), Spanned::span)
    }

    fn value(&mut self, key: &'static str) -> Option<&'d Spanned<DeValue<'d>>> {
        if !self.asked.contains(&key) {
            self.asked.push(key);
        }
        self.entries.get(key)
    }

    /// A finding that `key` is missing.
    pub fn missing(&self, key: &str, findings: &mut Findings) {
        let place = if self.title.is_empty() {
            "the file"
        } else {
            &self.title
        };
        let message = format!("{place} has no `{key}`");
        findings.push(Diagnostic::error("D0105", self.file, message).at(self.span.clone()));
    }

    fn mistyped(&self, key: &str, value: &Spanned<DeValue<'_>>, wanted: &str) -> Diagnostic {
        let found = value.get_ref().type_str();
        let message = format!("`{key}` must be {wanted}, not {} {found}", article(found));
        Diagnostic::error("D0106", self.file, message).at(value.span())
    }

    /// A text; a bare number is taken as its text, so that the unit is found missing and not the quotes.
    pub fn text(&mut self, key: &'static str, findings: &mut Findings) -> Option<Text> {
        let value = self.value(key)?;
        let text = as_text(value, self.file);
        if text.is_none() {
            findings.push(self.mistyped(key, value, "a text"));
        }
        text
    }

    /// A text that must be there.
    pub fn required(&mut self, key: &'static str, findings: &mut Findings) -> Option<Text> {
        if !self.has(key) {
            self.value(key);
            self.missing(key, findings);
            return None;
        }
        self.text(key, findings)
    }

    /// A number of one dimension.
    pub fn quantity(
        &mut self,
        key: &'static str,
        wanted: Dimension,
        findings: &mut Findings,
    ) -> Option<f64> {
        let text = self.text(key, findings)?;
        findings.quantity(&text, wanted)
    }

    /// A number above zero of one dimension.
    pub fn positive(
        &mut self,
        key: &'static str,
        wanted: Dimension,
        findings: &mut Findings,
    ) -> Option<f64> {
        let text = self.text(key, findings)?;
        findings.positive(&text, wanted)
    }

    /// A whole number within bounds, both allowed.
    pub fn whole(
        &mut self,
        key: &'static str,
        bounds: (u64, u64),
        findings: &mut Findings,
    ) -> Option<Whole> {
        let value = self.value(key)?;
        let DeValue::Integer(integer) = value.get_ref() else {
            findings.push(self.mistyped(key, value, "a whole number"));
            return None;
        };
        let number = i128::from_str_radix(integer.as_str(), integer.radix()).unwrap_or(i128::MAX);
        let (low, high) = bounds;
        if number < i128::from(low) || number > i128::from(high) {
            let code = if key == "count" { "D0401" } else { "D0108" };
            let message = format!("`{key}` is {integer}; it must lie from {low} to {high}");
            findings.push(Diagnostic::error(code, self.file, message).at(value.span()));
            return None;
        }
        Some(Whole {
            value: u64::try_from(number).unwrap_or(high),
            span: value.span(),
        })
    }

    /// A signed whole number within bounds, both allowed.
    pub fn signed(
        &mut self,
        key: &'static str,
        bounds: (i64, i64),
        findings: &mut Findings,
    ) -> Option<i64> {
        let value = self.value(key)?;
        signed(value, bounds).map_or_else(
            || {
                let wanted = format!("a whole number from {} to {}", bounds.0, bounds.1);
                findings.push(self.mistyped(key, value, &wanted));
                None
            },
            Some,
        )
    }

    /// Two signed whole numbers within bounds.
    pub fn signed_pair(
        &mut self,
        key: &'static str,
        bounds: (i64, i64),
        findings: &mut Findings,
    ) -> Option<(i64, i64)> {
        let value = self.value(key)?;
        let pair = match value.get_ref() {
            DeValue::Array(items) if items.len() == 2 => {
                let mut numbers = items.iter().map(|item| signed(item, bounds));
                numbers.next().flatten().zip(numbers.next().flatten())
            }
            _ => None,
        };
        if pair.is_none() {
            let wanted = format!("two whole numbers from {} to {}", bounds.0, bounds.1);
            findings.push(self.mistyped(key, value, &wanted));
        }
        pair
    }

    /// `true` or `false`.
    pub fn boolean(&mut self, key: &'static str, findings: &mut Findings) -> Option<bool> {
        let value = self.value(key)?;
        let boolean = value.get_ref().as_bool();
        if boolean.is_none() {
            findings.push(self.mistyped(key, value, "true or false"));
        }
        boolean
    }

    /// A list of texts; never empty.
    pub fn texts(&mut self, key: &'static str, findings: &mut Findings) -> Option<Vec<Text>> {
        let value = self.value(key)?;
        let list = as_texts(value, self.file);
        if list.as_ref().is_none_or(Vec::is_empty) {
            findings.push(self.mistyped(key, value, "a list of texts with at least one"));
            return None;
        }
        list
    }

    /// A list of lists of texts.
    pub fn groups(&mut self, key: &'static str, findings: &mut Findings) -> Option<Vec<Vec<Text>>> {
        let value = self.value(key)?;
        let groups = value.get_ref().as_array().and_then(|outer| {
            outer
                .iter()
                .map(|inner| as_texts(inner, self.file))
                .collect::<Option<Vec<_>>>()
        });
        if groups.is_none() {
            findings.push(self.mistyped(key, value, "a list of lists of texts"));
        }
        groups
    }

    /// An inner table.
    pub fn table(&mut self, key: &'static str, findings: &mut Findings) -> Option<Table<'d>> {
        let value = self.value(key)?;
        let title = self.title_of(key);
        self.as_table(key, value, title, findings)
    }

    /// Inner tables under keys of the user's choice, those already asked for left out, in order of
    /// place. What is no table is a finding.
    pub fn named_tables(&mut self, findings: &mut Findings) -> Vec<(Text, Table<'d>)> {
        let mut tables = Vec::new();
        for (name, value) in self.rest() {
            self.taken.push(name.text.clone());
            let title = self.title_of(&name.text);
            if let Some(table) = self.as_table(&name.text, value, title, findings) {
                tables.push((name, table));
            }
        }
        tables
    }

    /// Texts under keys of the user's choice, in order of place.
    pub fn named_texts(&mut self, findings: &mut Findings) -> Vec<(Text, Text)> {
        let mut texts = Vec::new();
        for (name, value) in self.rest() {
            self.taken.push(name.text.clone());
            match as_text(value, self.file) {
                Some(text) => texts.push((name, text)),
                None => findings.push(self.mistyped(&name.text, value, "a text")),
            }
        }
        texts
    }

    fn rest(&self) -> Vec<(Text, &'d Spanned<DeValue<'d>>)> {
        let mut rest: Vec<_> = self
            .entries
            .iter()
            .filter(|(key, _)| {
                let key: &str = key.get_ref();
                !self.asked.contains(&key) && !self.taken.iter().any(|taken| taken == key)
            })
            .map(|(key, value)| {
                let name = Text {
                    text: key.get_ref().to_string(),
                    span: key.span(),
                    file: self.file,
                };
                (name, value)
            })
            .collect();
        rest.sort_by_key(|(name, _)| name.span.start);
        rest
    }

    /// Tables of `[[key]]`, in order.
    pub fn tables(&mut self, key: &'static str, findings: &mut Findings) -> Vec<Table<'d>> {
        let Some(value) = self.value(key) else {
            return Vec::new();
        };
        let Some(array) = value.get_ref().as_array() else {
            let wanted = format!("a list of tables, each headed [[{key}]]");
            findings.push(self.mistyped(key, value, &wanted));
            return Vec::new();
        };
        let title = format!("[[{key}]]");
        array
            .iter()
            .filter_map(|item| self.as_table(key, item, title.clone(), findings))
            .collect()
    }

    fn as_table(
        &self,
        key: &str,
        value: &'d Spanned<DeValue<'d>>,
        title: String,
        findings: &mut Findings,
    ) -> Option<Table<'d>> {
        match value.get_ref() {
            DeValue::Table(entries) => Some(self.inner(title, value.span(), entries)),
            _ => {
                findings.push(self.mistyped(key, value, "a table"));
                None
            }
        }
    }

    fn title_of(&self, key: &str) -> String {
        match self
            .title
            .strip_prefix('[')
            .and_then(|t| t.strip_suffix(']'))
        {
            Some(outer) if !outer.starts_with('[') => format!("[{outer}.{key}]"),
            Some(_) => format!("`{key}` of {}", self.title),
            None if self.title.is_empty() => format!("[{key}]"),
            None => format!("`{key}` in {}", self.title),
        }
    }

    /// Reports every key that nobody asked for.
    pub fn finish(self, findings: &mut Findings) {
        let place = if self.title.is_empty() {
            String::new()
        } else {
            format!(" in {}", self.title)
        };
        for (name, _) in self.rest() {
            let message = format!("unknown key `{}`{place}", name.text);
            findings.push(
                Diagnostic::error("D0104", self.file, message)
                    .at(name.span)
                    .help(suggestion(&name.text, &self.asked)),
            );
        }
    }
}

fn as_text(value: &Spanned<DeValue<'_>>, file: FileRole) -> Option<Text> {
    let text = match value.get_ref() {
        DeValue::String(text) => text.to_string(),
        DeValue::Integer(number) => number.to_string(),
        DeValue::Float(number) => number.to_string(),
        _ => return None,
    };
    Some(Text {
        text,
        span: value.span(),
        file,
    })
}

fn as_texts(value: &Spanned<DeValue<'_>>, file: FileRole) -> Option<Vec<Text>> {
    let items = value.get_ref().as_array()?;
    items.iter().map(|item| as_text(item, file)).collect()
}

fn signed(value: &Spanned<DeValue<'_>>, bounds: (i64, i64)) -> Option<i64> {
    let integer = value.get_ref().as_integer()?;
    let number = i64::from_str_radix(integer.as_str(), integer.radix()).ok()?;
    (bounds.0..=bounds.1).contains(&number).then_some(number)
}

fn article(noun: &str) -> &'static str {
    if noun.starts_with(['a', 'i', 'o', 'u', 'e']) {
        "an"
    } else {
        "a"
    }
}
