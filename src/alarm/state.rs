//! The alarm state machine: states and transitions of IEC 62682 (ANSI/ISA-18.2).
//!
//! Latching is left out: none of our conditions needs a reset by hand after it has returned and been acknowledged.

use serde::{Deserialize, Serialize};

/// Where an alarm stands. In the last three the condition is still judged, so that the alarm can go back to the
/// state that the condition implies.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum State {
    /// Nothing to say.
    Normal,
    /// Active, nobody has acknowledged it.
    Unacknowledged,
    /// Active and acknowledged.
    Acknowledged,
    /// The condition went away before anybody acknowledged.
    ReturnedUnacknowledged,
    /// Set aside by the owner for a limited time.
    Shelved {
        /// Whether the condition holds meanwhile.
        active: bool,
    },
    /// Set aside by design: the condition has no meaning now (amplifier off).
    Suppressed {
        /// Whether the condition holds meanwhile.
        active: bool,
    },
    /// Set aside for maintenance, until put back.
    OutOfService {
        /// Whether the condition holds meanwhile.
        active: bool,
    },
}

/// What can happen to an alarm.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Event {
    /// The condition has held for its on-delay.
    Raise,
    /// The condition has been away, beyond the deadband, for its off-delay.
    Clear,
    /// A person has seen it.
    Acknowledge,
    /// It has been active and acknowledged for so long that it must be seen again.
    ReAlarm,
    /// A person sets it aside for a time.
    Shelve,
    /// That time is over, or the person takes it back.
    Unshelve,
    /// The design says that the condition has no meaning now.
    Suppress,
    /// It has one again.
    Unsuppress,
    /// Maintenance takes it out.
    TakeOut,
    /// Maintenance puts it back.
    PutBack,
}

impl Event {
    /// The word shown to people and programs.
    pub fn word(self) -> &'static str {
        match self {
            Event::Raise => "raise",
            Event::Clear => "clear",
            Event::Acknowledge => "acknowledge",
            Event::ReAlarm => "re_alarm",
            Event::Shelve => "shelve",
            Event::Unshelve => "unshelve",
            Event::Suppress => "suppress",
            Event::Unsuppress => "unsuppress",
            Event::TakeOut => "take_out",
            Event::PutBack => "put_back",
        }
    }
}

impl State {
    /// The word shown to people and programs.
    pub fn word(self) -> &'static str {
        match self {
            State::Normal => "normal",
            State::Unacknowledged => "unacknowledged",
            State::Acknowledged => "acknowledged",
            State::ReturnedUnacknowledged => "returned unacknowledged",
            State::Shelved { .. } => "shelved",
            State::Suppressed { .. } => "suppressed by design",
            State::OutOfService { .. } => "out of service",
        }
    }

    /// Whether the condition holds (after its delays), whatever the owner has done about it.
    pub fn is_active(self) -> bool {
        match self {
            State::Unacknowledged | State::Acknowledged => true,
            State::Normal | State::ReturnedUnacknowledged => false,
            State::Shelved { active } | State::Suppressed { active } | State::OutOfService { active } => {
                active
            }
        }
    }

    /// Whether it is set aside: judged, but not announced.
    pub fn is_set_aside(self) -> bool {
        matches!(self, State::Shelved { .. } | State::Suppressed { .. } | State::OutOfService { .. })
    }

    /// The state after `event`, or `None` where the event means nothing in this state.
    ///
    /// Out of service is the strongest way of setting aside, shelved next, suppressed by design the weakest: the
    /// stronger takes over from the weaker, never the other way.
    pub fn after(self, event: Event) -> Option<State> {
        use Event as E;
        use State as S;
        let implied = |active| if active { S::Unacknowledged } else { S::Normal };
        Some(match (self, event) {
            (S::Normal | S::ReturnedUnacknowledged, E::Raise) => S::Unacknowledged,
            (S::Unacknowledged, E::Acknowledge) => S::Acknowledged,
            (S::Unacknowledged, E::Clear) => S::ReturnedUnacknowledged,
            (S::Acknowledged, E::Clear) | (S::ReturnedUnacknowledged, E::Acknowledge) => S::Normal,
            (S::Acknowledged, E::ReAlarm) => S::Unacknowledged,

            (S::Shelved { active: false }, E::Raise) => S::Shelved { active: true },
            (S::Shelved { active: true }, E::Clear) => S::Shelved { active: false },
            (S::Suppressed { active: false }, E::Raise) => S::Suppressed { active: true },
            (S::Suppressed { active: true }, E::Clear) => S::Suppressed { active: false },
            (S::OutOfService { active: false }, E::Raise) => S::OutOfService { active: true },
            (S::OutOfService { active: true }, E::Clear) => S::OutOfService { active: false },

            (S::OutOfService { active }, E::PutBack) => implied(active),
            (S::OutOfService { .. }, _) => return None,
            (s, E::TakeOut) => S::OutOfService { active: s.is_active() },

            (S::Shelved { active }, E::Unshelve) => implied(active),
            (S::Shelved { .. }, _) => return None,
            (s, E::Shelve) => S::Shelved { active: s.is_active() },

            (S::Suppressed { active }, E::Unsuppress) => implied(active),
            (S::Suppressed { .. }, _) => return None,
            (s, E::Suppress) => S::Suppressed { active: s.is_active() },

            _ => return None,
        })
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Every state against every event, written from the state diagram of IEC 62682 / ANSI/ISA-18.2-2016 (names of
    /// states confirmed in OPC 10000-9; the diagram itself from memory), one letter a state:
    /// N normal, U unacknowledged, A acknowledged, R returned unacknowledged, S/s shelved, P/p suppressed by design,
    /// O/o out of service, the capital while the condition holds. `.` means that the event has no meaning there.
    const TABLE: &str = "
        state  raise clear ack realarm shelve unshelve suppress unsuppress takeout putback
        N      U     .     .   .       s      .        p        .          o       .
        U      .     R     A   .       S      .        P        .          O       .
        A      .     N     .   U       S      .        P        .          O       .
        R      U     .     N   .       s      .        p        .          o       .
        s      S     .     .   .       .      N        .        .          o       .
        S      .     s     .   .       .      U        .        .          O       .
        p      P     .     .   .       s      .        .        N          o       .
        P      .     p     .   .       S      .        .        U          O       .
        o      O     .     .   .       .      .        .        .          .       N
        O      .     o     .   .       .      .        .        .          .       U";

    fn state(letter: &str) -> State {
        match letter {
            "N" => State::Normal,
            "U" => State::Unacknowledged,
            "A" => State::Acknowledged,
            "R" => State::ReturnedUnacknowledged,
            "s" | "S" => State::Shelved { active: letter == "S" },
            "p" | "P" => State::Suppressed { active: letter == "P" },
            "o" | "O" => State::OutOfService { active: letter == "O" },
            other => panic!("no state {other}"),
        }
    }

    fn event(word: &str) -> Event {
        match word {
            "raise" => Event::Raise,
            "clear" => Event::Clear,
            "ack" => Event::Acknowledge,
            "realarm" => Event::ReAlarm,
            "shelve" => Event::Shelve,
            "unshelve" => Event::Unshelve,
            "suppress" => Event::Suppress,
            "unsuppress" => Event::Unsuppress,
            "takeout" => Event::TakeOut,
            "putback" => Event::PutBack,
            other => panic!("no event {other}"),
        }
    }

    #[test]
    fn every_state_and_event_goes_where_the_standard_says() {
        let mut rows = TABLE.lines().filter(|row| !row.trim().is_empty()).map(|row| row.split_whitespace());
        let events: Vec<_> = rows.next().unwrap().skip(1).collect();
        let mut pairs = 0;
        for mut row in rows {
            let from = row.next().unwrap();
            for (word, to) in events.iter().zip(row) {
                let expected = (to != ".").then(|| state(to));
                assert_eq!(state(from).after(event(word)), expected, "{from} on {word}");
                pairs += 1;
            }
        }
        assert_eq!(pairs, 10 * 10, "every pair is in the table");
    }

    #[test]
    fn no_event_but_an_acknowledgement_or_setting_aside_takes_an_unseen_alarm_out_of_sight() {
        for (word, seen) in
            [("ack", true), ("shelve", true), ("suppress", true), ("takeout", true), ("clear", false)]
        {
            let after = State::Unacknowledged.after(event(word)).unwrap();
            let still_unseen = matches!(after, State::Unacknowledged | State::ReturnedUnacknowledged);
            assert_eq!(still_unseen, !seen, "{word}");
        }
    }
}
