//! What `/metrics` shows, in the text format 0.0.4. Names and units by the open conventions for metrics: base units,
//! `_total` for what only grows, `_ratio` for shares. A give-up time of never is `+Inf`.

use std::sync::Arc;

use prometheus::core::{AtomicU64, Collector, GenericCounter, GenericCounterVec};
use prometheus::proto::{self, LabelPair, Metric, MetricFamily, MetricType};
use prometheus::{
    Encoder, Gauge, Histogram, HistogramOpts, IntGauge, IntGaugeVec, Opts, Registry, Result, TextEncoder,
};

use super::adviser::Fresh;
use super::shared::Shared;
use crate::advice::{Action, RemainingWait, TailClass};
use crate::advise::Survival;
use crate::ledger::{Entry, Extent};
use crate::policy::GiveUp;

type Counter = GenericCounter<AtomicU64>;
type Counters = GenericCounterVec<AtomicU64>;

/// Bounds of the survival histograms, s: 1, 2 and 5 in each decade from 1 ms to a month and more. The same for all
/// streams and for ever, so that they can be compared over time; those past a stream's edge of sight are left out.
pub(super) fn ladder() -> Vec<f64> {
    (-3..=6).flat_map(|decade| [1.0, 2.0, 5.0].map(|step| step * 10f64.powi(decade))).collect()
}

/// The daemon's own health.
pub(super) struct Metrics {
    registry: Registry,
    pub(super) batches: Counters,
    pub(super) lines: Counter,
    pub(super) waits: Counter,
    bad_lines: Counters,
    pub(super) requests: Counters,
    pub(super) queue: IntGauge,
    pub(super) commit: Histogram,
    pub(super) connections: IntGauge,
    pub(super) refused_connections: Counter,
    pub(super) policy_sound: IntGauge,
    pub(super) last_filed: Gauge,
    pub(super) left_out_of_telemetry: Counter,
    resets: Counter,
    ledger_bytes: IntGauge,
    ledger_streams: IntGauge,
    open_waits: IntGauge,
    backlog: IntGauge,
    oldest: Gauge,
    left_out: IntGauge,
}

impl Metrics {
    pub(super) fn new() -> Result<Metrics> {
        let registry = Registry::new();
        let made = Maker(&registry);
        let build = Opts::new("outwait_build_info", "The version that runs.");
        let build = made.add(IntGaugeVec::new(build, &["version"]))?;
        build.with_label_values(&[env!("CARGO_PKG_VERSION")]).set(1);
        let commit = HistogramOpts::new("outwait_commit_seconds", "How long one commit to the ledger took.")
            .buckets(vec![0.001, 0.002, 0.005, 0.01, 0.02, 0.05, 0.1, 0.2, 0.5, 1.0, 2.0, 5.0]);
        let metrics = Metrics {
            batches: made.counters("outwait_batches_total", "Batches of waits answered.", &["outcome"])?,
            lines: made.add(Counter::new("outwait_lines_total", "Lines read."))?,
            waits: made.add(Counter::new("outwait_waits_total", "Waits acknowledged: they are on disk."))?,
            bad_lines: made.counters(
                "outwait_bad_lines_total",
                "Lines that could not be read.",
                &["field", "reason"],
            )?,
            requests: made.counters(
                "outwait_http_requests_total",
                "Requests answered.",
                &["path", "status"],
            )?,
            queue: made.add(IntGauge::new("outwait_queue_batches", "Batches that wait for the disk."))?,
            commit: made.add(Histogram::with_opts(commit))?,
            connections: made.add(IntGauge::new("outwait_connections", "Connections open."))?,
            refused_connections: made
                .add(Counter::new("outwait_connections_refused_total", "Connections beyond the limit."))?,
            policy_sound: made.add(IntGauge::new(
                "outwait_policy_sound",
                "1 while the policy file holds, 0 while the last sound one stands in for it.",
            ))?,
            last_filed: made.add(Gauge::new(
                "outwait_last_filed_timestamp_seconds",
                "When waits were filed last; 0 before the first.",
            ))?,
            left_out_of_telemetry: made.add(Counter::new(
                "outwait_telemetry_left_out_total",
                "Spans and data points that are no waits: not of time, without buckets, or left out by a rule.",
            ))?,
            resets: made.add(Counter::new(
                "outwait_series_resets_total",
                "Histograms that have begun anew since they were read last.",
            ))?,
            ledger_bytes: made.add(IntGauge::new("outwait_ledger_bytes", "Size of the ledger on disk."))?,
            ledger_streams: made.add(IntGauge::new("outwait_ledger_streams", "Streams in the ledger."))?,
            open_waits: made
                .add(IntGauge::new("outwait_open_waits", "Waits that have started and not ended."))?,
            backlog: made.add(IntGauge::new(
                "outwait_advice_backlog_streams",
                "Streams that changed since their last advice.",
            ))?,
            oldest: made.add(Gauge::new(
                "outwait_advice_backlog_seconds",
                "How long the first of them has waited for it.",
            ))?,
            left_out: made.add(IntGauge::new(
                "outwait_streams_left_out",
                "Streams beyond the limit, of which nothing stands here.",
            ))?,
            registry,
        };
        metrics.policy_sound.set(1);
        for outcome in ["counted", "repeated", "refused"] {
            metrics.batches.with_label_values(&[outcome]);
        }
        Ok(metrics)
    }

    /// Notes how large the ledger is.
    pub(super) fn extent(&self, extent: &Extent) {
        self.ledger_bytes.set(extent.bytes as i64);
        self.ledger_streams.set(extent.streams as i64);
        self.open_waits.set(extent.open as i64);
    }

    /// Counts what histograms have grown by.
    pub(super) fn grown(&self, entry: &Entry) {
        self.waits.inc_by(entry.grown);
        self.resets.inc_by(entry.resets);
    }

    /// Counts bad lines. Field and reason come from a small set of the program's own, never from a client.
    pub(super) fn bad(&self, field: &'static str, reason: &'static str, lines: u64) {
        self.bad_lines.with_label_values(&[field, reason]).inc_by(lines);
    }

    /// Bad lines so far by field and reason, the commonest first.
    pub(super) fn bad_counts(&self) -> Vec<(String, String, u64)> {
        let mut all: Vec<_> = self
            .bad_lines
            .collect()
            .iter()
            .flat_map(|family| family.get_metric())
            .map(|metric| {
                let label = |name: &str| {
                    let found = metric.get_label().iter().find(|pair| pair.name() == name);
                    found.map_or_else(String::new, |pair| pair.value().to_owned())
                };
                (label("field"), label("reason"), metric.get_counter().get_value() as u64)
            })
            .collect();
        all.sort_by(|a, b| b.2.cmp(&a.2).then_with(|| a.cmp(b)));
        all
    }

    /// Everything as text.
    pub(super) fn text(&self, shared: &Shared) -> Result<Vec<u8>> {
        let (backlog, oldest) = shared.desk.backlog();
        self.backlog.set(backlog as i64);
        self.oldest.set(oldest);
        let all = shared.all_advice();
        let shown = &all[..all.len().min(shared.config.metric_streams)];
        self.left_out.set((all.len() - shown.len()) as i64);
        let mut families = self.registry.gather();
        families.extend(streams(shown, shared));
        families.sort_by(|a, b| a.name().cmp(b.name()));
        let mut text = Vec::new();
        TextEncoder::new().encode(&families, &mut text)?;
        Ok(text)
    }
}

struct Maker<'r>(&'r Registry);

impl Maker<'_> {
    fn add<C: Collector + Clone + 'static>(&self, made: Result<C>) -> Result<C> {
        let made = made?;
        self.0.register(Box::new(made.clone()))?;
        Ok(made)
    }

    fn counters(&self, name: &str, help: &str, labels: &[&str]) -> Result<Counters> {
        self.add(Counters::new(Opts::new(name, help), labels))
    }
}

/// One family of gauges over the streams, growing.
struct Gauges(MetricFamily);

impl Gauges {
    fn new(name: &str, help: &str) -> Gauges {
        Gauges(family(name, help, MetricType::GAUGE))
    }

    fn set(&mut self, stream: &str, label: Option<(&str, &str)>, value: Option<f64>) {
        let Some(value) = value else { return };
        let mut metric = Metric::from_label(labels(stream, label));
        let mut gauge = proto::Gauge::default();
        gauge.set_value(value);
        metric.set_gauge(gauge);
        self.0.mut_metric().push(metric);
    }
}

fn family(name: &str, help: &str, kind: MetricType) -> MetricFamily {
    let mut family = MetricFamily::default();
    family.set_name(name.to_owned());
    family.set_help(help.to_owned());
    family.set_field_type(kind);
    family
}

fn labels(stream: &str, more: Option<(&str, &str)>) -> Vec<LabelPair> {
    let pair = |name: &str, value: &str| {
        let mut pair = LabelPair::default();
        pair.set_name(name.to_owned());
        pair.set_value(value.to_owned());
        pair
    };
    let mut all: Vec<LabelPair> = more.into_iter().map(|(name, value)| pair(name, value)).collect();
    all.push(pair("stream", stream));
    all.sort_by(|a, b| a.name().cmp(b.name()));
    all
}

/// What stands there of each stream.
fn streams(all: &[Arc<Fresh>], shared: &Shared) -> Vec<MetricFamily> {
    let mut waits = family(
        "outwait_wait_seconds",
        "Who is still waiting: of the waits in the window, as many as have ended by each age, with what the timeout in \
         force cut off made good (product-limit estimate). An estimate of the whole window, not a counter.",
        MetricType::HISTOGRAM,
    );
    let mut give_up = Gauges::new(
        "outwait_give_up_seconds",
        "Give-up time: advised, settled (signed by somebody), present (in force by the policy); +Inf for never.",
    );
    let mut rate = Gauges::new("outwait_reward_rate", "What a give-up time earns, in the unit of the aim.");
    let mut regret = Gauges::new(
        "outwait_expected_regret_ratio",
        "Share of the best reward rate that a give-up time is expected to lose.",
    );
    let mut slack = Gauges::new("outwait_slack_ratio", "Loss that the policy puts up with.");
    let mut attempts = Gauges::new("outwait_attempts_per_request", "Attempts that a request takes.");
    let mut ceiling = Gauges::new("outwait_attempts_ceiling", "Attempts per request that the policy allows.");
    let mut done = Gauges::new("outwait_done_ratio", "Share of attempts that are done by a give-up time.");
    let mut tail = Gauges::new("outwait_tail", "1 for the verdict on the tail, 0 for the others.");
    let mut remaining = Gauges::new("outwait_remaining_wait", "1 for the verdict on the remaining wait.");
    let mut action = Gauges::new("outwait_action", "1 for what is advised, 0 for the others.");
    let mut evidence = Gauges::new("outwait_evidence_waits", "Waits in the window, by how they ended.");
    let mut age = Gauges::new("outwait_advice_age_seconds", "Age of the advice that is served.");
    let mut cautions = Gauges::new("outwait_cautions", "Cautions that stand beside the advice.");
    let (policy, now, settled) = (shared.policy(), shared.now(), shared.settled());
    for fresh in all {
        let (name, advice) = (fresh.advice.stream.as_str(), &fresh.advice.advice);
        waits.mut_metric().extend(fresh.survival.as_ref().map(|survival| histogram(name, survival)));
        let entry = policy.as_ref().and_then(|policy| policy.entry_for(name)).map(|(entry, _)| entry);
        let present = entry.and_then(|entry| entry.now).map(GiveUp::seconds);
        let advised = match advice.action {
            Action::WaitItOut => Some(f64::INFINITY),
            _ => advice.give_up_after_s,
        };
        for (at, time, earns, loses) in [
            ("advised", advised, advice.rate_per_s, advice.expected_regret),
            ("present", present, advice.rate_now_per_s, advice.regret_now),
        ] {
            give_up.set(name, Some(("at", at)), time);
            rate.set(name, Some(("at", at)), earns);
            regret.set(name, Some(("at", at)), loses);
        }
        let signed = settled.standing(name).give_up_after();
        give_up.set(name, Some(("at", "settled")), signed.map(GiveUp::seconds));
        rate.set(name, Some(("at", "never")), advice.rate_never_per_s);
        attempts.set(name, Some(("at", "advised")), advice.attempts_per_request);
        attempts.set(name, Some(("at", "present")), advice.now.and_then(|now| now.attempts_per_request));
        done.set(name, Some(("at", "advised")), advice.done_share);
        done.set(name, Some(("at", "present")), advice.now.map(|now| now.done_share));
        slack.set(name, None, entry.map(|entry| entry.guard.slack));
        ceiling.set(name, None, entry.and_then(|entry| entry.retry.load_ceiling));
        for class in TailClass::ALL {
            let is = f64::from(u8::from(fresh.advice.tail.class == class));
            tail.set(name, Some(("class", class.name())), Some(is));
        }
        for shape in RemainingWait::ALL {
            let is = f64::from(u8::from(fresh.advice.tail.remaining_wait == shape));
            remaining.set(name, Some(("shape", shape.name())), Some(is));
        }
        for kind in Action::ALL {
            action.set(name, Some(("action", kind.name())), Some(f64::from(u8::from(advice.action == kind))));
        }
        let counts = &fresh.advice.evidence;
        for (ending, count) in [
            ("done", counts.done),
            ("failed", counts.failed),
            ("gave_up", counts.gave_up),
            ("waiting", counts.waiting),
        ] {
            evidence.set(name, Some(("ending", ending)), Some(count as f64));
        }
        age.set(name, None, Some((now - fresh.made_at).max(0.0)));
        cautions.set(name, None, Some(fresh.advice.cautions.len() as f64));
    }
    let gauges = [
        give_up, rate, regret, slack, attempts, ceiling, done, tail, remaining, action, evidence, age,
        cautions,
    ];
    let mut families: Vec<MetricFamily> = gauges.into_iter().map(|gauges| gauges.0).collect();
    families.push(waits);
    // An empty family is no text of the format.
    families.retain(|family| !family.get_metric().is_empty());
    families
}

/// A survival curve as cumulative counts.
fn histogram(stream: &str, survival: &Survival) -> Metric {
    let count = survival.waits.round();
    let mut value = proto::Histogram::default();
    let bucket = |[age, waiting]: &[f64; 2]| {
        let mut bucket = proto::Bucket::default();
        bucket.set_upper_bound(*age);
        bucket.set_cumulative_count((count * (1.0 - waiting)).round() as u64);
        bucket
    };
    value.set_bucket(survival.points.iter().map(bucket).collect());
    value.set_sample_count(count as u64);
    value.set_sample_sum(count * survival.restricted_mean_s);
    let mut metric = Metric::from_label(labels(stream, None));
    metric.set_histogram(value);
    metric
}
