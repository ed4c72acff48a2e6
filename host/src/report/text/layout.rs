//! Lines of text: headings, wrapped paragraphs, labelled values, tables. Widths count characters.

/// Columns a line may take.
pub(crate) const WIDTH: usize = 100;
/// Indent of everything under a heading.
const INDENT: usize = 2;
/// Column where the value of a label begins.
const VALUE_COLUMN: usize = 20;

/// Characters of `text`.
pub(crate) fn width(text: &str) -> usize {
    text.chars().count()
}

/// A heading across the page: `── Title ─────`.
pub(crate) fn heading(title: &str) -> String {
    let rule = "─".repeat(WIDTH.saturating_sub(width(title) + 4));
    format!("── {title} {rule}")
}

/// `text` wrapped at [`WIDTH`]: the first line begins with `first` (padded to `hang`), the others are
/// indented by `hang`. Words longer than a line stay whole.
fn wrap(first: &str, hang: usize, text: &str) -> String {
    let mut lines = String::new();
    let mut line = format!("{first:<hang$}");
    let mut is_empty = true;
    for word in text.split_whitespace() {
        if !is_empty && width(&line) + 1 + width(word) > WIDTH {
            lines.push_str(line.trim_end());
            lines.push('\n');
            line = " ".repeat(hang);
            is_empty = true;
        }
        if !is_empty {
            line.push(' ');
        }
        line.push_str(word);
        is_empty = false;
    }
    lines.push_str(line.trim_end());
    lines.push('\n');
    lines
}

/// A paragraph under a heading.
pub(crate) fn paragraph(text: &str) -> String {
    wrap("", INDENT, text)
}

/// One item of a list.
pub(crate) fn item(text: &str) -> String {
    wrap("  -", INDENT + 2, text)
}

/// What belongs to the line above it.
pub(crate) fn detail(text: &str) -> String {
    wrap("", 2 * INDENT, text)
}

/// A label and its value.
pub(crate) fn labelled(label: &str, value: &str) -> String {
    wrap(&format!("{:INDENT$}{label}", ""), VALUE_COLUMN, value)
}

/// Where a column's text stands.
#[derive(Clone, Copy, PartialEq, Eq)]
pub(crate) enum Align {
    /// Words.
    Left,
    /// Numbers.
    Right,
}

/// A table with a header line; columns are as wide as their widest cell. Long cells are not wrapped.
pub(crate) fn table(columns: &[(&str, Align)], rows: &[Vec<String>]) -> String {
    let widths: Vec<usize> = columns
        .iter()
        .enumerate()
        .map(|(index, (title, _))| {
            let cells = rows.iter().filter_map(|row| row.get(index)).map(|cell| width(cell));
            cells.chain([width(title)]).max().unwrap_or(0)
        })
        .collect();
    let line = |cells: Vec<&str>| {
        let mut text = " ".repeat(INDENT);
        for (((cell, (_, align)), size), index) in cells.iter().zip(columns).zip(&widths).zip(0..) {
            let gap = if index == 0 { "" } else { "  " };
            let cell = match align {
                Align::Left => format!("{gap}{cell:<size$}"),
                Align::Right => format!("{gap}{cell:>size$}"),
            };
            text.push_str(&cell);
        }
        format!("{}\n", text.trim_end())
    };
    let mut text = line(columns.iter().map(|(title, _)| *title).collect());
    for row in rows {
        text.push_str(&line(row.iter().map(String::as_str).collect()));
    }
    text
}

/// A table that leaves columns out, in the order of `droppable`, until it fits the page.
pub(crate) fn fitting_table(columns: &[(&str, Align)], rows: &[Vec<String>], droppable: &[usize]) -> String {
    let mut text = table(columns, rows);
    for dropped in 1..=droppable.len() {
        if text.lines().all(|line| width(line) <= WIDTH) {
            break;
        }
        let is_kept = |index: &usize| !droppable.iter().take(dropped).any(|dropped| dropped == index);
        let kept: Vec<usize> = (0..columns.len()).filter(is_kept).collect();
        let kept_columns: Vec<_> = kept.iter().filter_map(|&index| columns.get(index).copied()).collect();
        let kept_rows: Vec<Vec<String>> = rows
            .iter()
            .map(|row| kept.iter().filter_map(|&index| row.get(index).cloned()).collect())
            .collect();
        text = table(&kept_columns, &kept_rows);
    }
    text
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn paragraphs_keep_to_the_width_and_lose_no_word() {
        let words = "µV/√Hz ± word ".repeat(60);
        let text = paragraph(&words);
        assert!(text.lines().all(|line| width(line) <= WIDTH && line.starts_with("  ")));
        assert_eq!(text.split_whitespace().count(), words.split_whitespace().count());
    }

    #[test]
    fn tables_align_by_characters_not_bytes() {
        let columns = [("name", Align::Left), ("value", Align::Right)];
        let text = table(&columns, &[vec!["µ".into(), "1".into()], vec!["aa".into(), "1000000".into()]]);
        let lengths: Vec<_> = text.lines().map(width).collect();
        assert_eq!(lengths, [15, 15, 15]);
    }

    #[test]
    fn a_table_too_wide_gives_up_the_columns_it_may() {
        let columns = [("keep", Align::Left), ("first", Align::Left), ("second", Align::Left)];
        let rows = [vec!["x".repeat(40), "y".repeat(40), "z".repeat(40)]];
        let text = fitting_table(&columns, &rows, &[2, 1]);
        assert!(text.contains("first") && !text.contains("second"), "{text}");
        assert!(text.lines().all(|line| width(line) <= WIDTH));
    }

    #[test]
    fn headings_fill_the_page() {
        assert_eq!(width(&heading("Limits")), WIDTH);
    }
}
