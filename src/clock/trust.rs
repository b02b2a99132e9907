//! Whether the host's clock may be believed yet. A board without a battery clock starts with a wrong time and gets the
//! right one minutes later; until then readings wait, known by their run and its monotonic time.

use std::path::Path;
use std::time::Duration;

use super::TimeBase;
use crate::quantity::Mono;

/// After this long the clock is taken as it is: a house without a network must keep its readings too.
const WAIT_AT_MOST: Duration = Duration::from_secs(600);

/// Whether the system's time service has set the clock since the start; `None` where nothing tells. `root` is `/`; a
/// test lays its own. systemd-timesyncd makes the file when it has synchronised; the kernel's own flag needs a system
/// call that no safe library of ours offers.
pub fn synchronised(root: &Path) -> Option<bool> {
    let service = root.join("run/systemd/timesync");
    service.is_dir().then(|| service.join("synchronized").exists())
}

/// Follows one run from its start until its time is known.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Trust {
    waiting_since: Option<Mono>,
}

/// How the waiting ended.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Known {
    /// The clock has been set: what waited gets its true time.
    Set,
    /// Nobody has set it for too long: what waited is kept by the time base as it is, flagged.
    GivenUp,
}

impl Trust {
    /// At a run's start. The clock isn't believed while it is earlier than the newest stored reading (`time` is
    /// doubtful then) or its service says that it hasn't been set.
    pub fn begin(time: &TimeBase, synchronised: Option<bool>, now: Mono) -> Self {
        let believed = !time.is_doubtful() && synchronised != Some(false);
        Trust { waiting_since: (!believed).then_some(now) }
    }

    /// Whether readings must wait.
    pub fn is_waiting(&self) -> bool {
        self.waiting_since.is_some()
    }

    /// Looks again; says once how the waiting has ended.
    pub fn look(&mut self, time: &TimeBase, synchronised: Option<bool>, now: Mono) -> Option<Known> {
        let since = self.waiting_since?;
        let known = if !time.is_doubtful() && synchronised != Some(false) {
            Known::Set
        } else if now.since(since) >= WAIT_AT_MOST {
            Known::GivenUp
        } else {
            return None;
        };
        self.waiting_since = None;
        Some(known)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::quantity::{Moment, Utc};

    fn at(mono_s: u64, utc_s: i64) -> Moment {
        Moment { mono: Mono(mono_s * 1000), utc: Utc(utc_s * 1000) }
    }

    #[test]
    fn a_clock_behind_the_record_is_believed_once_it_has_caught_up() {
        let mut time = TimeBase::new(at(0, 1000), Some(Utc(5_000_000)));
        let mut trust = Trust::begin(&time, None, Mono(0));
        assert!(trust.is_waiting());
        time.look(at(10, 1010));
        assert_eq!(trust.look(&time, None, Mono(10_000)), None);
        time.look(at(20, 6000));
        assert_eq!(trust.look(&time, None, Mono(20_000)), Some(Known::Set));
        assert_eq!(trust.look(&time, None, Mono(21_000)), None, "said once");
    }

    #[test]
    fn a_service_that_has_not_set_the_clock_is_waited_for_ten_minutes_at_most() {
        let time = TimeBase::new(at(0, 1000), None);
        let mut trust = Trust::begin(&time, Some(false), Mono(0));
        assert_eq!(trust.look(&time, Some(false), Mono(599_999)), None);
        assert_eq!(trust.look(&time, Some(false), Mono(600_000)), Some(Known::GivenUp));
        assert!(
            !Trust::begin(&time, None, Mono(0)).is_waiting(),
            "where nothing tells, the clock is believed"
        );
        let mut trust = Trust::begin(&time, Some(false), Mono(0));
        assert_eq!(trust.look(&time, Some(true), Mono(5_000)), Some(Known::Set));
    }

    #[test]
    fn the_time_service_is_asked_by_its_file() {
        let root = tempfile::tempdir().unwrap();
        assert_eq!(synchronised(root.path()), None);
        let service = root.path().join("run/systemd/timesync");
        std::fs::create_dir_all(&service).unwrap();
        assert_eq!(synchronised(root.path()), Some(false));
        std::fs::write(service.join("synchronized"), "").unwrap();
        assert_eq!(synchronised(root.path()), Some(true));
    }
}
