//! A queue with `n` servers: Erlang's B and C, and Erlang A (Palm), in which those who wait lose patience. METHODS.md
//! section 10.
//!
//! All assume arrivals that come independently at a steady rate (Poisson), service times that are exponential, one queue
//! served in the order of arrival, and a steady state. C assumes besides that nobody ever leaves, A that patience is
//! exponential. (Erlang 1917; Palm 1957; Garnett, Mandelbaum & Reiman 2002, *M&SOM* 4:208.)

use crate::numeric::integrate;

/// Most terms of the sum over the queue's states; past them the queue is so overloaded that its fluid limit holds.
const MOST_TERMS: u32 = 20_000_000;
/// Numbers are scaled down past this.
const LARGE: f64 = 1e200;
/// `e` to the minus this is nothing beside 1.
const NOTHING: f64 = 50.0;

/// What one who arrives meets. Shares from 0 to 1, times in s.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Service {
    /// Share that must wait.
    pub waits: f64,
    /// Mean wait of all, those who do not wait and those who leave included.
    pub mean_wait: f64,
    /// Share that leaves unserved.
    pub abandons: f64,
    /// Mean number waiting.
    pub queue: f64,
    /// Share of their time that servers are busy.
    pub busy: f64,
}

/// Erlang's loss formula `B(n, a)`: the share that finds all `n` servers busy where nobody waits; `load` `a` in erlangs,
/// above 0. By the recursion `1/B(k) = 1 + (k/a)/B(k-1)`, which only adds.
pub fn erlang_b(servers: u32, load: f64) -> f64 {
    let mut inverse = 1.0;
    for k in 1..=servers {
        inverse = 1.0 + inverse * f64::from(k) / load;
        if inverse.is_infinite() {
            return 0.0;
        }
    }
    1.0 / inverse
}

/// A queue that nobody leaves: M/M/n.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ErlangC {
    servers: f64,
    arrivals: f64,
    service: f64,
    waits: f64,
}

impl ErlangC {
    /// `servers` >= 1, `arrivals` per s and mean `service` time in s, both above 0 and finite. `None` where the load is not
    /// below the number of servers: the queue then grows without end.
    pub fn new(servers: u32, arrivals: f64, service: f64) -> Option<ErlangC> {
        let load = arrivals * service;
        let n = f64::from(servers);
        if !(load > 0.0 && load < n && service > 0.0) {
            return None;
        }
        let lost = erlang_b(servers, load);
        let waits = lost / (1.0 - load / n * (1.0 - lost));
        Some(ErlangC { servers: n, arrivals, service, waits })
    }

    /// What one who arrives meets.
    pub fn service(&self) -> Service {
        let load = self.arrivals * self.service;
        let mean_wait = self.waits * self.service / (self.servers - load);
        Service {
            waits: self.waits,
            mean_wait,
            abandons: 0.0,
            queue: self.arrivals * mean_wait,
            busy: load / self.servers,
        }
    }

    /// Share served within `t` s.
    pub fn within(&self, t: f64) -> f64 {
        let load = self.arrivals * self.service;
        1.0 - self.waits * (-(self.servers - load) * t / self.service).exp()
    }
}

/// A queue whose customers have exponential patience: M/M/n+M.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ErlangA {
    servers: f64,
    arrivals: f64,
    service: f64,
    patience: f64,
    waits: f64,
    /// Mean number in the queue where all servers are busy.
    behind: f64,
}

impl ErlangA {
    /// `servers` >= 1; `arrivals` per s, mean `service` time and mean `patience` in s, all above 0 and finite; `None`
    /// otherwise. Any load is well: whoever has waited too long leaves.
    ///
    /// With all servers busy, the states of the queue have weights `r_j = y^j / ((x+1)…(x+j))`, `x = nμ/θ`, `y = λ/θ`. The
    /// share that abandons is `θE[Q]/λ`; as a sum of positive terms it loses no digits, unlike the shorter `1/(ρA) + 1 - 1/ρ`.
    pub fn new(servers: u32, arrivals: f64, service: f64, patience: f64) -> Option<ErlangA> {
        let n = f64::from(servers);
        let sound = |v: f64| v > 0.0 && v.is_finite();
        if servers == 0
            || ![arrivals, service, patience, arrivals * service, arrivals * patience].into_iter().all(sound)
        {
            return None;
        }
        let (x, y) = (n * patience / service, arrivals * patience);
        let (mut term, mut total, mut first, mut ln_scale) = (1.0, 1.0, 0.0, 0.0_f64);
        let mut settled = false;
        for j in 1..=MOST_TERMS {
            let ratio = y / (x + f64::from(j));
            term *= ratio;
            total += term;
            first += f64::from(j) * term;
            if total > LARGE {
                (term, total, first) = (term / LARGE, total / LARGE, first / LARGE);
                ln_scale += LARGE.ln();
            }
            // What is left is less than a geometric series with this ratio.
            let rest = if ratio < 1.0 { f64::from(j) * term / (1.0 - ratio).powi(2) } else { f64::INFINITY };
            if rest <= 1e-16 * first {
                settled = true;
                break;
            }
        }
        let lost = erlang_b(servers, arrivals * service);
        let (waits, behind) = if settled {
            // A·B / (1 - B + A·B) without forming A, which may be too large.
            let odds = (1.0 - lost) / lost / total * (-ln_scale).exp();
            (1.0 / (1.0 + odds), first / total)
        } else {
            // So many wait that they leave at the rate at which they come too many.
            (1.0, (y - x).max(0.0))
        };
        Some(ErlangA { servers: n, arrivals, service, patience, waits, behind })
    }

    /// What one who arrives meets.
    pub fn service(&self) -> Service {
        let queue = self.waits * self.behind;
        // Little's law, and a share θ of all that wait leaving each second.
        let mean_wait = queue / self.arrivals;
        let abandons = (mean_wait / self.patience).min(1.0);
        let load = self.arrivals * self.service;
        Service {
            waits: self.waits,
            mean_wait,
            abandons,
            queue,
            busy: (load * (1.0 - abandons) / self.servers).min(1.0),
        }
    }

    /// Share that is served, and within `t` s.
    ///
    /// The wait offered to one who never leaves has the density `P(wait)·h(v)/∫h`, `h(v) = exp(y(1 - e^{-θv}) - nμv)`
    /// (Baccelli & Hebuterne 1981; Zeltyn & Mandelbaum 2005, *Queueing Systems* 51:361); whoever is offered `v` is
    /// still there with probability `e^{-θv}`.
    pub fn within(&self, t: f64) -> f64 {
        let (theta, y) = (1.0 / self.patience, self.arrivals * self.patience);
        let rate = self.servers / self.service;
        let ln_h = |v: f64| -y * (-theta * v).exp_m1() - rate * v;
        let peak = ((self.arrivals / rate).ln() / theta).max(0.0);
        let highest = ln_h(peak);
        let h = |v: f64| (ln_h(v) - highest).exp();
        // Where h is next to nothing on either side; the first step is about the width of the peak.
        let width =
            (rate * theta).sqrt().recip().min((rate - self.arrivals).abs().max(f64::MIN_POSITIVE).recip());
        let reach = |sign: f64| {
            let mut step = width;
            while ln_h((peak + sign * step).max(0.0)) - highest > -NOTHING
                && peak + sign * step > 0.0
                && step < 1e300
            {
                step *= 1.5;
            }
            (peak + sign * step).max(0.0)
        };
        let (low, high) = (reach(-1.0), reach(1.0));
        let piece = |f: &dyn Fn(f64) -> f64, to: f64| {
            integrate(f, low.min(to), peak.min(to), 1e-11) + integrate(f, peak.min(to), high.min(to), 1e-11)
        };
        let whole = piece(&h, high);
        let served = piece(&|v| h(v) * (-theta * v).exp(), t.max(0.0));
        if whole > 0.0 { (1.0 - self.waits) + self.waits * served / whole } else { 1.0 - self.waits }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn published_loss_and_delay() {
        // Values of the Erlang tables in common use (from memory): B(10, 10) = 0.2146, B(5, 3) = 0.1101, B(20, 12) = 0.0098;
        // C(10, 8) = 0.4092, C(5, 4) = 0.5541, C(2, 1) = 1/3 exactly.
        for (n, a, b) in [(10, 10.0, 0.214_6), (5, 3.0, 0.110_1), (20, 12.0, 0.009_8)] {
            assert!((erlang_b(n, a) - b).abs() < 5e-5, "{n} {a} {}", erlang_b(n, a));
        }
        for (n, a, c) in [(10, 8.0, 0.409_2), (5, 4.0, 0.554_1), (2, 1.0, 1.0 / 3.0)] {
            let found = ErlangC::new(n, a, 1.0).unwrap();
            assert!((found.service().waits - c).abs() < 5e-5, "{n} {a} {}", found.service().waits);
        }
        assert_eq!(ErlangC::new(8, 8.0, 1.0), None);
        assert_eq!(erlang_b(1_000_000, 0.1), 0.0);
    }

    #[test]
    fn the_tutorials_table_of_fifty_agents() {
        // 48 calls a minute, 1 minute of service, 50 agents, 2 minutes of patience: the comparison in Garnett, Mandelbaum &
        // Reiman 2002 and Gans, Koole & Mandelbaum 2003, section 4 (from memory). Without abandonment 20.8 s mean wait
        // and 17 in the queue; with it 3.1% abandon, 3.7 s, 3 in the queue, 93% busy.
        let minute = 60.0;
        let c = ErlangC::new(50, 48.0 / minute, minute).unwrap();
        assert!((c.service().mean_wait - 20.8).abs() < 0.05 && (c.service().queue - 17.0).abs() < 0.5);
        // 90% within 58.1 s.
        assert!((c.within(58.1) - 0.9).abs() < 5e-4, "{}", c.within(58.1));
        let a = ErlangA::new(50, 48.0 / minute, minute, 2.0 * minute).unwrap();
        let s = a.service();
        assert!((s.abandons - 0.031).abs() < 5e-4, "{s:?}");
        assert!((s.mean_wait - 3.7).abs() < 0.05 && (s.queue - 3.0).abs() < 0.1, "{s:?}");
        assert!((s.busy - 0.93).abs() < 5e-3, "{s:?}");
    }

    #[test]
    fn limits_of_patience() {
        // Who never leaves: C. Who leaves at once: B.
        let (c, b) = (ErlangC::new(10, 8.0, 1.0).unwrap(), erlang_b(10, 8.0));
        let (patient, hasty) =
            (ErlangA::new(10, 8.0, 1.0, 1e7).unwrap(), ErlangA::new(10, 8.0, 1.0, 1e-9).unwrap());
        assert!((patient.service().waits - c.service().waits).abs() < 1e-5);
        assert!((patient.service().mean_wait - c.service().mean_wait).abs() < 1e-4);
        assert!((patient.within(0.7) - c.within(0.7)).abs() < 1e-5);
        assert!((hasty.service().abandons - b).abs() < 1e-6 && (hasty.service().waits - b).abs() < 1e-6);
        // M/M/1+M with θ = μ is a birth-death process with death rates kμ: Poisson, so P(wait) = 1 - e^{-a}.
        let one = ErlangA::new(1, 2.0, 1.0, 1.0).unwrap();
        assert!((one.service().waits - (1.0 - (-2.0_f64).exp())).abs() < 1e-12);
        assert!((one.service().queue - (2.0 - (1.0 - (-2.0_f64).exp()))).abs() < 1e-12);
    }

    #[test]
    fn served_within_any_time_is_all_but_the_abandoned() {
        for (n, rate, patience) in [
            (10, 8.0, 0.5),
            (10, 8.0, 50.0),
            (10, 14.0, 3.0),
            (200, 260.0, 0.2),
            (3, 1e-3, 1.0),
            (50, 500.0, 1e3),
        ] {
            let a = ErlangA::new(n, rate, 1.0, patience).unwrap();
            let s = a.service();
            assert!(
                (a.within(1e6) - (1.0 - s.abandons)).abs() < 1e-7,
                "{n} {rate} {patience}: {} {s:?}",
                a.within(1e6)
            );
            assert!((a.within(0.0) - (1.0 - s.waits)).abs() < 1e-9);
            assert!(a.within(0.1) <= a.within(0.2));
        }
        for bad in [f64::NAN, 0.0, -1.0, f64::INFINITY] {
            assert_eq!(ErlangA::new(5, bad, 1.0, 1.0), None);
            assert_eq!(ErlangC::new(5, bad, 1.0), None);
        }
        assert_eq!(ErlangA::new(0, 1.0, 1.0, 1.0), None);
    }

    #[test]
    fn overload_beyond_counting() {
        let a = ErlangA::new(1, 1e6, 1.0, 1e6).unwrap();
        assert!((a.service().abandons - (1.0 - 1e-6)).abs() < 1e-9, "{:?}", a.service());
        assert!(a.within(1.0).is_finite());
    }
}
