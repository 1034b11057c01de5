//! The answer under the panels, in two columns, each number with as many digits as its uncertainty bears.
//! Owns the caption; takes every wording from `wording` and `terminal`.

use super::canvas::{Anchor, Canvas, Pen, fold};
use crate::report::palette::{FAINT, INK};
use crate::report::picture::ScanPicture;
use crate::report::terminal::{chi_square, sigma_over_scatter};
use crate::report::wording::worded;

const NAME: Pen = Pen {
    colour: FAINT,
    ..Pen::new(17.0, Anchor::Start)
};
const VALUE: Pen = Pen {
    bold: true,
    ..Pen::new(17.0, Anchor::Start)
};
const NOTE: Pen = Pen {
    colour: FAINT,
    ..Pen::new(15.0, Anchor::Start)
};
const MARGIN: f64 = 30.0;
/// From the start of a name to the start of its value.
const NAME_ROOM: f64 = 172.0;

struct Item {
    name: String,
    value: Vec<String>,
    note: Vec<String>,
    pen: Pen,
}

impl Item {
    fn new(name: &str, value: &str, note: Option<&str>, pen: Pen, room: f64) -> Self {
        // Lines break before a ± and its number, never between them.
        let value = value.replace("± ", "±\u{a0}").replace(" (", "\u{a0}(");
        let note = note.map(|note| fold(note, NOTE, room, 3));
        Self {
            name: name.to_owned(),
            value: fold(&value, pen, room, 3),
            note: note.unwrap_or_default(),
            pen,
        }
    }

    fn height(&self) -> f64 {
        let lines = self.value.len() as f64 * 23.0;
        lines + self.note.len() as f64 * 20.0 + 9.0
    }
}

/// Draws the caption below `top` and returns where it ends.
pub fn draw(canvas: &mut Canvas, picture: &ScanPicture, top: f64, width: f64) -> f64 {
    let column = (width - 2.0 * MARGIN) / 2.0;
    let items = items(picture, column - NAME_ROOM - 16.0);
    let style = format!(r#"stroke="{INK}" stroke-width="0.8" stroke-opacity="0.4""#);
    canvas.line((MARGIN, top - 14.0), (width - MARGIN, top - 14.0), &style);
    // Read down the first column, then down the second.
    let half = items.len().div_ceil(2);
    let mut ends = [top, top];
    for (index, item) in items.iter().enumerate() {
        let side = usize::from(index >= half);
        let left = MARGIN + side as f64 * column;
        let mut y = ends[side] + 17.0;
        canvas.text((left, y), NAME, &item.name);
        for line in &item.value {
            canvas.text((left + NAME_ROOM, y), item.pen, line);
            y += 23.0;
        }
        y -= 3.0;
        for line in &item.note {
            canvas.text((left + NAME_ROOM, y), NOTE, line);
            y += 20.0;
        }
        ends[side] += item.height();
    }
    ends[0].max(ends[1])
}

fn items(picture: &ScanPicture, room: f64) -> Vec<Item> {
    let answer = &picture.answer;
    let statements = answer.statements().into_iter().map(|(key, stated)| {
        let words = worded(stated);
        let pen = if words.known { VALUE } else { NOTE };
        let name = key.replace('_', " ");
        Item::new(&name, &words.text, words.qualifier.as_deref(), pen, room)
    });
    let mut items: Vec<Item> = statements.collect();
    let plain = Pen {
        bold: false,
        ..VALUE
    };
    items.push(Item::new(
        "chi-square",
        &chi_square(answer),
        None,
        plain,
        room,
    ));
    let flagged = picture.points.iter().filter(|point| point.flagged).count();
    let count = format!(
        "{} used of {}, {flagged} flagged",
        answer.used,
        picture.points.len()
    );
    items.push(Item::new("points", &count, None, plain, room));
    if let Some(ratio) = sigma_over_scatter(answer) {
        items.push(Item::new("fit sigma", &ratio, None, plain, room));
    }
    items
}
