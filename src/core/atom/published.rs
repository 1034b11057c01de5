//! Reads the published tables of `testdata/atom` for the tests of this module. Test code only.

/// Rows of a table by column name; `#` lines are left out.
pub(super) struct Table {
    columns: Vec<String>,
    rows: Vec<Vec<String>>,
}

impl Table {
    pub(super) fn read(text: &str) -> Table {
        let mut lines = text
            .lines()
            .filter(|line| !line.starts_with('#') && !line.is_empty())
            .map(cells);
        Table {
            columns: lines.next().unwrap(),
            rows: lines.collect(),
        }
    }

    pub(super) fn rows(&self) -> impl Iterator<Item = Row<'_>> {
        assert!(!self.rows.is_empty());
        self.rows.iter().map(|cells| Row {
            columns: &self.columns,
            cells,
        })
    }
}

pub(super) struct Row<'a> {
    columns: &'a [String],
    cells: &'a [String],
}

impl Row<'_> {
    pub(super) fn text(&self, column: &str) -> &str {
        let at = self.columns.iter().position(|c| c == column);
        &self.cells[at.unwrap_or_else(|| panic!("no column {column}"))]
    }

    pub(super) fn number(&self, column: &str) -> f64 {
        let text = self.text(column);
        text.parse()
            .unwrap_or_else(|_| panic!("{column}: {text} is no number"))
    }
}

/// One value of check_values.csv.
pub(super) fn check_value(group: &str, quantity: &str) -> f64 {
    let table = Table::read(include_str!("../testdata/atom/check_values.csv"));
    let found = table
        .rows()
        .find(|row| row.text("group") == group && row.text("quantity") == quantity);
    found
        .unwrap_or_else(|| panic!("no {quantity} in group {group}"))
        .number("value")
}

fn cells(line: &str) -> Vec<String> {
    let mut cells = vec![String::new()];
    let mut quoted = false;
    for letter in line.chars() {
        match letter {
            '"' => quoted = !quoted,
            ',' if !quoted => cells.push(String::new()),
            other => cells.last_mut().unwrap().push(other),
        }
    }
    cells
}
