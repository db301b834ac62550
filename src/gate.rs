//! Are the times in force worth keeping? A judgement for build pipelines: shut where one costs more than its slack, or where
//! a caller leaves before its callee's schedule ends. Pure: plain data in and out, and JUnit XML as a view of it.

use std::fmt::Write;

use serde::Serialize;

use crate::advice::{Action, Advice, Caution};
use crate::advise::EarlyLeave;
use crate::export::SAFETY;
use crate::policy::{Entry, GiveUp};
use crate::say;

/// Version of the JSON form.
pub const SCHEMA: &str = "outwait/gate/1";

/// The whole judgement.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Gate {
    /// [`SCHEMA`].
    pub schema: &'static str,
    /// Whether the build may pass.
    pub open: bool,
    /// One a stream: those that shut the gate first, the worst of them first.
    pub streams: Vec<Judged>,
    /// Callers that leave before their callees' schedules end; each shuts the gate.
    pub chains: Vec<Chain>,
    /// What no gate knows of.
    pub safety: &'static str,
}

/// How a time in force stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize)]
#[serde(rename_all = "snake_case")]
pub enum Verdict {
    /// It costs more than its slack.
    CostsTooMuch,
    /// Nothing tells what it costs.
    Unjudged,
    /// It costs less.
    Passes,
}

/// One stream's time in force.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Judged {
    /// Which waiting process.
    pub stream: String,
    /// How it stands.
    pub verdict: Verdict,
    /// Why, in a sentence.
    pub because: String,
    /// The time in force, s, or `never`; absent where none is known.
    pub in_force_s: Option<GiveUp>,
    /// Where that is said: `policy`, `settled`, `times` or `--time`.
    pub source: Option<String>,
    /// The advised time, s, or `never`.
    pub advised_s: Option<GiveUp>,
    /// Share of the rate that it loses above what the advised time is expected to lose.
    pub costs: Option<f64>,
    /// What may be lost.
    pub slack: f64,
    /// What to mind before changing it.
    pub cautions: Vec<Caution>,
}

/// A caller that leaves early.
#[derive(Clone, Debug, PartialEq, Eq, Serialize)]
pub struct Chain {
    /// Who leaves.
    pub caller: String,
    /// Whom it leaves at work.
    pub callee: String,
    /// What is the matter, and what to do.
    #[serde(flatten)]
    pub caution: Caution,
}

/// Judges one time in force. `regret`: what it loses of the best rate, if that is known.
pub fn judge(
    stream: &str,
    in_force: Option<(GiveUp, &str)>,
    advice: Option<&Advice>,
    regret: Option<f64>,
    entry: &Entry,
) -> Judged {
    let slack = entry.guard.slack;
    let decision = advice.map(|advice| &advice.advice);
    let advised = decision.and_then(|d| match d.action {
        Action::GiveUpAfter => d.give_up_after_s.map(GiveUp::After),
        Action::WaitItOut => Some(GiveUp::Never),
        _ => None,
    });
    let mut judged = Judged {
        stream: stream.to_owned(),
        verdict: Verdict::Unjudged,
        because: String::new(),
        in_force_s: in_force.map(|(time, _)| time),
        source: in_force.map(|(_, source)| source.to_owned()),
        advised_s: advised,
        costs: None,
        slack,
        cautions: advice.map(|advice| advice.cautions.clone()).unwrap_or_default(),
    };
    let Some(decision) = decision else {
        judged.because = "there are no waits of it".into();
        return judged;
    };
    let Some((now, _)) = in_force else {
        judged.because = "nothing says which time is in force".into();
        return judged;
    };
    let (Some(best), Some(regret)) = (decision.expected_regret.filter(|_| advised.is_some()), regret) else {
        judged.because = match advised {
            None => decision.because.clone(),
            Some(_) => "the advice at hand does not judge this time; weigh waits, or ask the daemon".into(),
        };
        return judged;
    };
    let costs = (regret - best).max(0.0);
    // What no wait has shown must promise twice as much, as for a proposal.
    let sight = advice.and_then(|advice| advice.evidence.sight_s).unwrap_or(f64::INFINITY);
    let unseen = advised.is_some_and(|best| best.seconds() > sight && now.seconds() < best.seconds());
    let needed = slack * if unseen { 2.0 } else { 1.0 };
    let best = match advised {
        Some(GiveUp::After(seconds)) => format!("{} is advised", say::duration(seconds)),
        _ => "waiting it out is advised".into(),
    };
    judged.costs = Some(costs);
    (judged.verdict, judged.because) = if costs > needed {
        let text = format!(
            "giving up after {} costs {} of the rate, more than the slack of {}; {best}",
            say::duration(now.seconds()),
            say::percent(costs),
            say::percent(needed)
        );
        (Verdict::CostsTooMuch, text)
    } else {
        let text = format!(
            "it costs {} of the rate, within the slack of {}",
            say::percent(costs),
            say::percent(needed)
        );
        (Verdict::Passes, text)
    };
    judged
}

impl Gate {
    /// Joins the judgements.
    pub fn of(mut streams: Vec<Judged>, chains: Vec<EarlyLeave>) -> Gate {
        streams.sort_by(|a, b| {
            let costs = |judged: &Judged| judged.costs.unwrap_or(0.0);
            a.verdict.cmp(&b.verdict).then(costs(b).total_cmp(&costs(a))).then(a.stream.cmp(&b.stream))
        });
        let shut = streams.iter().any(|judged| judged.verdict == Verdict::CostsTooMuch) || !chains.is_empty();
        let chains = chains
            .into_iter()
            .map(|EarlyLeave { caller, callee, caution }| Chain { caller, callee, caution })
            .collect();
        Gate { schema: SCHEMA, open: !shut, streams, chains, safety: SAFETY }
    }

    /// Whether any time was judged at all.
    pub fn judged_any(&self) -> bool {
        self.streams.iter().any(|judged| judged.verdict != Verdict::Unjudged) || !self.chains.is_empty()
    }

    /// The same for a terminal.
    pub fn text(&self) -> String {
        let shut =
            self.streams.iter().filter(|j| j.verdict == Verdict::CostsTooMuch).count() + self.chains.len();
        let mut text = match shut {
            0 => "The gate is open.\n".to_owned(),
            1 => "The gate is shut: 1 finding.\n".to_owned(),
            n => format!("The gate is shut: {n} findings.\n"),
        };
        for judged in &self.streams {
            let mark = match judged.verdict {
                Verdict::CostsTooMuch => "shut",
                Verdict::Unjudged => "  ? ",
                Verdict::Passes => "open",
            };
            let _ = writeln!(text, "{mark}  {}: {}", judged.stream, judged.because);
            if judged.verdict == Verdict::CostsTooMuch {
                for caution in &judged.cautions {
                    let _ = writeln!(
                        text,
                        "      ! {}: {}\n        -> {}",
                        caution.code, caution.text, caution.remedy
                    );
                }
            }
        }
        for Chain { caller, caution, .. } in &self.chains {
            let _ = writeln!(text, "shut  {caller}: {}\n        -> {}", caution.text, caution.remedy);
        }
        text
    }

    /// The same as JUnit XML: a test case a stream and a chain; what cannot be judged is skipped.
    pub fn junit(&self) -> String {
        let failures =
            self.streams.iter().filter(|j| j.verdict == Verdict::CostsTooMuch).count() + self.chains.len();
        let skipped = self.streams.iter().filter(|j| j.verdict == Verdict::Unjudged).count();
        let counts = format!(
            "tests=\"{}\" failures=\"{failures}\" errors=\"0\"",
            self.streams.len() + self.chains.len()
        );
        let mut xml = format!(
            "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n<testsuites name=\"outwait gate\" {counts}>\n  \
             <testsuite name=\"outwait gate\" {counts} skipped=\"{skipped}\">\n"
        );
        for judged in &self.streams {
            let _ =
                write!(xml, "    <testcase name=\"{}\" classname=\"outwait.gate\"", escaped(&judged.stream));
            let because = escaped(&judged.because);
            let _ = match judged.verdict {
                Verdict::Passes => writeln!(xml, "/>"),
                Verdict::Unjudged => {
                    writeln!(xml, ">\n      <skipped message=\"{because}\"/>\n    </testcase>")
                }
                Verdict::CostsTooMuch => {
                    let cautions: String = judged
                        .cautions
                        .iter()
                        .map(|c| {
                            format!("\n{}: {}\n  {}", escaped(&c.code), escaped(&c.text), escaped(&c.remedy))
                        })
                        .collect();
                    writeln!(
                        xml,
                        ">\n      <failure type=\"costs_too_much\" message=\"{because}\">{because}{cautions}</failure>\n    \
                         </testcase>"
                    )
                }
            };
        }
        for Chain { caller, callee, caution } in &self.chains {
            let (text, remedy) = (escaped(&caution.text), escaped(&caution.remedy));
            let _ = writeln!(
                xml,
                "    <testcase name=\"{} calls {}\" classname=\"outwait.gate\">\n      <failure type=\"{}\" \
                 message=\"{text}\">{remedy}</failure>\n    </testcase>",
                escaped(caller),
                escaped(callee),
                escaped(&caution.code)
            );
        }
        xml + "  </testsuite>\n</testsuites>\n"
    }
}

/// Text for XML, as an element's or an attribute's; what XML 1.0 cannot hold becomes a space.
fn escaped(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            c if c.is_control() || matches!(c, '\u{fffe}' | '\u{ffff}') => out.push(' '),
            c => out.push(c),
        }
    }
    out
}
