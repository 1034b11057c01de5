//! Writes SVG elements: escaping, short numbers, text anchors.
//! Owns the syntax; never decides what is drawn or where.

use std::fmt::Write;

use crate::report::palette::INK;

/// Where a text is held.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Anchor {
    /// At its left end.
    Start,
    /// At its middle.
    Middle,
    /// At its right end.
    End,
}

/// How a text looks.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Pen {
    /// Height of the letters, pixels.
    pub size: f64,
    /// Colour.
    pub colour: &'static str,
    /// Heavy letters.
    pub bold: bool,
    /// Which end stands at the place given.
    pub anchor: Anchor,
}

impl Pen {
    /// Ordinary letters in ink.
    pub const fn new(size: f64, anchor: Anchor) -> Self {
        Self {
            size,
            colour: INK,
            bold: false,
            anchor,
        }
    }
}

/// Elements of one drawing, in painting order.
#[derive(Debug, Default)]
pub struct Canvas {
    body: String,
}

impl Canvas {
    /// Elements written by the caller, as they are.
    pub fn raw(&mut self, element: &str) {
        self.body.push_str(element);
        self.body.push('\n');
    }

    /// A rectangle; `style` holds further attributes.
    pub fn rect(&mut self, (x, y): (f64, f64), (width, height): (f64, f64), style: &str) {
        let (x, y, width, height) = (short(x), short(y), short(width), short(height));
        self.raw(&format!(
            r#"<rect x="{x}" y="{y}" width="{width}" height="{height}" {style}/>"#
        ));
    }

    /// A straight line.
    pub fn line(&mut self, from: (f64, f64), to: (f64, f64), style: &str) {
        self.path(&[vec![from, to]], style);
    }

    /// Open strokes, each a row of places.
    pub fn path(&mut self, strokes: &[Vec<(f64, f64)>], style: &str) {
        let mut data = String::new();
        for stroke in strokes {
            for (index, (x, y)) in stroke.iter().enumerate() {
                let command = if index == 0 { 'M' } else { 'L' };
                let _ = write!(data, "{command}{} {}", short(*x), short(*y));
            }
        }
        if !data.is_empty() {
            self.raw(&format!(r#"<path d="{data}" fill="none" {style}/>"#));
        }
    }

    /// A circle.
    pub fn circle(&mut self, (x, y): (f64, f64), radius: f64, style: &str) {
        let (x, y, radius) = (short(x), short(y), short(radius));
        self.raw(&format!(
            r#"<circle cx="{x}" cy="{y}" r="{radius}" {style}/>"#
        ));
    }

    /// A text on its baseline.
    pub fn text(&mut self, (x, y): (f64, f64), pen: Pen, text: &str) {
        self.letters(&format!(r#"x="{}" y="{}""#, short(x), short(y)), pen, text);
    }

    /// A text reading upwards, on its baseline.
    pub fn text_upwards(&mut self, (x, y): (f64, f64), pen: Pen, text: &str) {
        let place = format!(
            r#"transform="translate({} {}) rotate(-90)""#,
            short(x),
            short(y)
        );
        self.letters(&place, pen, text);
    }

    fn letters(&mut self, place: &str, pen: Pen, text: &str) {
        let anchor = match pen.anchor {
            Anchor::Start => "start",
            Anchor::Middle => "middle",
            Anchor::End => "end",
        };
        let weight = if pen.bold {
            r#" font-weight="bold""#
        } else {
            ""
        };
        let (size, colour, text) = (short(pen.size), pen.colour, escaped(text));
        self.raw(&format!(
            r#"<text {place} font-size="{size}" fill="{colour}" text-anchor="{anchor}"{weight}>{text}</text>"#
        ));
    }

    /// The whole drawing; `title` is what a screen reader says.
    pub fn finish(self, width: f64, height: f64, title: &str) -> String {
        let (width, height, title) = (short(width), short(height), escaped(title));
        format!(
            "<svg xmlns=\"http://www.w3.org/2000/svg\" width=\"{width}\" height=\"{height}\" \
             viewBox=\"0 0 {width} {height}\" role=\"img\" \
             font-family=\"'DejaVu Sans', Verdana, Helvetica, Arial, sans-serif\">\n\
             <title>{title}</title>\n\
             <rect width=\"100%\" height=\"100%\" fill=\"#ffffff\"/>\n{}</svg>\n",
            self.body
        )
    }
}

/// A pixel place with at most two decimals; what is not finite would make the file invalid and becomes 0.
pub fn short(value: f64) -> String {
    if !value.is_finite() {
        return "0".to_owned();
    }
    // Far outside the picture nothing is seen, and renderers work in f32.
    let text = format!("{:.2}", value.clamp(-1e5, 1e5));
    let text = text.trim_end_matches('0').trim_end_matches('.');
    if text == "-0" { "0" } else { text }.to_owned()
}

/// Text for XML: marks escaped, control characters (which XML 1.0 forbids) replaced.
pub fn escaped(text: &str) -> String {
    let mut safe = String::with_capacity(text.len());
    for letter in text.chars() {
        match letter {
            '&' => safe.push_str("&amp;"),
            '<' => safe.push_str("&lt;"),
            '>' => safe.push_str("&gt;"),
            '"' => safe.push_str("&quot;"),
            '\u{fffe}' | '\u{ffff}' => safe.push('\u{fffd}'),
            letter if letter.is_control() => safe.push(' '),
            letter => safe.push(letter),
        }
    }
    safe
}

/// Width of a text in pixels, near enough to leave room for it: the advance widths of DejaVu Sans in classes.
pub fn text_width(text: &str, pen: Pen) -> f64 {
    let advance = |letter: char| match letter {
        ' ' | '.' | ',' | ':' | ';' | 'i' | 'j' | 'l' | '|' | '\u{a0}' => 0.32,
        'f' | 'r' | 't' | '(' | ')' | '/' | '-' | 'I' => 0.41,
        'm' | 'w' | 'M' | 'W' | '%' | '\u{2026}' => 0.98,
        '±' | '\u{2212}' | '<' | '>' | '=' | '+' => 0.84,
        letter if letter.is_uppercase() => 0.72,
        letter if (letter as u32) >= 0x2e80 => 1.0,
        _ => 0.63,
    };
    let weight = if pen.bold { 1.1 } else { 1.0 };
    text.chars().map(advance).sum::<f64>() * pen.size * weight
}

/// Lines no wider than `room` pixels, broken at ordinary spaces; at most `most`, the last then ends in "…".
pub fn fold(text: &str, pen: Pen, room: f64, most: usize) -> Vec<String> {
    let mut lines: Vec<String> = Vec::new();
    for word in text.split([' ', '\n', '\t']) {
        match lines.last_mut() {
            Some(line) if text_width(&format!("{line} {word}"), pen) <= room => {
                line.push(' ');
                line.push_str(word);
            }
            _ => lines.push(word.to_owned()),
        }
    }
    if lines.len() > most {
        lines.truncate(most);
        if let Some(line) = lines.last_mut() {
            line.push('…');
        }
    }
    for line in &mut lines {
        while text_width(line, pen) > room && line.chars().count() > 2 {
            line.pop();
            line.pop();
            line.push('…');
        }
    }
    lines
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_are_short_and_always_numbers() {
        assert_eq!(short(1.0), "1");
        assert_eq!(short(-0.001), "0");
        assert_eq!(short(12.345), "12.35");
        assert_eq!(short(f64::NAN), "0");
        assert_eq!(short(1e300), "100000");
    }

    #[test]
    fn text_is_escaped_and_folded() {
        assert_eq!(escaped("a<b & \"c\"\u{1}"), "a&lt;b &amp; &quot;c&quot; ");
        let pen = Pen::new(10.0, Anchor::Start);
        assert_eq!(fold("one two", pen, 30.0, 2), ["one", "two"]);
        assert_eq!(fold("one two three", pen, 45.0, 2), ["one two", "three"]);
        assert_eq!(fold("one two three", pen, 45.0, 1), ["one t…"]);
        assert!(text_width(&fold(&"x".repeat(99), pen, 45.0, 2)[0], pen) <= 45.0);
    }
}
