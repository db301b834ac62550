//! How text lies on the page: as wide as the terminal, wrapped with hanging indents, colour only where it shows.

use std::fmt::Write;
use std::io::{self, IsTerminal};

/// Columns where standard output is no terminal.
const COLUMNS: usize = 100;
/// Lines are neither squeezed below the one nor drawn out beyond the other: long lines are hard to read.
const NARROWEST: usize = 40;
const WIDEST: usize = 120;

/// What the text is written on. Colour is never the only sign of anything.
#[derive(Clone, Copy, Debug)]
pub(super) struct Page {
    /// Whether escape sequences may be written.
    pub(super) colour: bool,
    /// Characters in a line.
    pub(super) columns: usize,
}

impl Page {
    /// Standard output: colour only on a terminal that has it, and not where `NO_COLOR` asks for none.
    pub(super) fn standard_output() -> Page {
        let said = |name| std::env::var_os(name).filter(|value| !value.is_empty());
        let plain = said("NO_COLOR").is_some() || said("TERM").is_some_and(|terminal| terminal == "dumb");
        let columns = terminal_size::terminal_size_of(io::stdout())
            .map_or(COLUMNS, |(width, _)| usize::from(width.0).clamp(NARROWEST, WIDEST));
        Page { colour: !plain && io::stdout().is_terminal(), columns }
    }

    fn dress(self, code: &str, text: &str) -> String {
        if self.colour { format!("\x1b[{code}m{text}\x1b[0m") } else { text.to_owned() }
    }

    pub(super) fn plain(self, text: &str) -> String {
        text.to_owned()
    }

    pub(super) fn strong(self, text: &str) -> String {
        self.dress("1", text)
    }

    pub(super) fn warn(self, text: &str) -> String {
        self.dress("33", text)
    }

    pub(super) fn faint(self, text: &str) -> String {
        self.dress("2", text)
    }

    /// Writes `text` after `lead`, wrapped, the further lines `hang` columns in. Each is dressed apart, line by line, so
    /// that escape sequences count for nothing.
    pub(super) fn paragraph(self, out: &mut String, lead: Dressed<'_>, text: Dressed<'_>, hang: usize) {
        let (Dressed(lead, dress_lead), Dressed(text, dress)) = (lead, text);
        out.push_str(&dress_lead(self, lead));
        for (i, line) in wrapped(text, lead.chars().count(), hang, self.columns).iter().enumerate() {
            if i > 0 {
                let _ = write!(out, "\n{:hang$}", "");
            }
            out.push_str(&dress(self, line));
        }
        out.push('\n');
    }

    /// A table: the first column to the left, figures to the right, as far in as `indent` where there is room.
    pub(super) fn table(self, out: &mut String, rows: &[Vec<String>], indent: usize) {
        let columns = rows.iter().map(Vec::len).max().unwrap_or(0);
        let mut widths = vec![0; columns];
        for row in rows {
            for (width, cell) in widths.iter_mut().zip(row) {
                *width = (*width).max(cell.chars().count());
            }
        }
        let whole = widths.iter().sum::<usize>() + 2 * columns.saturating_sub(1);
        let indent = if indent + whole <= self.columns { indent } else { 2 };
        for row in rows {
            let mut line = " ".repeat(indent);
            for (i, (cell, width)) in row.iter().zip(&widths).enumerate() {
                let pad = " ".repeat(width - cell.chars().count());
                let _ = if i == 0 { write!(line, "{cell}{pad}") } else { write!(line, "  {pad}{cell}") };
            }
            let _ = writeln!(out, "{}", line.trim_end());
        }
    }

    /// Text of lines, each wrapped under its own indent.
    pub(super) fn lines(self, text: &str) -> String {
        let mut out = String::with_capacity(text.len());
        for line in text.lines() {
            let body = line.trim_start();
            let indent = line.len() - body.len();
            self.paragraph(
                &mut out,
                Dressed(&line[..indent], Page::plain),
                Dressed(body, Page::plain),
                indent + 2,
            );
        }
        out
    }
}

/// A text and how it is shown.
#[derive(Clone, Copy)]
pub(super) struct Dressed<'a>(pub(super) &'a str, pub(super) fn(Page, &str) -> String);

/// Cuts a text into lines of at most `columns`, of which the first has `first` taken already and the others `hang`.
/// A word too long for a line sticks out; a number keeps its unit.
fn wrapped(text: &str, first: usize, hang: usize, columns: usize) -> Vec<String> {
    let mut lines = vec![String::new()];
    let mut taken = first;
    let mut words = text.split_whitespace().peekable();
    while let Some(word) = words.next() {
        let mut piece = word.to_owned();
        if piece.ends_with(|last: char| last.is_ascii_digit())
            && let Some(unit) = words.next_if(|next| is_unit(next))
        {
            piece.push(' ');
            piece.push_str(unit);
        }
        let length = piece.chars().count();
        let Some(line) = lines.last_mut() else { break };
        if line.is_empty() {
            line.push_str(&piece);
            taken += length;
        } else if taken + 1 + length <= columns {
            line.push(' ');
            line.push_str(&piece);
            taken += 1 + length;
        } else {
            lines.push(piece);
            taken = hang + length;
        }
    }
    lines
}

/// A unit of [`crate::say::duration`], with what punctuation follows it.
fn is_unit(word: &str) -> bool {
    let bare = word.trim_end_matches(|last: char| last.is_ascii_punctuation());
    matches!(bare, "d" | "h" | "min" | "s" | "ms" | "µs")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wraps_under_the_hang_and_keeps_units() {
        assert_eq!(
            wrapped("give up after 75.5 ms; no later", 4, 2, 20),
            ["give up after", "75.5 ms; no later"]
        );
        assert_eq!(wrapped("", 0, 0, 20), [""]);
        assert_eq!(wrapped("a_word_far_too_long_for_it b", 0, 0, 10), ["a_word_far_too_long_for_it", "b"]);
        // 20 characters fill 20 columns exactly.
        assert_eq!(wrapped("twelve chars at last", 0, 0, 20), ["twelve chars at last"]);
    }

    #[test]
    fn escape_sequences_take_no_room() {
        let text = "waits that were cut off at the edge of sight";
        let [plain, coloured] = [false, true].map(|colour| {
            let mut out = String::new();
            let page = Page { colour, columns: 24 };
            page.paragraph(&mut out, Dressed("  ! code: ", Page::warn), Dressed(text, Page::strong), 4);
            out
        });
        assert_eq!(plain, "  ! code: waits that\n    were cut off at the\n    edge of sight\n");
        let bare = coloured.replace("\x1b[33m", "").replace("\x1b[1m", "").replace("\x1b[0m", "");
        assert_eq!(bare, plain);
        assert!(coloured.lines().all(|line| line.ends_with("\x1b[0m")), "{coloured:?}");
    }

    #[test]
    fn lines_keep_their_indent() {
        let page = Page { colour: false, columns: 20 };
        assert_eq!(
            page.lines("head\n\n  a sentence that is long"),
            "head\n\n  a sentence that is\n    long\n"
        );
    }
}
