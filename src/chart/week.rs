//! A quantity by the hour of the week. The size of a square says how much; the worst hour has a ring and a word.

use plotters_backend::text_anchor::HPos;

use super::area::at;
use super::element::around;
use super::ink;
use super::scale::Scale;
use super::sheet::{MARGIN, Sample, Sheet, nothing, square, worst};
use super::text::{self, named};
use super::words::{Quantity, Spoken, sentences};
use super::{Frame, Svg, Table};
use crate::say;

const DAYS: [&str; 7] = ["Mon", "Tue", "Wed", "Thu", "Fri", "Sat", "Sun"];
/// From this width on, days have their sums beside them, px.
const SUMS_FROM: f64 = 480.0;

/// What [`week`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Week<'a> {
    /// Which waiting process, or what the sheet is about.
    pub stream: &'a str,
    /// What is added up, as in "most over-waited", e.g. `"over-waited"`.
    pub what: &'a str,
    /// How it is written.
    pub quantity: Quantity<'a>,
    /// Day (Monday first) by hour of day, not negative; NaN where there are no data.
    pub hours: &'a [[f64; 24]; 7],
    /// Whose hours, e.g. `"UTC"`.
    pub zone: &'a str,
}

/// Draws the hours of the week.
pub fn week(input: &Week<'_>, frame: &Frame<'_>) -> Svg {
    let facts = Facts::of(input);
    let Some((_, _, most)) = facts.most else {
        return nothing(
            input.stream,
            &format!("no hour of the week has data on what was {}", named(input.what)),
            frame,
        );
    };
    let mut sheet = Sheet::open(frame, input.stream, &facts.title());
    let font = sheet.font;
    sheet.remark(HPos::Left, &format!("hour of day, {}", named(input.zone)));
    let says = |value: f64| facts.unit.short(value);
    let sums: Vec<f64> = (0..7).map(|d| facts.day(d)).collect();
    let room = match sheet.width >= SUMS_FROM {
        true => sums.iter().map(|s| text::width(&says(*s), font)).fold(0.0, f64::max) + 10.0,
        false => 0.0,
    };
    let left = MARGIN + text::width("Wed", font) + 8.0;
    let cell = (sheet.right() - room - left) / 24.0;
    let height = cell.clamp(1.5 * font, 40.0);
    sheet.y += 1.4 * font;
    let hours_y = sheet.y;
    sheet.y += 0.6 * font;
    let upper_left = (left, sheet.y);
    sheet.y += 7.0 * height;
    // Sunday is at the bottom.
    let (across, up) = (Scale::linear(0.0, 24.0), Scale::linear(0.0, 7.0));
    let grid = sheet.paper.plot(upper_left, (left + 24.0 * cell, sheet.y), across, up);
    let middle = |d: usize, hour: usize| (hour as f64 + 0.5, 6.5 - d as f64);
    let every = [3, 6, 12].into_iter().find(|n| cell * *n as f64 >= text::width("18", font) + font);
    for hour in (0..24).step_by(every.unwrap_or(12)) {
        let (x, _) = grid.at(hour as f64 + 0.5, 0.0);
        sheet.paper.put(ink::SOFT.words((x, hours_y), HPos::Center, font, hour.to_string()));
    }
    let side_of = |value: f64| {
        let full = cell.min(height) - 4.0;
        let share = if most > 0.0 { (value / most).min(1.0) } else { 0.0 };
        if value > 0.0 { (full * share.sqrt()).max(1.5) } else { 0.0 }
    };
    for (d, name) in DAYS.iter().enumerate() {
        let (_, row) = middle(d, 0);
        grid.put(ink::GRID.path([(0.0, row), (24.0, row)]));
        let base = grid.at(0.0, row).1 + 0.35 * font;
        sheet.paper.put(ink::SOFT.words((left - 8.0, base), HPos::Right, font, *name));
        for hour in 0..24 {
            let place = middle(d, hour);
            match facts.value(d, hour) {
                None => grid.put(at(place) + ink::TICK.path(around([(-2.0, 2.0), (2.0, -2.0)]))),
                Some(value) if facts.is_most(d, hour) && value > 0.0 => worst(&grid, place, side_of(value)),
                Some(value) if value > 0.0 => {
                    grid.put(at(place) + square(ink::CELL, side_of(value) / 2.0));
                }
                Some(_) => {}
            }
        }
        if room > 0.0 {
            let place = (sheet.right(), base);
            sheet.paper.put(ink::SOFT.words(place, HPos::Right, font, says(sums[d])));
        }
    }
    let mut key = Vec::new();
    if most > 0.0 {
        key.push((Sample::Worst(side_of(most).min(font)), format!("most: {}", facts.named_most())));
        let (middle, quarter) = (most / 4.0, side_of(most / 4.0));
        key.push((Sample::Square(quarter.min(font)), says(middle)));
    }
    sheet.key(&key);
    sheet.y += 0.3 * font;
    sheet.paragraph(&facts.words());
    sheet.finish(&facts.summary(), facts.table())
}

struct Facts<'a> {
    input: &'a Week<'a>,
    most: Option<(usize, usize, f64)>,
    least: Option<(usize, usize, f64)>,
    missing: usize,
    unit: Spoken,
}

impl<'a> Facts<'a> {
    fn of(input: &'a Week<'a>) -> Facts<'a> {
        let unit = input.quantity.spoken(input.hours.iter().flatten().copied());
        let mut facts = Facts { input, most: None, least: None, missing: 0, unit };
        for d in 0..7 {
            for hour in 0..24 {
                let Some(value) = facts.value(d, hour) else {
                    facts.missing += 1;
                    continue;
                };
                if facts.most.is_none_or(|(_, _, most)| value > most) {
                    facts.most = Some((d, hour, value));
                }
                if facts.least.is_none_or(|(_, _, least)| value < least) {
                    facts.least = Some((d, hour, value));
                }
            }
        }
        facts
    }

    fn value(&self, d: usize, hour: usize) -> Option<f64> {
        let value = self.input.hours[d][hour];
        (!value.is_nan()).then(|| (value * self.unit.factor).clamp(0.0, 1e300))
    }

    fn day(&self, d: usize) -> f64 {
        (0..24).filter_map(|hour| self.value(d, hour)).sum()
    }

    fn is_most(&self, d: usize, hour: usize) -> bool {
        self.most.is_some_and(|(a, b, _)| (a, b) == (d, hour))
    }

    fn says(&self, value: f64) -> String {
        self.unit.long(value)
    }

    fn named_most(&self) -> String {
        self.most
            .map_or(String::new(), |(d, hour, value)| format!("{}, {}", clock(d, hour), self.says(value)))
    }

    fn title(&self) -> String {
        match self.most {
            Some((_, _, most)) if most > 0.0 => {
                format!("Most {}: {}", named(self.input.what), self.named_most())
            }
            _ => format!("Nothing was {} in any hour of the week", named(self.input.what)),
        }
    }

    fn words(&self) -> String {
        let least = self.least.map_or(String::new(), |(d, hour, value)| {
            let nothing = (0..7).flat_map(|d| (0..24).map(move |h| (d, h)));
            let nothing = nothing.filter(|(d, h)| self.value(*d, *h) == Some(0.0)).count();
            match nothing {
                0 => format!("Least: {}, {}", clock(d, hour), self.says(value)),
                1 => format!("Nothing in one hour: {}", clock(d, hour)),
                n => format!("Nothing in {n} hours, the first {}", clock(d, hour)),
            }
        });
        let missing = match self.missing {
            0 => String::new(),
            1 => "No data for one hour (a slanted stroke)".into(),
            n => format!("No data for {n} hours (a slanted stroke)"),
        };
        sentences([least, missing])
    }

    fn summary(&self) -> String {
        let days = (0..7).map(|d| format!("{} {}", DAYS[d], self.unit.short(self.day(d))));
        let days: Vec<String> = days.collect();
        sentences([
            format!(
                "{} by hour of the week, {}",
                say::capital(&named(self.input.what)),
                named(self.input.zone)
            ),
            format!("Most: {}", self.named_most()),
        ]) + " "
            + &self.words()
            + &format!(" Sums by day: {}.", days.join(", "))
    }

    fn table(&self) -> Table {
        let rows = (0..24).map(|hour| {
            let cells = (0..7).map(|d| self.value(d, hour).map_or("no data".into(), |v| self.unit.short(v)));
            std::iter::once(format!("{hour:02}:00")).chain(cells).collect()
        });
        Table { columns: std::iter::once("hour").chain(DAYS).collect(), rows: rows.collect() }
    }
}

fn clock(d: usize, hour: usize) -> String {
    format!("{} {hour:02}:00 to {:02}:00", DAYS[d], hour + 1)
}
