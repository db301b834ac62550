//! Browsers that have shown the token: a browser cannot send it with each request, so it gets a cookie that says nothing.

use std::sync::{Mutex, PoisonError};

use subtle::ConstantTimeEq;

/// Longest time a session lasts, s.
pub(super) const LASTS: f64 = 12.0 * 3_600.0;
/// Sessions kept; the oldest ends when there are more.
const MOST: usize = 256;

/// Sessions by their names, which only the browser and this process know. They end with the process.
#[derive(Default)]
pub(super) struct Sessions(Mutex<Vec<(String, f64)>>);

impl Sessions {
    /// A new session, by its name of 256 random bits; `None` if the system gives none.
    pub(super) fn open(&self, now: f64) -> Option<String> {
        let mut bits = [0; 32];
        tokio_rustls::rustls::crypto::ring::default_provider().secure_random.fill(&mut bits).ok()?;
        let name: String = bits.iter().map(|byte| format!("{byte:02x}")).collect();
        let mut all = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        all.retain(|(_, ends)| *ends > now);
        if all.len() >= MOST {
            all.remove(0);
        }
        all.push((name.clone(), now + LASTS));
        Some(name)
    }

    /// Whether it is open. Takes the same time whichever it resembles.
    pub(super) fn is_open(&self, name: &str, now: f64) -> bool {
        let all = self.0.lock().unwrap_or_else(PoisonError::into_inner);
        all.iter().fold(false, |found, (known, ends)| {
            found | (bool::from(known.as_bytes().ct_eq(name.as_bytes())) & (*ends > now))
        })
    }

    /// Ends it.
    pub(super) fn close(&self, name: &str) {
        self.0.lock().unwrap_or_else(PoisonError::into_inner).retain(|(known, _)| known != name);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn sessions_end() {
        let sessions = Sessions::default();
        let (a, b) = (sessions.open(0.0).unwrap(), sessions.open(10.0).unwrap());
        assert!(a != b && a.len() == 64);
        assert!(sessions.is_open(&a, 1.0) && !sessions.is_open(&a, LASTS) && sessions.is_open(&b, LASTS));
        assert!(!sessions.is_open("", 1.0) && !sessions.is_open(&a[1..], 1.0));
        sessions.close(&a);
        assert!(!sessions.is_open(&a, 1.0));
        (0..MOST).for_each(|_| drop(sessions.open(20.0)));
        assert!(!sessions.is_open(&b, 21.0));
    }
}
