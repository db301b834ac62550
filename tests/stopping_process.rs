//! Monte Carlo of the process itself, attempt by attempt, against every closed form: long-run rates, totals, second
//! copies, deadlines, stickiness. Seeded; each comparison allows four standard errors.

// What the scene needs is there, or the test stops.
#![allow(clippy::unwrap_used)]

use std::collections::HashMap;
use std::sync::Arc;

use outwait::stopping::{
    Aim, Competing, Fade, Failure, Limits, Objective, Odds, Pause, Reached, RequestTime, Retry, SecondCopy,
    Worth, best, decay, expected_time, stickiness,
};
use outwait::tail::families::{Hyperexponential, Lognormal, Weibull};
use outwait::tail::{Family, Law};
use rand::{RngExt, SeedableRng};
use rand_xoshiro::Xoshiro256PlusPlus;

type Random = Xoshiro256PlusPlus;

fn random(seed: u64) -> Random {
    Random::seed_from_u64(seed)
}

fn law(family: &dyn Family, natural: &[f64]) -> Arc<dyn Law> {
    family.law(&family.free(natural).unwrap()).unwrap().into()
}

/// Draws latent ages by inverting `S`.
struct Source {
    outlook: Competing,
    done: Arc<dyn Law>,
    failed: Option<Arc<dyn Law>>,
}

impl Source {
    fn new(done: Arc<dyn Law>, failed: Option<Arc<dyn Law>>) -> Source {
        let failure = failed.clone().map_or(Failure::Never, Failure::Law);
        Source { outlook: Competing::new(done.clone(), failure), done, failed }
    }

    fn done_at(&self, random: &mut Random) -> f64 {
        self.done.quantile(random.random())
    }

    fn fails_at(&self, random: &mut Random) -> f64 {
        self.failed.as_ref().map_or(f64::INFINITY, |law| law.quantile(random.random()))
    }
}

#[derive(Clone, Copy, PartialEq)]
enum End {
    Done,
    Failed,
    GaveUp,
}

/// One fresh attempt: how it ends and how long it took.
fn attempt(source: &Source, give_up_after: f64, random: &mut Random) -> (End, f64) {
    let (done, failed) = (source.done_at(random), source.fails_at(random));
    if done.min(failed) > give_up_after {
        (End::GaveUp, give_up_after)
    } else if done <= failed {
        (End::Done, done)
    } else {
        (End::Failed, failed)
    }
}

/// What one request earned, how long it took with and without the pause at its end, its attempts, whether it was done.
struct Outcome {
    gain: f64,
    cycle: f64,
    until_over: f64,
    attempts: u32,
    done: bool,
}

fn request(
    source: &Source,
    worth: &Worth,
    retry: &Retry,
    give_up_after: f64,
    random: &mut Random,
) -> Outcome {
    let mut o = Outcome { gain: 0.0, cycle: 0.0, until_over: 0.0, attempts: 0, done: false };
    let mut gave_up_before = false;
    loop {
        o.attempts += 1;
        o.gain -= worth.attempt_cost;
        let doomed = gave_up_before && random.random::<f64>() < worth.sticky;
        let (end, took) =
            if doomed { (End::GaveUp, give_up_after) } else { attempt(source, give_up_after, random) };
        o.until_over = o.cycle + took;
        let pause = match end {
            End::Done => {
                o.gain += worth.completion(took);
                o.done = true;
                o.cycle = o.until_over + worth.pause.done;
                return o;
            }
            End::Failed => {
                o.gain += worth.failed;
                retry.pause(worth.pause.failed, o.attempts)
            }
            End::GaveUp => {
                o.gain += worth.gave_up;
                retry.pause(worth.pause.gave_up, o.attempts)
            }
        };
        let drawn = if retry.jitter { 2.0 * random.random::<f64>() } else { 1.0 };
        o.cycle = o.until_over + drawn * pause;
        gave_up_before = end == End::GaveUp;
        if retry.attempts == Some(o.attempts) {
            return o;
        }
    }
}

/// Ratio of two means with its standard error.
fn ratio(pairs: &[(f64, f64)]) -> (f64, f64) {
    let n = pairs.len() as f64;
    let (a, b) = pairs.iter().fold((0.0, 0.0), |s, p| (s.0 + p.0, s.1 + p.1));
    let r = a / b;
    let spread = pairs.iter().map(|p| (p.0 - r * p.1).powi(2)).sum::<f64>();
    (r, spread.sqrt() / (b / n) / n)
}

fn agrees(what: &str, found: f64, (truth, error): (f64, f64)) {
    assert!((found - truth).abs() < 4.0 * error + 1e-12, "{what}: {found} for {truth} ± {error}");
}

fn sources() -> [Source; 3] {
    [
        Source::new(law(&Lognormal, &[0.0, 1.2]), None),
        Source::new(law(&Hyperexponential, &[0.8, 4.0, 0.2]), Some(law(&Weibull, &[1.0, 8.0]))),
        Source::new(law(&Lognormal, &[-0.5, 1.0]), Some(law(&Weibull, &[0.6, 6.0]))),
    ]
}

fn retries() -> [Retry; 4] {
    [
        Retry::default(),
        Retry { attempts: Some(3), ..Retry::default() },
        Retry { attempts: Some(4), growth: 2.0, longest_pause: 0.9, jitter: true },
        Retry { attempts: None, growth: 1.6, longest_pause: 2.0, jitter: true },
    ]
}

const WORTH: Worth = Worth {
    aim: Aim::Rate,
    done: 1.0,
    failed: -0.1,
    gave_up: 0.05,
    attempt_cost: 0.03,
    fade: Fade::Stays,
    pause: Pause { done: 0.1, failed: 0.4, gave_up: 0.25 },
    sticky: 0.0,
};

#[test]
fn rates_and_loads() {
    let mut seed = 0;
    for source in sources() {
        for retry in retries() {
            for (sticky, fade) in [(0.0, Fade::Stays), (0.3, Fade::HalfLife(1.5))] {
                seed += 1;
                let worth = Worth { sticky, fade, ..WORTH };
                let give_up_after = 1.1;
                let mut random = random(seed);
                let outcomes: Vec<Outcome> = (0..20_000)
                    .map(|_| request(&source, &worth, &retry, give_up_after, &mut random))
                    .collect();
                let of =
                    |f: &dyn Fn(&Outcome) -> (f64, f64)| ratio(&outcomes.iter().map(f).collect::<Vec<_>>());
                let what = format!("{retry:?} {sticky} source {}", (seed - 1) / 8);
                let limits = Limits::new(0.01, 50.0).unwrap();
                let objective = Objective::new(&source.outlook, &worth, &retry, limits).unwrap();
                agrees(&what, objective.score(give_up_after), of(&|o| (o.gain, o.cycle)));
                let finish = Worth { aim: Aim::Finish, fade: Fade::Stays, ..worth };
                let objective = Objective::new(&source.outlook, &finish, &retry, limits).unwrap();
                // Time until done: pauses at the end of a request count unless it was done.
                let until = |o: &Outcome| if o.done { o.until_over } else { o.cycle };
                agrees(
                    &what,
                    objective.score(give_up_after),
                    of(&|o| (f64::from(u8::from(o.done)), until(o))),
                );
                let expected = retry.request(Odds::at(&source.outlook, give_up_after), &worth);
                agrees(&what, expected.attempts, of(&|o| (f64::from(o.attempts), 1.0)));
                agrees(&what, expected.done, of(&|o| (f64::from(u8::from(o.done)), 1.0)));
                if retry.attempts.is_none() {
                    let mean = expected_time(&source.outlook, &worth, &retry, give_up_after);
                    agrees(&what, mean, of(&|o| (o.until_over, 1.0)));
                }
            }
        }
    }
}

#[test]
fn carrying_cost_of_one_attempt() {
    let source = &sources()[1];
    let worth = Worth { aim: Aim::CarryingCost(0.2), ..WORTH };
    let one = Retry { attempts: Some(1), ..Retry::default() };
    let mut random = random(11);
    let outcomes: Vec<(f64, f64)> = (0..60_000)
        .map(|_| {
            let o = request(source, &worth, &one, 0.8, &mut random);
            (o.gain - 0.2 * o.cycle, 1.0)
        })
        .collect();
    let objective =
        Objective::new(&source.outlook, &worth, &Retry::default(), Limits::new(0.01, 50.0).unwrap()).unwrap();
    agrees("N - κD", objective.score(0.8), ratio(&outcomes));
}

#[test]
fn totals_of_whole_requests() {
    let mut seed = 100;
    for source in sources() {
        for retry in retries() {
            for sticky in [0.0, 0.35] {
                seed += 1;
                let worth = Worth { sticky, ..WORTH };
                let total = RequestTime::new(&source.outlook, &worth, &retry, 1.1);
                let n = 40_000;
                let mut random = random(seed);
                let times: Vec<f64> =
                    (0..n).map(|_| request(&source, &worth, &retry, 1.1, &mut random).until_over).collect();
                let share = |t: f64| times.iter().filter(|&&x| x > t).count() as f64 / f64::from(n);
                for q in [0.5, 0.9, 0.99] {
                    // A quantile may sit where many requests end at once: then both sides of it count.
                    let t = total.quantile(q);
                    let error = (q * (1.0 - q) / f64::from(n)).sqrt();
                    let (before, after) = (share(t * 0.999), share(t * 1.001));
                    assert!(
                        after <= 1.0 - q + 4.0 * error && before >= 1.0 - q - 4.0 * error,
                        "{retry:?} {sticky} {seed} p{q}: {t}, {before} {after}"
                    );
                }
                for t in [0.3, 1.0, 1.2, 2.0, 3.5] {
                    let s = total.survival(t);
                    let error = (s * (1.0 - s) / f64::from(n)).sqrt();
                    // The lattice may move an end by a cell.
                    let around = (share(t * 1.002), share(t * 0.998));
                    assert!(
                        s >= around.0 - 4.0 * error - 1e-9 && s <= around.1 + 4.0 * error + 1e-9,
                        "{retry:?} {sticky} {seed} {t}: {s} {around:?}"
                    );
                }
            }
        }
    }
}

/// Far out, `ln P(total > t)` falls at the rate that the Cramér-Lundberg equation gives.
#[test]
fn the_decay_of_long_totals() {
    let jitter = Retry { jitter: true, ..Retry::default() };
    let mut seed = 500;
    for (source, retry, sticky) in [
        (0, Retry::default(), 0.0),
        (0, Retry::default(), 0.4),
        (1, Retry::default(), 0.2),
        (1, jitter, 0.0),
        (2, jitter, 0.3),
    ] {
        seed += 1;
        let source = &sources()[source];
        let worth = Worth { sticky, ..WORTH };
        let rate = decay(&source.outlook, &worth, &retry, 1.1);
        let mut random = random(seed);
        let times: Vec<f64> =
            (0..200_000).map(|_| request(source, &worth, &retry, 1.1, &mut random).until_over).collect();
        // Between two ages a whole number of cycles apart, so that the ripple cancels.
        let cycle = 1.1 + worth.pause.gave_up;
        let (from, to) = (2.0 * cycle, 4.0 * cycle);
        let count = |t: f64| times.iter().filter(|&&x| x > t).count() as f64;
        let (near, far) = (count(from), count(to));
        let found = (near / far).ln() / (to - from);
        let error = (1.0 / far - 1.0 / near).sqrt() / (to - from);
        assert!(
            far > 100.0 && (found - rate).abs() < 4.0 * error + 0.01 * rate,
            "{retry:?} {sticky}: {rate} for {found} ± {error}"
        );
    }
}

#[test]
fn second_copies() {
    for (i, source) in sources().iter().enumerate() {
        let copy = SecondCopy::within_load(&source.outlook, 0.05, 1e3).unwrap();
        assert!((copy.extra_load() - 0.05).abs() < 1e-9);
        let h = copy.start();
        let mut random = random(900 + i as u64);
        let n = 100_000;
        let (mut started, mut server) = (0, vec![]);
        let times: Vec<f64> = (0..n)
            .map(|_| {
                let (end, took) = attempt(source, f64::INFINITY, &mut random);
                if took <= h {
                    server.push((took, 1.0));
                    return if end == End::Done { took } else { f64::INFINITY };
                }
                started += 1;
                let (second, later) = attempt(source, f64::INFINITY, &mut random);
                let first = if end == End::Done { took } else { f64::INFINITY };
                let second = if second == End::Done { h + later } else { f64::INFINITY };
                if source.failed.is_none() {
                    let over = first.min(second);
                    server.push((over + (over - h), 1.0));
                }
                first.min(second)
            })
            .collect();
        let load = f64::from(started) / f64::from(n);
        assert!((load - 0.05).abs() < 4.0 * (0.05 * 0.95 / f64::from(n)).sqrt(), "{load}");
        let points = copy.points(1e4);
        for (q, t) in [(0.5, points.p50), (0.99, points.p99), (0.999, points.p999)] {
            if t.is_infinite() {
                assert!(copy.not_done(1e4) > 1.0 - q);
                continue;
            }
            let late = times.iter().filter(|&&x| x > t).count() as f64 / f64::from(n);
            assert!(
                (late - (1.0 - q)).abs() < 4.0 * (q * (1.0 - q) / f64::from(n)).sqrt(),
                "{i} p{q}: {t} {late}"
            );
        }
        if source.failed.is_none() {
            agrees("server time", copy.server_time(1e4), ratio(&server));
            // What the copy buys at 5% more load (Dean & Barroso 2013): a far shorter tail.
            assert!(points.p999 < 0.5 * source.done.quantile(0.999));
        }
    }
}

/// Plays the schedule that the program gives, asking again after each failure, and is done as often as it says.
#[test]
fn deadlines_are_met_as_often_as_promised() {
    let mut seed = 1300;
    for source in sources() {
        for (attempts, sticky, growth) in
            [(1, 0.0, 1.0), (2, 0.0, 1.0), (3, 0.0, 2.0), (3, 0.4, 1.0), (4, 0.2, 1.5)]
        {
            seed += 1;
            let worth = Worth { aim: Aim::Deadline { by: 4.0, attempts }, sticky, ..WORTH };
            let retry = Retry { growth, ..Retry::default() };
            let objective =
                Objective::new(&source.outlook, &worth, &retry, Limits::new(0.05, 4.0).unwrap()).unwrap();
            let deadline = objective.deadline().unwrap();
            let promised = best(&objective).unwrap().score;
            let mut random = random(seed);
            let n = 1500;
            // Give-ups come at known times, so most questions are asked again.
            let mut asked = HashMap::new();
            let met = (0..n)
                .filter(|_| {
                    let (mut left, mut gave_up_before) = (4.0_f64, false);
                    for number in 1..=attempts {
                        let next = *asked
                            .entry((number, gave_up_before, left.to_bits()))
                            .or_insert_with(|| deadline.next(left, attempts + 1 - number, gave_up_before));
                        let doomed = gave_up_before && random.random::<f64>() < sticky;
                        let (end, took) = if doomed {
                            (End::GaveUp, next.give_up_after)
                        } else {
                            attempt(&source, next.give_up_after, &mut random)
                        };
                        match end {
                            End::Done => return true,
                            End::Failed => left -= took + retry.pause(worth.pause.failed, number),
                            End::GaveUp => left -= took + retry.pause(worth.pause.gave_up, number),
                        }
                        gave_up_before = end == End::GaveUp;
                        if left <= 0.0 {
                            return false;
                        }
                    }
                    false
                })
                .count();
            let met = met as f64 / f64::from(n);
            let error = (promised * (1.0 - promised) / f64::from(n)).sqrt();
            assert!(
                (met - promised).abs() < 4.0 * error,
                "{attempts} {sticky} {growth} {seed}: {promised} for {met}"
            );
        }
    }
}

/// φ from first attempts and the retries after their give-ups; its 90% interval holds the truth nine times in ten.
#[test]
fn stickiness_is_recovered() {
    let source = &sources()[0];
    let mut random = random(1700);
    let (phi, rounds) = (0.3, 400);
    let (mut held, mut sum) = (0, 0.0);
    for _ in 0..rounds {
        let (mut first_open, mut again_open) = (0.0, 0.0);
        let n = 1500;
        for _ in 0..n {
            if attempt(source, 1.1, &mut random).0 == End::GaveUp {
                first_open += 1.0;
                let doomed = random.random::<f64>() < phi;
                if doomed || attempt(source, 1.1, &mut random).0 == End::GaveUp {
                    again_open += 1.0;
                }
            }
        }
        let first = Reached { survival: first_open / f64::from(n), attempts: f64::from(n) };
        let again = Reached { survival: again_open / first_open, attempts: first_open };
        let found = stickiness(first, again, 1.645).unwrap();
        held += i32::from(found.interval[0] <= phi && phi <= found.interval[1]);
        sum += found.value;
    }
    let coverage = f64::from(held) / f64::from(rounds);
    assert!((sum / f64::from(rounds) - phi).abs() < 0.01, "{}", sum / f64::from(rounds));
    assert!((0.84..0.96).contains(&coverage), "{coverage}");
}
