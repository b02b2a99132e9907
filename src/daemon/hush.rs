//! Keeps a repeated fault from flooding the log: said at once the first time, then summed up.

use std::collections::BTreeMap;
use std::time::Duration;

use crate::quantity::Mono;

/// How often a fault that goes on is summed up.
const SUM_UP_EVERY: Duration = Duration::from_secs(60);

/// Counts faults by kind and says when one may be logged.
#[derive(Debug, Default)]
pub(super) struct Hush {
    kinds: BTreeMap<String, Kind>,
}

#[derive(Debug)]
struct Kind {
    said_at: Mono,
    unsaid: u64,
}

impl Hush {
    /// Notes one fault of `kind`; the number of faults to speak of (this one included), if it's time to speak.
    pub(super) fn note(&mut self, kind: &str, now: Mono) -> Option<u64> {
        match self.kinds.get_mut(kind) {
            None => {
                self.kinds.insert(kind.to_owned(), Kind { said_at: now, unsaid: 0 });
                Some(1)
            }
            Some(known) => {
                known.unsaid += 1;
                (now.since(known.said_at) >= SUM_UP_EVERY).then(|| {
                    known.said_at = now;
                    std::mem::take(&mut known.unsaid)
                })
            }
        }
    }

    /// What has been counted but not said for [`SUM_UP_EVERY`]; a kind that has been quiet since is forgotten, so
    /// that its next fault is said at once.
    pub(super) fn overdue(&mut self, now: Mono) -> Vec<(String, u64)> {
        let mut due = Vec::new();
        self.kinds.retain(|name, kind| {
            if now.since(kind.said_at) < SUM_UP_EVERY {
                return true;
            }
            if kind.unsaid == 0 {
                return false;
            }
            due.push((name.clone(), std::mem::take(&mut kind.unsaid)));
            kind.said_at = now;
            true
        });
        due
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_fault_that_repeats_is_said_once_and_then_summed_up_each_minute() {
        let mut hush = Hush::default();
        let said: Vec<u64> = (0..1000).filter_map(|i| hush.note("checksum", Mono(i * 100))).collect();
        assert_eq!(said, [1, 600]);
        assert_eq!(hush.overdue(Mono(120_000)), [("checksum".to_owned(), 399)]);
        assert_eq!(hush.overdue(Mono(180_000)), []);
        assert_eq!(hush.note("checksum", Mono(180_001)), Some(1), "after a quiet minute it's news again");
    }
}
