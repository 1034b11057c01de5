//! One entry of a command map: the words that set a property, ask for it, measure it, and how its answers
//! are read. Values outside are SI; the units inside the braces are the instrument's.

use std::collections::BTreeMap;

use darkline_core::quantity::Setting;
use darkline_core::quantity::unit::Unit;
use darkline_core::wire::number;

/// Text with at most one place in braces: `SOUR:CURR {A}`, `OUTP {switch}`, `INP{n}:COUP {word}`.
#[derive(Debug, Clone, PartialEq)]
pub struct Template {
    before: String,
    place: Option<Place>,
    after: String,
}

#[derive(Debug, Clone, Copy, PartialEq)]
enum Place {
    /// SI value = factor x number + offset.
    Number {
        factor: f64,
        offset: f64,
    },
    Whole,
    Switch,
    Word,
}

impl Template {
    /// Reads a template. `{n}`, a channel's number, is left standing for [`Entry::of_channel`].
    ///
    /// # Errors
    /// What is wrong with it, in words.
    pub fn parse(text: &str) -> Result<Self, String> {
        if text.contains(['\n', '\r']) {
            return Err("a message has no line ends of its own".to_owned());
        }
        let mut found: Option<(usize, usize, Place)> = None;
        let mut from = 0;
        while let Some(open) = text[from..].find('{').map(|at| from + at) {
            let close = text[open..]
                .find('}')
                .map(|at| open + at)
                .ok_or("a `{` has no `}`")?;
            let inner = &text[open + 1..close];
            if inner != "n" {
                if found.is_some() {
                    return Err("only one value stands in a message".to_owned());
                }
                found = Some((open, close, place(inner)?));
            }
            from = close + 1;
        }
        Ok(match found {
            Some((open, close, place)) => Self {
                before: text[..open].to_owned(),
                place: Some(place),
                after: text[close + 1..].to_owned(),
            },
            None => Self {
                before: text.to_owned(),
                place: None,
                after: String::new(),
            },
        })
    }

    /// Whether there is a place for a value.
    pub fn takes_value(&self) -> bool {
        self.place.is_some()
    }

    /// The words before the value, up to the first space: the header of IEEE 488.2.
    pub fn header(&self) -> &str {
        self.before.split(' ').next().unwrap_or_default()
    }

    fn fill(&self, value: &str) -> String {
        format!("{}{value}{}", self.before, self.after)
    }

    /// The value's part of an answer: what stands before and after it in the template is taken off.
    fn strip<'a>(&self, answer: &'a [u8]) -> Option<&'a [u8]> {
        let answer = answer.trim_ascii();
        let rest = answer.strip_prefix(self.before.as_bytes())?;
        rest.strip_suffix(self.after.as_bytes())
    }
}

fn place(inner: &str) -> Result<Place, String> {
    match inner {
        "whole" => Ok(Place::Whole),
        "switch" => Ok(Place::Switch),
        "word" => Ok(Place::Word),
        "number" => Ok(Place::Number {
            factor: 1.0,
            offset: 0.0,
        }),
        unit => match Unit::find(unit) {
            Some(unit) => Ok(Place::Number {
                factor: unit.factor,
                offset: unit.offset,
            }),
            None => Err(format!(
                "`{{{unit}}}` is neither a unit nor `number`, `whole`, `switch`, `word` or `n`"
            )),
        },
    }
}

/// The words for one property.
#[derive(Debug, Clone, PartialEq)]
pub struct Entry {
    /// Sets it; `None` where it cannot be set.
    pub say: Option<Template>,
    /// Asks what it is set to.
    pub readback: Option<String>,
    /// Asks for its measured value.
    pub measure: Option<String>,
    /// How the answers to both are read.
    pub hear: Template,
    /// Finest step of the readback, SI; 0 where not declared.
    pub resolution: f64,
    /// Writes that the instrument's memory is meant to bear in one session; `None` for any number.
    pub budget: Option<u64>,
    /// The instrument's words for ours.
    pub words: BTreeMap<String, String>,
}

impl Entry {
    /// The same, for one channel of several.
    pub fn of_channel(&self, number: u32) -> Self {
        let text = number.to_string();
        let put = |words: &String| words.replace("{n}", &text);
        let mut entry = self.clone();
        if let Some(say) = &mut entry.say {
            say.before = put(&say.before);
            say.after = put(&say.after);
        }
        entry.readback = entry.readback.as_ref().map(put);
        entry.measure = entry.measure.as_ref().map(put);
        entry
    }

    /// The message that sets it; `None` where it cannot be set, or not to such a value.
    pub fn write(&self, setting: Setting) -> Option<String> {
        let say = self.say.as_ref()?;
        let value = match (say.place?, setting) {
            (Place::Number { factor, offset }, Setting::Number(value)) => {
                number::print(tidy((value - offset) / factor))
            }
            (Place::Whole, Setting::Number(value)) => format!("{value:.0}"),
            (Place::Switch, Setting::Switch(on)) => self.switch_word(on),
            _ => return None,
        };
        Some(say.fill(&value))
    }

    /// The message that sets it to one of our words.
    pub fn write_word(&self, word: &str) -> Option<String> {
        let say = self.say.as_ref()?;
        match say.place? {
            Place::Word => Some(say.fill(self.words.get(word).map_or(word, String::as_str))),
            _ => None,
        }
    }

    /// Reads an answer; `None` where it is no such value.
    pub fn read(&self, answer: &[u8]) -> Option<Setting> {
        let value = self.hear.strip(answer)?;
        match self.hear.place? {
            Place::Number { factor, offset } => number::parse(value)
                .ok()
                .map(|number| Setting::Number(factor * number + offset)),
            Place::Whole => number::parse(value).ok().map(Setting::Number),
            Place::Switch => self.read_switch(value).map(Setting::Switch),
            Place::Word => None,
        }
    }

    /// Reads an answer as one of our words; one that the map does not list is given as it stands.
    pub fn read_word(&self, answer: &[u8]) -> Option<String> {
        let theirs = String::from_utf8(self.hear.strip(answer)?.trim_ascii().to_vec()).ok()?;
        let ours = self
            .words
            .iter()
            .find(|(_, word)| word.eq_ignore_ascii_case(&theirs))
            .map(|(ours, _)| ours.clone());
        Some(ours.unwrap_or(theirs))
    }

    fn switch_word(&self, on: bool) -> String {
        let (ours, usual) = if on { ("on", "1") } else { ("off", "0") };
        self.words
            .get(ours)
            .map_or(usual, String::as_str)
            .to_owned()
    }

    fn read_switch(&self, value: &[u8]) -> Option<bool> {
        let is = |ours: &str| {
            self.words
                .get(ours)
                .is_some_and(|word| word.as_bytes().eq_ignore_ascii_case(value))
        };
        match (is("on"), is("off")) {
            (true, _) => Some(true),
            (_, true) => Some(false),
            _ => number::parse_switch(value).ok(),
        }
    }
}

/// Fourteen significant digits: 80 degC as 80, not as 79.99999999999994.
fn tidy(value: f64) -> f64 {
    format!("{value:.13e}").parse().unwrap_or(value)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn entry(say: &str, hear: &str) -> Entry {
        Entry {
            say: Some(Template::parse(say).unwrap()),
            readback: None,
            measure: None,
            hear: Template::parse(hear).unwrap(),
            resolution: 0.0,
            budget: None,
            words: BTreeMap::new(),
        }
    }

    #[test]
    fn units_are_the_instruments() {
        let current = entry("SOUR:CURR {mA}", "CURR {mA} MA");
        let set = current.write(Setting::Number(-0.0203));
        assert_eq!(set.as_deref(), Some("SOUR:CURR -20.3"));
        assert_eq!(
            current.read(b"CURR -20.5 MA"),
            Some(Setting::Number(-0.0205))
        );
        assert_eq!(current.read(b"-20.5"), None);
        assert_eq!(current.write(Setting::Switch(true)), None);
        let temperature = entry("TEMP {degC}", "{degC}");
        assert_eq!(
            temperature.write(Setting::Number(353.15)).as_deref(),
            Some("TEMP 80")
        );
        assert_eq!(temperature.read(b"8.0E+01"), Some(Setting::Number(353.15)));
    }

    #[test]
    fn switches_and_words() {
        let mut output = entry("OUTP {switch}", "{switch}");
        assert_eq!(
            output.write(Setting::Switch(false)).as_deref(),
            Some("OUTP 0")
        );
        assert_eq!(output.read(b"ON"), Some(Setting::Switch(true)));
        output.words = [("on", "RUN"), ("off", "STOP")]
            .map(|(ours, theirs)| (ours.to_owned(), theirs.to_owned()))
            .into();
        assert_eq!(
            output.write(Setting::Switch(true)).as_deref(),
            Some("OUTP RUN")
        );
        assert_eq!(output.read(b"stop"), Some(Setting::Switch(false)));
        let mut coupling = entry("INP{n}:COUP {word}", "{word}").of_channel(3);
        coupling.words.insert("ground".to_owned(), "GND".to_owned());
        assert_eq!(
            coupling.write_word("ground").as_deref(),
            Some("INP3:COUP GND")
        );
        assert_eq!(coupling.read_word(b"gnd").as_deref(), Some("ground"));
    }

    #[test]
    fn wrong_templates_say_why() {
        for (text, why) in [
            ("CURR {A", "no `}`"),
            ("CURR {parsec}", "neither a unit"),
            ("CURR {A} {A}", "only one value"),
            ("CURR 1\nOUTP 1", "line ends"),
        ] {
            assert!(Template::parse(text).unwrap_err().contains(why), "{text}");
        }
    }
}
