//! Lists of numbers on their way between processes: the bits as they are, copied as one piece and not element by
//! element.

use std::fmt;

use serde::de::{Error, Visitor};
use serde::{Deserializer, Serializer};

const BYTES: usize = size_of::<f64>();

/// Writes the numbers as little-endian bytes.
pub fn serialize<S: Serializer>(values: &[f64], serializer: S) -> Result<S::Ok, S::Error> {
    let mut bytes = Vec::with_capacity(BYTES * values.len());
    for value in values {
        bytes.extend_from_slice(&value.to_le_bytes());
    }
    serializer.serialize_bytes(&bytes)
}

/// Reads what [`serialize`] wrote.
pub fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<f64>, D::Error> {
    deserializer.deserialize_bytes(Bits)
}

struct Bits;

impl Visitor<'_> for Bits {
    type Value = Vec<f64>;

    fn expecting(&self, formatter: &mut fmt::Formatter<'_>) -> fmt::Result {
        formatter.write_str("little-endian doubles")
    }

    fn visit_bytes<E: Error>(self, bytes: &[u8]) -> Result<Vec<f64>, E> {
        let (values, rest) = bytes.as_chunks::<BYTES>();
        if !rest.is_empty() {
            return Err(E::invalid_length(bytes.len(), &self));
        }
        Ok(values.iter().map(|value| f64::from_le_bytes(*value)).collect())
    }
}
