//! From bytes to events: finds lines in a stream, bounded in memory whatever arrives, and follows the logger's
//! numbering.

use super::tide::{MAX_LINE, TideLine, Unreadable, Value};
use super::{FromLogger, LineFault, LoggerEvent, Sample};
use crate::quantity::Moment;

const START: u8 = b'@';
const END: u8 = b'\n';

/// Decodes the tide lines of one logger.
///
/// It holds at most one line ([`MAX_LINE`] bytes). A start mark begins a new line wherever it stands, so nothing that
/// came before can spoil the next good line. A run of bytes that is no line, up to the next line end or start mark,
/// counts as one fault however long it is. Blank lines, and what is heard of a line that was under way when the port
/// opened, count as none.
#[derive(Debug)]
pub struct Decoder {
    logger: usize,
    channels: Vec<String>,
    place: Place,
    /// The line so far, from its `@` on; never longer than a line may be.
    line: Vec<u8>,
    numbering: Numbering,
}

/// Where in the stream the decoder stands.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Place {
    /// The port has just opened, probably in the middle of a line.
    Joining { skipped: usize },
    /// Between a line's end and the next start mark.
    Between { noise: usize },
    /// Behind a start mark.
    Line,
    /// In a run of bytes that was counted already: skip to the next line end or start mark.
    Counted,
}

impl Decoder {
    /// A decoder for the logger with this index in [`crate::config::Site::loggers`], whose channels have these
    /// names; a [`Sample`] refers to a channel by its place in them.
    pub fn new(logger: usize, channels: impl IntoIterator<Item = impl Into<String>>) -> Self {
        Decoder {
            logger,
            channels: channels.into_iter().map(Into::into).collect(),
            place: Place::Joining { skipped: 0 },
            line: Vec::with_capacity(MAX_LINE),
            numbering: Numbering::default(),
        }
    }

    /// The stream was cut and begins anew, as when a port is opened again. The numbering goes on, so lines that were
    /// lost meanwhile are noticed.
    pub fn rejoin(&mut self) {
        self.line.clear();
        self.place = Place::Joining { skipped: 0 };
    }

    /// Takes the bytes that arrived at `at` and appends what they say to `out`.
    pub fn feed(&mut self, bytes: &[u8], at: Moment, out: &mut Vec<FromLogger>) {
        let logger = self.logger;
        let mut say = |what| out.push(FromLogger { logger, received: at, what });
        let mut rest = bytes;
        while let Some(mark) = rest.iter().position(|&b| b == START || b == END) {
            self.take(&rest[..mark], &mut say);
            if rest[mark] == START {
                self.start_line(&mut say);
            } else {
                self.end_line(&mut say);
            }
            rest = &rest[mark + 1..];
        }
        self.take(rest, &mut say);
    }

    fn take(&mut self, piece: &[u8], say: &mut impl FnMut(LoggerEvent)) {
        match &mut self.place {
            Place::Joining { skipped } => {
                *skipped += piece.len();
                // The rest of a line can't be longer than a line.
                if *skipped > MAX_LINE {
                    self.count(LineFault::Garbage, say);
                }
            }
            Place::Between { noise } => {
                *noise += piece.iter().filter(|&&b| b != b'\r').count();
                if *noise > MAX_LINE {
                    self.count(LineFault::Garbage, say);
                }
            }
            // One byte of MAX_LINE belongs to the line end.
            Place::Line if self.line.len() + piece.len() >= MAX_LINE => self.count(LineFault::TooLong, say),
            Place::Line => self.line.extend_from_slice(piece),
            Place::Counted => {}
        }
    }

    fn count(&mut self, fault: LineFault, say: &mut impl FnMut(LoggerEvent)) {
        say(LoggerEvent::Fault(fault));
        self.line.clear();
        self.place = Place::Counted;
    }

    fn start_line(&mut self, say: &mut impl FnMut(LoggerEvent)) {
        // A start mark never stands inside a line: what precedes it is noise, or a torn line.
        if matches!(self.place, Place::Line | Place::Between { noise: 1.. }) {
            self.count(LineFault::Garbage, say);
        }
        self.line.clear();
        self.line.push(START);
        self.place = Place::Line;
    }

    fn end_line(&mut self, say: &mut impl FnMut(LoggerEvent)) {
        match self.place {
            Place::Line => self.read_line(say),
            Place::Between { noise: 1.. } => say(LoggerEvent::Fault(LineFault::Garbage)),
            Place::Joining { .. } | Place::Between { .. } | Place::Counted => {}
        }
        self.line.clear();
        self.place = Place::Between { noise: 0 };
    }

    fn read_line(&mut self, say: &mut impl FnMut(LoggerEvent)) {
        let line = self.line.strip_suffix(b"\r").unwrap_or(&self.line);
        let line = match TideLine::parse(line) {
            Ok(line) => line,
            Err(why) => {
                return say(LoggerEvent::Fault(match why {
                    Unreadable::NoLine => LineFault::Garbage,
                    Unreadable::Checksum => LineFault::Checksum,
                    Unreadable::Malformed => LineFault::Malformed,
                }));
            }
        };
        let mut values = Vec::with_capacity(self.channels.len());
        let mut faults = Vec::new();
        for pair in line.pairs() {
            let Some((name, value)) = pair else {
                return say(LoggerEvent::Fault(LineFault::Malformed));
            };
            let channel = self.channels.iter().position(|c| c.as_bytes() == name);
            match (channel, value) {
                (None, _) => faults.push(LineFault::UnknownChannel),
                // Named twice: the first value stands.
                (Some(channel), _) if values.iter().any(|&(c, _)| c == channel) => {
                    faults.push(LineFault::BadValue);
                }
                (Some(channel), Value::Millivolts(mv)) => values.push((channel, f64::from(mv) / 1000.0)),
                (Some(_), Value::Absent | Value::Unusable) => faults.push(LineFault::BadValue),
            }
        }
        let logger_ms = match self.numbering.follow(line.sequence, line.logger_ms) {
            Step::Duplicate => return say(LoggerEvent::Fault(LineFault::Duplicate)),
            Step::Next { logger_ms, lost } => {
                if lost > 0 {
                    say(LoggerEvent::Lost { lines: lost });
                }
                logger_ms
            }
            Step::Restarted { logger_ms } => {
                say(LoggerEvent::Restarted);
                logger_ms
            }
        };
        for fault in faults {
            say(LoggerEvent::Fault(fault));
        }
        say(LoggerEvent::Sample(Sample { logger_ms: Some(logger_ms), values }));
    }
}

/// Follows a logger's sequence numbers and milliseconds.
#[derive(Clone, Copy, Debug, Default)]
struct Numbering {
    last: Option<Numbers>,
    /// What the wraps of a 32-bit millisecond counter add up to.
    wrapped_ms: u64,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
struct Numbers {
    sequence: u32,
    /// As sent, before wraps are added.
    ms: u64,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Step {
    Next { logger_ms: u64, lost: u32 },
    Restarted { logger_ms: u64 },
    Duplicate,
}

impl Numbering {
    /// A counter of 32-bit milliseconds wraps after 49.7 days; milliseconds that went back and would be within this
    /// time after such a wrap are taken for one, if the sequence number went on.
    const WRAP_WINDOW_MS: u64 = 3_600_000;

    fn follow(&mut self, sequence: u32, ms: u64) -> Step {
        let now = Numbers { sequence, ms };
        let Some(before) = self.last.replace(now) else {
            return Step::Next { logger_ms: ms, lost: 0 };
        };
        if now == before {
            return Step::Duplicate;
        }
        // The sequence wraps at 2³²; more than half of that forward is backward.
        let ahead = sequence.wrapping_sub(before.sequence);
        let sequence_went_back = ahead > u32::MAX / 2;
        let ms_wrapped = ms < before.ms
            && before.ms < 1 << 32
            && (1..=u32::MAX / 2).contains(&ahead)
            && ms + (1 << 32) - before.ms < Self::WRAP_WINDOW_MS;
        if ms_wrapped {
            self.wrapped_ms += 1 << 32;
        } else if sequence_went_back || ms < before.ms {
            self.wrapped_ms = 0;
            return Step::Restarted { logger_ms: ms };
        }
        Step::Next { logger_ms: ms.saturating_add(self.wrapped_ms), lost: ahead.saturating_sub(1) }
    }
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::super::tide::write_line;
    use super::*;
    use crate::quantity::{Mono, Utc};

    const AT: Moment = Moment { mono: Mono(5), utc: Utc(7) };

    fn line(sequence: u32, ms: u64, values: &[(&str, Option<i32>)]) -> Vec<u8> {
        let mut out = Vec::new();
        write_line(&mut out, sequence, ms, values.iter().copied()).unwrap();
        out
    }

    fn mains_line(sequence: u32, ms: u64) -> Vec<u8> {
        line(sequence, ms, &[("mains", Some(230_000))])
    }

    fn body_line(body: &str) -> Vec<u8> {
        format!("@{body}*{:04X}\r\n", super::super::crc16(body.as_bytes())).into_bytes()
    }

    fn decoder() -> Decoder {
        Decoder::new(0, ["mains", "rail"])
    }

    fn feed(decoder: &mut Decoder, bytes: &[u8]) -> Vec<LoggerEvent> {
        let mut out = Vec::new();
        decoder.feed(bytes, AT, &mut out);
        assert!(out.iter().all(|event| event.logger == 0 && event.received == AT));
        out.into_iter().map(|event| event.what).collect()
    }

    fn sample(ms: u64) -> LoggerEvent {
        LoggerEvent::Sample(Sample { logger_ms: Some(ms), values: vec![(0, 230.0)] })
    }

    fn fault(fault: LineFault) -> LoggerEvent {
        LoggerEvent::Fault(fault)
    }

    #[test]
    fn a_line_is_read_however_it_is_cut_and_with_either_line_end() {
        let mut stream = mains_line(1, 10);
        stream.extend(body_line("2 20 mains=230000"));
        stream.extend(b"\r\n\n");
        stream.extend(mains_line(3, 30));
        for size in 1..stream.len() {
            let mut decoder = decoder();
            let events: Vec<_> = stream.chunks(size).flat_map(|chunk| feed(&mut decoder, chunk)).collect();
            assert_eq!(events, [sample(10), sample(20), sample(30)], "in pieces of {size}");
        }
    }

    #[test]
    fn the_rest_of_a_line_heard_on_joining_is_no_fault() {
        let mut decoder = decoder();
        assert_eq!(feed(&mut decoder, b"9512*ABCD\r\n"), []);
        assert_eq!(feed(&mut decoder, &mains_line(1, 10)), [sample(10)]);
        feed(&mut decoder, b"@2 2");
        decoder.rejoin();
        assert_eq!(feed(&mut decoder, b"0 mains=230000*ABCD\r\n"), []);
        assert_eq!(feed(&mut decoder, &mains_line(4, 40)), [LoggerEvent::Lost { lines: 2 }, sample(40)]);
    }

    #[test]
    fn a_start_mark_begins_a_new_line_wherever_it_stands() {
        let mut decoder = decoder();
        feed(&mut decoder, b"\n");
        let mut torn = b"@1 10 mai".to_vec();
        torn.extend(mains_line(2, 20));
        assert_eq!(feed(&mut decoder, &torn), [fault(LineFault::Garbage), sample(20)]);
        let mut noise = b"\x00\xFF hum".to_vec();
        noise.extend(mains_line(3, 30));
        assert_eq!(feed(&mut decoder, &noise), [fault(LineFault::Garbage), sample(30)]);
    }

    #[test]
    fn a_run_without_an_end_is_counted_once_and_leaves_the_next_line_readable() {
        let cases = [(&b"@1 10 mains="[..], LineFault::TooLong), (&b"noise"[..], LineFault::Garbage)];
        for (start, expected) in cases {
            let mut decoder = decoder();
            feed(&mut decoder, b"\n");
            let mut events = feed(&mut decoder, start);
            for _ in 0..1024 {
                events.extend(feed(&mut decoder, &[b'7'; 1024]));
            }
            events.extend(feed(&mut decoder, b"\n"));
            events.extend(feed(&mut decoder, &mains_line(2, 20)));
            assert_eq!(events, [fault(expected), sample(20)]);
            assert_eq!(decoder.line.capacity(), MAX_LINE);
        }
    }

    #[test]
    fn the_longest_line_is_read_and_one_byte_more_is_too_long() {
        // 512 bytes with CR LF: "@" and "*XXXX\r\n" leave 504 for the body.
        let mut body = "1 10 mains=230000".to_owned();
        while body.len() + 13 <= 504 {
            body.push_str(" filler-xyz=1");
        }
        let room = 504 - body.len();
        body.push_str(&format!(" f{}=", "i".repeat(room - 3)));
        assert_eq!(body.len(), 504);
        let events = feed(&mut decoder(), &body_line(&body));
        assert_eq!(events.last(), Some(&sample(10)));
        let longer = body.replacen("filler-xyz=1", "filler-xyz=12", 1);
        assert_eq!(feed(&mut decoder(), &body_line(&longer)), [fault(LineFault::TooLong)]);
    }

    #[test]
    fn a_bad_value_or_an_unknown_channel_costs_only_itself() {
        let mut decoder = decoder();
        let cases = [
            ("1 10 mains=230000 rail=NaN", LineFault::BadValue),
            ("2 20 mains=230000 rail=1e99", LineFault::BadValue),
            ("3 30 rail= mains=230000", LineFault::BadValue),
            ("4 40 mains=230000 rail=2147483648", LineFault::BadValue),
            ("5 50 mains=230000 mains=1", LineFault::BadValue),
            ("6 60 mains=230000 other=5", LineFault::UnknownChannel),
        ];
        for (i, (body, expected)) in cases.into_iter().enumerate() {
            let events = feed(&mut decoder, &body_line(body));
            assert_eq!(events, [fault(expected), sample(10 * (i as u64 + 1))], "{body}");
        }
        // What is impossible for a quantity is not the line's business.
        let negative = LoggerEvent::Sample(Sample { logger_ms: Some(70), values: vec![(0, -5.25)] });
        assert_eq!(feed(&mut decoder, &body_line("7 70 mains=-5250")), [negative]);
    }

    #[test]
    fn a_line_of_another_make_is_malformed_and_none_of_it_is_used() {
        let mut decoder = decoder();
        assert_eq!(feed(&mut decoder, &body_line("hello")), [fault(LineFault::Malformed)]);
        let broken_later = body_line("1 10 mains=230000 rail");
        assert_eq!(feed(&mut decoder, &broken_later), [fault(LineFault::Malformed)]);
        let mut wrong = mains_line(1, 10);
        wrong[3] ^= 1;
        assert_eq!(feed(&mut decoder, &wrong), [fault(LineFault::Checksum)]);
        assert_eq!(feed(&mut decoder, &mains_line(1, 10)), [sample(10)]);
    }

    /// What each line after the first says beside its sample.
    fn numbering(lines: &[(u32, u64)]) -> Vec<Step> {
        let mut numbering = Numbering::default();
        lines.iter().map(|&(sequence, ms)| numbering.follow(sequence, ms)).skip(1).collect()
    }

    #[test]
    fn lost_lines_are_counted_across_the_wrap_of_the_sequence() {
        let next = |logger_ms, lost| Step::Next { logger_ms, lost };
        let steps = numbering(&[(u32::MAX - 1, 10), (u32::MAX, 20), (0, 30), (3, 60), (4, 60)]);
        assert_eq!(steps, [next(20, 0), next(30, 0), next(60, 2), next(60, 0)]);
    }

    #[test]
    fn a_restart_is_told_by_a_sequence_or_by_milliseconds_that_go_back() {
        let restarted = |logger_ms| Step::Restarted { logger_ms };
        let next = |logger_ms| Step::Next { logger_ms, lost: 0 };
        // Both back; the milliseconds alone (restarted later than it had run before); the sequence alone.
        let steps = numbering(&[(500, 50_000), (0, 100), (1, 200), (2, 150), (1, 300), (2, 400)]);
        assert_eq!(steps, [restarted(100), next(200), restarted(150), restarted(300), next(400)]);
        assert_eq!(numbering(&[(5, 5_000), (5, 100)]), [restarted(100)]);
    }

    #[test]
    fn the_same_numbers_again_are_the_same_line_again() {
        let mut decoder = decoder();
        feed(&mut decoder, &mains_line(1, 10));
        assert_eq!(feed(&mut decoder, &mains_line(1, 10)), [fault(LineFault::Duplicate)]);
        assert_eq!(feed(&mut decoder, &mains_line(2, 20)), [sample(20)]);
    }

    #[test]
    fn milliseconds_of_32_bits_run_on_after_their_wrap() {
        let wrap = 1u64 << 32;
        let next = |logger_ms| Step::Next { logger_ms, lost: 0 };
        let steps = numbering(&[(7, wrap - 400), (8, 600), (9, 1_600), (0, 30)]);
        assert_eq!(steps, [next(wrap + 600), next(wrap + 1_600), Step::Restarted { logger_ms: 30 }]);
        // Going back from a counter that is nowhere near its wrap is a restart even when the sequence goes on.
        assert_eq!(numbering(&[(7, wrap / 2), (8, 600)]), [Step::Restarted { logger_ms: 600 }]);
        let near_the_end = [(7, u64::MAX), (8, u64::MAX - 1)];
        assert_eq!(numbering(&near_the_end), [Step::Restarted { logger_ms: u64::MAX - 1 }]);
    }

    proptest! {
        #[test]
        fn no_bytes_panic_or_spoil_the_next_good_line(
            bytes in proptest::collection::vec(
                prop_oneof![any::<u8>(), Just(b'@'), Just(b'*'), Just(b'\n'), Just(b' '), Just(b'='), b'0'..=b'9'],
                0..2000,
            ),
            cut in 1usize..64,
        ) {
            let mut decoder = decoder();
            for chunk in bytes.chunks(cut) {
                feed(&mut decoder, chunk);
            }
            // The last one before may claim any numbers; a second line is read in any case.
            let mut events = feed(&mut decoder, &mains_line(1, 10));
            events.extend(feed(&mut decoder, &mains_line(2, 20)));
            prop_assert_eq!(&events[events.len() - 2..], [sample(10), sample(20)]);
            prop_assert_eq!(decoder.line.capacity(), MAX_LINE);
        }
    }
}
