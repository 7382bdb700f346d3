//! Group keys as bytes that sort as the values do: one form for hashing, ordering, and the ledger.
//!
//! A key is, for each key column: 0 and the value, or 1 for null (so nulls come last). Integers are big-endian with the
//! sign bit flipped; floats likewise after the usual turn of negative bit patterns, with -0 written as 0 because both
//! are one value; texts are their bytes, each 0 followed by 255, ended by 0 0.

use crate::columnar::bridge::Handed;

/// A value of a key or of an aggregate.
#[derive(Debug, Clone, PartialEq)]
pub enum Value<'a> {
    /// Missing.
    Null,
    /// True or false.
    Boolean(bool),
    /// Signed.
    Integer(i64),
    /// Unsigned.
    Unsigned(u64),
    /// Either float type.
    Real(f64),
    /// Text.
    Text(&'a str),
}

/// Appends `value` to `key`.
pub fn write(key: &mut Vec<u8>, value: &Value) {
    const SIGN: u64 = 1 << 63;
    match value {
        Value::Null => {
            key.push(1);
            return;
        }
        _ => key.push(0),
    }
    match value {
        Value::Null => {}
        Value::Boolean(b) => key.push(u8::from(*b)),
        Value::Integer(n) => key.extend((*n as u64 ^ SIGN).to_be_bytes()),
        Value::Unsigned(n) => key.extend(n.to_be_bytes()),
        Value::Real(x) => {
            let bits = (x + 0.0).to_bits();
            key.extend((if bits & SIGN == 0 { bits | SIGN } else { !bits }).to_be_bytes());
        }
        Value::Text(text) => {
            for byte in text.bytes() {
                key.push(byte);
                if byte == 0 {
                    key.push(255);
                }
            }
            key.extend([0, 0]);
        }
    }
}

/// Takes the next value of type `kind` off `key`, handing text over in `text`; `None` if the key is damaged.
pub fn read<'a>(key: &mut &[u8], kind: Handed, text: &'a mut String) -> Option<Value<'a>> {
    const SIGN: u64 = 1 << 63;
    let (tag, rest) = key.split_first()?;
    *key = rest;
    if *tag == 1 {
        return Some(Value::Null);
    }
    let mut eight = || {
        let (head, rest) = key.split_first_chunk::<8>()?;
        *key = rest;
        Some(u64::from_be_bytes(*head))
    };
    Some(match kind {
        Handed::Boolean => {
            let (head, rest) = key.split_first()?;
            *key = rest;
            Value::Boolean(*head == 1)
        }
        Handed::Integer => Value::Integer((eight()? ^ SIGN) as i64),
        Handed::Unsigned => Value::Unsigned(eight()?),
        Handed::Float32 | Handed::Float64 => {
            let bits = eight()?;
            Value::Real(f64::from_bits(if bits & SIGN == 0 { !bits } else { bits ^ SIGN }))
        }
        Handed::Text => {
            let mut bytes = Vec::new();
            loop {
                match **key {
                    [0, 0, ..] => {
                        *key = &key[2..];
                        break;
                    }
                    [0, 255, ..] => {
                        bytes.push(0);
                        *key = &key[2..];
                    }
                    [byte, ..] => {
                        bytes.push(byte);
                        *key = &key[1..];
                    }
                    [] => return None,
                }
            }
            *text = String::from_utf8(bytes).ok()?;
            Value::Text(text)
        }
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn key(value: Value) -> Vec<u8> {
        let mut key = Vec::new();
        write(&mut key, &value);
        key
    }

    #[test]
    fn order_and_value_survive() {
        let ordered: [(Handed, Vec<Value>); 5] = [
            (Handed::Boolean, vec![Value::Boolean(false), Value::Boolean(true), Value::Null]),
            (
                Handed::Integer,
                [i64::MIN, -1, 0, 1, i64::MAX].map(Value::Integer).into_iter().chain([Value::Null]).collect(),
            ),
            (Handed::Unsigned, [0, 1, u64::MAX].map(Value::Unsigned).into_iter().chain([Value::Null]).collect()),
            (
                Handed::Float64,
                [-1e300, -1.0, -5e-324, 0.0, 5e-324, 1.0, 1e300]
                    .map(Value::Real)
                    .into_iter()
                    .chain([Value::Null])
                    .collect(),
            ),
            (
                Handed::Text,
                ["", "\0", "\0a", "a", "a\0", "ab", "b", "\u{e9}"]
                    .map(Value::Text)
                    .into_iter()
                    .chain([Value::Null])
                    .collect(),
            ),
        ];
        for (kind, values) in ordered {
            let keys: Vec<Vec<u8>> = values.iter().map(|v| key(v.clone())).collect();
            assert!(keys.windows(2).all(|pair| pair[0] < pair[1]), "{kind:?}");
            for (value, bytes) in values.iter().zip(&keys) {
                let (mut rest, mut text) = (bytes.as_slice(), String::new());
                assert_eq!(read(&mut rest, kind, &mut text).as_ref(), Some(value));
                assert!(rest.is_empty());
            }
        }
        assert_eq!(key(Value::Real(-0.0)), key(Value::Real(0.0)));
    }

    #[test]
    fn a_damaged_key_is_noticed() {
        let mut text = String::new();
        assert_eq!(read(&mut [0, 1, 2].as_slice(), Handed::Integer, &mut text), None);
        assert_eq!(read(&mut [0, b'a', 0].as_slice(), Handed::Text, &mut text), None);
        assert_eq!(read(&mut [].as_slice(), Handed::Text, &mut text), None);
    }
}
