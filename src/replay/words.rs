//! What came of a replay, in a sentence that does not take sides.

use super::report::{ADVICE, IN_FORCE, RuleReplay};
use crate::say;

/// Differences below this share of the larger are none.
const SLIGHT: f64 = 0.005;

/// Why nothing was replayed.
pub(super) fn nothing(periods: usize, dated: bool) -> String {
    let unit = if dated { "week" } else { "part" };
    match periods {
        0 => "it has no waits that can be replayed".to_owned(),
        1 => format!("all its waits lie in one {unit}: there is no later one to earn on"),
        n => format!("in none of its {n} {unit}s did waits end after others to learn from"),
    }
}

/// How the advice did beside the others.
pub(super) fn finding(rules: &[RuleReplay]) -> String {
    let Some(ours) = rules.iter().find(|r| r.rule == ADVICE) else { return String::new() };
    let Some(earned) = ours.rate_per_s else {
        return format!(
            "what the advice would have earned was not seen: {} of the waits were cut off before its time",
            say::percent(ours.hidden_share)
        );
    };
    let seen = rules.iter().filter(|r| r.rule != ADVICE && r.rate_per_s.is_some());
    let best =
        seen.max_by(|a, b| a.rate_per_s.unwrap_or(f64::NAN).total_cmp(&b.rate_per_s.unwrap_or(f64::NAN)));
    let hidden = match rules.iter().filter(|r| r.rate_per_s.is_none()).count() {
        0 => String::new(),
        n => format!("; what {n} {} would have earned was not seen", if n == 1 { "rule" } else { "rules" }),
    };
    let Some(best) = best else {
        return format!("nothing that could be seen stands beside the advice{hidden}");
    };
    let rate = best.rate_per_s.unwrap_or(f64::NAN);
    let alike = |a: f64, b: f64| (a - b).abs() <= SLIGHT * a.abs().max(b.abs());
    let chance = |certain: bool| if certain { "" } else { ", which may be chance" };
    let [low, high] = best.advice_ahead_interval_per_s.unwrap_or([f64::NEG_INFINITY, f64::INFINITY]);
    let lead = match (alike(earned, rate), earned < rate) {
        _ if earned == 0.0 && rate == 0.0 => return format!("no rule earned anything{hidden}"),
        (true, _) => format!("the advice earned as much as the best of the others, {}", name(best)),
        (false, true) => {
            let than = compared(rate, earned);
            format!("{} earned {than} the advice{}", name(best), chance(high < 0.0))
        }
        (false, false) => {
            let than = compared(earned, rate);
            let best = name(best);
            format!("the advice earned most, {than} the next, {best}{}", chance(low > 0.0))
        }
    };
    let now = rules.iter().find(|r| r.rule == IN_FORCE && best.rule != IN_FORCE);
    let against_now =
        now.and_then(|now| now.rate_per_s).map_or(String::new(), |rate| match alike(earned, rate) {
            true => "; the advice earned as much as the time in force".to_owned(),
            false => format!("; the advice earned {} the time in force", compared(earned, rate)),
        });
    format!("{lead}{against_now}{hidden}")
}

/// "12% more than", "3.5 times as much as", or the difference where one earned nothing.
fn compared(one: f64, other: f64) -> String {
    match one / other {
        _ if other <= 0.0 && one > other => format!("{} more than", say::number(one - other)),
        _ if other <= 0.0 => format!("{} less than", say::number(other - one)),
        ratio if ratio >= 2.0 => format!("{} times as much as", say::number(ratio)),
        ratio if ratio >= 1.0 => format!("{} more than", say::percent(ratio - 1.0)),
        ratio => format!("{} less than", say::percent(1.0 - ratio)),
    }
}

fn name(rule: &RuleReplay) -> String {
    match rule.rule.as_str() {
        IN_FORCE => "the time in force".to_owned(),
        "never" => "never giving up".to_owned(),
        other => format!("the rule {other}"),
    }
}
