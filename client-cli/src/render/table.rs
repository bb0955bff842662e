//! Tables without boxes: a head, a thin rule, rows. What does not fit is wrapped; what cannot be wrapped is stacked.

use super::text::{Page, Style, View, pad_left, pad_right, visible_width, wrap};

/// Blanks between columns.
const GAP: usize = 2;
/// A column of words is never squeezed below this.
const WORDS_MIN: usize = 10;

/// What a column holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// Words, to the left; may be wrapped.
    Words,
    /// Names and numbers in one piece, to the left.
    Name,
    /// Numbers, to the right.
    Number,
}

/// Rows of cells under titles.
#[derive(Debug, Clone)]
pub struct Table {
    columns: Vec<(String, Kind)>,
    rows: Vec<Vec<String>>,
}

impl Table {
    /// A table without rows.
    pub fn new(columns: &[(&str, Kind)]) -> Self {
        Self {
            columns: columns
                .iter()
                .map(|(title, kind)| ((*title).to_owned(), *kind))
                .collect(),
            rows: Vec::new(),
        }
    }

    /// Adds a row; missing cells are empty, cells beyond the last column are dropped.
    pub fn row(&mut self, mut cells: Vec<String>) {
        cells.resize(self.columns.len(), String::new());
        self.rows.push(cells);
    }

    /// Whether there is no row.
    pub fn is_empty(&self) -> bool {
        self.rows.is_empty()
    }

    /// Columns that the table needs to stand side by side without wrapping.
    pub fn natural_width(&self) -> usize {
        let widths = self.natural_widths();
        widths.iter().sum::<usize>() + GAP * widths.len().saturating_sub(1)
    }

    /// Drops the named columns, one after the other, until the table fits into `room` without wrapping.
    pub fn drop_until_it_fits(&mut self, room: usize, droppable: &[&str]) {
        for title in droppable {
            if self.natural_width() <= room {
                return;
            }
            let Some(column) = self.columns.iter().position(|(known, _)| known == title) else {
                continue;
            };
            self.columns.remove(column);
            for row in &mut self.rows {
                row.remove(column);
            }
        }
    }

    fn natural_widths(&self) -> Vec<usize> {
        self.columns
            .iter()
            .enumerate()
            .map(|(column, (title, _))| {
                self.rows
                    .iter()
                    .filter_map(|row| row.get(column))
                    .map(|cell| visible_width(cell))
                    .chain([visible_width(title)])
                    .max()
                    .unwrap_or(0)
            })
            .collect()
    }

    /// Widths that fit into `room`, or nothing where the table must be stacked.
    fn fitted_widths(&self, room: usize) -> Option<Vec<usize>> {
        let mut widths = self.natural_widths();
        let gaps = GAP * widths.len().saturating_sub(1);
        loop {
            let total = widths.iter().sum::<usize>() + gaps;
            if total <= room {
                return Some(widths);
            }
            let widest = widths
                .iter_mut()
                .zip(&self.columns)
                .filter(|(width, (_, kind))| *kind == Kind::Words && **width > WORDS_MIN)
                .max_by_key(|(width, _)| **width)
                .map(|(width, _)| width)?;
            *widest = widest.saturating_sub(total - room).max(WORDS_MIN);
        }
    }

    /// Writes the table, `indent` columns from the left.
    pub fn write(&self, page: &mut Page, indent: usize) {
        let view = page.view();
        match self.fitted_widths(view.width.saturating_sub(indent)) {
            Some(widths) => self.write_columns(page, indent, &widths),
            None => self.write_stacked(page, indent),
        }
    }

    fn write_columns(&self, page: &mut Page, indent: usize, widths: &[usize]) {
        let view = page.view();
        let titles: Vec<String> = self
            .columns
            .iter()
            .map(|(title, _)| view.paint(Style::Quiet, title))
            .collect();
        self.write_row(page, indent, widths, &titles);
        let rule = widths.iter().sum::<usize>() + GAP * widths.len().saturating_sub(1);
        let rule = view.paint(Style::Quiet, &"─".repeat(rule));
        page.line(&format!("{}{rule}", " ".repeat(indent)));
        for row in &self.rows {
            self.write_row(page, indent, widths, row);
        }
    }

    fn write_row(&self, page: &mut Page, indent: usize, widths: &[usize], cells: &[String]) {
        let wrapped: Vec<Vec<String>> = cells
            .iter()
            .zip(widths)
            .map(|(cell, width)| {
                if visible_width(cell) <= *width {
                    vec![cell.clone()]
                } else {
                    wrap(cell, *width, "", "")
                }
            })
            .collect();
        let height = wrapped.iter().map(Vec::len).max().unwrap_or(0);
        for line in 0..height {
            let mut text = " ".repeat(indent);
            for ((lines, width), (_, kind)) in wrapped.iter().zip(widths).zip(&self.columns) {
                let piece = lines.get(line).map_or("", String::as_str);
                text.push_str(&match kind {
                    Kind::Number => pad_left(piece, *width),
                    Kind::Words | Kind::Name => pad_right(piece, *width),
                });
                text.push_str(&" ".repeat(GAP));
            }
            page.line(&text);
        }
    }

    fn write_stacked(&self, page: &mut Page, indent: usize) {
        let label_width = self
            .columns
            .iter()
            .map(|(title, _)| visible_width(title))
            .max()
            .unwrap_or(0);
        for row in &self.rows {
            page.gap();
            for ((title, _), cell) in self.columns.iter().zip(row) {
                if !cell.is_empty() {
                    page.labelled(indent, title, label_width, cell);
                }
            }
        }
    }

    /// The table as text.
    pub fn to_text(&self, view: View) -> String {
        let mut page = Page::new(view);
        self.write(&mut page, 0);
        page.finish()
    }
}

/// Pads numbers of one column to the same width, so that equal decimals stand under each other.
pub fn aligned(numbers: &[Option<f64>], decimals: usize) -> Vec<String> {
    let texts: Vec<String> = numbers
        .iter()
        .map(|number| number.map_or_else(String::new, |value| fixed(value, decimals)))
        .collect();
    let width = texts.iter().map(String::len).max().unwrap_or(0);
    texts.iter().map(|text| pad_left(text, width)).collect()
}

/// A number with a fixed count of decimals, never `-0.00`.
pub fn fixed(value: f64, decimals: usize) -> String {
    let text = format!("{value:.decimals$}");
    let is_zero = text.chars().all(|c| matches!(c, '-' | '0' | '.'));
    if is_zero {
        text.trim_start_matches('-').to_owned()
    } else {
        text
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn sample() -> Table {
        let mut table = Table::new(&[
            ("name", Kind::Name),
            ("reason", Kind::Words),
            ("kJ/mol", Kind::Number),
        ]);
        table.row(vec![
            "I".into(),
            "a reason of several words".into(),
            "1.00".into(),
        ]);
        table.row(vec!["II".into(), "short".into(), "-12.50".into()]);
        table
    }

    #[test]
    fn columns_line_up_and_words_wrap_inside_theirs() {
        let table = sample();
        assert_eq!(table.natural_width(), 4 + 2 + 25 + 2 + 6);
        let wide = table.to_text(View::plain(80));
        assert_eq!(wide.lines().count(), 4);
        let ends: Vec<usize> = wide.lines().map(visible_width).collect();
        assert!(ends.iter().all(|end| *end == table.natural_width()));

        let mut page = Page::new(View {
            width: 28,
            colour: false,
        });
        table.write(&mut page, 0);
        let narrow = page.finish();
        assert!(narrow.lines().all(|line| visible_width(line) <= 28));
        assert!(narrow.lines().count() > 4);
    }

    #[test]
    fn what_cannot_be_squeezed_is_stacked() {
        let mut table = Table::new(&[("record", Kind::Name), ("form", Kind::Name)]);
        table.row(vec![
            "records/0123456789abcdef0123456789abcdef".into(),
            "II".into(),
        ]);
        let text = table.to_text(View::plain(40));
        assert!(text.lines().all(|line| visible_width(line) <= 40));
        assert!(text.contains("form   II"));
    }

    #[test]
    fn columns_are_dropped_in_the_given_order_and_no_more_than_needed() {
        let mut table = sample();
        table.drop_until_it_fits(39, &["reason", "kJ/mol"]);
        assert_eq!(table.natural_width(), 39);
        table.drop_until_it_fits(38, &["no such column", "reason", "kJ/mol"]);
        let text = table.to_text(View::plain(80));
        assert!(!text.contains("reason") && text.contains("-12.50"));
    }

    #[test]
    fn aligned_numbers_have_their_points_under_each_other() {
        let texts = aligned(&[Some(1.0), Some(-123.456), None, Some(-0.001)], 2);
        assert_eq!(texts, ["   1.00", "-123.46", "       ", "   0.00"]);
    }
}
