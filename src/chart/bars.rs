//! Bars with intervals: rules side by side, or streams by what they lose.

use plotters_backend::text_anchor::HPos;

use super::area::at;
use super::ink;
use super::scale::{Measure, Scale};
use super::sheet::{MARGIN, Sample, Sheet, advised_shape, in_force_shape, nothing, span};
use super::text::{self, named};
use super::words::{Quantity, Spoken, brackets_hold, in_brackets, percent, range, roughly, sentences};
use super::{Frame, Svg, Table};
use crate::say;

/// Below this width a bar's name stands above it, px.
const BESIDE_FROM: f64 = 560.0;
/// Differences below this share of the larger are none.
const SLIGHT: f64 = 0.005;
/// Bars told in the summary; the table has all.
const TOLD: usize = 12;

/// Whose bar.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Role {
    /// What is advised.
    Ours,
    /// What is in force.
    InForce,
    /// Another rule.
    Other,
}

/// One bar.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Bar<'a> {
    /// Its name.
    pub name: &'a str,
    /// Its length; NaN where it is not known.
    pub value: f64,
    /// Its interval, low and high; of a length that is not known, the bounds within which it lies.
    pub interval: Option<[f64; 2]>,
    /// Whose it is.
    pub role: Role,
}

/// What [`replay`] draws: what each rule earned on waits it had not seen.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Replay<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// On what, e.g. `"11 weeks not seen before"`.
    pub over: &'a str,
    /// How the values are written.
    pub quantity: Quantity<'a>,
    /// Level of the intervals, e.g. 0.9.
    pub level: f64,
    /// One bar a rule; drawn the best first.
    pub bars: &'a [Bar<'a>],
}

/// What [`ranking`] draws: many streams by one number.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Ranking<'a> {
    /// What the number is, as in "lost most", e.g. `"lost per day"`.
    pub what: &'a str,
    /// How the values are written.
    pub quantity: Quantity<'a>,
    /// Level of the intervals, e.g. 0.9.
    pub level: f64,
    /// One bar a stream; drawn the largest first.
    pub bars: &'a [Bar<'a>],
}

/// Draws what each rule earned.
pub fn replay(input: &Replay<'_>, frame: &Frame<'_>) -> Svg {
    let (bars, unit) = ordered(input.bars, input.quantity);
    if bars.is_empty() {
        return nothing(input.stream, "no rule could be replayed", frame);
    }
    let title = replay_title(&unit, &bars);
    let lead = format!("Earned by each rule on {}", named(input.over));
    let sheet = Sheet::open(frame, input.stream, &title);
    let caption = format!("{}, on {}", unit.caption("earned"), named(input.over));
    draw(sheet, Rows { bars, unit, level: input.level, caption, lead, head: "rule" })
}

/// Draws streams by one number.
pub fn ranking(input: &Ranking<'_>, frame: &Frame<'_>) -> Svg {
    let (bars, unit) = ordered(input.bars, input.quantity);
    let what = named(input.what);
    let Some(first) = bars.first() else {
        return nothing("", &format!("no stream has a number for what is {what}"), frame);
    };
    let known: Vec<f64> = bars.iter().map(|b| b.value).filter(|v| v.is_finite()).collect();
    let all: f64 = known.iter().sum();
    let mut title = format!("Most {what}: {}, {}", named(first.name), unit.long(first.value));
    if bars.len() > 5 && all > 0.0 && all.is_finite() && known.iter().all(|v| *v >= 0.0) {
        let top: f64 = known.iter().take(3).sum();
        title += &format!("; the first 3 of {} make up {}", bars.len(), roughly(top / all));
    }
    let lead = format!("{} streams by what is {what}", bars.len());
    let sheet = Sheet::open(frame, "", &title);
    let caption = unit.caption(&what);
    draw(sheet, Rows { bars, unit, level: input.level, caption, lead, head: "stream" })
}

/// The best first, what is not known last, equal ones as they came; in the unit they are told in.
fn ordered<'a>(bars: &[Bar<'a>], quantity: Quantity<'_>) -> (Vec<Bar<'a>>, Spoken) {
    let unit = quantity.spoken(bars.iter().map(|b| b.value));
    let by = |value: f64| value * unit.factor;
    let sound = |[a, b]: [f64; 2]| if a <= b { Some([a, b]) } else { (b < a).then_some([b, a]) };
    let mut bars: Vec<Bar<'a>> = bars
        .iter()
        .map(|b| Bar { value: by(b.value), interval: b.interval.map(|i| i.map(by)).and_then(sound), ..*b })
        .collect();
    let key = |b: &Bar<'_>| if b.value.is_nan() { f64::NEG_INFINITY } else { b.value };
    bars.sort_by(|a, b| key(b).total_cmp(&key(a)));
    (bars, unit)
}

fn replay_title(unit: &Spoken, bars: &[Bar<'_>]) -> String {
    let of = |role: Role| bars.iter().find(|b| b.role == role && b.value.is_finite());
    let Some(ours) = of(Role::Ours) else {
        if bars.iter().any(|b| b.role == Role::Ours) {
            return "What the advice would have earned was not seen".into();
        }
        return format!("{} earned most, {}", say::capital(&named(bars[0].name)), unit.long(bars[0].value));
    };
    let gap = |other: &Bar<'_>| (ours.value - other.value) / ours.value.abs().max(other.value.abs());
    let better = bars.iter().find(|b| b.role != Role::Ours && b.value.is_finite() && gap(b) < -SLIGHT);
    let versus = better.or(of(Role::InForce)).or(bars.iter().find(|b| b.role != Role::Ours));
    let Some(other) = versus.filter(|b| b.value.is_finite()) else {
        return format!("The advice earned {}", unit.long(ours.value));
    };
    let name = match other.role {
        Role::InForce => "the time in force".into(),
        _ if other.name == "never" => "never giving up".into(),
        _ => named(other.name),
    };
    let overlap = ours.interval.zip(other.interval).is_some_and(|(a, b)| a[0] <= b[1] && b[0] <= a[1]);
    let doubt = if overlap { "; their intervals overlap" } else { "" };
    let (best, rest, name, than) = match better {
        Some(better) => (better, ours, say::capital(&name), "the advice".into()),
        None => (ours, other, "The advice".into(), name),
    };
    match gap(other) {
        g if g.abs() <= SLIGHT || g.is_nan() => format!("{name} earned as much as {than}"),
        _ if rest.value > 0.0 => {
            format!("{name} earned {} more than {than}{doubt}", roughly(best.value / rest.value - 1.0))
        }
        _ => format!("{name} earned {}, {than} {}{doubt}", unit.long(best.value), unit.short(rest.value)),
    }
}

struct Rows<'a> {
    bars: Vec<Bar<'a>>,
    unit: Spoken,
    level: f64,
    caption: String,
    lead: String,
    head: &'static str,
}

impl Rows<'_> {
    /// What stands beside a bar.
    fn written(&self, bar: &Bar<'_>) -> String {
        let say = |v: f64| self.unit.short(v);
        match bar.interval {
            Some(bounds) if bar.value.is_nan() => format!("not seen: {}", range(bounds, say)),
            None if bar.value.is_nan() => "not known".into(),
            interval => say(bar.value) + &in_brackets(interval, say),
        }
    }

    /// The same without an interval, which the bar shows.
    fn briefly(&self, bar: &Bar<'_>) -> String {
        self.written(&Bar { interval: bar.interval.filter(|_| bar.value.is_nan()), ..*bar })
    }

    fn summary(&self) -> String {
        let told = self.bars.iter().take(TOLD).map(|b| format!("{} {}", named(b.name), self.written(b)));
        let told: Vec<String> = told.collect();
        let rest = self.bars.len().saturating_sub(TOLD);
        sentences([
            self.unit.caption(&self.lead),
            told.join("; "),
            if rest > 0 { format!("{rest} more are in the table") } else { String::new() },
            brackets_hold(self.bars.iter().any(|b| b.interval.is_some()), self.level, "interval"),
        ])
    }

    fn table(&self) -> Table {
        let say = |v: f64| self.unit.short(v);
        let rows = self.bars.iter().map(|b| {
            let role = match b.role {
                Role::Ours => "advised",
                Role::InForce => "in force",
                Role::Other => "",
            };
            let value = if b.value.is_nan() { "not known".into() } else { say(b.value) };
            let interval = b.interval.map_or(String::new(), |i| range(i, say));
            vec![text::plain(b.name), value, interval, role.into()]
        });
        Table { columns: vec![self.head, "value", "interval", "remark"], rows: rows.collect() }
    }
}

fn draw(mut sheet: Sheet<'_>, rows: Rows<'_>) -> Svg {
    let font = sheet.font;
    sheet.paragraph(&rows.caption);
    sheet.y += 0.6 * font;
    let widest =
        |texts: &mut dyn Iterator<Item = String>| texts.map(|t| text::width(&t, font)).fold(0.0, f64::max);
    let beside = sheet.width >= BESIDE_FROM;
    let values = widest(&mut rows.bars.iter().map(|b| rows.written(b)));
    let names = widest(&mut rows.bars.iter().map(|b| text::plain(b.name))).min(0.3 * sheet.width);
    let shaped = rows.bars.iter().any(|b| b.role != Role::Other);
    let shape = if shaped { 1.4 * font } else { 0.0 };
    let (left, right) = match beside {
        true => {
            let left = MARGIN + shape + names + font;
            (left, (sheet.right() - values - font).max(left + 20.0))
        }
        false => (MARGIN + 2.0, sheet.right() - 2.0),
    };
    let across = sheet.right() - MARGIN - shape - font;
    let room = |written: &str| if beside { names } else { across - text::width(written, font) };
    // Streams are told apart by the ends of their names.
    let cut = |bar: &Bar<'_>| text::width(&text::plain(bar.name), font) > room(&rows.written(bar));
    let brief = !beside && rows.bars.iter().any(cut);
    let ends = rows.bars.iter().flat_map(|b| b.interval.into_iter().flatten());
    let lengths = rows.bars.iter().map(|b| b.value);
    let longest = lengths.clone().filter(|v| v.is_finite()).fold(0.0, |m: f64, v| m.max(v.abs()));
    let far = if longest > 0.0 { 3.0 * longest } else { f64::INFINITY };
    let scale = Scale::with_zero(Measure::Number, lengths.chain(ends.map(|e| e.clamp(-far, far))));
    let thick = 1.1 * font;
    for bar in &rows.bars {
        let written = if brief { rows.briefly(bar) } else { rows.written(bar) };
        let name = text::shorten(&text::plain(bar.name), font, room(&written));
        let (words, height) =
            if beside { (sheet.y + 1.3 * font, 2.0 * font) } else { (sheet.y + 1.2 * font, 3.2 * font) };
        let middle = if beside { sheet.y + font } else { sheet.y + 2.2 * font };
        let mark = (MARGIN + 0.5 * font, words - 0.35 * font);
        let paper = &sheet.paper;
        let ink = match bar.role {
            Role::Ours => {
                paper.put(at(mark) + advised_shape(0.5 * font));
                ink::GOOD_BAR
            }
            Role::InForce => {
                paper.put(at(mark) + in_force_shape(0.4 * font));
                ink::IN_FORCE_BAR
            }
            Role::Other => ink::RIVAL_BAR,
        };
        paper.put(ink::TEXT.words((MARGIN + shape, words), HPos::Left, font, name));
        paper.put(ink::TEXT.words((sheet.right(), words), HPos::Right, font, written));
        // A row counts in bars' thicknesses from its middle.
        let (upper_left, lower_right) = ((left, middle - 0.8 * thick), (right, middle + 0.8 * thick));
        let row = paper.plot(upper_left, lower_right, scale, Scale::linear(-0.8, 0.8));
        if !bar.value.is_nan() {
            row.put(ink.rect([(0.0, -0.5), (bar.value, 0.5)]));
        }
        row.put(ink::TICK.path([(0.0, 0.8), (0.0, -0.8)]));
        if let Some([low, high]) = bar.interval {
            span(&row, [(low, 0.0), (high, 0.0)], 0.25 * thick);
        }
        sheet.y += height;
    }
    let has = |role: Role| rows.bars.iter().any(|b| b.role == role);
    let mut key = Vec::new();
    if has(Role::Ours) {
        key.push((Sample::OursBar, "advised".to_owned()));
    }
    if has(Role::InForce) {
        key.push((Sample::InForceBar, "in force".into()));
    }
    if has(Role::Other) && !key.is_empty() {
        key.push((Sample::RivalBar, "other rules".into()));
    }
    if rows.bars.iter().any(|b| b.interval.is_some()) {
        key.push((Sample::Span, format!("{} interval", percent(rows.level))));
    }
    sheet.key(&key);
    sheet.finish(&rows.summary(), rows.table())
}
