//! Counts packed for the ledger: mostly zeros and small numbers, so runs of zeros and variable-length integers, as text.
//!
//! Form: for each count that is not zero, the number of zeros before it and the count, both as LEB128 (seven bits a
//! byte, low first, high bit set on all but the last); the bytes as hexadecimal digits.

/// Packs `counts`.
pub fn pack(counts: &[u64]) -> String {
    let mut bytes = Vec::new();
    let mut zeros = 0_u64;
    for count in counts {
        if *count == 0 {
            zeros += 1;
            continue;
        }
        for mut n in [std::mem::take(&mut zeros), *count] {
            while n >= 0x80 {
                bytes.push(n as u8 | 0x80);
                n >>= 7;
            }
            bytes.push(n as u8);
        }
    }
    hex(&bytes)
}

/// Unpacks `text` into `size` counts; `None` if it was not packed from so many.
pub fn unpack(text: &str, size: usize) -> Option<Vec<u64>> {
    let bytes = unhex(text)?;
    let mut bytes = bytes.iter();
    let mut next = || -> Option<Option<u64>> {
        let mut n = 0_u64;
        for shift in (0..64).step_by(7) {
            let Some(byte) = bytes.next() else { return (shift == 0).then_some(None) };
            n |= u64::from(byte & 0x7f) << shift;
            if byte & 0x80 == 0 {
                return Some(Some(n));
            }
        }
        None
    };
    let mut counts = vec![0; size];
    let mut at = 0_usize;
    while let Some(zeros) = next()? {
        at = at.checked_add(usize::try_from(zeros).ok()?)?;
        *counts.get_mut(at)? = next()??;
        at += 1;
    }
    Some(counts)
}

/// Bytes as hexadecimal digits.
pub fn hex(bytes: &[u8]) -> String {
    const DIGITS: [u8; 16] = *b"0123456789abcdef";
    bytes.iter().flat_map(|b| [DIGITS[(b >> 4) as usize] as char, DIGITS[(b & 15) as usize] as char]).collect()
}

/// Bytes of hexadecimal digits; `None` for anything else.
pub fn unhex(text: &str) -> Option<Vec<u8>> {
    let digit = |c: u8| (c as char).to_digit(16).map(|d| d as u8);
    let (pairs, rest) = text.as_bytes().as_chunks::<2>();
    if !rest.is_empty() {
        return None;
    }
    pairs.iter().map(|[high, low]| Some(digit(*high)? << 4 | digit(*low)?)).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn counts_survive() {
        let counts = [0, 0, 1, 0, 127, 128, u64::MAX, 0, 0, 0];
        assert_eq!(unpack(&pack(&counts), counts.len()).unwrap(), counts);
        assert_eq!(unpack(&pack(&[]), 3).unwrap(), [0, 0, 0]);
    }

    #[test]
    fn damage_is_noticed() {
        let text = pack(&[0, 5, 0, 7]);
        assert_eq!(unpack(&text, 3), None, "too few cells");
        assert_eq!(unpack(&text[..text.len() - 1], 4), None, "half a byte");
        assert_eq!(unpack(&text[..text.len() - 2], 4), None, "a number cut off");
        assert_eq!(unpack("0g", 4), None, "no digit");
    }
}
