//! A picture over ages: the path with its marks, the values beside it, curves firm and open, posts with labels.

use plotters_backend::text_anchor::HPos;

use super::age::Road;
use super::area::{At, Plot, at};
use super::element::{Hatching, around};
use super::ink::{self, Ink};
use super::scale::{Scale, Tick};
use super::sheet::{MARGIN, Sample, Sheet, advised_shape, arrow, in_force_shape};
use super::text;
use super::trace::{Point, Trace};
use super::words;
use super::{Marks, Svg, Table};

/// Where the post of a give-up time, of the edge of sight, or of an end stands.
#[derive(Clone, Copy, PartialEq)]
pub(super) struct Post {
    pub(super) kind: Kind,
    pub(super) age: f64,
}

/// What a post stands for.
#[derive(Clone, Copy, PartialEq)]
pub(super) enum Kind {
    Advised,
    InForce,
    Sight,
    PaysUntil,
}

impl Kind {
    fn name(self) -> &'static str {
        match self {
            Kind::Advised => "advised",
            Kind::InForce => "in force",
            Kind::Sight => "sight ends",
            Kind::PaysUntil => "pays until",
        }
    }

    fn has_shape(self) -> bool {
        matches!(self, Kind::Advised | Kind::InForce)
    }

    fn inks(self) -> (Ink, Ink) {
        match self {
            Kind::Advised => (ink::ADVISED, ink::ADVISED_TEXT),
            Kind::InForce => (ink::IN_FORCE, ink::IN_FORCE_TEXT),
            Kind::Sight => (ink::SIGHT, ink::SOFT),
            Kind::PaysUntil => (ink::TICK, ink::TEXT),
        }
    }
}

/// The posts of marks and of the edge of sight.
pub(super) fn posts(marks: &Marks, road: &Road) -> Vec<Post> {
    [
        (Kind::Advised, marks.advised),
        (Kind::InForce, marks.in_force),
        (Kind::Sight, Some(road.sight).filter(|s| s.is_finite() && *s >= road.scale.from)),
    ]
    .into_iter()
    .filter_map(|(kind, age)| Some(Post { kind, age: age? }))
    .collect()
}

/// The values beside the path.
pub(super) struct Level {
    pub(super) scale: Scale,
    /// What they are.
    pub(super) caption: String,
}

/// The picture in the making.
pub(super) struct Panel<'a> {
    sheet: Sheet<'a>,
    /// Ages across, values up.
    plot: Plot,
    road: Road,
    level: Level,
    left: f64,
    right: f64,
    top: f64,
    bottom: f64,
    /// Top of the row of the posts' names.
    strip: f64,
    posts: Vec<Post>,
    ticks: Vec<Tick>,
    /// Places of shapes that nothing may cover.
    taken: Vec<At>,
}

impl<'a> Panel<'a> {
    /// Lays out the axes under a heading and draws all that lies behind the curves.
    pub(super) fn open(mut sheet: Sheet<'a>, road: Road, level: Level, mut posts: Vec<Post>) -> Panel<'a> {
        let font = sheet.font;
        let height = (0.4 * sheet.width).clamp(150.0, 440.0);
        let apart = |ticks: &[Tick]| ticks.windows(2).all(|w| (w[1].part - w[0].part) * height >= 2.0 * font);
        let values = level.scale.ticks(7, apart);
        let widest = |ticks: &[Tick]| {
            let labels = ticks.iter().filter_map(|t| t.label.as_deref());
            labels.map(|l| text::width(l, font)).fold(0.0, f64::max)
        };
        let left = MARGIN + widest(&values).max(1.5 * font) + 10.0;
        let (ages, right) = age_ticks(road.scale, left, sheet.right(), font);

        let caption =
            if level.scale.log { format!("{}, logarithmic", level.caption) } else { level.caption.clone() };
        sheet.paragraph(&caption);
        sheet.y += 0.7 * font;
        posts.sort_by(|a, b| a.age.total_cmp(&b.age));
        let strip = sheet.y;
        sheet.y += if posts.is_empty() { 0.0 } else { 3.6 * font };
        let plot = sheet.paper.plot((left, sheet.y), (right, sheet.y + height), road.scale, level.scale);
        let ((left, top), (right, bottom)) = plot.corners();
        sheet.y += height;
        let mut panel = Panel {
            sheet,
            plot,
            road,
            level,
            left,
            right,
            top,
            bottom,
            strip,
            posts,
            ticks: ages,
            taken: Vec::new(),
        };
        panel.haze();
        panel.values(&values);
        panel.ages();
        panel
    }

    /// Where an age and a value lie.
    fn at(&self, age: f64, value: f64) -> At {
        self.plot.at(age, value)
    }

    /// Two corners of the ground over a stretch of ages, from the top to the path.
    fn over(&self, from: f64, to: f64) -> [(f64, f64); 2] {
        [(from, self.level.scale.to), (to, self.level.scale.from)]
    }

    /// The ends of a line along which a value is read.
    fn along(&self, value: f64) -> [(f64, f64); 2] {
        [(self.road.scale.from, value), (self.road.scale.to, value)]
    }

    fn x(&self, age: f64) -> f64 {
        self.at(age, 0.0).0
    }

    /// Whether an age is on the path and not at its end for want of room.
    fn reaches(&self, age: f64) -> bool {
        age <= self.road.scale.to
    }

    /// Ages worth a row in a table: those with a label, and the posts; rising.
    pub(super) fn told(&self) -> Vec<f64> {
        let ticks = self.ticks.iter().filter(|t| t.label.is_some() && t.value > 0.0).map(|t| t.value);
        let mut ages: Vec<f64> = ticks.chain(self.posts.iter().map(|p| p.age)).collect();
        ages.sort_by(f64::total_cmp);
        ages.dedup();
        ages
    }

    /// What a table says of an age beside its numbers.
    pub(super) fn remark(&self, age: f64) -> String {
        let mut remarks: Vec<&str> =
            self.posts.iter().filter(|p| p.age == age).map(|p| p.kind.name()).collect();
        if age > self.road.sight {
            remarks.push("not seen");
        }
        remarks.join(", ")
    }

    fn haze(&self) {
        if self.road.sight.is_finite() {
            self.plot.put(Hatching { name: "haze", ink: ink::HAZE, step: 7.0, rising: true });
            self.plot.put(Ink::Hatch("haze").rect(self.over(self.road.sight, self.road.scale.to)));
        }
    }

    fn values(&self, ticks: &[Tick]) {
        let font = self.sheet.font;
        for tick in ticks {
            self.plot.put(ink::GRID.path(self.along(tick.value)));
            if let Some(label) = &tick.label {
                let place = (self.left - 8.0, self.at(0.0, tick.value).1 + 0.35 * font);
                self.sheet.paper.put(ink::SOFT.words(place, HPos::Right, font, label.as_str()));
            }
        }
    }

    fn ages(&mut self) {
        let font = self.sheet.font;
        self.sheet.y += 1.7 * font;
        for tick in std::mem::take(&mut self.ticks) {
            let long = if tick.label.is_some() { 6.0 } else { 3.5 };
            let down = around([(0.0, 0.0), (0.0, long)]);
            self.plot.put(at((tick.value, self.level.scale.from)) + ink::TICK.path(down));
            if let Some(label) = &tick.label {
                let place = (self.x(tick.value), self.sheet.y);
                self.sheet.paper.put(ink::SOFT.words(place, HPos::Center, font, label.as_str()));
            }
            self.ticks.push(tick);
        }
        let log = if self.road.scale.log { ", logarithmic" } else { "" };
        self.sheet.remark(HPos::Right, &format!("time waited so far{log}"));
    }

    /// Names of the posts in a row, each led to its post; a post past the end of the path has an arrow instead.
    pub(super) fn posts(&mut self) {
        let (font, strip) = (self.sheet.font, self.strip);
        let room = self.sheet.right() - MARGIN;
        let indent = |kind: Kind| if kind.has_shape() { 1.1 * font } else { 0.0 };
        let value = |p: &Post| words::time(p.age) + if self.reaches(p.age) { "" } else { " →" };
        let values: Vec<String> = self.posts.iter().map(value).collect();
        let wanted: Vec<(f64, f64)> = (self.posts.iter().zip(&values))
            .map(|(p, value)| {
                let name = text::width(p.kind.name(), font) + indent(p.kind);
                (self.x(p.age), name.max(text::width(value, font)))
            })
            .collect();
        let total: f64 = wanted.iter().map(|(_, width)| width + font).sum();
        if total > room + font && self.posts.iter().any(|p| !p.kind.has_shape()) {
            // The title tells how long holding on pays, and the key where sight ends.
            self.posts.retain(|p| p.kind.has_shape());
            return self.posts();
        }
        let centres = text::spread(&wanted, font, MARGIN, self.sheet.right());
        let (name_y, value_y, foot_y) = (strip + font, strip + 2.2 * font, strip + 2.55 * font);
        for (i, post) in self.posts.clone().into_iter().enumerate() {
            let (line, words) = post.kind.inks();
            let (x, width) = wanted[i];
            let left = centres[i] - width / 2.0;
            self.shape(post.kind, (left + 0.45 * font, name_y - 0.35 * font));
            let name_at = (left + indent(post.kind), name_y);
            let paper = &self.sheet.paper;
            paper.put(words.words(name_at, HPos::Left, font, post.kind.name()));
            paper.put(words.words((left, value_y), HPos::Left, font, values[i].as_str()));
            if self.reaches(post.age) {
                let foot = x.clamp(left + 0.2 * font, left + width - 0.2 * font);
                paper.put(line.path([(foot, foot_y), (x, self.top), (x, self.bottom)]));
            }
        }
    }

    fn shape(&self, kind: Kind, place: At) {
        let Sheet { ref paper, font, .. } = self.sheet;
        match kind {
            Kind::Advised => paper.put(at(place) + advised_shape(0.5 * font)),
            Kind::InForce => paper.put(at(place) + in_force_shape(0.38 * font)),
            Kind::Sight | Kind::PaysUntil => {}
        }
    }

    /// A ground over a stretch of ages, from the path to the top, with its edges.
    pub(super) fn good(&self, from: f64, to: f64) {
        self.plot.put(Hatching { name: "good", ink: ink::GOOD_HATCH, step: 5.0, rising: false });
        self.plot.put(ink::GOOD.rect(self.over(from, to)));
        self.plot.put(Ink::Hatch("good").rect(self.over(from, to)));
        for age in [from, to] {
            let [top, bottom] = self.over(age, age);
            self.plot.put(ink::GOOD_EDGE.path([top, bottom]));
        }
    }

    fn columns(&self) -> impl Fn(f64) -> i64 + use<> {
        let (scale, width) = (self.road.scale, self.right - self.left);
        move |age| (scale.part(age) * width / 2.0) as i64
    }

    /// The band of a curve: its ground where it is seen, its edges everywhere. Drawn before the posts.
    pub(super) fn band(&self, trace: &Trace) {
        let Scale { from, to, .. } = self.road.scale;
        let sight = self.road.sight.min(to);
        for (from, to, edge) in [(from, sight, ink::EDGE), (sight.max(from), to, ink::EDGE_OPEN)] {
            let part = trace.cut(from, to).thinned(self.columns());
            for run in part.banded() {
                let low = run.line(|p| p.band.map_or(p.value, |b| b[0]));
                let high = run.line(|p| p.band.map_or(p.value, |b| b[1]));
                if from < sight {
                    let outline: Vec<_> = low.iter().chain(high.iter().rev()).copied().collect();
                    self.plot.put(ink::BAND.polygon(outline));
                }
                self.plot.put(edge.path(low));
                self.plot.put(edge.path(high));
            }
        }
    }

    /// The ground between a curve and 0.
    pub(super) fn ground(&self, trace: &Trace) {
        let part = trace.cut(self.road.scale.from, self.road.scale.to).thinned(self.columns());
        let mut outline = part.line(|p| p.value);
        if let (Some(&(first, _)), Some(&(last, _))) = (outline.first(), outline.last()) {
            outline.extend([(last, 0.0), (first, 0.0)]);
            self.plot.put(ink::BAND.polygon(outline));
        }
    }

    /// A curve: firm as far as it is seen, dashed beyond. On a logarithmic axis it ends where it leaves the axis.
    pub(super) fn curve(&self, trace: &Trace) {
        let Scale { from, to, .. } = self.road.scale;
        let sight = self.road.sight.min(to);
        for (from, to, ink) in [(from, sight, ink::LINE), (sight.max(from), to, ink::LINE_OPEN)] {
            let part = trace.cut(from, to).thinned(self.columns());
            let mut line = part.line(|p| p.value);
            if self.level.scale.log {
                let lowest = self.level.scale.from;
                let end = line.iter().position(|&(_, v)| v <= lowest).map_or(line.len(), |i| i + 1);
                line.truncate(end);
            }
            self.plot.put(ink.path(line));
        }
    }

    /// The shapes of the marked times on a curve, the full one over the open one where they coincide.
    pub(super) fn stations(&mut self, trace: &Trace) {
        for post in self.shaped() {
            if let Some(Point { value, .. }) = trace.at(post.age).filter(|_| self.reaches(post.age)) {
                let at = self.at(post.age, value);
                self.shape(post.kind, at);
                self.taken.push(at);
            }
        }
    }

    /// Numbered rings at ages and values, moved up or down where they would cover each other or a shape. A ring
    /// that finds no place is left to the key.
    pub(super) fn rings(&mut self, places: &[(f64, f64)]) {
        let radius = self.sheet.ring_radius();
        let step = 2.0 * radius + 2.0;
        let (highest, lowest) = (self.top + radius, self.bottom - radius - 4.0);
        let mut rings: Vec<(usize, At)> = Vec::new();
        for (i, &(age, value)) in places.iter().enumerate() {
            let (x, y) = self.at(age, value);
            let x = x.clamp(self.left + radius, self.right - radius);
            let offsets =
                (0..60).map(|k: i32| f64::from((k + 1) / 2 * if k % 2 == 0 { -1 } else { 1 }) * step);
            let far = |a: f64, b: f64| (a - b).abs() >= step - SLACK;
            let clear = |c: f64| self.taken.iter().all(|t| far(t.0, x) || far(t.1, c));
            let start = y.clamp(highest, lowest);
            let found = offsets.map(|o| start + o).find(|c| *c >= highest && *c <= lowest && clear(*c));
            let Some(centre) = found else { continue };
            if (centre - y).abs() > radius {
                self.sheet.paper.put(ink::RIVAL_LEAD.path([(x, centre), (x, y)]));
                self.sheet.paper.put(ink::RIVAL_TEXT.circle((x, y), 2.2));
            }
            self.taken.push((x, centre));
            rings.push((i + 1, (x, centre)));
        }
        for (number, at) in rings {
            self.sheet.ring(at, number);
        }
    }

    /// A line where the value is 0.
    pub(super) fn zero(&self) {
        self.plot.put(ink::TICK.path(self.along(0.0)));
    }

    fn shaped(&self) -> Vec<Post> {
        let of = |kind: Kind| self.posts.iter().copied().filter(move |p| p.kind == kind);
        of(Kind::InForce).chain(of(Kind::Advised)).collect()
    }

    /// The path itself, over everything, and the key under it.
    pub(super) fn close(mut self, mut key: Vec<(Sample, String)>, summary: &str, table: Table) -> Svg {
        let y = self.bottom;
        let sight = if self.road.sight.is_finite() { self.x(self.road.sight) } else { self.right };
        let paper = &self.sheet.paper;
        paper.put(ink::PATH.path([(self.left, y), (sight, y)]));
        paper.put(ink::PATH_OPEN.path([(sight, y), (self.right + 6.0, y)]));
        paper.put(at((self.right + 12.0, y)) + arrow());
        paper.put(ink::WAITER.circle((self.left, y), 4.5));
        for post in self.shaped() {
            if self.reaches(post.age) {
                self.shape(post.kind, (self.x(post.age), y));
            }
        }
        if self.road.sight.is_finite() {
            key.push((Sample::Haze, format!("past {} nothing is seen", words::time(self.road.sight))));
        }
        self.sheet.key(&key);
        self.sheet.finish(summary, table)
    }
}

/// By how much rings may stand closer than a step, px: places are whole tenths, and rings at almost the same place
/// are a step apart.
const SLACK: f64 = 0.5;

/// Marks of the path with the right end that leaves room for the last label and the arrow.
fn age_ticks(scale: Scale, left: f64, edge: f64, font: f64) -> (Vec<Tick>, f64) {
    // Room for half of the widest label an axis of ages can have.
    let right = edge - text::width("100 min", font) / 2.0;
    let width = right - left;
    let clear = |ticks: &[Tick]| {
        let label = |t: &Tick| text::width(t.label.as_deref().unwrap_or(""), font);
        text::fits(ticks.iter().map(|t| (t.part * width, label(t))), font)
    };
    let mut ticks = scale.ticks(14, clear);
    let mut last = f64::NEG_INFINITY;
    let mut small: Vec<f64> = ticks.iter().filter(|t| t.label.is_none()).map(|t| t.part * width).collect();
    small.retain(|x| {
        let clear = x - last >= 4.0;
        last = if clear { *x } else { last };
        clear
    });
    ticks.retain(|t| t.label.is_some() || small.contains(&(t.part * width)));
    (ticks, right)
}
