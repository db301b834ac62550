//! Pictures: well-formed, readable at every width, in both lights, in words too.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

use std::collections::BTreeMap;

use outwait::advice::RemainingWait;
use outwait::chart::*;
use outwait::say;
use proptest::prelude::*;
use roxmltree::{Document, Node};

/// Upper tail of a lognormal.
fn lognormal(median: f64, sigma: f64) -> impl Fn(f64) -> f64 {
    move |t: f64| {
        let z = (t.max(1e-300) / median).ln() / sigma;
        0.5 * statrs::function::erf::erfc(z / std::f64::consts::SQRT_2)
    }
}

/// Shares with the band of a binomial from `n` waits.
fn banded(ages: &[f64], n: f64, s: impl Fn(f64) -> f64) -> Vec<Point> {
    let point = |&t: &f64| {
        let p = s(t);
        let half = 1.645 * (p * (1.0 - p) / n).sqrt();
        Point::new(t, p).between((p - half).max(0.0), (p + half).min(1.0))
    };
    ages.iter().map(point).collect()
}

/// `∫_0^t S` by the trapezoid rule on a fine grid, as a function.
fn area(to: f64, s: &impl Fn(f64) -> f64) -> impl Fn(f64) -> f64 {
    let n = 4000;
    let ages: Vec<f64> = (0..=n).map(|i| to * (f64::from(i) / f64::from(n)).powi(6)).collect();
    let mut sums = vec![0.0];
    for w in ages.windows(2) {
        sums.push(sums[sums.len() - 1] + 0.5 * (s(w[0]) + s(w[1])) * (w[1] - w[0]));
    }
    move |t: f64| {
        let i = ages.partition_point(|a| *a <= t).clamp(1, ages.len() - 1);
        let part = ((t - ages[i - 1]) / (ages[i] - ages[i - 1])).clamp(0.0, 1.0);
        sums[i - 1] + part * (sums[i] - sums[i - 1])
    }
}

/// A stream with all its pictures.
struct Scene {
    stream: &'static str,
    waits: u64,
    ages: Ages,
    marks: Marks,
    steps: bool,
    survival: Vec<Point>,
    remaining: Vec<Point>,
    trend: RemainingWait,
    rate: Vec<Point>,
    as_good: Option<[f64; 2]>,
    /// By the time in force.
    earned: f64,
    rivals: Vec<(&'static str, f64, f64)>,
    holding: Vec<[f64; 2]>,
}

impl Scene {
    /// Everything that follows from a survival function, `n` waits, and a pause after giving up.
    fn of(
        (stream, waits, trend): (&'static str, u64, RemainingWait),
        s: impl Fn(f64) -> f64,
        ages: Ages,
        in_force: f64,
        pause: f64,
    ) -> Scene {
        let n = waits as f64;
        let whole = 30.0 * ages.end;
        let sum = area(whole, &s);
        let rate_at = |t: f64| (1.0 - s(t)) / (sum(t.min(whole)) + pause);
        let mut marks = Marks { advised: None, in_force: Some(in_force) };
        let grid = ages.sample(400, &marks);
        let best = grid.iter().copied().max_by(|a, b| rate_at(*a).total_cmp(&rate_at(*b))).unwrap();
        let top = rate_at(best);
        let inner = best < 0.9 * ages.end;
        marks.advised = inner.then_some(best);
        let at = ages.sample(160, &marks);
        let remaining = at.iter().map(|&t| {
            let left = s(t).max(1e-300);
            let e = ((sum(whole) - sum(t)) / left).max(0.0);
            let doubt = 2.0 / (n * left).sqrt();
            let high = if doubt > 5.0 { f64::INFINITY } else { e * (1.0 + doubt) };
            Point::new(t, e).between(e / (1.0 + doubt), high)
        });
        let doubt = 2.0 / n.sqrt();
        let rate = at.iter().map(|&t| {
            let r = rate_at(t);
            Point::new(t, r).between(r * (1.0 - doubt).max(0.0), r * (1.0 + doubt))
        });
        let good: Vec<f64> = grid.iter().copied().filter(|t| rate_at(*t) >= 0.99 * top).collect();
        let worth = |t: f64| {
            let gain = |u: f64| (s(t) - s(u)) - top * (sum(u) - sum(t));
            grid.iter().filter(|u| **u > t).map(|u| gain(*u)).fold(0.0, f64::max) / s(t).max(1e-300)
        };
        let point = |share: f64| grid.iter().copied().find(|t| s(*t) <= share).unwrap_or(2.0 * ages.end);
        let rules = [
            ("95th percentile", point(0.05)),
            ("99th percentile", point(0.01)),
            ("99.9th percentile", point(0.001)),
            ("3 times the mean", 3.0 * sum(ages.sight.min(ages.end))),
            ("RFC 6298", 2.2 * sum(ages.sight.min(ages.end))),
            ("never", f64::INFINITY),
        ];
        Scene {
            stream,
            waits,
            survival: banded(&at, n, &s),
            remaining: remaining.collect(),
            trend,
            as_good: Some([good[0], good[good.len() - 1]]),
            rate: rate.collect(),
            earned: rate_at(in_force),
            rivals: rules.iter().map(|&(name, age)| (name, age, rate_at(age))).collect(),
            holding: at.iter().map(|&t| [t, worth(t)]).collect(),
            ages,
            marks,
            steps: false,
        }
    }

    fn pictures(&self, frame: &Frame<'_>) -> Vec<(&'static str, Svg)> {
        let Scene { stream, waits, ages, marks, steps, trend, as_good, .. } = *self;
        let level = 0.9;
        let prefix = |name: &str| format!("{}-{name}", frame.prefix);
        let rivals: Vec<Rival<'_>> =
            self.rivals.iter().map(|&(name, age, rate)| Rival { name, age, rate }).collect();
        let quantity = Quantity::PerTime("worth");
        let draw = |name: &'static str, svg: &dyn Fn(&Frame<'_>) -> Svg| {
            (name, svg(&Frame { prefix: &prefix(name), ..*frame }))
        };
        vec![
            draw("waiting", &|f| {
                waiting(&Waiting { stream, waits, ages, curve: &self.survival, steps, level, marks }, f)
            }),
            draw("remaining", &|f| {
                remaining(
                    &Remaining {
                        stream,
                        ages,
                        curve: &self.remaining,
                        level,
                        marks,
                        trend,
                        upto: f64::INFINITY,
                    },
                    f,
                )
            }),
            draw("rate", &|f| {
                let (earned, rivals) = ([None, Some(self.earned)], &rivals[..]);
                rate(
                    &Rate {
                        stream,
                        ages,
                        curve: &self.rate,
                        level,
                        marks,
                        earned,
                        as_good,
                        rivals,
                        quantity,
                    },
                    f,
                )
            }),
            draw("holding", &|f| {
                holding(&Holding { stream, ages, curve: &self.holding, marks, unit: "completions" }, f)
            }),
        ]
    }
}

fn scenes() -> Vec<Scene> {
    use RemainingWait::{Growing, Shrinking, Undecided};
    let infinite = f64::INFINITY;
    // A heavy tail, seen up to its timeout by very many waits.
    let (fast, slow) = (lognormal(0.018, 0.9), lognormal(1.5, 1.2));
    let lookup = move |t: f64| 0.97 * fast(t) + 0.03 * slow(t);
    let ages = Ages { start: 0.002, middle: 0.018, end: 3.0, sight: 0.8 };
    let heavy = Scene::of(("catalogue.lookup", 104_311_204, Growing), lookup, ages, 0.8, 0.01);
    // Forty waits, a step curve.
    let ages = Ages { start: 5.0, middle: 40.0, end: 150.0, sight: 130.0 };
    let repair = |t: f64| 0.8 * (-(t / 30.0f64).powf(1.6)).exp() + 0.2 * (-t / 400.0f64).exp();
    let mut few = Scene::of(("binding.repair", 40, Undecided), repair, ages, 120.0, 5.0);
    let ended: Vec<f64> =
        (1..=33).map(|i| 30.0 * (-(1.0 - f64::from(i) / 36.0f64).ln()).powf(1.0 / 1.6)).collect();
    few.survival = banded(&ended, 40.0, |t| 1.0 - ended.iter().filter(|x| **x <= t).count() as f64 / 40.0);
    few.steps = true;
    // Jobs of hours and days; nothing gives up today, and the advice lies past the edge of sight.
    let ages = Ages { start: 600.0, middle: 7_200.0, end: 30.0 * 86_400.0, sight: 40_000.0 };
    let jobs = Scene::of(
        ("reading-room/microfilm.scan", 3_170, Growing),
        |t| (1.0 + t / 90_000.0f64).powf(-1.1),
        ages,
        infinite,
        20_000.0,
    );
    // A rising hazard: wait it out; no mark but the one in force, everything seen.
    let ages = Ages { start: 2e-4, middle: 9e-4, end: 2.2e-3, sight: infinite };
    let sensor = |t: f64| (-(t / 1e-3f64).powi(3)).exp();
    let light = Scene::of(("shelf.sensor", 12_000, Shrinking), sensor, ages, 2.5e-3, 1e-4);
    vec![heavy, few, jobs, light]
}

fn hours(worst: f64) -> [[f64; 24]; 7] {
    std::array::from_fn(|d| {
        std::array::from_fn(|h| match (d, h) {
            (6, 0..=7) => f64::NAN,
            (5 | 6, _) => 0.0,
            _ => worst * (-((h as f64 - 14.0) / 4.0).powi(2)).exp() * (1.0 - 0.15 * (d as f64 - 1.0).abs()),
        })
    })
}

const RULES: [Bar<'static>; 7] = [
    Bar { name: "advice", value: 31.2, interval: Some([30.6, 31.9]), role: Role::Ours },
    Bar { name: "in force, 800 ms", value: 27.9, interval: Some([27.1, 28.6]), role: Role::InForce },
    Bar { name: "95th percentile", value: 30.9, interval: Some([30.2, 31.4]), role: Role::Other },
    Bar { name: "99th percentile", value: 28.8, interval: Some([28.0, 29.5]), role: Role::Other },
    Bar { name: "3 times the mean", value: 29.7, interval: Some([29.1, 30.3]), role: Role::Other },
    Bar { name: "RFC 6298", value: 30.1, interval: Some([29.0, 31.1]), role: Role::Other },
    Bar { name: "never", value: 19.4, interval: Some([15.0, 24.0]), role: Role::Other },
];

fn sparks() -> Vec<String> {
    let scenes = scenes();
    let all = scenes.iter().enumerate().map(|(i, scene)| {
        let Scene { stream, ages, marks, steps, .. } = *scene;
        let prefix = format!("s{i}");
        spark(&Spark { stream, ages, curve: &scene.survival, steps, marks, prefix: &prefix, size: (120, 28) })
    });
    all.collect()
}

/// Pictures of little data, and of strange ones.
fn odd(frame: &Frame<'_>) -> Vec<(String, Svg)> {
    let (stream, level) = ("branch-04.holds", 0.9);
    let marks = Marks { advised: Some(0.5), in_force: Some(0.5) };
    let ages = Ages { start: 0.5, middle: 0.5, end: 0.5, sight: 0.5 };
    let of = |name: &str| format!("{}-{name}", frame.prefix);
    let (a, b, c, d) = (of("one"), of("loss"), of("endless"), of("twice"));
    let (curve, steps) = (&[Point::new(0.5, 0.0)][..], true);
    let one = Waiting { stream, waits: 1, ages, curve, steps, level, marks };
    let curve = &[Point::new(0.1, -3.0).between(-4.0, -2.5), Point::new(0.5, -1.0).between(-1.2, 0.3)][..];
    let rivals = &[Rival { name: "never", age: f64::INFINITY, rate: -0.5 }; 9][..];
    let quantity = Quantity::PerTime("worth");
    let loss = Rate {
        stream,
        ages,
        curve,
        level,
        marks,
        earned: [None, None],
        as_good: Some([0.4, 0.5]),
        rivals,
        quantity,
    };
    let curve = &[
        Point::new(0.0, 1.0).between(0.5, f64::INFINITY),
        Point::new(0.4, 3.0).between(1.0, f64::INFINITY),
        Point::new(0.5, f64::INFINITY).between(2.0, f64::INFINITY),
    ][..];
    let endless = Remaining { stream, ages, curve, level, marks, trend: RemainingWait::Growing, upto: 9.0 };
    let curve = &[[0.0, 1.0], [1.0, 0.0], [2.0, 0.0], [2.5, 0.3], [3.0, 0.0], [4.0, 0.0]][..];
    let ages = Ages { start: 1.0, middle: 1.0, end: 4.0, sight: 2.8 };
    let marks = Marks { advised: Some(1.3), in_force: Some(3.5) };
    let twice = Holding { stream, ages, curve, marks, unit: "completions" };
    vec![
        ("waiting-one".into(), waiting(&one, &Frame { prefix: &a, ..*frame })),
        ("rate-loss".into(), rate(&loss, &Frame { prefix: &b, ..*frame })),
        ("remaining-endless".into(), remaining(&endless, &Frame { prefix: &c, ..*frame })),
        ("holding-twice".into(), holding(&twice, &Frame { prefix: &d, ..*frame })),
    ]
}

/// Every picture there is, by name.
fn gallery(frame: &Frame<'_>) -> Vec<(String, Svg)> {
    let mut all = odd(frame);
    for (i, scene) in scenes().iter().enumerate() {
        let prefix = format!("{}{i}", frame.prefix);
        for (name, svg) in scene.pictures(&Frame { prefix: &prefix, ..*frame }) {
            all.push((format!("{name}-{i}"), svg));
        }
    }
    let of = |name: &str| format!("{}-{name}", frame.prefix);
    let (a, b, c, d) = (of("week"), of("replay"), of("ranking"), of("nothing"));
    let week_of = Week {
        stream: "catalogue.lookup",
        what: "over-waited",
        quantity: Quantity::Time,
        hours: &hours(11_500.0),
        zone: "UTC",
    };
    all.push(("week".into(), week(&week_of, &Frame { prefix: &a, ..*frame })));
    let replayed = Replay {
        stream: "catalogue.lookup",
        over: "11 weeks not seen before",
        quantity: Quantity::PerTime("worth"),
        level: 0.9,
        bars: &RULES,
    };
    all.push(("replay".into(), replay(&replayed, &Frame { prefix: &b, ..*frame })));
    let names: Vec<String> =
        (0..50).map(|i| format!("branch-{:02}.{}", i / 3, ["loans", "returns", "holds"][i % 3])).collect();
    let bars: Vec<Bar<'_>> = names
        .iter()
        .enumerate()
        .map(|(i, name)| {
            let value = 40_000.0 / (1.0 + i as f64).powf(1.2);
            Bar { name, value, interval: Some([0.8 * value, 1.3 * value]), role: Role::Other }
        })
        .collect();
    let ranked = Ranking { what: "lost per day", quantity: Quantity::Time, level: 0.9, bars: &bars };
    all.push(("ranking".into(), ranking(&ranked, &Frame { prefix: &c, ..*frame })));
    all.push((
        "nothing".into(),
        nothing("branch-04.holds", "no wait has ended yet", &Frame { prefix: &d, ..*frame }),
    ));
    all
}

const WIDTHS: [u32; 4] = [320, 480, 800, 1600];

fn frame(width: u32) -> Frame<'static> {
    Frame { width, prefix: "p", styled: true }
}

/// `OUTWAIT_PICTURES=DIR cargo test --test charts` writes them all, to be looked at.
#[test]
fn writes_the_gallery_where_asked() {
    let Some(dir) = std::env::var_os("OUTWAIT_PICTURES") else { return };
    let dir = std::path::PathBuf::from(dir);
    for width in WIDTHS {
        for (name, svg) in gallery(&frame(width)) {
            std::fs::write(dir.join(format!("{name}-{width}.svg")), &svg.markup).unwrap();
            if width == 800 {
                println!("{name}: {}\n  {}\n", svg.title, svg.summary);
            }
        }
    }
    for (i, markup) in sparks().iter().enumerate() {
        std::fs::write(dir.join(format!("spark-{i}.svg")), markup).unwrap();
    }
}

/// A rectangle in a picture.
#[derive(Debug, Clone, Copy)]
struct Extent {
    left: f64,
    right: f64,
    top: f64,
    bottom: f64,
}

fn number(node: Node<'_, '_>, name: &str) -> f64 {
    let text = node.attribute(name).unwrap_or_else(|| panic!("{name} of {node:?}"));
    let value: f64 = text.parse().unwrap_or_else(|_| panic!("{name}={text:?}"));
    assert!(value.is_finite(), "{name}={text}");
    value
}

/// Room that a text takes, by 0.6 em a character.
fn extent(text: Node<'_, '_>) -> Extent {
    let (x, y, size) = (number(text, "x"), number(text, "y"), number(text, "font-size"));
    let width = 0.6 * size * text.text().unwrap_or("").chars().count() as f64;
    let left = match text.attribute("text-anchor").unwrap() {
        "start" => x,
        "middle" => x - width / 2.0,
        "end" => x - width,
        other => panic!("{other}"),
    };
    Extent { left, right: left + width, top: y - 0.8 * size, bottom: y + 0.22 * size }
}

/// What a reader may expect of any picture, whatever was drawn. Returns what went wrong.
fn check(markup: &str) -> Result<(), String> {
    let document = Document::parse(markup).map_err(|e| format!("not well-formed: {e}\n{markup}"))?;
    let root = document.root_element();
    let say = |what: &str, node: Node<'_, '_>| {
        let attributes: Vec<String> =
            node.attributes().map(|a| format!("{}={}", a.name(), a.value())).collect();
        Err(format!("{what}: {} {} {:?}", node.tag_name().name(), attributes.join(" "), node.text()))
    };
    let (width, height) = (number(root, "width"), number(root, "height"));
    if root.attribute("role") != Some("img")
        || root.attribute("viewBox") != Some(&format!("0 0 {width} {height}"))
    {
        return say("root", root);
    }
    let mut ids = BTreeMap::new();
    for node in root.descendants().filter(Node::is_element) {
        if let Some(id) = node.attribute("id")
            && ids.insert(id, node).is_some()
        {
            return say("id used twice", node);
        }
    }
    for id in root.attribute("aria-labelledby").unwrap_or("").split(' ') {
        let named = ids.get(id).and_then(|n| n.text()).unwrap_or("");
        if named.is_empty() {
            return say("named by nothing", root);
        }
    }
    let inside = |e: Extent| e.left >= 0.0 && e.right <= width && e.top >= 0.0 && e.bottom <= height;
    let mut labels: Vec<(Extent, Node<'_, '_>)> = Vec::new();
    for node in root.descendants().filter(Node::is_element) {
        for attribute in node.attributes() {
            let (name, value) = (attribute.name(), attribute.value());
            let outside = value.contains("://") && name != "xmlns";
            if name.starts_with("on") || name.ends_with("href") || name == "style" || outside {
                return say("reaches outside", node);
            }
            if let Some(id) = value.strip_prefix("url(#")
                && !ids.contains_key(id.trim_end_matches(')'))
            {
                return say("fills with nothing", node);
            }
        }
        if node.ancestors().any(|a| a.has_tag_name("defs")) {
            continue;
        }
        let spots: Vec<f64> = match node.tag_name().name() {
            "svg" | "title" | "desc" | "style" => continue,
            "text" => {
                let here = extent(node);
                if !inside(here) {
                    return say("text leaves the picture", node);
                }
                labels.push((here, node));
                continue;
            }
            "rect" => {
                let (x, y) = (number(node, "x"), number(node, "y"));
                vec![x, y, x + number(node, "width"), y + number(node, "height")]
            }
            "circle" => {
                let (x, y, r) = (number(node, "cx"), number(node, "cy"), number(node, "r"));
                vec![x - r, y - r, x + r, y + r]
            }
            "line" => ["x1", "y1", "x2", "y2"].map(|name| number(node, name)).to_vec(),
            "polyline" | "polygon" => {
                let points = node.attribute("points").unwrap().split([' ', ',']);
                points.map(|p| p.parse::<f64>().unwrap()).collect()
            }
            _ => return say("unknown element", node),
        };
        for at in spots.chunks(2) {
            let slack = 0.11;
            if !(at[0] >= -slack && at[0] <= width + slack && at[1] >= -slack && at[1] <= height + slack) {
                return say("leaves the picture", node);
            }
        }
    }
    labels.sort_by(|a, b| a.0.top.total_cmp(&b.0.top));
    for (i, (a, first)) in labels.iter().enumerate() {
        for (b, second) in labels[i + 1..].iter().take_while(|(b, _)| b.top < a.bottom) {
            if a.left < b.right && b.left < a.right {
                return Err(format!("{:?} lies over {:?}", first.text(), second.text()));
            }
        }
    }
    Ok(())
}

fn sound(svg: &Svg) -> Result<(), String> {
    check(&svg.markup)?;
    let document = Document::parse(&svg.markup).unwrap();
    let text =
        |tag: &str| document.descendants().find(|n| n.has_tag_name(tag)).and_then(|n| n.text()).unwrap();
    let words = [svg.title.as_str(), &svg.summary].join(" ") + &svg.table.rows.concat().join(" ");
    for broken in ["NaN", "inf", "unknown"] {
        if words.contains(broken) {
            return Err(format!("{broken} in {words}"));
        }
    }
    if !text("title").ends_with(&svg.title) || text("desc") != svg.summary || svg.title.is_empty() {
        return Err(format!("{:?} against {:?}", text("title"), svg.title));
    }
    match svg.table.rows.iter().find(|row| row.len() != svg.table.columns.len()) {
        Some(row) => Err(format!("{row:?} under {:?}", svg.table.columns)),
        None => Ok(()),
    }
}

#[test]
fn nothing_overlaps_or_is_clipped() {
    for width in WIDTHS.into_iter().chain((320..800).step_by(17)) {
        for (name, svg) in gallery(&frame(width)) {
            sound(&svg).unwrap_or_else(|wrong| panic!("{name} at {width}: {wrong}"));
        }
    }
    sparks().iter().for_each(|markup| check(markup).unwrap());
}

#[test]
fn many_pictures_share_a_page() {
    let mut page: Vec<String> = gallery(&frame(640)).into_iter().map(|(_, svg)| svg.markup).collect();
    page.extend(sparks());
    let page = format!("<body>{}</body>", page.concat());
    let document = Document::parse(&page).unwrap();
    let mut ids: Vec<&str> = document.descendants().filter_map(|n| n.attribute("id")).collect();
    let all = ids.len();
    ids.sort_unstable();
    ids.dedup();
    assert_eq!(ids.len(), all);
}

#[test]
fn the_same_data_give_the_same_bytes() {
    assert_eq!(gallery(&frame(800)), gallery(&frame(800)));
    let plain = gallery(&Frame { styled: false, ..frame(800) });
    for ((_, with), (_, without)) in gallery(&frame(800)).iter().zip(&plain) {
        assert_eq!(with.markup.replace(&format!("<style>{}</style>", style()), ""), without.markup);
    }
}

#[test]
fn words_carry_the_numbers() {
    let pictures: BTreeMap<String, Svg> = gallery(&frame(800)).into_iter().collect();
    let scenes = scenes();
    let says = |name: &str, parts: &[&str]| {
        let svg = &pictures[name];
        let words = format!("{} {}", svg.title, svg.summary);
        parts.iter().for_each(|part| assert!(words.contains(part), "{part} in {words}"));
    };
    let (median, tenth) = (0.5, 0.1);
    for (i, scene) in scenes.iter().enumerate() {
        if let Some(advised) = scene.marks.advised {
            let short = say::duration(advised);
            for name in ["waiting", "remaining", "rate", "holding"] {
                says(&format!("{name}-{i}"), &[short.trim_end_matches('0')]);
            }
        }
        says(&format!("waiting-{i}"), &[&say::count(scene.waits as f64)]);
    }
    // Read off the curve itself, not off the picture.
    let heavy = &scenes[0];
    for (share, name) in [(median, "half after "), (tenth, "1 in 10 after ")] {
        let truth = heavy.survival.iter().find(|p| p.value <= share).unwrap().age;
        let told = pictures["waiting-0"].summary.split(name).nth(1).unwrap();
        let told: String = told.split(" ms").next().unwrap().into();
        assert!((told.parse::<f64>().unwrap() * 1e-3 / truth - 1.0).abs() < 0.05, "{name}{told} {truth}");
    }
    says(
        "waiting-0",
        &["After ", "only 1 in 8 is still waiting", "the time in force is 800 ms", "Past 800 ms"],
    );
    says("rate-0", &["48% more than the 800 ms in force", "95th percentile", "RFC 6298", "never: "]);
    says("rate-2", &["as never giving up", "worth per day"]);
    says("remaining-0", &["The longer it has waited, the longer there is to wait"]);
    says("remaining-3", &["the sooner it ends"]);
    says("holding-0", &["Holding on pays until", "742 ms longer"]);
    says("week", &["Tue 14:00 to 15:00, 3.19 h", "Nothing in 40 hours", "No data for 8 hours", "Mon 19.2 h"]);
    says("replay", &["12% more than the time in force", "31.2 (30.6 to 31.9)", "never 19.4", "11 weeks"]);
    says("ranking", &["branch-00.loans, 11.1 h", "the first 3 of 50", "38 more are in the table"]);
    assert_eq!(pictures["ranking"].table.rows.len(), 50);
    assert_eq!(pictures["week"].table.rows.len(), 24);
    // The table reads the curve.
    let row = &pictures["waiting-0"].table.rows;
    let at = row.iter().find(|r| r[3].contains("in force")).unwrap();
    assert_eq!((at[0].as_str(), at[1].as_str()), ("800 ms", "2.1%"));
    assert!(row.iter().any(|r| r[3] == "not seen"));
}

#[test]
fn the_honest_line_when_another_rule_wins() {
    let with = |ours: f64, p95: f64| {
        let mut bars = RULES;
        (bars[0].value, bars[2].value) = (ours, p95);
        bars[2].interval = Some([p95 - 0.2, p95 + 0.2]);
        let quantity = Quantity::Number("worth");
        replay(&Replay { stream: "s", over: "a week", quantity, level: 0.9, bars: &bars }, &frame(800)).title
    };
    assert_eq!(with(31.2, 40.0), "95th percentile earned 28% more than the advice");
    assert_eq!(with(31.2, 32.0), "95th percentile earned 2.6% more than the advice; their intervals overlap");
    assert_eq!(with(27.9, 27.0), "RFC 6298 earned 7.9% more than the advice; their intervals overlap");
}

/// Relative luminance and contrast as in WCAG 2.2, "relative luminance", "contrast ratio" (from memory).
fn contrast(a: &str, b: &str) -> f64 {
    let luminance = |colour: &str| {
        let channel = |i: usize| {
            let v = f64::from(u8::from_str_radix(&colour[i..i + 2], 16).unwrap()) / 255.0;
            if v <= 0.04045 { v / 12.92 } else { ((v + 0.055) / 1.055).powf(2.4) }
        };
        0.2126 * channel(1) + 0.7152 * channel(3) + 0.0722 * channel(5)
    };
    let (a, b) = (luminance(a) + 0.05, luminance(b) + 0.05);
    a.max(b) / a.min(b)
}

#[test]
fn contrast_is_enough_in_both_lights() {
    assert!((contrast("#ffffff", "#000000") - 21.0).abs() < 1e-9);
    let sheet = style();
    let dark = sheet.split_once("(prefers-color-scheme:dark){").unwrap().1;
    let dark: BTreeMap<&str, BTreeMap<&str, &str>> = dark
        .split('}')
        .filter_map(|rule| rule.split_once('{'))
        .map(|(class, rules)| {
            let rules = rules.split(';').filter_map(|r| r.split_once(':')).collect();
            (class.trim_start_matches('.'), rules)
        })
        .collect();
    let mut seen = 0;
    for (name, svg) in gallery(&frame(800)) {
        let document = Document::parse(&svg.markup).unwrap();
        let paper = document.descendants().find(|n| n.attribute("class") == Some("ow-faint-paper")).unwrap();
        let light_paper = paper.attribute("fill").unwrap();
        let dark_paper = dark["ow-faint-paper"]["fill"];
        for node in document.descendants() {
            let Some(class) = node.attribute("class").filter(|c| *c != "ow" && !c.starts_with("ow-faint"))
            else {
                continue;
            };
            let least = if node.has_tag_name("text") { 4.5 } else { 3.0 };
            let parts =
                ["fill", "stroke"].map(|p| (node.attribute(p).filter(|c| *c != "none"), dark[class].get(p)));
            let best = |paper: &str, colours: [Option<&str>; 2]| {
                colours.into_iter().flatten().map(|c| contrast(c, paper)).fold(0.0, f64::max)
            };
            let light = best(light_paper, parts.map(|p| p.0));
            let night = best(dark_paper, parts.map(|p| p.1.copied()));
            assert!(light >= least && night >= least, "{name}: {class} has {light:.2} and {night:.2}");
            // What has a colour in one light has one in the other.
            parts.iter().for_each(|(day, night)| assert_eq!(day.is_some(), night.is_some(), "{class}"));
            seen += 1;
        }
    }
    assert!(seen > 500);
    // Words stand on the grounds too.
    let text = ["ow-text", "ow-soft", "ow-advised-text", "ow-in-force-text"];
    for ground in ["ow-faint-band", "ow-faint-good", "ow-ours-bar", "ow-in-force-bar"] {
        text[..1]
            .iter()
            .for_each(|t| assert!(contrast(dark[t]["fill"], dark[ground]["fill"]) >= 4.5, "{ground}"));
    }
}

#[test]
fn colour_is_never_the_only_sign() {
    let all = gallery(&frame(800));
    let of = |name: &str| Document::parse(&all.iter().find(|(n, _)| n == name).unwrap().1.markup).unwrap();
    let picture = of("rate-0");
    let with = |class: &str| -> Vec<Node<'_, '_>> {
        picture.descendants().filter(|n| n.attribute("class") == Some(class)).collect()
    };
    // Shapes.
    assert!(with("ow-advised-shape").iter().all(|n| n.has_tag_name("polygon")));
    assert!(with("ow-in-force-shape").iter().all(|n| n.has_tag_name("rect")));
    assert_eq!(with("ow-rival-text").iter().filter(|n| n.has_tag_name("text")).count(), 12);
    // Line styles: what is not seen is dashed, and so is what is in force.
    for (class, dashed) in [
        ("ow-line", false),
        ("ow-line-open", true),
        ("ow-path", false),
        ("ow-path-open", true),
        ("ow-advised", false),
        ("ow-in-force", true),
    ] {
        let found = with(class);
        assert!(!found.is_empty(), "{class}");
        assert!(found.iter().all(|n| n.attribute("stroke-dasharray").is_some() == dashed), "{class}");
    }
    // Words.
    let words: Vec<&str> =
        picture.descendants().filter(|n| n.has_tag_name("text")).filter_map(|n| n.text()).collect();
    for word in ["advised", "in force", "sight ends", "past 800 ms nothing is seen"] {
        assert!(words.contains(&word), "{word}");
    }
    // The edge: the firm line ends where the dashed one begins.
    let ends = |class: &str| -> Vec<String> {
        with(class)[0].attribute("points").unwrap().split(' ').map(str::to_owned).collect()
    };
    assert_eq!(ends("ow-line").last(), ends("ow-line-open").first());
    // Squares of the week: the larger the value, the larger the square.
    let week = of("week");
    let side = |class: &str| -> Vec<f64> {
        let found = week.descendants().filter(|n| n.attribute("class") == Some(class));
        found.map(|n| number(n, "width")).collect()
    };
    let worst = side("ow-in-force-full")[0];
    assert!(side("ow-cell").iter().all(|s| *s < worst) && side("ow-cell").len() == 24 * 5);
}

#[test]
fn axes_follow_the_tail() {
    let all: BTreeMap<String, Svg> = gallery(&frame(800)).into_iter().collect();
    let log = |name: &str| all[name].markup.contains("time waited so far, logarithmic");
    assert!(
        log("waiting-0") && log("rate-0") && log("holding-2") && !log("waiting-1") && !log("remaining-3")
    );
    let labels = |name: &str, picture: &BTreeMap<String, Svg>| -> Vec<String> {
        let document = Document::parse(&picture[name].markup).unwrap();
        document
            .descendants()
            .filter(|n| n.has_tag_name("text"))
            .filter_map(|n| n.text())
            .map(str::to_owned)
            .collect()
    };
    let at_800 = labels("waiting-2", &all);
    for label in ["1 h", "6 h", "1 d", "7 d", "30 d"] {
        assert!(at_800.iter().any(|l| l == label), "{label} in {at_800:?}");
    }
    // Fewer labels, smaller type where there is less room.
    let narrow: BTreeMap<String, Svg> = gallery(&frame(320)).into_iter().collect();
    let wide: BTreeMap<String, Svg> = gallery(&frame(1600)).into_iter().collect();
    assert!(labels("waiting-0", &narrow).len() < labels("waiting-0", &wide).len());
    assert!(narrow["waiting-0"].markup.contains("font-size=\"11\""));
    assert!(wide["waiting-0"].markup.contains("font-size=\"15\""));
}

#[test]
fn hostile_names_stay_text() {
    let evil = "</title></svg><script>alert('1')</script>\u{0}\u{202e}\u{1b}[31m\"&amp;'<![CDATA[]]>\u{ffff}";
    let frame = Frame { width: 320, prefix: "\"><script x='", styled: true };
    let long = "W".repeat(5_000);
    for stream in [evil, &long, "", "\u{0}", "日本語の棚の長い名前".repeat(20).as_str()] {
        let bars = [Bar { name: stream, value: 1.0, interval: None, role: Role::Other }; 3];
        let quantity = Quantity::Number(stream);
        let curve = [Point::new(0.1, 0.5), Point::new(0.2, 0.1)];
        let ages = Ages { start: 0.1, middle: 0.1, end: 0.2, sight: 0.15 };
        let marks = Marks { advised: Some(0.1), in_force: Some(f64::INFINITY) };
        let rivals = [Rival { name: stream, age: 0.15, rate: 0.3 }; 3];
        let pictures = [
            waiting(
                &Waiting { stream, waits: 2, ages, curve: &curve, steps: true, level: 0.9, marks },
                &frame,
            ),
            rate(
                &Rate {
                    stream,
                    ages,
                    curve: &curve,
                    level: 0.9,
                    marks,
                    earned: [None, None],
                    as_good: None,
                    rivals: &rivals,
                    quantity,
                },
                &frame,
            ),
            replay(&Replay { stream, over: stream, quantity, level: 0.9, bars: &bars }, &frame),
            ranking(&Ranking { what: stream, quantity, level: 0.9, bars: &bars }, &frame),
            week(&Week { stream, what: stream, quantity, hours: &hours(3.0), zone: stream }, &frame),
            nothing(stream, stream, &frame),
        ];
        for svg in &pictures {
            check(&svg.markup).unwrap();
            assert!(!svg.markup.contains("<script") && !svg.markup.contains('\u{202e}'));
            assert!(svg.markup.len() < 60_000);
        }
        let small =
            Spark { stream, ages, curve: &curve, steps: false, marks, prefix: stream, size: (0, 9_999) };
        check(&spark(&small)).unwrap();
    }
}

#[test]
fn says_why_there_is_nothing_to_draw() {
    let frame = frame(480);
    let (stream, level, marks) = ("branch-04.holds", 0.9, Marks::default());
    let ages = Ages { start: f64::NAN, middle: f64::NAN, end: f64::NAN, sight: f64::NAN };
    let none: [Point; 0] = [];
    let nan = [Point::new(f64::NAN, f64::NAN), Point::new(1.0, f64::NAN)];
    let endless = [Point::new(1.0, f64::INFINITY), Point::new(2.0, f64::INFINITY)];
    for curve in [&none[..], &nan, &endless] {
        let trend = RemainingWait::Undecided;
        let more =
            remaining(&Remaining { stream, ages, curve, level, marks, trend, upto: f64::INFINITY }, &frame);
        let quantity = Quantity::PerTime("worth");
        let (as_good, rivals) = (Some([f64::NAN, 1.0]), &[][..]);
        let input =
            Rate { stream, ages, curve, level, marks, earned: [None, None], as_good, rivals, quantity };
        let earns = rate(&input, &frame);
        let worth: Vec<[f64; 2]> = curve.iter().map(|p| [p.age, p.value]).collect();
        let holds = holding(&Holding { stream, ages, curve: &worth, marks, unit: "" }, &frame);
        for svg in [more, earns, holds] {
            sound(&svg).unwrap();
            assert!(svg.title.starts_with("Nothing to draw: "), "{}", svg.title);
            assert!(svg.markup.contains("ow-nobody"));
        }
    }
    for curve in [&none[..], &nan] {
        let input = Waiting { stream, waits: 0, ages, curve, steps: true, level, marks };
        let svg = waiting(&input, &frame);
        sound(&svg).unwrap();
        assert_eq!(svg.title, "Nothing to draw: no wait has been seen");
    }
    let empty = Replay { stream, over: "a week", quantity: Quantity::Time, level, bars: &[] };
    assert_eq!(replay(&empty, &frame).title, "Nothing to draw: no rule could be replayed");
    let hours = [[f64::NAN; 24]; 7];
    let blind = Week { stream, what: "over-waited", quantity: Quantity::Time, hours: &hours, zone: "UTC" };
    assert!(week(&blind, &frame).title.starts_with("Nothing to draw: no hour of the week has data"));
}

#[test]
fn degenerate_data_make_a_clear_picture() {
    let frame = frame(640);
    let stream = "shelf.sensor";
    let level = 0.9;
    let marks = Marks { advised: Some(0.5), in_force: Some(0.5) };
    let ages = Ages { start: 0.5, middle: 0.5, end: 0.5, sight: 0.5 };
    // One wait, and many equal ones.
    let one = [Point::new(0.5, 0.0)];
    let svg = waiting(&Waiting { stream, waits: 1, ages, curve: &one, steps: true, level, marks }, &frame);
    sound(&svg).unwrap();
    assert_eq!(svg.title, "After 500 ms, the time in force, none is still waiting");
    // Every rate is zero.
    let zero = [Point::new(0.1, 0.0).between(0.0, 0.0), Point::new(0.5, 0.0).between(0.0, 0.0)];
    let rivals = [Rival { name: "never", age: f64::INFINITY, rate: 0.0 }; 3];
    let quantity = Quantity::PerTime("worth");
    let rates = |curve: &[Point]| {
        let (earned, as_good, rivals) = ([Some(0.0); 2], Some([0.1, 0.5]), &rivals[..]);
        rate(&Rate { stream, ages, curve, level, marks, earned, as_good, rivals, quantity }, &frame)
    };
    sound(&rates(&zero)).unwrap();
    assert_eq!(rates(&zero).title, "Every give-up time earns nothing");
    // Rates below zero are drawn below a line at zero.
    let loss = [Point::new(0.1, -3.0), Point::new(0.5, -1.0)];
    sound(&rates(&loss)).unwrap();
    // An infinite remaining wait leaves the axis and is said.
    let endless = [Point::new(0.1, 1.0).between(0.5, f64::INFINITY), Point::new(0.5, f64::INFINITY)];
    let trend = RemainingWait::Growing;
    let svg = remaining(
        &Remaining { stream, ages, curve: &endless, level, marks, trend, upto: f64::INFINITY },
        &frame,
    );
    sound(&svg).unwrap();
    assert!(svg.title.ends_with("1 s more at the start, no end after 500 ms"), "{}", svg.title);
    // Nothing was over-waited.
    let hours = [[0.0; 24]; 7];
    let calm = Week { stream, what: "over-waited", quantity: Quantity::Time, hours: &hours, zone: "UTC" };
    let svg = week(&calm, &frame);
    sound(&svg).unwrap();
    assert_eq!(svg.title, "Nothing was over-waited in any hour of the week");
    // Holding on never pays, always pays, pays twice.
    let title = |curve: &[[f64; 2]]| {
        let ages = Ages { start: 1.0, middle: 1.0, end: 4.0, sight: 9.0 };
        let marks = Marks { advised: None, in_force: Some(3.5) };
        let svg = holding(&Holding { stream, ages, curve, marks, unit: "completions" }, &frame);
        sound(&svg).unwrap();
        svg.title
    };
    assert_eq!(title(&[[0.0, 0.0], [4.0, 0.0]]), "Holding on is never worth more than giving up");
    assert_eq!(title(&[[0.0, 1.0], [4.0, 2.0]]), "Holding on pays as far as is known, 4 s");
    let twice = [[0.0, 1.0], [1.0, 0.0], [2.0, 0.0], [2.5, 0.3], [3.0, 0.0], [4.0, 0.0]];
    assert_eq!(
        title(&twice),
        "Holding on pays until 1 s, and again from 2 s; the time in force is 2.5 s longer"
    );
}

#[test]
fn a_million_points_cost_no_more_than_a_screen_shows() {
    let curve: Vec<Point> = (1..=1_000_000)
        .map(|i| {
            let age = f64::from(i) * 1e-5;
            Point::new(age, (-age).exp() * (1.0 - 0.1 * f64::from(i % 2))).between(0.0, 1.0)
        })
        .collect();
    let ages = Ages { start: 0.01, middle: 0.7, end: 10.0, sight: 8.0 };
    let marks = Marks::default();
    let input =
        Waiting { stream: "s", waits: 100_000_000, ages, curve: &curve, steps: true, level: 0.9, marks };
    for width in WIDTHS {
        let svg = waiting(&input, &frame(width));
        sound(&svg).unwrap();
        assert!(svg.markup.len() < 250_000, "{}", svg.markup.len());
    }
}

/// Numbers as bad as they come.
fn wild() -> impl Strategy<Value = f64> {
    prop_oneof![
        6 => (-12.0..12.0f64).prop_map(|k| 10f64.powf(k)),
        2 => 0.0..1.0f64,
        1 => -100.0..100.0f64,
        1 => prop_oneof![
            Just(0.0), Just(-0.0), Just(f64::NAN), Just(f64::INFINITY), Just(f64::NEG_INFINITY),
            Just(f64::MAX), Just(f64::MIN), Just(f64::MIN_POSITIVE), Just(5e-324), Just(1.0),
        ],
    ]
}

fn points() -> impl Strategy<Value = Vec<Point>> {
    let point = (wild(), wild(), proptest::option::of((wild(), wild())))
        .prop_map(|(age, value, band)| Point { age, value, band: band.map(|(a, b)| [a, b]) });
    let scattered = proptest::collection::vec(point, 0..40);
    // Decent curves, too: over a few decades, with a band.
    let decent =
        (-6.0..6.0f64, 0.0..7.0f64, -3.0..3.0f64, 2usize..200).prop_map(|(start, decades, slope, n)| {
            (0..n)
                .map(|i| {
                    let part = i as f64 / n as f64;
                    let (age, value) = (10f64.powf(start + part * decades), 10f64.powf(slope * part));
                    Point::new(age, value).between(0.7 * value, 1.6 * value)
                })
                .collect()
        });
    prop_oneof![1 => scattered, 1 => decent]
}

proptest! {
    #![proptest_config(ProptestConfig { failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn any_data_make_a_sound_picture(
        curve in points(),
        (start, middle, end, sight) in (wild(), wild(), wild(), wild()),
        (advised, in_force) in (proptest::option::of(wild()), proptest::option::of(wild())),
        rules in proptest::collection::vec((".{0,30}", wild(), wild(), proptest::option::of((wild(), wild())), 0usize..3), 0..60),
        as_good in proptest::option::of((wild(), wild())),
        (stream, unit) in (".{0,80}", "[a-z ]{0,40}"),
        width in 0u32..2000,
        steps in any::<bool>(),
        kind in 0usize..3,
        trend in 0usize..5,
        spread in proptest::collection::vec(wild(), 1..12),
        (earned, level) in (proptest::option::of(wild()), 0.5..0.999f64),
    ) {
        let earned = [None, earned];
        let frame = Frame { width, prefix: &stream, styled: false };
        let ages = Ages { start, middle, end, sight };
        let marks = Marks { advised, in_force };
        let quantity = [Quantity::Time, Quantity::Number(&unit), Quantity::PerTime(&unit)][kind];
        let stream = stream.as_str();
        use RemainingWait::{Flat, Growing, Mixed, Shrinking, Undecided};
        let trend = [Growing, Shrinking, Flat, Mixed, Undecided][trend];
        let rivals: Vec<Rival<'_>> =
            rules.iter().take(12).map(|(name, age, rate, ..)| Rival { name, age: *age, rate: *rate }).collect();
        let bars: Vec<Bar<'_>> = rules
            .iter()
            .map(|(name, value, _, interval, role)| Bar {
                name,
                value: *value,
                interval: interval.map(|(a, b)| [a, b]),
                role: [Role::Ours, Role::InForce, Role::Other][*role],
            })
            .collect();
        let worth: Vec<[f64; 2]> = curve.iter().map(|p| [p.age, p.value]).collect();
        let hours = std::array::from_fn(|d| std::array::from_fn(|h| spread[(24 * d + h) % spread.len()]));
        let (curve, rivals, bars) = (&curve[..], &rivals[..], &bars[..]);
        let as_good = as_good.map(|(a, b)| [a, b]);
        let pictures = [
            waiting(&Waiting { stream, waits: 9, ages, curve, steps, level, marks }, &frame),
            remaining(&Remaining { stream, ages, curve, level, marks, trend, upto: f64::INFINITY }, &frame),
            rate(&Rate { stream, ages, curve, level, marks, earned, as_good, rivals, quantity }, &frame),
            holding(&Holding { stream, ages, curve: &worth, marks, unit: &unit }, &frame),
            week(&Week { stream, what: &unit, quantity, hours: &hours, zone: "UTC" }, &frame),
            replay(&Replay { stream, over: &unit, quantity, level, bars }, &frame),
            ranking(&Ranking { what: &unit, quantity, level, bars }, &frame),
            nothing(stream, &unit, &frame),
        ];
        for svg in pictures {
            let found = check(&svg.markup);
            prop_assert!(found.is_ok(), "{}: {}", svg.title, found.unwrap_err());
        }
        let small = Spark { stream, ages, curve, steps, marks, prefix: stream, size: (width, width / 4) };
        let small = check(&spark(&small));
        prop_assert!(small.is_ok(), "{small:?}");
        ages.sample(50, &marks).windows(2).for_each(|w| assert!(w[0] < w[1]));
    }
}
