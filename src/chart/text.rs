//! Text that fits: a width estimate no font in common use exceeds, wrapping, shortening, and lines of labels that
//! keep clear of each other.

/// Least distance between two labels, in em.
const GAP: f64 = 0.6;

/// Upper estimate of the width of a text, px. Never below 0.6 em a character.
pub(super) fn width(text: &str, size: f64) -> f64 {
    text.chars().map(em).sum::<f64>() * size
}

/// The same for bold text.
fn bold_width(text: &str, size: f64) -> f64 {
    let bold = |c: char| if em(c) > NARROW { 1.12 * em(c) } else { NARROW };
    text.chars().map(bold).sum::<f64>() * size
}

/// Characters narrower than this count as this wide, em.
const NARROW: f64 = 0.6;

fn em(c: char) -> f64 {
    match c {
        ' ' | '.' | ',' | ':' | ';' | '\'' | '|' | '!' | '(' | ')' | '[' | ']' | '-' | '/' => NARROW,
        'f' | 'i' | 'j' | 'l' | 'r' | 's' | 't' | 'I' => NARROW,
        'm' | 'w' | 'M' | 'W' | '@' | '%' => 1.0,
        'A'..='Z' => 0.8,
        c if c.is_ascii() => 0.64,
        c if c < '\u{1100}' => 0.8,
        '\u{2000}'..='\u{206f}' => 0.8,
        _ => 1.2,
    }
}

/// A text without anything a text may not hold in XML or that would turn its direction or break its line.
pub(super) fn plain(text: &str) -> String {
    let harmless = |c: char| match c {
        '\t' | '\n' | '\r' | '\u{2028}' | '\u{2029}' => ' ',
        c if c.is_control() => '\u{fffd}',
        '\u{fffe}' | '\u{ffff}' => '\u{fffd}',
        // Marks, embeddings, overrides and isolates of the bidirectional algorithm.
        '\u{200e}' | '\u{200f}' | '\u{061c}' | '\u{202a}'..='\u{202e}' | '\u{2066}'..='\u{2069}' => {
            '\u{fffd}'
        }
        c => c,
    };
    text.chars().map(harmless).collect()
}

/// A name short enough for a sentence.
pub(super) fn named(name: &str) -> String {
    let name = plain(name);
    match name.char_indices().nth(NAME) {
        Some((cut, _)) => format!("{}…", &name[..cut]),
        None => name,
    }
}

/// Longest name in a sentence, characters.
const NAME: usize = 48;

/// Cuts a text to a width, with an ellipsis in place of what was cut; empty where not even that has room.
pub(super) fn shorten(text: &str, size: f64, room: f64) -> String {
    if width(text, size) <= room {
        return text.into();
    }
    if width("…", size) > room {
        return String::new();
    }
    let mut left = room - width("…", size);
    let kept: String = text
        .chars()
        .take_while(|&c| {
            left -= em(c) * size;
            left >= 0.0
        })
        .collect();
    format!("{}…", kept.trim_end())
}

/// Breaks a text into lines that have room even in bold; a word longer than a line is cut in pieces, a number keeps
/// its unit.
pub(super) fn wrap(text: &str, size: f64, room: f64) -> Vec<String> {
    let mut lines = Vec::new();
    let mut line = String::new();
    for word in words(text) {
        let joined = if line.is_empty() { word.to_owned() } else { format!("{line} {word}") };
        if bold_width(&joined, size) <= room {
            line = joined;
            continue;
        }
        if !line.is_empty() {
            lines.push(std::mem::take(&mut line));
        }
        for c in word.chars() {
            line.push(c);
            if bold_width(&line, size) > room && line.chars().count() > 1 {
                line.pop();
                lines.push(std::mem::replace(&mut line, c.to_string()));
            }
        }
    }
    lines.push(line);
    lines
}

/// Words, where a number and its unit are one.
fn words(text: &str) -> Vec<String> {
    let mut words: Vec<String> = Vec::new();
    for word in text.split_whitespace() {
        let unit = word.trim_end_matches([';', ',', '.', ':', ')']);
        match words.last_mut() {
            Some(last) if last.ends_with(|c: char| c.is_ascii_digit()) && UNITS.contains(&unit) => {
                *last = format!("{last} {word}");
            }
            _ => words.push(word.to_owned()),
        }
    }
    words
}

/// What [`crate::say`] writes after a number.
const UNITS: [&str; 6] = ["µs", "ms", "s", "min", "h", "d"];

/// Places labels of given widths in a row, each as near its centre as the others allow. Labels come in the order of
/// their centres and keep it. Returns the centres.
pub(super) fn spread(labels: &[(f64, f64)], size: f64, from: f64, to: f64) -> Vec<f64> {
    let gap = GAP * size;
    let mut lefts: Vec<f64> = Vec::with_capacity(labels.len());
    let mut free = from;
    for &(centre, width) in labels {
        let left = (centre - width / 2.0).max(free);
        free = left + width + gap;
        lefts.push(left);
    }
    let mut limit = to;
    for (left, &(_, width)) in lefts.iter_mut().zip(labels).rev() {
        *left = left.min(limit - width);
        limit = *left - gap;
    }
    lefts.iter().zip(labels).map(|(left, (_, width))| left + width / 2.0).collect()
}

/// Whether labels at rising centres keep clear of each other.
pub(super) fn fits(labels: impl IntoIterator<Item = (f64, f64)>, size: f64) -> bool {
    let mut free = f64::NEG_INFINITY;
    labels.into_iter().all(|(centre, width)| {
        let clear = centre - width / 2.0 >= free;
        free = centre + width / 2.0 + GAP * size;
        clear
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn fits_what_it_is_given() {
        assert_eq!(shorten("catalogue.lookup", 10.0, 1000.0), "catalogue.lookup");
        assert!(width(&shorten("catalogue.lookup", 10.0, 50.0), 10.0) <= 50.0);
        let lines = wrap("After 80 ms only 1 in 10 is stillwaitingwithoutaspaceanywhere", 10.0, 90.0);
        assert!(lines.len() > 3 && lines.iter().all(|l| bold_width(l, 10.0) <= 90.0), "{lines:?}");
        assert_eq!(lines.concat().replace(' ', "").len(), 53);
        assert_eq!(words("in 57.4 ms; or so"), ["in", "57.4 ms;", "or", "so"]);
    }

    #[test]
    fn names_are_short() {
        assert_eq!(named("catalogue.lookup"), "catalogue.lookup");
        assert_eq!(named(&"µ".repeat(500)).chars().count(), NAME + 1);
        assert_eq!(shorten("catalogue", 10.0, 3.0), "");
    }

    #[test]
    fn spreads_in_order_without_overlap() {
        let labels = [(10.0, 40.0), (12.0, 30.0), (95.0, 20.0)];
        let centres = spread(&labels, 10.0, 0.0, 120.0);
        assert!(fits(centres.iter().copied().zip(labels.map(|(_, w)| w)), 9.9), "{centres:?}");
        assert!(centres[0] >= 20.0 && centres[2] <= 110.0);
    }

    #[test]
    fn leaves_nothing_that_breaks_markup_or_direction() {
        assert_eq!(plain("a\u{0}b\u{202e}c\nd\u{ffff}"), "a\u{fffd}b\u{fffd}c d\u{fffd}");
    }
}
