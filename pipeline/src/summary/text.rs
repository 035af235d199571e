//! Text from data: made visible, shortened, escaped for Markdown.

/// Longest cell id or value shown, in characters.
pub(super) const ID_LENGTH: usize = 60;
/// Longest sentence shown, in characters.
pub(super) const SENTENCE_LENGTH: usize = 600;

/// Whether a character shows nothing, changes the direction of what follows, or may not stand in XML 1.0.
fn is_invisible(c: char) -> bool {
    c.is_control()
        || matches!(c, '\u{ad}' | '\u{61c}' | '\u{180e}' | '\u{200b}'..='\u{200f}' | '\u{2028}'..='\u{202e}'
            | '\u{2060}'..='\u{206f}' | '\u{feff}' | '\u{fff9}'..='\u{fffb}' | '\u{fffe}' | '\u{ffff}')
}

/// The text with invisible characters written out (`\n`, `\u{202e}`) and cut to `longest` characters with an ellipsis.
pub(super) fn visible(text: &str, longest: usize) -> String {
    let mut shown = String::new();
    for c in text.chars().take(longest.saturating_add(1)) {
        if is_invisible(c) {
            shown.extend(c.escape_default());
        } else {
            shown.push(c);
        }
    }
    if shown.chars().count() > longest {
        shown = shown.chars().take(longest.saturating_sub(1)).collect();
        shown.push('…');
    }
    shown
}

/// A cell id as a figure shows it; one of blanks alone is said to be blank.
pub(super) fn id_visible(text: &str) -> String {
    if text.trim().is_empty() {
        "(blank)".into()
    } else {
        visible(text, ID_LENGTH)
    }
}

/// Visible text as one piece of inline Markdown that also stands within a table cell.
fn markdown(visible: &str) -> String {
    let characters: Vec<char> = visible.chars().collect();
    let mut escaped = String::with_capacity(visible.len() + 8);
    for (i, &c) in characters.iter().enumerate() {
        let neighbour = |j: Option<usize>| {
            j.and_then(|j| characters.get(j))
                .is_some_and(|c: &char| c.is_ascii_alphanumeric())
        };
        match c {
            '&' => escaped.push_str("&amp;"),
            '<' => escaped.push_str("&lt;"),
            '>' => escaped.push_str("&gt;"),
            // A backslash does not protect these in every renderer's tables.
            '|' => escaped.push_str("&#124;"),
            '`' => escaped.push_str("&#96;"),
            // Kept plain inside a word, where it means nothing, so that ids stay readable.
            '_' if neighbour(i.checked_sub(1)) && neighbour(Some(i + 1)) => escaped.push('_'),
            '\\' | '*' | '_' | '[' | ']' | '~' | '$' | '!' | '#' => {
                escaped.push('\\');
                escaped.push(c);
            }
            // No automatic link, no mention.
            ':' if characters.get(i + 1) == Some(&'/') => escaped.push_str("&#58;"),
            '@' => escaped.push_str("&#64;"),
            _ => escaped.push(c),
        }
    }
    escaped
}

/// A cell id, group, path or value as Markdown; an empty one is said to be empty.
pub(super) fn id_markdown(text: &str) -> String {
    if text.trim().is_empty() {
        return format!("(blank, {} characters)", text.chars().count());
    }
    markdown(visible(text, ID_LENGTH).trim())
}

/// A sentence as Markdown.
pub(super) fn sentence_markdown(text: &str) -> String {
    markdown(visible(text, SENTENCE_LENGTH).trim())
}

/// One row of a Markdown table from cells that are Markdown already.
pub(super) fn table_row<S: AsRef<str>>(cells: &[S]) -> String {
    let mut row = String::from("|");
    for cell in cells {
        row.push(' ');
        row.push_str(cell.as_ref());
        row.push_str(" |");
    }
    row.push('\n');
    row
}

/// Head of a Markdown table; `numeric` columns are flushed right.
pub(super) fn table_head(columns: &[(&str, bool)]) -> String {
    let names: Vec<&str> = columns.iter().map(|(name, _)| *name).collect();
    let rule: Vec<&str> = columns
        .iter()
        .map(|(_, numeric)| if *numeric { "---:" } else { "---" })
        .collect();
    table_row(&names) + &table_row(&rule)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn text_from_data_cannot_leave_its_table_cell() {
        let nasty = "a|b<b>`x`[y](z)\n\r\t\u{0}\u{202e}*c*_d_\\|e";
        let shown = id_markdown(nasty);
        assert!(
            !shown.contains(['|', '<', '>', '`', '\n', '\r', '\t', '\u{0}', '\u{202e}']),
            "{shown}"
        );
        assert!(
            shown.starts_with("a&#124;b&lt;b&gt;&#96;x&#96;\\[y\\](z)\\\\n"),
            "{shown}"
        );
        assert_eq!(id_markdown("L5_pyr_01"), "L5_pyr_01");
        assert_eq!(id_markdown("_a_"), "\\_a\\_");
        assert_eq!(id_markdown("http://x"), "http&#58;//x");
    }

    #[test]
    fn long_ids_end_in_an_ellipsis() {
        let shown = visible(&"x".repeat(300), ID_LENGTH);
        assert_eq!(shown.chars().count(), 60);
        assert!(shown.ends_with("x…"));
        assert_eq!(visible(&"y".repeat(60), ID_LENGTH), "y".repeat(60));
        assert_eq!(id_markdown(" "), "(blank, 1 characters)");
    }
}
