//! A value that is stated, or counts that it is to be inferred from.

use std::{fmt, marker::PhantomData};

use serde::{Deserialize, Deserializer, Serialize, Serializer, de};

/// On the wire a number, or an object of counts.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Measured<C> {
    /// The value; the poster answers for it.
    Stated(f64),
    /// Counts; the value is an exact confidence limit.
    Counted(C),
}

impl<C: Serialize> Serialize for Measured<C> {
    fn serialize<S: Serializer>(&self, serializer: S) -> Result<S::Ok, S::Error> {
        match self {
            Self::Stated(value) => value.serialize(serializer),
            Self::Counted(counts) => counts.serialize(serializer),
        }
    }
}

impl<'de, C: Deserialize<'de>> Deserialize<'de> for Measured<C> {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct Visitor<C>(PhantomData<C>);
        impl<'de, C: Deserialize<'de>> de::Visitor<'de> for Visitor<C> {
            type Value = Measured<C>;
            fn expecting(&self, formatter: &mut fmt::Formatter) -> fmt::Result {
                formatter.write_str("a number, or an object of counts")
            }
            fn visit_f64<E: de::Error>(self, value: f64) -> Result<Self::Value, E> {
                // Adding positive zero turns -0.0 into 0.0: one spelling per number, so that equal documents have equal digests.
                Ok(Measured::Stated(value + 0.0))
            }
            fn visit_u64<E: de::Error>(self, value: u64) -> Result<Self::Value, E> {
                Ok(Measured::Stated(value as f64))
            }
            fn visit_i64<E: de::Error>(self, value: i64) -> Result<Self::Value, E> {
                Ok(Measured::Stated(value as f64))
            }
            fn visit_map<A: de::MapAccess<'de>>(self, map: A) -> Result<Self::Value, A::Error> {
                C::deserialize(de::value::MapAccessDeserializer::new(map)).map(Measured::Counted)
            }
        }
        deserializer.deserialize_any(Visitor(PhantomData))
    }
}
