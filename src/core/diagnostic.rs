//! What is wrong, as data: a [`Diagnostic`] says a file is wrong, a [`Fault`] says the bench is wrong.
//!
//! Both carry a stable code, a terse message and a remedy. This module never renders them: caret
//! drawings, JSON and pages are made by whoever shows them.

use std::borrow::Cow;
use std::fmt;
use std::ops::Range;

use serde::{Deserialize, Serialize};

/// Which of the two files a user writes is meant.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum FileRole {
    /// The bench file: instruments, limits, interlocks.
    Bench,
    /// The sequence file: the declared scan.
    Sequence,
}

/// Whether a finding forbids the run.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash, Serialize, Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Severity {
    /// The run is refused.
    Error,
    /// The run is possible, but the user should know.
    Warning,
}

/// One finding about a bench or sequence file.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Diagnostic {
    /// Stable code, "D0104".
    pub code: Cow<'static, str>,
    /// Whether the run is refused.
    pub severity: Severity,
    /// What is wrong, lowercase, naming quantity, value and limit.
    pub message: String,
    /// The file that the span points into.
    pub file: FileRole,
    /// Bytes of the file's text that are meant; `None` where the whole file is.
    pub span: Option<Range<usize>>,
    /// Words to stand beside the marked bytes; empty for none.
    pub label: String,
    /// What to do about it.
    pub help: Option<String>,
}

impl Diagnostic {
    /// An error without label, span or help.
    pub fn error(code: &'static str, file: FileRole, message: impl Into<String>) -> Self {
        Self {
            code: Cow::Borrowed(code),
            severity: Severity::Error,
            message: message.into(),
            file,
            span: None,
            label: String::new(),
            help: None,
        }
    }

    /// A warning without label, span or help.
    pub fn warning(code: &'static str, file: FileRole, message: impl Into<String>) -> Self {
        Self {
            severity: Severity::Warning,
            ..Self::error(code, file, message)
        }
    }

    /// The same, pointing at these bytes.
    #[must_use]
    pub fn at(mut self, span: Range<usize>) -> Self {
        self.span = Some(span);
        self
    }

    /// The same, with words beside the marked bytes.
    #[must_use]
    pub fn label(mut self, label: impl Into<String>) -> Self {
        self.label = label.into();
        self
    }

    /// The same, with a remedy.
    #[must_use]
    pub fn help(mut self, help: impl Into<String>) -> Self {
        self.help = Some(help.into());
        self
    }

    /// The line (from 1) on which the marked bytes of `text` begin; `None` without a span.
    pub fn line(&self, text: &str) -> Option<usize> {
        let start = self.span.as_ref()?.start.min(text.len());
        let before = text.as_bytes().get(..start)?;
        Some(1 + before.iter().filter(|byte| **byte == b'\n').count())
    }
}

impl fmt::Display for Diagnostic {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "[{}] {}", self.code, self.message)?;
        match &self.help {
            Some(help) => write!(f, "; {help}"),
            None => Ok(()),
        }
    }
}

/// The bench is wrong: an instrument cannot be reached, refuses, or does not do what it was told.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct Fault {
    /// Stable code, "F0101".
    pub code: Cow<'static, str>,
    /// What is wrong, lowercase, naming instrument, value and limit.
    pub message: String,
    /// What to do about it.
    pub help: Option<String>,
    /// The instrument concerned; `None` where it is not one instrument's.
    pub instrument: Option<String>,
}

impl Fault {
    /// A fault without help or instrument.
    pub fn new(code: &'static str, message: impl Into<String>) -> Self {
        Self {
            code: Cow::Borrowed(code),
            message: message.into(),
            help: None,
            instrument: None,
        }
    }

    /// The same, with a remedy.
    #[must_use]
    pub fn help(mut self, help: impl Into<String>) -> Self {
        self.help = Some(help.into());
        self
    }

    /// The same, of this instrument.
    #[must_use]
    pub fn of(mut self, instrument: impl Into<String>) -> Self {
        self.instrument = Some(instrument.into());
        self
    }
}

impl fmt::Display for Fault {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "[{}] {}", self.code, self.message)?;
        match &self.help {
            Some(help) => write!(f, "; {help}"),
            None => Ok(()),
        }
    }
}

impl std::error::Error for Fault {}
