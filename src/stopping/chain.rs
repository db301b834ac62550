//! Waits that wait for other waits: does a caller stay until its callee has tried everything, and how do retries
//! multiply down a chain of calls?

use super::retry::Retry;
use super::worth::Pause;

/// One stream of a chain of calls.
#[derive(Clone, Debug, PartialEq)]
pub struct Station {
    /// When an attempt is given up, s; infinite for never.
    pub give_up_after: f64,
    /// How it is tried again.
    pub retry: Retry,
    /// The pauses between.
    pub pause: Pause,
    /// The stations each of its attempts waits for, by number.
    pub calls: Vec<usize>,
}

impl Station {
    /// The longest time a whole request can take until it is done or out of attempts, s: every attempt runs to its
    /// give-up time and every pause is at its longest. Infinite without a cap or a give-up time.
    pub fn longest(&self) -> f64 {
        let Some(attempts) = self.retry.attempts else { return f64::INFINITY };
        let longest = self.pause.failed.max(self.pause.gave_up) * if self.retry.jitter { 2.0 } else { 1.0 };
        let pauses: f64 = (1..attempts).map(|number| self.retry.pause(longest, number)).sum();
        f64::from(attempts) * self.give_up_after + pauses
    }

    /// Attempts that start before `leaves` s have passed when each is given up, with the expected pauses between.
    fn attempts_before(&self, leaves: f64) -> u32 {
        let pause = self.pause.gave_up;
        let (mut start, mut started) = (0.0, 0);
        while start < leaves && started < self.retry.attempts.unwrap_or(u32::MAX) && started < 10_000 {
            started += 1;
            start += self.give_up_after + self.retry.pause(pause, started);
        }
        started
    }
}

/// Something to mind about a chain of calls.
#[derive(Clone, Debug, PartialEq)]
pub enum ChainFinding {
    /// The caller gives an attempt up before its callee's last attempt can have ended: work goes on for nobody.
    LeavesEarly {
        /// The station that leaves.
        caller: usize,
        /// The station it waits for.
        callee: usize,
        /// When it leaves, s.
        leaves: f64,
        /// When the callee's schedule ends at the latest, s; infinite without cap or give-up time.
        ends: f64,
        /// The callee's attempts that can start before the caller leaves.
        attempts: u32,
    },
    /// A chain of calls comes back to where it began; these stations in turn.
    Circle(Vec<usize>),
}

/// Checks every call of a chain; `calls` to numbers out of range are passed over. In order of the caller.
pub fn check_chain(stations: &[Station]) -> Vec<ChainFinding> {
    let mut findings = vec![];
    for (caller, station) in stations.iter().enumerate() {
        for &callee in &station.calls {
            let Some(called) = stations.get(callee) else { continue };
            let (leaves, ends) = (station.give_up_after, called.longest());
            if leaves < ends {
                let attempts = called.attempts_before(leaves);
                findings.push(ChainFinding::LeavesEarly { caller, callee, leaves, ends, attempts });
            }
        }
    }
    let mut state = vec![Visit::New; stations.len()];
    for start in 0..stations.len() {
        let mut path = vec![];
        walk(stations, start, &mut state, &mut path, &mut findings);
    }
    findings
}

/// Most attempts that one request to station `from` can cause at each station: the product of the caps along the
/// calls, summed over paths. Infinite without a cap, and in or below a circle; 0 where no call leads.
pub fn attempts_caused(stations: &[Station], from: usize) -> Vec<f64> {
    let mut caused = vec![0.0; stations.len()];
    if from >= stations.len() {
        return caused;
    }
    let calls = |at: usize| stations[at].calls.iter().copied().filter(|&c| c < stations.len());
    // How many calls lead to each station that can be reached.
    let mut callers = vec![0; stations.len()];
    let mut reached = vec![from];
    let mut seen = vec![false; stations.len()];
    seen[from] = true;
    let mut next = 0;
    while let Some(&at) = reached.get(next) {
        for callee in calls(at) {
            callers[callee] += 1;
            if !seen[callee] {
                seen[callee] = true;
                reached.push(callee);
            }
        }
        next += 1;
    }
    // Callers before callees; what a circle holds back never becomes ready.
    let mut requests = vec![0.0; stations.len()];
    requests[from] = 1.0;
    let mut ready = if callers[from] == 0 { vec![from] } else { vec![] };
    for &at in &reached {
        caused[at] = f64::INFINITY;
    }
    while let Some(at) = ready.pop() {
        caused[at] = requests[at] * stations[at].retry.attempts.map_or(f64::INFINITY, f64::from);
        for callee in calls(at) {
            requests[callee] += caused[at];
            callers[callee] -= 1;
            if callers[callee] == 0 {
                ready.push(callee);
            }
        }
    }
    caused
}

#[derive(Clone, Copy, PartialEq)]
enum Visit {
    New,
    Open,
    Closed,
}

fn walk(
    stations: &[Station],
    at: usize,
    state: &mut [Visit],
    path: &mut Vec<usize>,
    findings: &mut Vec<ChainFinding>,
) {
    match state[at] {
        Visit::Closed => {}
        Visit::Open => {
            let start = path.iter().position(|&p| p == at).unwrap_or(0);
            findings.push(ChainFinding::Circle(path[start..].to_vec()));
        }
        Visit::New => {
            state[at] = Visit::Open;
            path.push(at);
            for &callee in stations[at].calls.iter().filter(|&&c| c < stations.len()) {
                walk(stations, callee, state, path, findings);
            }
            path.pop();
            state[at] = Visit::Closed;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn station(give_up_after: f64, attempts: u32, calls: &[usize]) -> Station {
        let retry = Retry { attempts: Some(attempts), growth: 2.0, ..Retry::default() };
        let pause = Pause { gave_up: 0.1, ..Pause::default() };
        Station { give_up_after, retry, pause, calls: calls.to_vec() }
    }

    #[test]
    fn a_caller_that_leaves_early() {
        // The callee tries at 0, 1.1 and 2.3 and ends at 3.3 s.
        let chain = [station(2.0, 2, &[1]), station(1.0, 3, &[])];
        assert!((chain[1].longest() - 3.3).abs() < 1e-12);
        let findings = check_chain(&chain);
        assert_eq!(findings.len(), 1);
        assert!(
            matches!(findings[0], ChainFinding::LeavesEarly { caller: 0, callee: 1, attempts: 2, .. }),
            "{findings:?}"
        );
        assert_eq!(check_chain(&[station(3.5, 2, &[1]), station(1.0, 3, &[9])]), []);
        assert_eq!(attempts_caused(&chain, 0), [2.0, 6.0]);
        // Two ways to the bottom: 2·3·2 + 2·2.
        let diamond = [station(9.0, 2, &[1, 2]), station(9.0, 3, &[2]), station(1.0, 2, &[])];
        assert_eq!(attempts_caused(&diamond, 0), [2.0, 6.0, 16.0]);
        assert_eq!(attempts_caused(&diamond, 1), [0.0, 3.0, 6.0]);
    }

    #[test]
    fn drawn_pauses_may_be_twice_as_long() {
        let mut callee = station(1.0, 3, &[]);
        callee.retry.jitter = true;
        assert!((callee.longest() - 3.6).abs() < 1e-12);
        callee.retry.attempts = None;
        assert_eq!(callee.longest(), f64::INFINITY);
    }

    #[test]
    fn circles_are_found_and_do_not_hang() {
        let chain = [station(9.0, 2, &[1]), station(9.0, 1, &[2]), station(9.0, 1, &[0, 1])];
        let circles: Vec<_> = check_chain(&chain)
            .into_iter()
            .filter_map(|f| if let ChainFinding::Circle(path) = f { Some(path) } else { None })
            .collect();
        assert_eq!(circles, [vec![0, 1, 2], vec![1, 2]]);
        assert!(attempts_caused(&chain, 0).iter().all(|a| a.is_infinite()));
    }
}
