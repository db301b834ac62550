//! Advice as text for a person at a terminal: a summary line, then one block a stream. A view; it computes nothing.

use std::fmt::Write;

use crate::advice::{Action, Advice, AdviceSet, Outcome, RemainingWait, TailClass};
use crate::say;

/// Colour and emphasis, only where a terminal shows them; never the only sign of anything.
#[derive(Clone, Copy, Debug, Default)]
pub(super) struct Style {
    /// Whether escape sequences may be written.
    pub(super) colour: bool,
}

impl Style {
    fn wrap(self, code: &str, text: &str) -> String {
        if self.colour { format!("\x1b[{code}m{text}\x1b[0m") } else { text.to_owned() }
    }

    fn strong(self, text: &str) -> String {
        self.wrap("1", text)
    }

    fn warn(self, text: &str) -> String {
        self.wrap("33", text)
    }

    fn faint(self, text: &str) -> String {
        self.wrap("2", text)
    }
}

/// The whole of a run.
pub(super) fn advice_set(set: &AdviceSet, style: Style) -> String {
    let mut out = String::new();
    for line in &set.assumed {
        let _ = writeln!(out, "{} {line}", style.warn("assumed:"));
    }
    let _ = writeln!(out, "{}", style.strong(&summary(set)));
    for advice in &set.streams {
        out.push('\n');
        out.push_str(&block(advice, style));
    }
    out
}

/// How many streams get which advice, and where most is lost.
fn summary(set: &AdviceSet) -> String {
    let waits: u64 = set.streams.iter().map(|s| s.evidence.waits).sum();
    let n = set.streams.len();
    let count = |action: Action| set.streams.iter().filter(|s| s.advice.action == action).count();
    let mut parts = Vec::new();
    for (action, words) in [
        (Action::GiveUpAfter, "to give up after a time"),
        (Action::WaitItOut, "to wait out"),
        (Action::GatherEvidence, "with too little evidence"),
        (Action::StateACost, "without a cost of time"),
    ] {
        match count(action) {
            0 => {}
            n => parts.push(format!("{n} {words}")),
        }
    }
    let mut line = format!(
        "{} waits in {n} {}: {}.",
        say::count(waits as f64),
        if n == 1 { "stream" } else { "streams" },
        parts.join(", ")
    );
    let worst = set
        .streams
        .iter()
        .filter_map(|s| s.advice.regret_now.map(|r| (s, r)))
        .max_by(|a, b| a.1.total_cmp(&b.1))
        .filter(|(_, regret)| *regret > 0.0);
    if let Some((stream, regret)) = worst {
        let _ = write!(line, " The time in force loses most in {}: {}.", stream.stream, say::percent(regret));
    }
    line
}

fn block(advice: &Advice, style: Style) -> String {
    let mut out = String::new();
    let e = &advice.evidence;
    let _ = writeln!(
        out,
        "{}  {}",
        style.strong(&advice.stream),
        style.faint(&format!(
            "{}, {} waits: {} done, {} failed, {} given up, {} open",
            advice.kind,
            say::count(e.waits as f64),
            say::count(e.done as f64),
            say::count(e.failed as f64),
            say::count(e.gave_up as f64),
            say::count(e.waiting as f64)
        ))
    );
    field(&mut out, "Verdict", &verdict(advice));
    field(&mut out, "Advice", &style.strong(&headline(advice)));
    field(&mut out, "Why", &advice.advice.because);
    outcomes(&mut out, advice);
    doubt(&mut out, advice);
    extras(&mut out, advice);
    for caution in &advice.cautions {
        let _ = writeln!(out, "  {} {}", style.warn(&format!("! {}:", caution.code)), caution.text);
        let _ = writeln!(out, "    -> {}", caution.remedy);
    }
    out
}

fn field(out: &mut String, name: &str, text: &str) {
    let _ = writeln!(out, "  {name:<9}{text}");
}

fn verdict(advice: &Advice) -> String {
    let tail = match advice.tail.class {
        TailClass::Heavy => "heavy tail",
        TailClass::Light => "light tail",
        TailClass::Undecided => "tail undecided",
    };
    let wait = match advice.tail.remaining_wait {
        RemainingWait::Growing => "the longer one has waited, the longer there is to wait",
        RemainingWait::Shrinking => "the longer one has waited, the sooner it ends",
        RemainingWait::Flat => "what was waited says nothing about the rest",
        RemainingWait::Mixed => "the remaining wait first falls, then grows, or the reverse",
        RemainingWait::Undecided => "the data do not tell whether the remaining wait grows or shrinks",
    };
    format!("{tail}; {wait}")
}

fn headline(advice: &Advice) -> String {
    let d = &advice.advice;
    match d.action {
        Action::GiveUpAfter => match d.give_up_after_s {
            Some(t) => {
                let mut line = format!("give up after {}", say::duration(t));
                if let Some([low, high]) = d.band_s {
                    let _ = write!(
                        line,
                        "; anything from {} to {} is about as good",
                        say::duration(low),
                        say::duration(high)
                    );
                }
                line
            }
            None => "give up".into(),
        },
        Action::WaitItOut => match d.ceiling_s {
            Some(c) => format!("wait it out, up to the ceiling of {}", say::duration(c)),
            None => "wait it out".into(),
        },
        Action::GatherEvidence => "gather evidence before changing anything".into(),
        Action::StateACost => "state what waiting costs; without it there is no reason to stop".into(),
    }
}

/// The table of what the advised time, the one in force and never giving up do.
fn outcomes(out: &mut String, advice: &Advice) {
    let d = &advice.advice;
    let advised = d.rate_per_s.map(|rate| Outcome {
        give_up_after_s: d.give_up_after_s.or(d.ceiling_s),
        rate_per_s: rate,
        done_share: d.done_share.unwrap_or(f64::NAN),
        attempts_per_request: d.attempts_per_request,
        p50_s: d.p50_s,
        p99_s: d.p99_s,
    });
    let rows: Vec<(&str, Outcome)> = [("advised", advised), ("in force", d.now), ("never", d.never)]
        .into_iter()
        .filter_map(|(name, outcome)| outcome.map(|o| (name, o)))
        .collect();
    if rows.is_empty() {
        return;
    }
    let cells: Vec<[String; 7]> = std::iter::once(
        ["", "give up at", "rate", "done", "attempts", "half by", "99% by"].map(String::from),
    )
    .chain(rows.iter().map(|(name, o)| {
        [
            (*name).to_owned(),
            o.give_up_after_s.map_or("never".into(), say::duration),
            per_second(o.rate_per_s),
            say::percent(o.done_share),
            o.attempts_per_request.map_or("-".into(), say::number),
            o.p50_s.map_or("-".into(), say::duration),
            o.p99_s.map_or("-".into(), say::duration),
        ]
    }))
    .collect();
    let mut widths = [0; 7];
    for row in &cells {
        for (width, cell) in widths.iter_mut().zip(row) {
            *width = (*width).max(cell.chars().count());
        }
    }
    for row in &cells {
        let mut line = String::from("           ");
        for (i, (cell, width)) in row.iter().zip(widths).enumerate() {
            let pad = " ".repeat(width - cell.chars().count());
            // Names to the left, figures to the right.
            let _ = if i == 0 { write!(line, "{cell}{pad}") } else { write!(line, "  {pad}{cell}") };
        }
        let _ = writeln!(out, "{}", line.trim_end());
    }
}

/// A rate in the unit that keeps it readable: per second, minute, hour or day.
fn per_second(rate: f64) -> String {
    let (value, unit) = match rate.abs() {
        r if r >= 0.1 || r == 0.0 => (rate, "/s"),
        r if r >= 0.1 / 60.0 => (rate * 60.0, "/min"),
        r if r >= 0.1 / 3600.0 => (rate * 3600.0, "/h"),
        _ => (rate * 86_400.0, "/d"),
    };
    format!("{}{unit}", say::number(value))
}

fn doubt(out: &mut String, advice: &Advice) {
    let d = &advice.advice;
    let mut parts = Vec::new();
    if let Some([low, high]) = d.interval_s {
        parts.push(format!(
            "best time between {} and {} (90%)",
            say::duration(low),
            if Some(high) == d.ceiling_s { "the ceiling".into() } else { say::duration(high) }
        ));
    }
    if let (Some(mean), Some(high)) = (d.expected_regret, d.regret_95) {
        parts.push(format!("expected loss {} (95%: {})", say::percent(mean), say::percent(high)));
    }
    if let Some(regret) = d.regret_now {
        parts.push(format!("the time in force loses {}", say::percent(regret)));
    }
    if !parts.is_empty() {
        field(out, "Doubt", &parts.join("; "));
    }
}

fn extras(out: &mut String, advice: &Advice) {
    let d = &advice.advice;
    if let Some(sticky) = &d.sticky {
        let phi = say::percent(sticky.value);
        let mut line = match (sticky.from.as_str(), sticky.interval) {
            ("unknown", _) => {
                "nothing tells how often a retry meets the fate of the attempt it replaces; taken as never"
                    .to_owned()
            }
            (_, Some([low, high])) => format!(
                "one in the data meets the fate of the attempt it replaces {phi} of the time ({} to {})",
                say::percent(low),
                say::percent(high)
            ),
            _ => format!("by the policy one meets the fate of the attempt it replaces {phi} of the time"),
        };
        if let Some(flip) = sticky.flips_at {
            let _ = write!(line, "; from {} on, waiting it out would be best", say::percent(flip));
        }
        field(out, "Retries", &line);
    }
    if !d.schedule_s.is_empty() {
        field(out, "Schedule", &list(&d.schedule_s));
    }
    if let Some(copy) = &d.second_copy {
        let mut line = format!(
            "a second copy started at {} adds {} attempts a request",
            say::duration(copy.start_s),
            say::number(copy.extra_load)
        );
        let by = |t: Option<f64>| t.map_or("never".to_owned(), |t| format!("by {}", say::duration(t)));
        let _ = write!(
            line,
            "; 99% are then done {}, with a retry of equal load {}",
            by(copy.p99_s),
            by(copy.retry_p99_s)
        );
        field(out, "Copy", &line);
    }
    if let Some(look) = &d.look {
        let share = look.share.map(|s| format!(", {} of the traffic for a week", say::percent(s)));
        field(
            out,
            "Look",
            &format!(
                "past the edge of sight: let {} waits{} run from {} to {}; worth it if more than {} of them end by then",
                say::count(look.waits_needed),
                share.unwrap_or_default(),
                say::duration(look.from_s),
                say::duration(look.to_s),
                say::percent(look.break_even)
            ),
        );
    }
    if !d.stop_gap_s.is_empty() {
        field(
            out,
            "Stop-gap",
            &format!("until there is evidence, give up in turn after {}", list(&d.stop_gap_s)),
        );
    }
}

fn list(times: &[f64]) -> String {
    times.iter().map(|&t| say::duration(t)).collect::<Vec<_>>().join(", ")
}
