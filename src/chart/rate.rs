//! What each give-up time earns: the reward rate with its band, and where known rules stand on it.

use super::age::Road;
use super::panel::{Level, Panel, posts};
use super::scale::{Measure, Scale};
use super::sheet::{Sample, Sheet, nothing};
use super::text::named;
use super::trace::{Point, Trace};
use super::words::{
    Quantity, Spoken, brackets_hold, in_brackets, percent, range, roughly, rule, sentences, time,
};
use super::{Ages, Frame, Marks, Svg, Table};

/// Differences below this share of the larger rate are not worth a sentence.
const SLIGHT: f64 = 0.005;

/// A common rule, where it stands and what it earns.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rival<'a> {
    /// Its name, e.g. `"99th percentile"`.
    pub name: &'a str,
    /// Its give-up time, s; infinite for never.
    pub age: f64,
    /// What it earns.
    pub rate: f64,
}

/// What [`rate`] draws.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Rate<'a> {
    /// Which waiting process.
    pub stream: &'a str,
    /// The axis.
    pub ages: Ages,
    /// What a give-up time earns in the long run.
    pub curve: &'a [Point],
    /// Level of the band, e.g. 0.9.
    pub level: f64,
    /// Times to mark.
    pub marks: Marks,
    /// What the advised time earns, and what the time in force does; read off the curve where absent, which ends
    /// before never.
    pub earned: [Option<f64>; 2],
    /// Every give-up time between these is as good as the best.
    pub as_good: Option<[f64; 2]>,
    /// Rules to compare.
    pub rivals: &'a [Rival<'a>],
    /// What is earned, e.g. [`Quantity::PerTime`]`("worth")`.
    pub quantity: Quantity<'a>,
}

/// Draws what each give-up time earns.
pub fn rate(input: &Rate<'_>, frame: &Frame<'_>) -> Svg {
    let good = input.as_good.filter(|[a, b]| *a >= 0.0 && a <= b);
    let input = &Rate { marks: input.marks.sound(), as_good: good, ..*input };
    let unit = input.quantity.spoken(input.curve.iter().map(|p| p.value));
    let by = |value: f64| value * unit.factor;
    let curve: Vec<Point> = input
        .curve
        .iter()
        .map(|p| Point { value: by(p.value), band: p.band.map(|b| b.map(by)), ..*p })
        .collect();
    let trace = Trace::of(&curve, false);
    let road = Road::of(&input.ages, &input.marks, Some(&trace)).filter(|_| trace.is_line());
    let Some(road) = road else {
        return nothing(input.stream, "no give-up time can be judged yet", frame);
    };
    let shown = trace.cut(road.scale.from, road.scale.to);
    if !shown.points().iter().any(|p| p.value.is_finite()) {
        return nothing(input.stream, "no give-up time on this path can be judged", frame);
    }
    let mut rivals: Vec<Rival<'_>> =
        input.rivals.iter().filter(|r| r.age > 0.0 && !r.rate.is_nan()).copied().collect();
    rivals.iter_mut().for_each(|r| r.rate = by(r.rate));
    rivals.sort_by(|a, b| a.age.total_cmp(&b.age));
    let earned = input.earned.map(|rate| rate.filter(|r| !r.is_nan()).map(by));
    let facts = Facts { input, trace: &trace, shown, road, rivals, unit, earned };
    let panel = Panel::open(
        Sheet::open(frame, input.stream, &facts.title()),
        road,
        Level { scale: facts.scale(), caption: facts.unit.caption("earned") },
        posts(&input.marks, &road),
    );
    facts.draw(panel)
}

struct Facts<'a> {
    input: &'a Rate<'a>,
    trace: &'a Trace,
    shown: Trace,
    road: Road,
    rivals: Vec<Rival<'a>>,
    unit: Spoken,
    earned: [Option<f64>; 2],
}

impl Facts<'_> {
    fn earned(&self, age: f64) -> Option<f64> {
        let Marks { advised, in_force } = self.input.marks;
        let marked = [advised, in_force].into_iter().zip(self.earned);
        let told = marked.filter(|(mark, _)| *mark == Some(age)).find_map(|(_, rate)| rate);
        told.or_else(|| self.trace.at(age).map(|p| p.value))
    }

    /// The best of the curve within the axis.
    fn best(&self) -> Point {
        let finite = self.shown.points().iter().filter(|p| p.value.is_finite());
        finite.copied().max_by(|a, b| a.value.total_cmp(&b.value)).unwrap_or(Point::new(0.0, 0.0))
    }

    fn scale(&self) -> Scale {
        let points = self.shown.points().iter();
        let lines = points.clone().map(|p| p.value).chain(self.rivals.iter().map(|r| r.rate));
        let top = 2.0 * lines.clone().filter(|v| v.is_finite()).fold(0.0, |m: f64, v| m.max(v.abs()));
        let bands = points.filter_map(|p| p.band).flatten().map(|b| b.clamp(-top, top));
        Scale::with_zero(Measure::Number, lines.chain(bands))
    }

    fn title(&self) -> String {
        let Marks { advised, in_force } = self.input.marks;
        let best = self.best();
        if best.value == 0.0 && self.shown.points().iter().all(|p| p.value == 0.0) {
            return "Every give-up time earns nothing".into();
        }
        let (time_of, rate) = match advised.and_then(|age| Some((age, self.earned(age)?))) {
            Some(found) => found,
            None => (best.age, best.value),
        };
        let giving = match time_of.is_infinite() {
            true => "Never giving up".into(),
            false => format!("Giving up after {}", time(time_of)),
        };
        let now = in_force.and_then(|age| Some((age, self.earned(age)?)));
        let Some((now, earns)) = now else {
            let most = if advised.is_none() { "earns most, " } else { "earns " };
            return format!("{giving} {most}{}", self.unit.long(rate));
        };
        let rival =
            if now.is_infinite() { "never giving up".into() } else { format!("the {} in force", time(now)) };
        let gap = rate - earns;
        match () {
            () if now == time_of => format!("{giving}, as now, earns {}", self.unit.long(rate)),
            () if gap.abs() <= SLIGHT * rate.abs().max(earns.abs()) => {
                format!("{giving} earns as much as {rival}")
            }
            () if earns > 0.0 && rate > 0.0 => {
                let (share, word) = if gap > 0.0 { (gap / earns, "more") } else { (-gap / earns, "less") };
                let share = if share < 2.0 {
                    roughly(share)
                } else {
                    format!("{} times", self.unit.short(rate / earns))
                };
                match share.ends_with('%') {
                    true => format!("{giving} earns {share} {word} than {rival}"),
                    false => format!("{giving} earns {share} as much as {rival}"),
                }
            }
            () => format!("{giving} earns {}, {rival} {}", self.unit.long(rate), self.unit.short(earns)),
        }
    }

    fn summary(&self) -> String {
        let Rate { marks, as_good, level, .. } = *self.input;
        let best = self.best();
        let mark = |age: Option<f64>, name: &str| match age.map(|age| (age, self.earned(age))) {
            None => String::new(),
            Some((age, None)) => format!("The {name} is {}", time(age)),
            Some((age, Some(rate))) if age.is_infinite() => {
                format!("The {name} is never and earns {}", self.unit.short(rate))
            }
            Some((age, Some(rate))) => {
                let band = self.trace.at(age).and_then(|p| p.band);
                let band = in_brackets(band, |v| self.unit.short(v));
                format!("The {name} of {} earns {}{band}", time(age), self.unit.short(rate))
            }
        };
        let rivals: Vec<String> = self
            .rivals
            .iter()
            .map(|r| format!("{}: {}", rule(&named(r.name), r.age), self.unit.short(r.rate)))
            .collect();
        sentences([
            self.unit.caption("Earned in the long run against the give-up time"),
            format!("The curve is highest at {} with {}", time(best.age), self.unit.short(best.value)),
            mark(marks.advised, "advised time"),
            mark(marks.in_force, "time in force"),
            match as_good {
                Some(band) => format!("Any time from {} is as good as the best", range(band, time)),
                None => String::new(),
            },
            match rivals.is_empty() {
                true => String::new(),
                false => format!("Other rules: {}", rivals.join("; ")),
            },
            brackets_hold(self.trace.has_band(), level, "band"),
            self.road.past_sight(self.trace),
        ])
    }

    fn draw(&self, mut panel: Panel<'_>) -> Svg {
        let good = self.input.as_good;
        if let Some([from, to]) = good {
            panel.good(from, to);
        }
        panel.band(self.trace);
        panel.zero();
        panel.posts();
        panel.curve(self.trace);
        panel.stations(self.trace);
        let places: Vec<(f64, f64)> = self.rivals.iter().map(|r| (r.age, r.rate)).collect();
        panel.rings(&places);

        let mut key = Vec::new();
        if let Some(band) = good {
            key.push((Sample::Good, format!("as good as the best: {}", range(band, time))));
        }
        if self.trace.has_band() {
            key.push((Sample::Band, format!("{} band", percent(self.input.level))));
        }
        key.extend(self.rivals.iter().enumerate().map(|(i, r)| {
            let words = format!("{}: {}", rule(&named(r.name), r.age), self.unit.short(r.rate));
            (Sample::Number(i + 1), words)
        }));
        let table = self.table(&panel);
        panel.close(key, &self.summary(), table)
    }

    fn table(&self, panel: &Panel<'_>) -> Table {
        let curve = panel.told().into_iter().filter_map(|age| {
            let band = self.trace.at(age).and_then(|p| p.band);
            let band = band.map_or(String::new(), |b| range(b, |v| self.unit.short(v)));
            Some(vec![time(age), self.unit.short(self.earned(age)?), band, panel.remark(age)])
        });
        let rivals = self
            .rivals
            .iter()
            .map(|r| vec![time(r.age), self.unit.short(r.rate), String::new(), named(r.name)]);
        Table {
            columns: vec!["give up after", "earns", "band", "remark"],
            rows: curve.chain(rivals).collect(),
        }
    }
}
