//! The tide line, our open line format: reading one line and writing one. The grammar, with examples and test
//! vectors, is in `hardware-notes/tide-line.md`.
//!
//! ```text
//! line    = "@" body "*" crc end            at most 512 bytes, the end included
//! body    = sequence " " milliseconds *( " " channel "=" value )
//! channel = 1 to 32 of A-Z a-z 0-9 . _ -
//! value   = [ "-" ] 1*DIGIT                 millivolts; or nothing: the channel has no value now
//! crc     = four hex digits over body       CRC-16/CCITT-FALSE, also called IBM-3740
//! end     = LF or CR LF
//! ```

use std::io::Write;

use crc::{CRC_16_IBM_3740, Crc, Table};

/// The longest line in bytes, its end included.
pub const MAX_LINE: usize = 512;

/// The longest name of a channel in bytes.
pub const MAX_CHANNEL_NAME: usize = 32;

/// What `*`, the four digits and a CR LF take.
const TRAILER: usize = 7;

// Sixteen tables (8 KiB) read sixteen bytes at a step.
static CRC: Crc<u16, Table<16>> = Crc::<u16, Table<16>>::new(&CRC_16_IBM_3740);

/// The check sum of a tide line's body: CRC-16/CCITT-FALSE (polynomial 0x1021, start 0xFFFF, not reflected, no final
/// xor; "123456789" gives 0x29B1).
pub fn crc16(body: &[u8]) -> u16 {
    CRC.checksum(body)
}

/// Whether `name` may name a channel in a tide line.
fn is_channel_name(name: &[u8]) -> bool {
    (1..=MAX_CHANNEL_NAME).contains(&name.len())
        && name.iter().all(|b| b.is_ascii_alphanumeric() || matches!(b, b'.' | b'_' | b'-'))
}

/// A line whose check sum is right; its pairs are read as they are asked for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct TideLine<'a> {
    /// Counts the logger's lines, and wraps from 2³² − 1 to 0.
    pub sequence: u32,
    /// The logger's own milliseconds, from an unknown start.
    pub logger_ms: u64,
    pairs: &'a [u8],
}

/// Why a line can't be read.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Unreadable {
    /// It doesn't start with `@`, or doesn't end in `*` and four hex digits: a torn line or none at all.
    NoLine,
    /// The check sum is wrong.
    Checksum,
    /// The check sum is right, the body isn't one of this format.
    Malformed,
}

/// The right side of a pair.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Value {
    /// A whole number of millivolts that the record can hold.
    Millivolts(i32),
    /// Nothing: the logger has no value for this channel now.
    Absent,
    /// Something else: `NaN`, `1e99`, a number of millivolts beyond what can be stored.
    Unusable,
}

impl<'a> TideLine<'a> {
    /// Reads one line, given from its `@` on and without its end.
    pub fn parse(line: &'a [u8]) -> Result<Self, Unreadable> {
        let after_mark = line.strip_prefix(b"@").ok_or(Unreadable::NoLine)?;
        let star = after_mark.len().checked_sub(5).ok_or(Unreadable::NoLine)?;
        let (body, trailer) = after_mark.split_at(star);
        let digits = trailer.strip_prefix(b"*").ok_or(Unreadable::NoLine)?;
        let stated = hex4(digits).ok_or(Unreadable::NoLine)?;
        if stated != crc16(body) {
            return Err(Unreadable::Checksum);
        }
        let (sequence, rest) = number(body).ok_or(Unreadable::Malformed)?;
        let sequence = u32::try_from(sequence).map_err(|_| Unreadable::Malformed)?;
        let rest = rest.strip_prefix(b" ").ok_or(Unreadable::Malformed)?;
        let (logger_ms, pairs) = number(rest).ok_or(Unreadable::Malformed)?;
        Ok(TideLine { sequence, logger_ms, pairs })
    }

    /// The line's pairs in their order. `None` in place of a pair: from here on this is no list of pairs, and the
    /// whole line is to be discarded.
    pub fn pairs(&self) -> Pairs<'a> {
        Pairs { rest: self.pairs }
    }
}

/// Iterates over the pairs of a [`TideLine`].
#[derive(Clone, Debug)]
pub struct Pairs<'a> {
    rest: &'a [u8],
}

impl<'a> Iterator for Pairs<'a> {
    type Item = Option<(&'a [u8], Value)>;

    fn next(&mut self) -> Option<Self::Item> {
        if self.rest.is_empty() {
            return None;
        }
        let pair = self.read_pair();
        if pair.is_none() {
            self.rest = &[];
        }
        Some(pair)
    }
}

impl<'a> Pairs<'a> {
    fn read_pair(&mut self) -> Option<(&'a [u8], Value)> {
        let rest = self.rest.strip_prefix(b" ")?;
        let equals = rest.iter().take(MAX_CHANNEL_NAME + 1).position(|&b| b == b'=')?;
        let (name, rest) = (&rest[..equals], &rest[equals + 1..]);
        if !is_channel_name(name) {
            return None;
        }
        let end = rest.iter().position(|&b| b == b' ').unwrap_or(rest.len());
        let (value, rest) = rest.split_at(end);
        self.rest = rest;
        Some((name, read_value(value)))
    }
}

fn read_value(text: &[u8]) -> Value {
    if text.is_empty() {
        return Value::Absent;
    }
    let (negative, digits) = match text.strip_prefix(b"-") {
        Some(digits) => (true, digits),
        None => (false, text),
    };
    let millivolts = match number(digits) {
        Some((magnitude, [])) if negative => 0i64.checked_sub_unsigned(magnitude),
        Some((magnitude, [])) => i64::try_from(magnitude).ok(),
        _ => None,
    };
    millivolts.and_then(|mv| i32::try_from(mv).ok()).map_or(Value::Unusable, Value::Millivolts)
}

/// The decimal number that `text` starts with, and what follows it; `None` without a digit or beyond 2⁶⁴ − 1.
fn number(text: &[u8]) -> Option<(u64, &[u8])> {
    let mut value = 0u64;
    let mut digits = 0;
    for &b in text {
        if !b.is_ascii_digit() {
            break;
        }
        value = value.checked_mul(10)?.checked_add(u64::from(b - b'0'))?;
        digits += 1;
    }
    (digits > 0).then(|| (value, &text[digits..]))
}

fn hex4(digits: &[u8]) -> Option<u16> {
    digits.iter().try_fold(0u16, |value, &b| {
        let digit = char::from(b).to_digit(16)?;
        Some(value << 4 | digit as u16)
    })
}

/// Why a line can't be written.
#[derive(Clone, Debug, PartialEq, Eq, thiserror::Error)]
pub enum Unwritable {
    /// A name that no channel can have.
    #[error(
        "channel name {name:?} can't stand in a tide line: use 1 to 32 letters, digits, dots, underscores or hyphens"
    )]
    ChannelName {
        /// The name.
        name: String,
    },
    /// More channels than fit.
    #[error("a tide line of {length} bytes is longer than 512: send the channels in two lines")]
    TooLong {
        /// How long it would be, in bytes, with the longer line end.
        length: usize,
    },
}

/// Appends one line with its LF to `out`; on an error `out` is left as it was.
pub fn write_line<'n>(
    out: &mut Vec<u8>,
    sequence: u32,
    logger_ms: u64,
    values: impl IntoIterator<Item = (&'n str, Option<i32>)>,
) -> Result<(), Unwritable> {
    let start = out.len();
    let written = write_body(out, sequence, logger_ms, values).and_then(|()| {
        let length = out.len() - start + TRAILER;
        if length > MAX_LINE { Err(Unwritable::TooLong { length }) } else { Ok(()) }
    });
    if let Err(why) = written {
        out.truncate(start);
        return Err(why);
    }
    let crc = crc16(&out[start + 1..]);
    out.push(b'*');
    for shift in [12, 8, 4, 0] {
        out.push(b"0123456789ABCDEF"[usize::from(crc >> shift & 0xF)]);
    }
    out.push(b'\n');
    Ok(())
}

fn write_body<'n>(
    out: &mut Vec<u8>,
    sequence: u32,
    logger_ms: u64,
    values: impl IntoIterator<Item = (&'n str, Option<i32>)>,
) -> Result<(), Unwritable> {
    const MEMORY: &str = "writing to memory doesn't fail";
    write!(out, "@{sequence} {logger_ms}").expect(MEMORY);
    for (name, millivolts) in values {
        if !is_channel_name(name.as_bytes()) {
            return Err(Unwritable::ChannelName { name: name.to_owned() });
        }
        out.push(b' ');
        out.extend_from_slice(name.as_bytes());
        out.push(b'=');
        if let Some(millivolts) = millivolts {
            write!(out, "{millivolts}").expect(MEMORY);
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use proptest::prelude::*;

    use super::*;

    fn pairs(line: &TideLine<'_>) -> Vec<(String, Value)> {
        line.pairs()
            .map(|pair| {
                let (name, value) = pair.expect("a well-formed list of pairs");
                (String::from_utf8(name.to_vec()).unwrap(), value)
            })
            .collect()
    }

    fn with_crc(body: &str) -> Vec<u8> {
        format!("@{body}*{:04X}", crc16(body.as_bytes())).into_bytes()
    }

    #[test]
    fn the_check_sum_is_the_published_one() {
        // Handbook section 9: CRC check "123456789", CCITT-FALSE (IBM-3740) 0x29B1 (crc-catalog; computed a second
        // time with `crccheck`).
        assert_eq!(crc16(b"123456789"), 0x29B1);
        assert_eq!(crc16(b""), 0xFFFF);
    }

    #[test]
    fn a_line_gives_its_sequence_its_milliseconds_and_its_pairs() {
        let bytes = with_crc("17 123456 mains=229512 hall.reservoir=471200 screens=-3 spare=");
        let line = TideLine::parse(&bytes).unwrap();
        assert_eq!((line.sequence, line.logger_ms), (17, 123_456));
        let expected = [
            ("mains", Value::Millivolts(229_512)),
            ("hall.reservoir", Value::Millivolts(471_200)),
            ("screens", Value::Millivolts(-3)),
            ("spare", Value::Absent),
        ];
        assert_eq!(pairs(&line), expected.map(|(n, v)| (n.to_owned(), v)));
    }

    #[test]
    fn a_line_without_pairs_is_a_sign_of_life() {
        let bytes = with_crc("4294967295 18446744073709551615");
        let line = TideLine::parse(&bytes).unwrap();
        assert_eq!((line.sequence, line.logger_ms), (u32::MAX, u64::MAX));
        assert_eq!(line.pairs().next(), None);
    }

    #[test]
    fn hex_digits_may_be_small_letters() {
        let bytes = with_crc("17 123456 mains=229512").to_ascii_lowercase();
        assert!(TideLine::parse(&bytes).is_ok(), "{}", bytes.escape_ascii());
    }

    #[test]
    fn values_that_are_no_storable_number_are_unusable_and_leave_the_others_alone() {
        for text in
            ["NaN", "nan", "inf", "1e99", "229.5", "+5", "-", "--5", "2147483648", "-2147483649", "0x10"]
        {
            let bytes = with_crc(&format!("1 2 mains={text} rail=5"));
            let line = TideLine::parse(&bytes).unwrap();
            let expected = [("mains", Value::Unusable), ("rail", Value::Millivolts(5))];
            assert_eq!(pairs(&line), expected.map(|(n, v)| (n.to_owned(), v)), "{text}");
        }
        let bytes = with_crc("1 2 low=-2147483648 high=2147483647");
        let expected = [("low", Value::Millivolts(i32::MIN)), ("high", Value::Millivolts(i32::MAX))];
        assert_eq!(pairs(&TideLine::parse(&bytes).unwrap()), expected.map(|(n, v)| (n.to_owned(), v)));
    }

    #[test]
    fn what_is_torn_changed_or_no_line_is_told_apart() {
        let good = with_crc("17 123456 mains=229512");
        for end in 0..good.len() {
            assert_eq!(TideLine::parse(&good[..end]), Err(Unreadable::NoLine), "cut after {end} bytes");
        }
        let mut changed = good.clone();
        changed[20] ^= 1;
        assert_eq!(TideLine::parse(&changed), Err(Unreadable::Checksum));
        assert_eq!(TideLine::parse(&good[1..]), Err(Unreadable::NoLine));
        for body in ["", "17", "17 ", "x 1", "4294967296 1", "-1 1", "1 -1", "1 18446744073709551616", " 1 1"]
        {
            assert_eq!(TideLine::parse(&with_crc(body)), Err(Unreadable::Malformed), "{body:?}");
        }
    }

    #[test]
    fn a_broken_list_of_pairs_says_so_where_it_breaks() {
        let long = format!("1 1 {}=5", "n".repeat(33));
        for body in
            ["1 1 ", "1 1 mains", "1 1 =5", "1 1 a b=5", "1 1  a=5", "1 1 a=5 ", "1 1 a/b=5", "1 1x", &long]
        {
            let bytes = with_crc(body);
            let line = TideLine::parse(&bytes).unwrap();
            assert!(line.pairs().any(|pair| pair.is_none()), "{body:?}");
        }
    }

    #[test]
    fn a_line_that_cannot_be_written_leaves_nothing_behind() {
        let mut out = b"before".to_vec();
        let name = Unwritable::ChannelName { name: "a b".to_owned() };
        assert_eq!(write_line(&mut out, 1, 1, [("mains", Some(1)), ("a b", Some(1))]), Err(name));
        let many = (0..100).map(|_| ("mains", Some(229_512)));
        assert_eq!(write_line(&mut out, 1, 1, many), Err(Unwritable::TooLong { length: 1311 }));
        assert_eq!(out, b"before");
    }

    proptest! {
        #[test]
        fn a_line_written_and_read_is_the_same(
            sequence: u32,
            logger_ms: u64,
            values in proptest::collection::vec(("[A-Za-z0-9._-]{1,32}", any::<Option<i32>>()), 0..10),
        ) {
            let mut bytes = Vec::new();
            write_line(&mut bytes, sequence, logger_ms, values.iter().map(|(n, v)| (n.as_str(), *v))).unwrap();
            prop_assert!(bytes.len() < MAX_LINE);
            let line = TideLine::parse(bytes.strip_suffix(b"\n").unwrap()).unwrap();
            prop_assert_eq!((line.sequence, line.logger_ms), (sequence, logger_ms));
            let expected: Vec<_> = values
                .into_iter()
                .map(|(name, mv)| (name, mv.map_or(Value::Absent, Value::Millivolts)))
                .collect();
            prop_assert_eq!(pairs(&line), expected);
        }

        #[test]
        fn one_changed_bit_is_always_noticed(sequence: u32, mv: i32, at: prop::sample::Index, bit in 0..8u8) {
            // A CRC-16 finds every single-bit error; in the frame itself it is no line, or one with a wrong sum.
            let mut bytes = Vec::new();
            write_line(&mut bytes, sequence, 7, [("mains", Some(mv))]).unwrap();
            bytes.pop();
            let at = at.index(bytes.len());
            bytes[at] ^= 1 << bit;
            // A letter's case in the sum itself carries no meaning.
            prop_assume!(!(at >= bytes.len() - 4 && bytes[at].is_ascii_hexdigit() && bit == 5));
            prop_assert!(TideLine::parse(&bytes).is_err());
        }
    }
}
