//! Rows in columns.

use anstyle::Style;
use comfy_table::presets::NOTHING;
use comfy_table::{CellAlignment, ContentArrangement, Table};

/// A cell: its text, how it is shown, and on which side it stands.
#[derive(Clone, Debug, Default)]
pub struct Cell {
    text: String,
    style: Style,
    right: bool,
}

impl Cell {
    /// Text on the left.
    pub fn new(text: impl Into<String>) -> Self {
        Self { text: text.into(), ..Self::default() }
    }

    /// A number: on the right.
    pub fn number(text: impl Into<String>) -> Self {
        Self { text: text.into(), right: true, ..Self::default() }
    }

    /// The same in a style.
    #[must_use]
    pub fn styled(self, style: Style) -> Self {
        Self { style, ..self }
    }
}

impl From<&str> for Cell {
    fn from(text: &str) -> Self {
        Self::new(text)
    }
}

/// A table with a header, two blanks between the columns, `width` characters wide at most: long cells are wrapped.
/// Styles are written as escape sequences; whoever prints them strips them where they are not wanted.
pub fn table(header: &[&str], rows: &[Vec<Cell>], width: u16) -> String {
    let mut table = Table::new();
    table.load_style(NOTHING);
    table.set_content_arrangement(ContentArrangement::Dynamic).set_width(width);
    table.set_header(header.iter().map(|title| comfy_table::Cell::new(title.to_uppercase())));
    for row in rows {
        table.add_row(row.iter().map(|cell| {
            let side = if cell.right { CellAlignment::Right } else { CellAlignment::Left };
            comfy_table::Cell::new(&cell.text).set_alignment(side)
        }));
    }
    for column in table.column_iter_mut() {
        column.set_padding((0, 2));
    }
    paint(&table.to_string(), rows)
}

/// Paints each styled text where it stands. The table is laid out without styles first: escape sequences would count as
/// characters.
fn paint(text: &str, rows: &[Vec<Cell>]) -> String {
    let plain = Style::new();
    let mut out = String::with_capacity(text.len());
    let mut lines = text.lines();
    out.push_str(lines.next().unwrap_or_default().trim_end());
    out.push('\n');
    let mut rows = rows.iter().peekable();
    let mut current: Option<&Vec<Cell>> = None;
    for line in lines {
        // A wrapped cell goes on in the next line; a new row begins with its first cell.
        let begins = |row: &&Vec<Cell>| {
            row.first().is_some_and(|cell| {
                let word = cell.text.split_whitespace().next().unwrap_or_default();
                !word.is_empty() && line.starts_with(word)
            })
        };
        if current.is_none() || rows.peek().is_some_and(begins) {
            current = rows.next();
        }
        let mut painted = String::new();
        let mut rest = line.trim_end();
        for cell in current.into_iter().flatten().filter(|cell| cell.style != plain && !cell.text.is_empty()) {
            if let Some(at) = rest.find(cell.text.as_str()) {
                let (before, after) = rest.split_at(at);
                painted.push_str(before);
                painted.push_str(&format!("{}{}{}", cell.style.render(), cell.text, cell.style.render_reset()));
                rest = &after[cell.text.len()..];
            }
        }
        out.push_str(&painted);
        out.push_str(rest);
        out.push('\n');
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn columns_stand_under_their_titles_and_numbers_on_the_right() {
        let rows = vec![
            vec![Cell::new("W12"), Cell::number("+6.1 dB").styled(Style::new().bold()), Cell::new("good")],
            vec![Cell::new("W140"), Cell::number("0 dB"), Cell::new("good")],
        ];
        let text = table(&["cable", "drop", "quality"], &rows, 80);
        assert_eq!(text, "CABLE  DROP     QUALITY\nW12    \u{1b}[1m+6.1 dB\u{1b}[0m  good\nW140      0 dB  good\n");
    }

    #[test]
    fn long_cells_are_wrapped() {
        let rows = vec![vec![Cell::new("W12"), Cell::new("a reason that is much too long for one line of this table")]];
        let text = table(&["cable", "why"], &rows, 40);
        assert!(text.lines().count() > 2 && text.lines().all(|line| line.chars().count() <= 40), "{text}");
    }
}
