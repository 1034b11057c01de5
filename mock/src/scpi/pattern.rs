//! Command patterns such as `[SOURce]:FREQuency:[CW|FIXed]` or `INPut#:COUPling`, and how a header fits them.

use crate::scpi::ErrorCode;
use crate::scpi::parse::Node;

/// One pattern, read once. Nodes are separated by `:`; brackets make a node optional, `|` gives alternatives, and a
/// trailing `#` allows a numeric suffix.
#[derive(Clone, Debug)]
pub struct Pattern {
    nodes: Vec<PatternNode>,
}

#[derive(Clone, Debug)]
struct PatternNode {
    /// Short and long form, upper case.
    names: Vec<(String, String)>,
    optional: bool,
    numeric: bool,
}

/// How a header fits.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Fit {
    /// Not this command.
    No,
    /// This command, but with a suffix where none is known (-114).
    Suffix,
    /// This command; the first numeric suffix, or 1.
    Yes(u32),
}

impl Pattern {
    /// Reads a pattern of our own tables.
    pub fn new(text: &str) -> Pattern {
        Pattern {
            nodes: text.split(':').map(PatternNode::new).collect(),
        }
    }

    /// Whether the header is this command.
    pub fn fit(&self, header: &[Node]) -> Fit {
        fit(&self.nodes, header, None)
    }
}

/// Whether a word is the short or the long form of a keyword such as `IMMediate`.
pub fn is_keyword(word: &str, keyword: &str) -> bool {
    let short = short_form(keyword);
    word.eq_ignore_ascii_case(short) || word.eq_ignore_ascii_case(keyword)
}

/// The short form of a keyword: its leading capitals, digits included.
pub fn short_form(keyword: &str) -> &str {
    let end = keyword
        .find(|letter: char| letter.is_ascii_lowercase())
        .unwrap_or(keyword.len());
    &keyword[..end]
}

/// The one of the keywords that a word means, or -224.
pub fn choose(word: &str, keywords: &[&str]) -> Result<usize, ErrorCode> {
    keywords
        .iter()
        .position(|keyword| is_keyword(word, keyword))
        .ok_or(ErrorCode::ILLEGAL_PARAMETER)
}

impl PatternNode {
    fn new(text: &str) -> PatternNode {
        let bare = text.trim_matches(['[', ']']);
        let numeric = bare.ends_with('#');
        let forms = |name: &str| (short_form(name).to_owned(), name.to_ascii_uppercase());
        let names = bare.trim_end_matches('#').split('|').map(forms).collect();
        PatternNode {
            names,
            optional: text.starts_with('['),
            numeric,
        }
    }
}

fn fit(pattern: &[PatternNode], header: &[Node], suffix: Option<u32>) -> Fit {
    let Some((first, rest)) = pattern.split_first() else {
        return if header.is_empty() {
            Fit::Yes(suffix.unwrap_or(1))
        } else {
            Fit::No
        };
    };
    let taken = header.split_first().map_or(Fit::No, |(node, after)| {
        if !first
            .names
            .iter()
            .any(|(short, long)| node.name == *short || node.name == *long)
        {
            return Fit::No;
        }
        let own = if first.numeric { node.suffix } else { None };
        let fitted = fit(rest, after, suffix.or(own));
        let wrong = !first.numeric && node.suffix.is_some_and(|number| number != 1);
        if wrong && fitted != Fit::No {
            Fit::Suffix
        } else {
            fitted
        }
    });
    if taken == Fit::No && first.optional {
        fit(rest, header, suffix)
    } else {
        taken
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::scpi::parse::{Header, Message};

    fn check(pattern: &str, header: &str) -> Fit {
        let unit = Message::new(header.as_bytes().to_vec())
            .next_unit()
            .unwrap()
            .unwrap();
        let Header::Path(nodes) = unit.header else {
            panic!("{header}")
        };
        Pattern::new(pattern).fit(&nodes)
    }

    #[test]
    fn forms_and_optional_nodes() {
        let pattern = "[SOURce]:FREQuency:[CW|FIXed]";
        for header in [
            "FREQ",
            "freq:cw",
            "SOUR:FREQ",
            "SOURCE:FREQUENCY:FIXED",
            "SOUR1:FREQ:FIX",
        ] {
            assert_eq!(check(pattern, header), Fit::Yes(1), "{header}");
        }
        for header in ["FREQU", "SOUR", "FREQ:CW:X", "CW", "SOURC:FREQ"] {
            assert_eq!(check(pattern, header), Fit::No, "{header}");
        }
        assert_eq!(check(pattern, "SOUR2:FREQ"), Fit::Suffix);
    }

    #[test]
    fn numeric_suffixes() {
        assert_eq!(check("INPut#:COUPling", "INP3:COUP"), Fit::Yes(3));
        assert_eq!(check("INPut#:COUPling", "INP:COUP"), Fit::Yes(1));
        assert_eq!(
            check("[SENSe#]:VOLTage:[DC]:RANGe:[UPPer]", "VOLT:RANG"),
            Fit::Yes(1)
        );
        assert_eq!(
            check(
                "[SENSe#]:VOLTage:[DC]:RANGe:[UPPer]",
                "SENS2:VOLT:DC:RANG:UPP"
            ),
            Fit::Yes(2)
        );
    }
}
