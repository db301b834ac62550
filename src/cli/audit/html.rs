//! An audit as one page that needs nothing else: no script, no fetched file, light and dark, fit for print. A view.

use minijinja::value::Serde;
use minijinja::{AutoEscape, Environment};
use serde::Serialize;

use super::text;
use crate::advice::Caution;
use crate::audit::queue::CurveSummary;
use crate::audit::{AuditSet, DAYS, Lost, StreamAudit, Unit};
use crate::chart::{self, Ages, Marks, Point, Quantity, Svg};

const PAGE: &str = include_str!("page.html");
/// Streams that get pictures: those with the most time waited past the advice. A picture weighs some ten kilobytes.
const PICTURED: usize = 40;
/// Width of a picture, CSS pixels; it shrinks with the page.
const WIDTH: u32 = 720;

#[derive(Serialize)]
struct View<'a> {
    title: String,
    summary: String,
    made_at: Option<&'a str>,
    assumed: &'a [String],
    all_cautions: &'a [Caution],
    picture_style: String,
    overview: Table,
    open: Open,
    streams: Vec<Stream<'a>>,
}

#[derive(Serialize)]
struct Table {
    caption: String,
    heads: Vec<String>,
    rows: Vec<Vec<String>>,
}

#[derive(Serialize)]
struct Open {
    head: String,
    note: String,
    table: Table,
}

#[derive(Serialize)]
struct Stream<'a> {
    name: &'a str,
    head: String,
    fields: Vec<(&'static str, String)>,
    tables: Vec<Table>,
    pictures: Vec<Picture>,
    notes: Vec<String>,
    cautions: &'a [Caution],
}

#[derive(Serialize)]
struct Picture {
    markup: String,
    table: Table,
}

/// The page.
pub(super) fn page(set: &AuditSet) -> Result<String, minijinja::Error> {
    let mut environment = Environment::new();
    environment.set_auto_escape_callback(|_| AutoEscape::Html);
    environment.add_template("page", PAGE)?;
    let mut by_loss: Vec<usize> = (0..set.streams.len()).collect();
    by_loss.sort_by(|&a, &b| {
        let hours = |i: usize| set.streams[i].closed.total.over.hours;
        hours(b).total_cmp(&hours(a)).then(a.cmp(&b))
    });
    let pictured: Vec<usize> = by_loss.iter().copied().take(PICTURED).collect();
    let streams = set.streams.iter().enumerate();
    let view = View {
        title: "Audit of waits".to_owned(),
        summary: text::summary(set),
        made_at: set.made_at.as_deref(),
        assumed: &set.assumed,
        all_cautions: &set.cautions,
        picture_style: chart::style(),
        overview: overview(by_loss.iter().map(|&i| &set.streams[i])),
        open: open(set),
        streams: streams.map(|(i, s)| stream(s, pictured.contains(&i).then_some(i))).collect(),
    };
    environment.get_template("page")?.render(Serde(&view))
}

fn heads(first: &str, rest: &[&str]) -> Vec<String> {
    std::iter::once(&first).chain(rest).map(|head| (*head).to_owned()).collect()
}

fn overview<'a>(streams: impl Iterator<Item = &'a StreamAudit>) -> Table {
    let rows = streams.map(|s| {
        let mut row = vec![s.stream.clone()];
        row.extend(text::lost_cells(&s.closed.total, s.advice.unit));
        row.extend([s.open.waits, s.open.let_go].map(|n| crate::say::count(n as f64)));
        row
    });
    let mut names = text::LOST_HEADS.to_vec();
    names.extend(["open", "to let go"]);
    Table { caption: String::new(), heads: heads("stream", &names), rows: rows.collect() }
}

fn open(set: &AuditSet) -> Open {
    let mut rows = text::open_rows(&set.open).into_iter();
    let heads = rows.next().unwrap_or_default();
    Open {
        head: text::open_head(&set.open),
        note: text::open_note(&set.open),
        table: Table { caption: String::new(), heads, rows: rows.collect() },
    }
}

/// `pictured`: the number that makes the ids of its pictures.
fn stream(s: &StreamAudit, pictured: Option<usize>) -> Stream<'_> {
    let mut fields = text::fields(s);
    let mut tables = Vec::new();
    let mut notes = Vec::new();
    let rows = text::rule_rows(s);
    if !rows.is_empty() {
        let caption = "How they ended".to_owned();
        tables.push(Table { caption, heads: heads("", &text::LOST_HEADS), rows });
    }
    if let Some(queue) = &s.queue {
        fields.extend(text::queue_fields(queue));
        tables.push(Table {
            caption: "What had become of those who came".to_owned(),
            heads: text::QUEUE_HEADS.map(String::from).to_vec(),
            rows: queue.by_age.iter().map(|row| text::queue_cells(row).to_vec()).collect(),
        });
        if let Some(sizing) = &queue.sizing {
            fields.push(("Sizing", text::sizing_line(sizing)));
            tables.push(Table {
                caption: "First sizing, by Erlang A and Erlang C".to_owned(),
                heads: text::SIZING_HEADS.map(String::from).to_vec(),
                rows: text::sizing_cells(sizing),
            });
            notes.extend(sizing.assumptions.iter().map(|line| format!("Assumed: {line}.")));
        }
    }
    let pictures = pictured.map(|number| pictures(s, number)).unwrap_or_default();
    let head = text::head(s);
    Stream { name: &s.stream, head, fields, tables, pictures, notes, cautions: &s.cautions }
}

fn pictures(s: &StreamAudit, number: usize) -> Vec<Picture> {
    let mut drawn = Vec::new();
    let frame = |what: &str| format!("s{number}-{what}");
    let week = |what: &str, quantity: Quantity<'_>, prefix: &str, of: &dyn Fn(&Lost) -> f64| {
        let hours = by_hour(s, of);
        let input = chart::Week { stream: &s.stream, what, quantity, hours: &hours, zone: "UTC" };
        chart::at_both_widths(WIDTH, prefix, |frame| chart::week(&input, frame))
    };
    // Fewer hours than a day has show no rhythm.
    if s.closed.by_hour.len() >= 12 {
        if s.closed.total.over.waits > 0 {
            let past = |lost: &Lost| 3600.0 * lost.over.hours;
            drawn.push(week("waited past the advice", Quantity::Time, &frame("over"), &past));
        }
        if s.closed.total.under.waits > 0 {
            let (unit, factor) = match s.advice.unit {
                Some(Unit::Seconds) => (Quantity::Time, 1.0),
                Some(Unit::Probability) => (Quantity::Number("requests"), 1.0),
                _ => (Quantity::Number("worth"), 1.0),
            };
            let early = |lost: &Lost| factor * lost.under.lost.unwrap_or(0.0);
            drawn.push(week("lost by giving up too early", unit, &frame("under"), &early));
        }
    }
    if let Some(queue) = &s.queue {
        let served = "until service, if nobody left";
        let left = "until they leave, if nobody were served";
        for (what, id, waits, curve) in [
            (served, "offered", queue.served, &queue.offered),
            (left, "patience", queue.abandoned, &queue.patience),
        ] {
            drawn.push(survival(&format!("{}: {what}", s.stream), waits as u64, curve, &frame(id)));
        }
    }
    drawn.into_iter().map(picture).collect()
}

fn survival(title: &str, waits: u64, curve: &CurveSummary, prefix: &str) -> Svg {
    let points: Vec<Point> = curve.curve.iter().map(|p| Point::new(p[0], p[1])).collect();
    let ages = Ages {
        start: points.first().map_or(curve.sight_s, |p| p.age),
        middle: curve.p50_s.unwrap_or(curve.sight_s),
        end: curve.sight_s,
        sight: curve.sight_s,
    };
    let input = chart::Waiting {
        stream: title,
        waits,
        ages,
        curve: &points,
        steps: true,
        level: 0.9,
        marks: Marks::default(),
    };
    chart::at_both_widths(WIDTH, prefix, |frame| chart::waiting(&input, frame))
}

/// Monday first; NaN where no wait ended.
fn by_hour(s: &StreamAudit, of: &dyn Fn(&Lost) -> f64) -> [[f64; 24]; 7] {
    let mut hours = [[f64::NAN; 24]; 7];
    for row in &s.closed.by_hour {
        if let Some(day) = DAYS.iter().position(|day| *day == row.day)
            && let Some(cell) = hours[day].get_mut(row.hour as usize)
        {
            *cell = of(&row.lost);
        }
    }
    hours
}

fn picture(svg: Svg) -> Picture {
    Picture {
        table: Table {
            caption: svg.title,
            heads: svg.table.columns.iter().map(|head| (*head).to_owned()).collect(),
            rows: svg.table.rows,
        },
        markup: svg.markup,
    }
}
