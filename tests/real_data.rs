//! Every real data set through the reader and the advice, each pinned and looked at. Sources and terms:
//! `tests/reference/SOURCES.md`; sets that may not be redistributed are read from a `shared/reference` folder where
//! there is one.
//!
//! No one has published what these waits were worth, so the prices are ours: a completion is worth 1, and a new start
//! costs a fifth of the median wait.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail

mod support;

use outwait::advice::{Action, Advice, RemainingWait, TailClass};
use outwait::advise::{Case, Terms, advise};
use outwait::intake::{self, Allowed, Measure, Options, Record, Report, Selector, Sink, Source};
use outwait::policy::Entry;
use outwait::tally::Book;

#[derive(Default)]
struct Counting(Book);

impl Sink for Counting {
    fn take(&mut self, record: &Record<'_>) {
        self.0.add(record.stream, &record.wait).unwrap();
    }
    fn fork(&self) -> Self {
        Counting::default()
    }
    fn absorb(&mut self, other: Self) {
        self.0.merge(other.0);
    }
}

fn read(file: &str, name: Option<&str>, measure: Measure) -> Option<(Book, Report)> {
    let path = support::reference_path("data", file)?;
    let options = Options {
        streams: name.map(|n| Selector::new(n).unwrap()),
        measure,
        bad_lines: Allowed::All,
        ..Options::default()
    };
    // This set's own names hold a character that no stream name may have.
    let source = if file == "hpc2n_2002_waits.csv" {
        let text = std::fs::read_to_string(path).unwrap().replace('>', "-over-");
        Source::reader(file, std::io::Cursor::new(text))
    } else {
        Source::path(path)
    };
    let (Counting(book), report) =
        intake::read(vec![source], &options, Counting::default(), &mut |_| ()).unwrap();
    Some((book, report))
}

/// The advice on all of a stream's waits, whenever they were, with a fifth of the median as the pause.
fn ask(book: &Book, stream: &str) -> Advice {
    let tally = book.stream(stream).unwrap().whole();
    let mut entry = Entry::without_policy();
    entry.guard.evidence = 10;
    let free = advise(&Case::new(stream, &tally), &entry, 1);
    let median = free.advice.never.and_then(|n| n.p50_s).unwrap();
    entry.worth.as_mut().unwrap().pause.gave_up = 0.2 * median;
    advise(&Case::new(stream, &tally), &entry, 1)
}

#[test]
fn explore() {
    for (file, name, measure) in [
        ("azure_vm_launch_program.csv", None, Measure::Wait),
        ("bank_calls_1999_feb_first_half.csv", None, Measure::Wait),
        ("college_message_replies.csv", Some("replies"), Measure::Wait),
        ("danish_fire_losses.csv", Some("losses"), Measure::Wait),
        ("helpdesk_tickets.csv", Some("tickets"), Measure::Wait),
        ("hpc2n_2002_first_jobs.swf", None, Measure::Wait),
        ("hpc2n_2002_first_jobs.swf", None, Measure::Run),
        ("hpc2n_2002_waits.csv", None, Measure::Wait),
        ("leukemia_6mp.csv", None, Measure::Wait),
        ("nasa_ipsc_1993_runtimes.csv", None, Measure::Wait),
        ("nist_weibull_type1.csv", Some("units"), Measure::Wait),
        ("seattle_rtt.csv", None, Measure::Wait),
        ("strike_durations.csv", Some("strikes"), Measure::Wait),
        ("unemployment_spells.csv", None, Measure::Wait),
        ("waltons_flies.csv", None, Measure::Wait),
    ] {
        let Some((book, report)) = read(file, name, measure) else { continue };
        println!(
            "== {file} {measure:?} waits {} bad {} left {:?} susp {:?}",
            report.waits,
            report.bad.count,
            report.left_out,
            report.suspicions.iter().map(|s| s.to_string()).collect::<Vec<_>>()
        );
        for (stream, days) in book.streams() {
            let done = days.whole().counts();
            if done[0] < 10 {
                println!("   {stream} {done:?}");
                continue;
            }
            let a = ask(&book, stream);
            let d = &a.advice;
            println!(
                "   {stream} {done:?} {} at {:?} int {:?} band {:?} rate {:?} never {:?} regret {:?} | {:?} h{:.2} l{:.2} {:?} | {} {:.2} gap {:.3} | median {:?} sight {:?} | {:?}\n       {}",
                d.action.name(),
                d.give_up_after_s,
                d.interval_s,
                d.band_s,
                d.rate_per_s,
                d.rate_never_per_s,
                d.expected_regret,
                a.tail.class,
                a.tail.heavy_weight,
                a.tail.light_weight,
                a.tail.remaining_wait,
                a.fits[0].family,
                a.fits[0].weight,
                a.fits[0].largest_gap,
                d.never.and_then(|n| n.p50_s),
                a.evidence.sight_s,
                a.cautions.iter().map(|c| c.code.as_str()).collect::<Vec<_>>(),
                d.because
            );
            println!("       {}", a.tail.reason);
        }
        let newest = book.streams().iter().filter_map(|(_, d)| d.last_day()).max();
        let terms = Terms { policy: None, newest, seed: 1 };
        for (stream, days) in book.streams().into_iter().take(40) {
            let a = terms.advise(stream, days, None);
            println!(
                "   as is: {stream} {} {:?} waits {}",
                a.advice.action.name(),
                a.advice.give_up_after_s,
                a.evidence.waits
            );
        }
    }
    let _ = (TailClass::Heavy, RemainingWait::Mixed, Action::WaitItOut);
}
