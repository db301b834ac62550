//! The text that goes with the scenario's files: what was put in, what to expect and why. Pure.

use super::generate::{DemoRecord, Scenario};
use super::latent::Latent;
use super::truth::{Best, Stream};
use super::{fernhollow::truth, write::WAITS};
use crate::say;
use crate::wait::Ending;
use jiff::Timestamp;
use std::fmt::Write;

/// The README of a folder that holds these records of the scenario. Markdown.
pub(super) fn readme(scenario: &Scenario, records: &[DemoRecord]) -> String {
    let mut text = format!(
        "# Fernhollow\n\n\
         An invented network of lending libraries. **Everything here is made up** by a seeded generator: no library, \
         person or system stands behind it, and the numbers say nothing about real ones. Its use is that the truth is \
         known, so that advice can be judged.\n\n\
         `{WAITS}` holds {} waits that ended or were open between {} and {} (UTC), made from seed {}; `policy.yaml` says \
         what waiting costs. To weigh them:\n\n\
         ```\noutwait weigh {WAITS} --policy policy.yaml\n```\n\n\
         ## What to expect\n\n\
         *Right* is the best give-up time under the true law and the policy; any time in the range beside it earns at \
         least 99% as much. Advice is learnt from the waits alone, so expect it in that range or near it, not on the \
         dot. The last column is what the time in force loses of the best rate.\n\n\
         | stream | in force | right | as good | lost now |\n|---|---|---|---|---|\n",
        say::count(records.len() as f64),
        day(scenario.begin()),
        day(scenario.end()),
        scenario.seed(),
    );
    for stream in truth() {
        if stream.shifted.is_some() {
            let shift = day(scenario.shift());
            expect(&mut text, stream, &format!(" before {shift}"), stream.best(false));
            expect(&mut text, stream, &format!(" from {shift}"), stream.best(true));
        } else {
            expect(&mut text, stream, "", stream.best(false));
        }
    }
    text.push_str(
        "\nWhere the law shifts, advice from all weeks together lies between the two rows. No wait tells what lies \
         past the time at which all are given up: there the advice carries a caution.\n\n\
         ## What is recorded\n\n\
         | stream | waits | done | failed | gave up | still waiting |\n|---|---|---|---|---|---|\n",
    );
    for stream in truth() {
        count(&mut text, stream.name, records);
    }
    text.push_str("\n## What was put in, and why the advice is right\n");
    for stream in truth() {
        explain(&mut text, stream, &day(scenario.shift()));
    }
    text
}

// Writing to a String cannot fail, so the results below carry nothing.

fn expect(text: &mut String, stream: &Stream, when: &str, best: Best) {
    let right = if best.wait_it_out {
        "wait it out".into()
    } else {
        format!("give up after {}", say::duration(best.give_up_after))
    };
    let _ = writeln!(
        text,
        "| `{}`{when} | {} | {right} | {} to {} | {} |",
        stream.name,
        say::duration(stream.terms.now),
        say::duration(best.band[0]),
        say::duration(best.band[1]),
        say::percent(best.loss_now.max(0.0)),
    );
}

fn count(text: &mut String, name: &str, records: &[DemoRecord]) {
    let mine = || records.iter().filter(|r| r.stream == name);
    let total = mine().count() as f64;
    let _ = write!(text, "| `{name}` | {} |", say::count(total));
    for ending in Ending::ALL {
        let share = mine().filter(|r| r.ending == ending).count() as f64 / total;
        let _ = write!(text, " {} |", say::percent(share));
    }
    text.push('\n');
}

fn explain(text: &mut String, stream: &Stream, shift: &str) {
    let _ = write!(
        text,
        "\n### {}\n\n{} {}\n\n- done after: {}\n",
        stream.name, stream.what, stream.why, stream.done
    );
    if let Some(law) = stream.shifted {
        let _ = writeln!(text, "- from {shift} on: {law}");
    }
    if stream.crowds {
        text.push_str("- the last share grows with how busy the hour is; what is written is its average\n");
    }
    if stream.failed != Latent::NEVER {
        let _ = writeln!(text, "- failed after, if not done before: {}", stream.failed);
    }
    let _ = writeln!(text, "- given up after, if still open: {}", stream.patience);
    if stream.retries.attempts > 1 {
        let _ = writeln!(
            text,
            "- what was given up is tried again, up to {} times in all; with probability {} a retry meets the very \
             same wait as the try before it",
            stream.retries.attempts, stream.retries.sticky
        );
    }
    if stream.lead_weeks > 0 {
        let _ = writeln!(
            text,
            "- begun up to {} weeks before the record opens; those still open then are watched from the age they had \
             (`entered`)",
            stream.lead_weeks
        );
    }
}

fn day(at: f64) -> String {
    let time = Timestamp::from_second(at as i64).unwrap_or_default();
    time.strftime("%Y-%m-%d").to_string()
}
