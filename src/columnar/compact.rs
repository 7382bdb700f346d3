//! Walks structures of the Thrift compact protocol without decoding them.
//!
//! The parquet crate shows neither whether a footer declares encrypted columns nor the size and checksum of a page
//! that is copied undecoded; both are top-level fields of Thrift structures and can be found by skipping the rest.
//! Protocol: Apache Thrift, `doc/specs/thrift-compact-protocol.md`; field numbers: Apache Parquet, `parquet.thrift`.
//! Any malformed byte gives `None`; depth and lengths are bounded by the slice.

/// Cursor over the bytes of one structure.
pub struct Compact<'a> {
    bytes: &'a [u8],
    at: usize,
}

/// Nesting beyond this is taken for damage (Parquet's own structures nest below 10).
const MAX_DEPTH: u32 = 32;

/// A field of a structure: its number and, for integers, its value.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Field {
    /// Number in the `.thrift` definition.
    pub id: i16,
    /// Value of an integer field; `None` for every other type.
    pub integer: Option<i64>,
    /// Where the field's value starts, for nested structures.
    pub start: usize,
}

impl<'a> Compact<'a> {
    /// Starts at the first byte.
    pub fn new(bytes: &'a [u8]) -> Self {
        Self { bytes, at: 0 }
    }

    /// Top-level fields, and the length of the structure in bytes.
    pub fn structure(mut self) -> Option<(Vec<Field>, usize)> {
        let mut fields = Vec::new();
        let mut id = 0i16;
        while let Some((next, kind)) = self.field_header(id)? {
            id = next;
            let start = self.at;
            let integer = self.value(kind, 0)?;
            fields.push(Field { id, integer, start });
        }
        Some((fields, self.at))
    }

    fn byte(&mut self) -> Option<u8> {
        let byte = *self.bytes.get(self.at)?;
        self.at += 1;
        Some(byte)
    }

    fn varint(&mut self) -> Option<u64> {
        let mut value = 0u64;
        for shift in (0..64).step_by(7) {
            let byte = self.byte()?;
            value |= u64::from(byte & 0x7f) << shift;
            if byte & 0x80 == 0 {
                return Some(value);
            }
        }
        None
    }

    fn zigzag(&mut self) -> Option<i64> {
        let raw = self.varint()?;
        Some((raw >> 1) as i64 ^ -((raw & 1) as i64))
    }

    fn skip(&mut self, count: u64) -> Option<()> {
        let end = self.at.checked_add(usize::try_from(count).ok()?)?;
        (end <= self.bytes.len()).then(|| self.at = end)
    }

    /// `Some(None)` at the stop byte.
    fn field_header(&mut self, previous: i16) -> Option<Option<(i16, u8)>> {
        let byte = self.byte()?;
        if byte == 0 {
            return Some(None);
        }
        let delta = i16::from(byte >> 4);
        let id = if delta == 0 { i16::try_from(self.zigzag()?).ok()? } else { previous.checked_add(delta)? };
        Some(Some((id, byte & 0x0f)))
    }

    /// Passes over one value; gives it when it is an integer.
    fn value(&mut self, kind: u8, depth: u32) -> Option<Option<i64>> {
        if depth > MAX_DEPTH {
            return None;
        }
        match kind {
            1 | 2 => {} // the boolean is in the type itself
            3 => return Some(Some(i64::from(self.byte()? as i8))),
            4..=6 => return Some(Some(self.zigzag()?)),
            7 => self.skip(8)?,
            8 => {
                let len = self.varint()?;
                self.skip(len)?;
            }
            9 | 10 => {
                let head = self.byte()?;
                let count = if head >> 4 == 15 { self.varint()? } else { u64::from(head >> 4) };
                for _ in 0..count {
                    self.element(head & 0x0f, depth)?;
                }
            }
            11 => {
                let count = self.varint()?;
                if count > 0 {
                    let kinds = self.byte()?;
                    for _ in 0..count {
                        self.element(kinds >> 4, depth)?;
                        self.element(kinds & 0x0f, depth)?;
                    }
                }
            }
            12 => {
                let mut id = 0;
                while let Some((next, kind)) = self.field_header(id)? {
                    id = next;
                    self.value(kind, depth + 1)?;
                }
            }
            _ => return None,
        }
        Some(None)
    }

    /// An element of a list, set or map: booleans take a byte there.
    fn element(&mut self, kind: u8, depth: u32) -> Option<()> {
        match kind {
            1 | 2 => self.byte().map(drop),
            _ => self.value(kind, depth + 1).map(drop),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Bytes written by hand after the protocol's specification: field 1 i32 = -3, field 3 binary "ab", field 9 struct {1: true}.
    #[test]
    fn walks_a_structure_written_by_hand() {
        let bytes = [0x15, 0x05, 0x28, 0x02, b'a', b'b', 0x6c, 0x11, 0x00, 0x00, 0xff];
        let (fields, len) = Compact::new(&bytes).structure().unwrap();
        let seen: Vec<_> = fields.iter().map(|f| (f.id, f.integer)).collect();
        assert_eq!(seen, [(1, Some(-3)), (3, None), (9, None)]);
        assert_eq!(len, 10);
    }

    #[test]
    fn malformed_bytes_give_none() {
        assert!(Compact::new(&[]).structure().is_none());
        assert!(Compact::new(&[0x18, 0xff, 0xff, 0xff, 0xff, 0x7f, 0x00]).structure().is_none());
        assert!(Compact::new(&[0x1c; 4096]).structure().is_none());
    }
}
