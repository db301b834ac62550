//! The one table of the scenario: seven streams, their laws, and why each is there.

use super::latent::{Latent, Shape};
use super::truth::{Retries, Rhythm, Stream, Terms};
use crate::stopping::{Aim, Fade, Pause, Worth};

const MS: f64 = 1e-3;
const MINUTE: f64 = 60.0;
const HOUR: f64 = 3_600.0;
const DAY: f64 = 86_400.0;

/// Every stream of the scenario, as it truly is.
pub fn truth() -> &'static [Stream] {
    &STREAMS
}

/// Stickiness of the catalogue's retries.
const STICKY: f64 = 0.35;

const STREAMS: [Stream; 7] = [
    Stream {
        name: "catalogue.lookup",
        what: "A reading-room terminal waits for the catalogue.",
        why: "Nine answers in ten come within 80 ms. What is slower is slow by seconds or hangs, so there is little \
              to hope for between 100 ms and 1 s; the timeout of 800 ms waits through that desert and then cuts before \
              the slow answers come. A retry often meets the same slow cause, which makes each give-up dearer the \
              later it comes. In the last week everything takes 30% longer and more answers are slow: the right time \
              moves with it.",
        per_week: 26_000.0,
        rhythm: PUBLIC,
        lead_weeks: 0,
        done: Latent(&[
            (0.895, Shape::Lognormal { median: 35.0 * MS, sigma: 0.3 }),
            (0.1, Shape::Lognormal { median: 1.7, sigma: 0.3 }),
            (0.005, Shape::Never),
        ]),
        shifted: Some(Latent(&[
            (0.835, Shape::Lognormal { median: 45.5 * MS, sigma: 0.3 }),
            (0.16, Shape::Lognormal { median: 2.2, sigma: 0.3 }),
            (0.005, Shape::Never),
        ])),
        patience: Latent(&[(1.0, Shape::Uniform { from: 0.8, upto: 0.802 })]),
        retries: Retries { attempts: 3, pause: 10.0 * MS, sticky: STICKY },
        ticks: 1e6,
        terms: Terms {
            worth: Worth { pause: pause(0.0, 10.0 * MS), sticky: STICKY, ..COMPLETIONS },
            floor: 20.0 * MS,
            ceiling: 5.0,
            now: 0.8,
        },
        ..PLAIN
    },
    Stream {
        name: "index.search",
        what: "The catalogue waits for its index; one search in three is recorded.",
        why: "The longer a search has run, the sooner it ends: nothing is gained by giving up. Its two tries of 250 ms \
              are a caution for its caller, which should leave long before they are over.",
        per_week: 10_000.0,
        rhythm: PUBLIC,
        done: Latent(&[(1.0, Shape::Weibull { shape: 2.0, scale: 14.0 * MS })]),
        patience: Latent(&[(1.0, Shape::Uniform { from: 0.25, upto: 0.251 })]),
        ticks: 1e6,
        terms: Terms {
            worth: Worth { pause: pause(0.0, 5.0 * MS), ..COMPLETIONS },
            floor: 5.0 * MS,
            ceiling: 1.0,
            now: 0.25,
        },
        ..PLAIN
    },
    Stream {
        name: "scan.job",
        what: "The digitisation desk waits for a page-scan job.",
        why: "A light tail and a hazard that rises: a job that has run long is nearly done. The limit of 20 minutes \
              throws away the work of every job that it cuts.",
        per_week: 2_500.0,
        rhythm: OFFICE,
        done: Latent(&[(1.0, Shape::Weibull { shape: 2.5, scale: 14.0 * MINUTE })]),
        patience: Latent(&[(1.0, Shape::Uniform { from: 20.0 * MINUTE, upto: 20.25 * MINUTE })]),
        terms: Terms {
            worth: Worth { pause: pause(0.0, MINUTE), ..COMPLETIONS },
            floor: 5.0 * MINUTE,
            ceiling: 2.0 * HOUR,
            now: 20.0 * MINUTE,
        },
        ..PLAIN
    },
    Stream {
        name: "lender.reply",
        what: "An interlibrary request waits for another library's reply.",
        why: "A heavy tail, and a quarter never answers: after the first days each day of silence makes a reply less \
              likely, while another lender could have been asked. At 14 days the desk cancels most of what is open \
              and forgets the rest, which therefore shows what comes later.",
        per_week: 1_500.0,
        rhythm: OFFICE,
        lead_weeks: 8,
        done: Latent(&[(0.75, Shape::LogLogistic { shape: 1.5, median: 2.5 * DAY }), (0.25, Shape::Never)]),
        patience: Latent(&[
            (0.6, Shape::Uniform { from: 14.0 * DAY, upto: 15.0 * DAY }),
            (0.4, Shape::Never),
        ]),
        terms: Terms {
            worth: Worth { pause: pause(0.0, DAY), ..COMPLETIONS },
            floor: DAY,
            ceiling: 60.0 * DAY,
            now: 14.0 * DAY,
        },
        ..PLAIN
    },
    Stream {
        name: "courier.slot",
        what: "A branch waits for a courier to take its crates.",
        why: "Half of the requests are taken within minutes, the others only on a later round, hours away, and \
              between the two nothing happens: give up just after the prompt half and ask another courier.",
        per_week: 1_500.0,
        rhythm: OFFICE,
        done: Latent(&[
            (0.5, Shape::Lognormal { median: 6.0 * MINUTE, sigma: 0.4 }),
            (0.5, Shape::Lognormal { median: 9.0 * HOUR, sigma: 0.4 }),
        ]),
        patience: Latent(&[(1.0, Shape::Uniform { from: 6.0 * HOUR, upto: 6.0 * HOUR + MINUTE })]),
        terms: Terms {
            worth: Worth { pause: pause(0.0, 5.0 * MINUTE), ..COMPLETIONS },
            floor: 2.0 * MINUTE,
            ceiling: DAY,
            now: 6.0 * HOUR,
        },
        ..PLAIN
    },
    Stream {
        name: "helpdesk.call",
        what: "A librarian waits in the help desk's queue.",
        why: "The tail is light, and yet the wait still to come grows while one waits: whoever was not answered \
              within two minutes is most likely in the slow queue. In busy hours more callers land there. No limit \
              is in force; callers leave when their patience ends, which hides the end of their waits.",
        per_week: 4_000.0,
        rhythm: OFFICE,
        done: Latent(&[
            (0.7, Shape::Weibull { shape: 1.0, scale: 45.0 }),
            (0.3, Shape::Weibull { shape: 1.0, scale: 6.0 * MINUTE }),
        ]),
        crowds: true,
        patience: Latent(&[(1.0, Shape::Weibull { shape: 1.0, scale: 4.0 * MINUTE })]),
        ticks: 10.0,
        terms: Terms {
            worth: Worth { pause: pause(0.0, MINUTE), ..COMPLETIONS },
            floor: 10.0,
            ceiling: HOUR,
            now: f64::INFINITY,
        },
        ..PLAIN
    },
    Stream {
        name: "index.rebuild",
        what: "A branch waits for its index to be rebuilt.",
        why: "A rebuild that has not ended in an hour and a half is stuck and would take most of a day; starting \
              again is sooner done. Some fail in the first minutes, some only after hours, when memory runs out; a \
              failure is no completion and no censoring either.",
        per_week: 350.0,
        rhythm: NIGHT,
        done: Latent(&[
            (0.85, Shape::Weibull { shape: 2.5, scale: 50.0 * MINUTE }),
            (0.15, Shape::Lognormal { median: 7.0 * HOUR, sigma: 0.3 }),
        ]),
        failed: Latent(&[
            (0.08, Shape::Weibull { shape: 1.0, scale: 2.0 * MINUTE }),
            (0.92, Shape::Weibull { shape: 3.0, scale: 8.0 * HOUR }),
        ]),
        patience: Latent(&[(1.0, Shape::Uniform { from: 4.0 * HOUR, upto: 4.0 * HOUR + MINUTE })]),
        terms: Terms {
            worth: Worth { aim: Aim::Finish, pause: pause(10.0 * MINUTE, 20.0 * MINUTE), ..COMPLETIONS },
            floor: 10.0 * MINUTE,
            ceiling: 12.0 * HOUR,
            now: 4.0 * HOUR,
        },
        ..PLAIN
    },
];

/// What a stream is unless it says otherwise.
const PLAIN: Stream = Stream {
    name: "",
    what: "",
    why: "",
    per_week: 0.0,
    rhythm: OFFICE,
    lead_weeks: 0,
    done: Latent::NEVER,
    shifted: None,
    crowds: false,
    failed: Latent::NEVER,
    patience: Latent::NEVER,
    retries: Retries { attempts: 1, pause: 0.0, sticky: 0.0 },
    ticks: 1.0,
    terms: Terms { worth: COMPLETIONS, floor: 0.0, ceiling: 0.0, now: f64::INFINITY },
};

/// A completion is worth 1, all else nothing.
const COMPLETIONS: Worth = Worth {
    aim: Aim::Rate,
    done: 1.0,
    failed: 0.0,
    gave_up: 0.0,
    attempt_cost: 0.0,
    fade: Fade::Stays,
    pause: pause(0.0, 0.0),
    sticky: 0.0,
};

const fn pause(failed: f64, gave_up: f64) -> Pause {
    Pause { done: 0.0, failed, gave_up }
}

/// Reading rooms and homes: evenings and Saturdays busy, Sundays quiet.
const PUBLIC: Rhythm = Rhythm {
    hours: [
        0.3, 0.2, 0.1, 0.1, 0.1, 0.2, 0.5, 1.0, 2.0, 3.5, 4.5, 4.5, 4.0, 4.0, 4.5, 5.0, 5.5, 6.0, 6.0, 5.0,
        3.5, 2.0, 1.0, 0.5,
    ],
    days: [1.0, 1.1, 1.1, 1.0, 1.1, 1.4, 0.5],
};

/// Desks: two peaks a day, hardly anything at weekends.
const OFFICE: Rhythm = Rhythm {
    hours: [
        0.1, 0.1, 0.1, 0.1, 0.1, 0.1, 0.2, 1.0, 3.0, 6.0, 7.0, 6.0, 4.0, 4.5, 6.0, 6.0, 5.0, 3.0, 1.0, 0.5,
        0.3, 0.2, 0.1, 0.1,
    ],
    days: [1.3, 1.1, 1.0, 1.0, 0.9, 0.2, 0.05],
};

/// Machines: the small hours, and some on demand by day.
const NIGHT: Rhythm = Rhythm {
    hours: [
        4.0, 8.0, 9.0, 7.0, 4.0, 2.0, 1.0, 0.5, 0.5, 0.7, 0.7, 0.7, 0.5, 0.5, 0.7, 0.7, 0.5, 0.5, 0.3, 0.3,
        0.3, 0.5, 1.0, 2.0,
    ],
    days: [1.0, 1.0, 1.0, 1.0, 1.0, 0.8, 1.2],
};
