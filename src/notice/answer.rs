//! A receiver's answer, judged.

use std::time::Duration;

/// How one attempt ended.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) struct Answer {
    pub(super) verdict: Verdict,
    /// One line for people, without a secret in it.
    pub(super) said: String,
}

/// What an answer means for the notice.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Verdict {
    /// The receiver has it.
    Taken,
    /// It isn't there or isn't able; it will be, some day.
    Later {
        /// The wait that it asked for.
        retry_after: Option<Duration>,
    },
    /// It says no, and would go on saying it until something is changed on one side: after `allowed` such answers
    /// the notice is given up.
    Refused {
        /// How many refusals a notice is worth.
        allowed: u32,
    },
    /// It says that it will never take any.
    Gone,
}
