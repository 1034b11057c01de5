//! The answer as text for a terminal or a log.
//! Owns alignment, wrapping and colour; takes every number's wording from `wording` and prints nothing itself.

use darkline_core::answer::Answer;

use super::wording::{significant, worded};

/// What the answer does not know of its run.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct RunSummary {
    /// Points carried out.
    pub done: u64,
    /// Points that carry a flag.
    pub flagged: u64,
    /// Points that were taken again.
    pub repeated: u64,
    /// The run folder, as it should be printed.
    pub folder: String,
    /// How the run ended: `finished`, `stopped`, `tripped`, `faulted`, `interrupted`.
    pub state: String,
}

const BOLD: &str = "\u{1b}[1m";
const DIM: &str = "\u{1b}[2m";
const GREEN: &str = "\u{1b}[32m";
const YELLOW: &str = "\u{1b}[33m";
const RED: &str = "\u{1b}[31m";
const PLAIN: &str = "\u{1b}[0m";

/// Columns in front of the values: two of margin, the longest name and two of gap.
const INDENT: usize = 20;

/// The answer in aligned lines of at most `width` columns (40 at least), each ended by a line feed.
///
/// With `colour` the text carries ANSI escapes; whether it may (a terminal, `NO_COLOR`) is the caller's to say.
pub fn answer_text(answer: &Answer, colour: bool, width: usize, run: &RunSummary) -> String {
    let mut page = Page {
        text: String::new(),
        colour,
        width: width.max(40),
    };
    for (key, stated) in answer.statements() {
        let worded = worded(stated);
        let style = if worded.known { BOLD } else { YELLOW };
        page.line(
            &key.replace('_', " "),
            style,
            &worded.text,
            &worded.qualifier,
        );
    }
    page.text.push('\n');
    page.line("chi-square", "", &chi_square(answer), &None);
    page.line("points", "", &points(answer, run), &None);
    if let Some(ratio) = sigma_over_scatter(answer) {
        page.line("fit sigma", "", &ratio, &None);
    }
    let style = match run.state.as_str() {
        "finished" => GREEN,
        "stopped" => YELLOW,
        _ => RED,
    };
    page.line("state", style, &run.state, &None);
    page.line("run", "", &run.folder, &None);
    page.text
}

/// `39.1 for 38 degrees of freedom, 1.03 each`, or why there is none.
pub fn chi_square(answer: &Answer) -> String {
    match (answer.chi2, answer.dof) {
        (Some(chi2), _) if !chi2.is_finite() => {
            "cannot tell: the result is not a finite number".to_owned()
        }
        (Some(chi2), Some(dof)) if dof > 0 => {
            let (total, each) = (tidy(chi2), tidy(chi2 / dof as f64));
            let plural = if dof == 1 { "degree" } else { "degrees" };
            format!("{total} for {dof} {plural} of freedom, {each} each")
        }
        (Some(_), _) => "cannot tell: no degree of freedom is left".to_owned(),
        (None, _) => "none: the field law was not fitted".to_owned(),
    }
}

/// `0.97 of the scatter of separate acquisitions`; `None` where it was not determined.
pub fn sigma_over_scatter(answer: &Answer) -> Option<String> {
    let ratio = answer
        .sigma_over_scatter
        .filter(|ratio| ratio.is_finite())?;
    Some(format!(
        "{} of the scatter of separate acquisitions",
        tidy(ratio)
    ))
}

fn points(answer: &Answer, run: &RunSummary) -> String {
    format!(
        "{} done, {} used, {} flagged, {} repeated",
        run.done, answer.used, run.flagged, run.repeated
    )
}

/// Two decimals where they mean something, else three significant digits.
fn tidy(value: f64) -> String {
    if (0.1..100.0).contains(&value.abs()) {
        format!("{value:.2}")
    } else {
        significant(value, 3)
    }
}

struct Page {
    text: String,
    colour: bool,
    width: usize,
}

impl Page {
    /// One name with its value and qualifier, wrapped with a hanging indent.
    fn line(&mut self, name: &str, style: &str, value: &str, qualifier: &Option<String>) {
        let room = self.width.saturating_sub(INDENT);
        let joint = if qualifier
            .as_deref()
            .is_some_and(|text| !text.starts_with("at "))
        {
            ", "
        } else {
            " "
        };
        let qualifier = qualifier.as_deref().map(|text| format!("{joint}{text}"));
        let whole = format!("{value}{}", qualifier.unwrap_or_default());
        // Only what belongs to the value is styled; wrapping never counts the escapes.
        let mut styled = value.chars().count();
        let name = format!("  {name:<width$}", width = INDENT - 2);
        let name = self.paint(DIM, &name);
        self.text.push_str(&name);
        for (row, line) in wrap(&whole, room).iter().enumerate() {
            if row > 0 {
                self.text.push_str(&" ".repeat(INDENT));
            }
            let here = styled.min(line.chars().count());
            let split = line
                .char_indices()
                .nth(here)
                .map_or(line.len(), |(at, _)| at);
            let painted = self.paint(style, &line[..split]);
            self.text.push_str(&painted);
            self.text.push_str(&line[split..]);
            self.text.push('\n');
            // The space at the break was swallowed.
            styled = styled.saturating_sub(line.chars().count() + 1);
        }
    }

    fn paint(&self, style: &str, text: &str) -> String {
        if self.colour && !style.is_empty() && !text.is_empty() {
            format!("{style}{text}{PLAIN}")
        } else {
            text.to_owned()
        }
    }
}

/// Lines of at most `room` characters, broken at spaces; a longer word (a path) stays whole so that it
/// can be copied. Never empty.
pub fn wrap(text: &str, room: usize) -> Vec<String> {
    let mut lines = vec![String::new()];
    for word in text.split(' ') {
        let Some(line) = lines.last_mut() else { break };
        if line.is_empty() {
            line.push_str(word);
        } else if line.chars().count() + 1 + word.chars().count() <= room {
            line.push(' ');
            line.push_str(word);
        } else {
            lines.push(word.to_owned());
        }
    }
    lines
}

#[cfg(test)]
mod tests;
