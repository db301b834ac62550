//! What holding on is worth at an age, above giving up there and then, and where it ends.

use super::age::Road;
use super::panel::{Kind, Level, Panel, Post, posts};
use super::scale::{Measure, Scale};
use super::sheet::{Sample, Sheet, nothing};
use super::trace::{Point, Trace};
use super::words::{Quantity, range, sentences, time};
use super::{Ages, Frame, Marks, Svg, Table};

/// Worth below this share of the most there is counts as none.
const NONE: f64 = 1e-6;
/// A later stretch of at least this share of the most is worth a word in the title; what is less may be noise.
const AGAIN: f64 = 0.2;
/// Ages that differ by less than this share are one.
const SAME: f64 = 0.02;

/// What [`holding`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Holding<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// The axis.
    pub ages: Ages,
    /// `[age in s, worth of holding on above giving up now]`.
    pub curve: &'a [[f64; 2]],
    /// Times to mark.
    pub marks: Marks,
    /// Unit of worth, e.g. `"completions"`; may be empty.
    pub unit: &'a str,
}

/// Draws what holding on is worth.
pub fn holding(input: &Holding<'_>, frame: &Frame<'_>) -> Svg {
    let input = &Holding { marks: input.marks.sound(), ..*input };
    let points: Vec<Point> = input.curve.iter().map(|&[age, worth]| Point::new(age, worth)).collect();
    let trace = Trace::of(&points, false);
    let road = Road::of(&input.ages, &input.marks, Some(&trace)).filter(|_| trace.is_line());
    let Some(road) = road else {
        return nothing(input.stream, "no worth of holding on is known", frame);
    };
    let shown = trace.cut(road.scale.from, road.scale.to);
    if !shown.points().iter().any(|p| p.value.is_finite()) {
        return nothing(input.stream, "no worth of holding on is known on this path", frame);
    }
    let pays = stretches(&trace);
    let title = title(input, &pays, &trace);
    let mut marked = posts(&input.marks, &road);
    if let Some(&[_, end]) = pays.first().filter(|[_, end]| *end < trace.last_age().unwrap_or(0.0)) {
        let told = input.marks.advised.is_some_and(|a| (a / end - 1.0).abs() < SAME);
        if !told && end <= road.scale.to && end >= road.scale.from {
            marked.push(Post { kind: Kind::PaysUntil, age: end });
        }
    }
    let unit = Quantity::Number(input.unit).spoken([]);
    let level = Level {
        scale: Scale::with_zero(Measure::Number, shown.points().iter().map(|p| p.value)),
        caption: unit.caption("worth of holding on"),
    };
    let mut panel = Panel::open(Sheet::open(frame, input.stream, &title), road, level, marked);
    panel.ground(&trace);
    panel.zero();
    panel.posts();
    panel.curve(&trace);
    panel.stations(&trace);
    let key = vec![(Sample::Line, "worth above giving up now".into())];
    let rows = panel.told().into_iter().filter_map(|age| {
        let worth = trace.at(age)?.value;
        Some(vec![time(age), unit.short(worth), panel.remark(age)])
    });
    let table = Table { columns: vec!["after", "holding on is worth", "remark"], rows: rows.collect() };
    panel.close(key, &summary(input, &pays, &trace, &road), table)
}

/// Stretches of ages over which holding on is worth something.
fn stretches(trace: &Trace) -> Vec<[f64; 2]> {
    let most = trace.points().iter().map(|p| p.value).filter(|v| v.is_finite()).fold(0.0, f64::max);
    let pays = |p: &Point| p.value > NONE * most;
    let mut found: Vec<[f64; 2]> = Vec::new();
    let mut open: Option<f64> = None;
    for pair in trace.points().windows(2) {
        match (pays(&pair[0]), pays(&pair[1])) {
            (true, _) if open.is_none() => open = Some(pair[0].age),
            (false, true) => open = Some(pair[0].age),
            _ => {}
        }
        if pays(&pair[0]) && !pays(&pair[1]) {
            found.extend(open.take().map(|from| [from, pair[1].age]));
        }
    }
    let last = trace.last_age();
    found.extend(open.zip(last).map(|(from, to)| [from, to]));
    found
}

fn title(input: &Holding<'_>, pays: &[[f64; 2]], trace: &Trace) -> String {
    let last = trace.last_age().unwrap_or(0.0);
    let Some(&[from, to]) = pays.first() else {
        return "Holding on is never worth more than giving up".into();
    };
    let first = trace.points().first().map_or(0.0, |p| p.age);
    let start = match (from <= first, to >= last) {
        (true, true) => return format!("Holding on pays as far as is known, {}", time(last)),
        (true, false) => format!("Holding on pays until {}", time(to)),
        (false, true) => return format!("Holding on pays from {} on", time(from)),
        (false, false) => format!("Holding on pays from {}", range([from, to], time)),
    };
    let most_within = |[from, to]: [f64; 2]| {
        let points = trace.points().iter().filter(|p| (from..=to).contains(&p.age));
        points.map(|p| p.value).filter(|v| v.is_finite()).fold(0.0, f64::max)
    };
    let worth_a_word = AGAIN * most_within([first, last]);
    let again = match pays.iter().skip(1).find(|stretch| most_within(**stretch) >= worth_a_word) {
        Some(&[from, _]) => format!(", and again from {}", time(from)),
        None => String::new(),
    };
    let now = match input.marks.in_force {
        Some(now) if now.is_infinite() => "; nothing ends the wait today".into(),
        Some(now) if now > to * (1.0 + SAME) => format!("; the time in force is {} longer", time(now - to)),
        Some(now) if now < to * (1.0 - SAME) => {
            format!("; the time in force ends it {} too early", time(to - now))
        }
        _ => String::new(),
    };
    format!("{start}{again}{now}")
}

fn summary(input: &Holding<'_>, pays: &[[f64; 2]], trace: &Trace, road: &Road) -> String {
    let unit = Quantity::Number(input.unit).spoken([]);
    let at = |age: Option<f64>, name: &str| match age.map(|age| (age, trace.at(age))) {
        None => String::new(),
        Some((age, None)) => format!("The {name} is {}", time(age)),
        Some((age, Some(p))) => {
            format!("At the {name} of {} holding on is worth {}", time(age), unit.short(p.value))
        }
    };
    let finite = || trace.points().iter().filter(|p| p.value.is_finite());
    let most = finite().max_by(|a, b| a.value.total_cmp(&b.value));
    let stretches: Vec<String> = pays.iter().take(5).map(|s| range(*s, time)).collect();
    sentences([
        unit.caption("Worth of holding on, above giving up now, against time waited"),
        match most {
            Some(p) => format!("Most is {} after {}", unit.short(p.value), time(p.age)),
            None => String::new(),
        },
        match stretches.is_empty() {
            true => "It never exceeds 0".into(),
            false => format!("It exceeds 0 from {}", stretches.join(", from ")),
        },
        at(input.marks.advised, "advised time"),
        at(input.marks.in_force, "time in force"),
        road.past_sight(trace),
    ])
}
