//! Where time comes from, and how it is written.

use std::{fmt, str::FromStr};

use jiff::{Span, Timestamp, tz::TimeZone};
use serde::{Deserialize, Deserializer, Serialize, Serializer, de};

/// Tells the time. The core never asks; the service asks through this, so that tests can hold it still.
pub trait Clock: Send + Sync + 'static {
    fn now(&self) -> Stamp;
}

/// The computer's clock.
#[derive(Debug, Clone, Copy, Default)]
pub struct SystemClock;

impl Clock for SystemClock {
    fn now(&self) -> Stamp {
        Stamp(Timestamp::now())
    }
}

/// A point in time, in UTC and whole microseconds when written: RFC 3339 with six decimals, one width, so that text sorts as
/// time does.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub struct Stamp(Timestamp);

impl Stamp {
    /// Microseconds since 1970; what the ledger keeps.
    pub fn microseconds(self) -> i64 {
        self.0.as_microsecond()
    }

    /// The time so many microseconds after 1970; `None` outside the years −9999 to 9999.
    pub fn from_microseconds(microseconds: i64) -> Option<Self> {
        Timestamp::from_microsecond(microseconds).ok().map(Self)
    }

    /// Whole seconds since 1970, and the nanoseconds of the current second; times before 1970 count as 1970.
    pub fn unix(self) -> (u64, u32) {
        (u64::try_from(self.0.as_second()).unwrap_or(0), u32::try_from(self.0.subsec_nanosecond()).unwrap_or(0))
    }
}

impl Stamp {
    /// The time that a text names: a time as in RFC 3339, or a span counted from here, such as `90d`, `12h` or `1y`; days are those of UTC.
    ///
    /// # Errors
    /// A text that is neither, or a time that is too far away.
    pub fn or_after(self, text: &str) -> Result<Self, NoEnd> {
        if let Ok(time) = text.parse() {
            return Ok(time);
        }
        let span: Span = text.parse().map_err(|_| NoEnd)?;
        let end = self.0.to_zoned_datetime(TimeZone::UTC).checked_add(span).map_err(|_| NoEnd)?;
        Self::from_microseconds(end.timestamp().as_microsecond()).ok_or(NoEnd)
    }
}

/// The text names no time.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("neither a time as in RFC 3339, for example 2026-03-01T12:00:00Z, nor a span such as 90d or 12h")]
pub struct NoEnd;

impl fmt::Display for Stamp {
    fn fmt(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
        write!(formatter, "{:.6}", self.0)
    }
}

/// The text is no RFC 3339 time.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[error("not a time as in RFC 3339, for example 2026-03-01T12:00:00Z")]
pub struct NoStamp;

impl FromStr for Stamp {
    type Err = NoStamp;

    /// Stricter than the parser beneath, which also takes times without seconds, with a space for the `T`, or with a time zone
    /// in brackets.
    fn from_str(text: &str) -> Result<Self, NoStamp> {
        let shape = text.as_bytes();
        let separators = [(4, b'-'), (7, b'-'), (10, b'T'), (13, b':'), (16, b':')];
        if shape.len() < 20 || text.contains('[') || separators.iter().any(|(at, byte)| shape[*at].to_ascii_uppercase() != *byte) {
            return Err(NoStamp);
        }
        let time: Timestamp = text.parse().map_err(|_| NoStamp)?;
        // What is finer than the ledger keeps is dropped here, so that a time compares the same before and after storage.
        Self::from_microseconds(time.as_microsecond()).ok_or(NoStamp)
    }
}

impl Serialize for Stamp {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        serializer.collect_str(self)
    }
}

impl<'de> Deserialize<'de> for Stamp {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        let text = String::deserialize(deserializer)?;
        text.parse().map_err(de::Error::custom)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_stamp_is_read_back() {
        let time: Stamp = "2026-03-01T12:00:00.25+01:00".parse().unwrap();
        assert_eq!(time.to_string(), "2026-03-01T11:00:00.250000Z");
        assert_eq!(time.to_string().parse(), Ok(time));
        assert_eq!(Stamp::from_microseconds(time.microseconds()), Some(time));
    }

    #[test]
    fn an_end_is_a_time_or_a_span() {
        let now: Stamp = "2026-03-01T12:00:00Z".parse().unwrap();
        let end = |text| now.or_after(text).map(|end| end.to_string());
        assert_eq!(end("90d").as_deref(), Ok("2026-05-30T12:00:00.000000Z"));
        assert_eq!(end("1h").as_deref(), Ok("2026-03-01T13:00:00.000000Z"));
        assert_eq!(end("2027-01-01T00:00:00Z").as_deref(), Ok("2027-01-01T00:00:00.000000Z"));
        assert_eq!(end("soon"), Err(NoEnd));
    }

    #[test]
    fn only_rfc_3339_is_read() {
        for text in ["", "2026-03-01", "2026-03-01T12:00Z", "2026-03-01 12:00:00Z", "2026-03-01T12:00:00", "2026-13-01T12:00:00Z"] {
            assert_eq!(text.parse::<Stamp>(), Err(NoStamp), "{text}");
        }
        assert_eq!("2026-03-01T12:00:00+00:00[UTC]".parse::<Stamp>(), Err(NoStamp));
    }
}
