//! The queue behind waits that end served or abandoned. METHODS.md section 10.
//!
//! Served: done or failed; abandoned: gave up. Where give-ups are a timer's they tell nothing of patience, and there is no
//! queue to speak of.

mod erlang;
mod little;
mod patience;

use serde::{Deserialize, Serialize};

use super::sums::Flow;
use crate::tally::{Cause, Cells};

pub use erlang::{ErlangA, ErlangC, Service, erlang_b};
pub use little::{Little, Passed};
pub use patience::{CurveSummary, PatienceFit, TwoCurves, fit_patience, turned};

/// Fewer served or abandoned than this draw no curve worth reading.
const LEAST: f64 = 20.0;
/// Most servers that a sizing looks at.
const MOST_SERVERS: u32 = 100_000;
/// Rows of a sizing table at most.
const ROWS: u32 = 8;
/// Nanoseconds in a second.
const NANO: f64 = 1e9;

/// What is known of a queue from elsewhere.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct Known {
    /// Mean number waiting over the window, as something else counted it.
    pub queue_length: Option<f64>,
    /// Mean time that a server is busy with one, s: without it nothing can be sized.
    pub service_time: Option<f64>,
    /// Arrivals per s, where the records lack those that did not wait at all; else those of the records.
    pub arrivals: Option<f64>,
    /// What service is aimed at.
    pub goal: Goal,
}

/// A share to be served within a time.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct Goal {
    /// Share of all that arrive, in (0, 1).
    pub share: f64,
    /// Within so many s.
    pub within_s: f64,
}

impl Default for Goal {
    /// 80% within 20 s: common practice in call centres, no source.
    fn default() -> Goal {
        Goal { share: 0.8, within_s: 20.0 }
    }
}

/// A queue as the waits show it.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct QueueReport {
    /// First attempts that were served.
    pub served: f64,
    /// First attempts that were abandoned.
    pub abandoned: f64,
    /// The wait that service would have taken if nobody left.
    pub offered: CurveSummary,
    /// The wait after which they would have left if nobody were served.
    pub patience: CurveSummary,
    /// What had become of them by some ages.
    pub by_age: Vec<ByAge>,
    /// Fitted patience; absent where nothing fits.
    pub patience_fit: Option<PatienceFit>,
    /// Completeness; absent where the waits carry no times.
    pub little: Option<Little>,
    /// First sizing; absent without a service time or without arrivals.
    pub sizing: Option<Sizing>,
}

/// What had become of those who came, by an age. Shares of all; they add up to 1.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct ByAge {
    /// The age, s.
    pub age_s: f64,
    /// Still waiting.
    pub waiting: f64,
    /// Served by then.
    pub served: f64,
    /// Abandoned by then.
    pub abandoned: f64,
    /// Of those still waiting, the share that leaves unserved later on, as far as sight reaches; absent where none waits.
    pub will_abandon: Option<f64>,
}

/// How many servers a queue needs, to a first approximation.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Sizing {
    /// Mean service time, s.
    pub service_time_s: f64,
    /// Arrivals per s.
    pub arrivals_per_s: f64,
    /// Offered load, erlangs: servers that would be busy all the time if each one who came were served.
    pub load: f64,
    /// Mean patience that A takes, s.
    pub mean_patience_s: f64,
    /// The goal.
    pub goal: Goal,
    /// Least number of servers that meets it by Erlang C (nobody leaves).
    pub least_c: Option<u32>,
    /// By Erlang A (exponential patience).
    pub least_a: Option<u32>,
    /// Number of servers with which A comes nearest to the share that abandons in the data.
    pub as_seen: Option<u32>,
    /// Some numbers of servers, side by side.
    pub rows: Vec<SizingRow>,
    /// What both assume, in sentences.
    pub assumptions: Vec<String>,
}

/// One number of servers.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct SizingRow {
    /// Servers.
    pub servers: u32,
    /// Erlang C; absent where the queue would grow without end.
    pub c: Option<ServiceLevel>,
    /// Erlang A.
    pub a: ServiceLevel,
}

/// What a number of servers gives.
#[derive(Clone, Copy, Debug, PartialEq, Serialize, Deserialize)]
pub struct ServiceLevel {
    /// Share that waits at all.
    pub waits: f64,
    /// Share served within the goal's time.
    pub within: f64,
    /// Share that abandons.
    pub abandons: f64,
    /// Mean wait, s.
    pub mean_wait_s: f64,
    /// Share of their time that servers are busy.
    pub busy: f64,
}

impl ServiceLevel {
    fn new(service: Service, within: f64) -> ServiceLevel {
        ServiceLevel {
            waits: service.waits,
            within,
            abandons: service.abandons,
            mean_wait_s: service.mean_wait,
            busy: service.busy,
        }
    }
}

/// Whether enough were served and enough abandoned to draw both curves.
pub(super) fn is_queue(cells: &Cells) -> bool {
    let [done, failed, gave_up, _] = cells.totals();
    done + failed >= LEAST && gave_up >= LEAST
}

/// Everything there is to say of a queue; `None` where no curve can be drawn.
pub(super) fn report(
    cells: &Cells,
    flow: &Flow,
    window: Option<(f64, f64)>,
    known: &Known,
) -> Option<QueueReport> {
    let curves = TwoCurves::of(cells).ok()?;
    let [done, failed, gave_up, _] = cells.totals();
    let passed = window.map(|(from, to)| Passed {
        window: to - from,
        ended: flow.ended,
        waited: flow.waited as f64 / NANO,
        inside: flow.inside as f64 / NANO,
        open: flow.open,
    });
    let patience_fit = fit_patience(cells);
    let arrivals = known.arrivals.or(window.map(|(from, to)| flow.arrived as f64 / (to - from)));
    let share = gave_up / (done + failed + gave_up);
    let sizing =
        known.service_time.zip(arrivals).zip(patience_fit.as_ref()).and_then(|((service, arrivals), fit)| {
            Sizing::new(service, arrivals, fit.exponential_mean_s, share, known)
        });
    Some(QueueReport {
        served: done + failed,
        abandoned: gave_up,
        offered: curves.offered_summary(),
        patience: curves.patience_summary(),
        by_age: by_age(&curves),
        patience_fit,
        little: passed.and_then(|p| Little::of(&p, known.queue_length)),
        sizing,
    })
}

/// At the ages by which 10, 25, 50, 75, 90 and 99% of all waits were over.
fn by_age(curves: &TwoCurves) -> Vec<ByAge> {
    let outcomes = &curves.outcomes;
    let end = outcomes.points().last().map_or(0.0, |p| p.failed);
    let ages = [0.1, 0.25, 0.5, 0.75, 0.9, 0.99].into_iter().filter_map(|share| {
        outcomes.points().iter().find(|p| p.survival <= 1.0 - share + 1e-12).map(|p| p.time)
    });
    let mut rows: Vec<ByAge> = ages
        .map(|age| {
            let abandoned = outcomes.cumulative_incidence(Cause::Failed, age);
            let served = outcomes.cumulative_incidence(Cause::Done, age);
            let waiting = (1.0 - abandoned - served).max(0.0);
            let will = (end - abandoned).max(0.0) / waiting;
            ByAge {
                age_s: age,
                waiting,
                served,
                abandoned,
                will_abandon: (waiting > 1e-9).then(|| will.min(1.0)),
            }
        })
        .collect();
    rows.dedup_by(|a, b| a.age_s == b.age_s);
    rows
}

impl Sizing {
    /// `share` of those who came was seen to abandon. `None` for a load that is no number or too large to size.
    pub fn new(
        service_time: f64,
        arrivals: f64,
        mean_patience: f64,
        share: f64,
        known: &Known,
    ) -> Option<Sizing> {
        let load = arrivals * service_time;
        let sound = |v: f64| v > 0.0 && v.is_finite();
        let sized = load > 0.0 && load < f64::from(MOST_SERVERS) / 4.0;
        if !(sized && [service_time, arrivals, mean_patience].into_iter().all(sound)) {
            return None;
        }
        let goal = known.goal;
        let a = |n: u32| {
            ErlangA::new(n, arrivals, service_time, mean_patience)
                .map(|q| ServiceLevel::new(q.service(), q.within(goal.within_s)))
        };
        let c = |n: u32| {
            ErlangC::new(n, arrivals, service_time)
                .map(|q| ServiceLevel::new(q.service(), q.within(goal.within_s)))
        };
        let met = |s: Option<ServiceLevel>| s.is_some_and(|s| s.within >= goal.share);
        let least_a = least(|n| met(a(n)));
        let least_c = least(|n| met(c(n)));
        // The share that abandons falls as servers are added.
        let as_seen = least(|n| a(n).is_some_and(|s| s.abandons <= share)).map(|n| {
            let off = |n: u32| a(n).map_or(f64::INFINITY, |s| (s.abandons - share).abs());
            if n > 1 && off(n - 1) < off(n) { n - 1 } else { n }
        });
        let named = [least_a, least_c, as_seen, Some(load.ceil() as u32)];
        let from = named.iter().flatten().min().copied().unwrap_or(1).saturating_sub(1).max(1);
        let to = named.iter().flatten().max().copied().unwrap_or(1) + 1;
        let stride = (to - from).div_ceil(ROWS).max(1);
        let mut numbers: Vec<u32> = (from..=to).step_by(stride as usize).collect();
        numbers.extend(named.into_iter().flatten());
        numbers.retain(|&n| n > 0);
        numbers.sort_unstable();
        numbers.dedup();
        let rows = numbers.into_iter().filter_map(|n| Some(SizingRow { servers: n, c: c(n), a: a(n)? }));
        Some(Sizing {
            service_time_s: service_time,
            arrivals_per_s: arrivals,
            load,
            mean_patience_s: mean_patience,
            goal,
            least_c,
            least_a,
            as_seen,
            rows: rows.collect(),
            assumptions: assumptions(known),
        })
    }
}

fn assumptions(known: &Known) -> Vec<String> {
    let mut told = vec![
        "arrivals come independently at one steady rate, service times are exponential, one queue is served in the order of \
         arrival, and the state is steady: size each busy hour apart"
            .to_owned(),
        "Erlang C: nobody ever leaves, so it asks for too many servers where people do".to_owned(),
        "Erlang A: patience is exponential with the mean that the waits show, the same for everybody and at every age"
            .to_owned(),
    ];
    if known.arrivals.is_none() {
        told.push(
            "arrivals are those of the records; where those served at once are not among them, give the true rate"
                .to_owned(),
        );
    }
    told
}

/// The least number from 1 on for which `holds`, which goes on holding once it does.
fn least(holds: impl Fn(u32) -> bool) -> Option<u32> {
    let mut high = 1;
    while !holds(high) {
        high *= 2;
        if high > MOST_SERVERS {
            return None;
        }
    }
    let mut low = high / 2;
    // It does not hold at `low` (or that is 0) and does at `high`.
    while high - low > 1 {
        let middle = low + (high - low) / 2;
        if holds(middle) { high = middle } else { low = middle }
    }
    Some(high)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sizing_meets_its_goal_with_the_fewest() {
        let known = Known { goal: Goal { share: 0.8, within_s: 20.0 }, ..Known::default() };
        // 100 calls in half an hour, 3 minutes each: 10 erlangs. The least number for 80% in 20 s by Erlang C is the 14 that
        // call-centre tables give (from memory).
        let sizing = Sizing::new(180.0, 100.0 / 1800.0, 120.0, 0.05, &known).unwrap();
        assert_eq!(sizing.least_c, Some(14));
        assert!(sizing.least_a < sizing.least_c);
        let row = |n: u32| sizing.rows.iter().find(|r| r.servers == n).unwrap();
        assert!(row(14).c.unwrap().within >= 0.8);
        assert!(ErlangC::new(13, 100.0 / 1800.0, 180.0).unwrap().within(20.0) < 0.8);
        let seen = row(sizing.as_seen.unwrap()).a.abandons;
        assert!((seen - 0.05).abs() < 0.03, "{seen}");
        assert_eq!(Sizing::new(f64::NAN, 1.0, 1.0, 0.0, &known), None);
        assert_eq!(Sizing::new(1e9, 1e9, 1.0, 0.0, &known), None);
    }
}
