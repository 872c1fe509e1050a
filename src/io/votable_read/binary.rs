//! The BINARY and BINARY2 serialisations (sections 5.3 and 5.4), and their base64 envelope.

use super::fields::{Cells, Datatype, Field, Size};
use crate::io::format_error::FormatError;

/// Reads all rows. BINARY2 begins every row with one bit for each field that is none.
pub(super) fn read_rows(
    bytes: &[u8],
    masked: bool,
    fields: &[Field],
    columns: &mut [Option<Cells>],
) -> Result<usize, FormatError> {
    let mut rest = bytes;
    let mut n_rows = 0;
    let mask_bytes = if masked { fields.len().div_ceil(8) } else { 0 };
    while !rest.is_empty() {
        let n_left = rest.len();
        let mask = take(&mut rest, mask_bytes).map_err(|e| e.in_row(n_rows))?;
        for (k, (field, cells)) in fields.iter().zip(columns.iter_mut()).enumerate() {
            let is_none = masked && mask[k / 8] & (0x80 >> (k % 8)) != 0;
            read_cell(&mut rest, field, cells.as_mut(), is_none)
                .map_err(|e| e.in_row(n_rows).in_column(&field.name))?;
        }
        if rest.len() == n_left {
            return Err(FormatError::new(
                "data, but no field that takes a byte of it",
                "a FIELD for every value of a row",
            ));
        }
        n_rows += 1;
    }
    Ok(n_rows)
}

fn read_cell(
    rest: &mut &[u8],
    field: &Field,
    cells: Option<&mut Cells>,
    is_none: bool,
) -> Result<(), FormatError> {
    let n = match field.size {
        Size::Fixed(n) => n,
        Size::Variable => u32::from_be_bytes(array(take(rest, 4)?)) as usize,
    };
    let n_bytes = if field.datatype == Datatype::Bit {
        Some(n.div_ceil(8))
    } else {
        n.checked_mul(field.datatype.bytes())
    };
    let n_bytes = n_bytes.ok_or_else(cut_short)?;
    let raw = take(rest, n_bytes)?;
    let Some(cells) = cells else {
        return Ok(());
    };
    if is_none {
        cells.push_none();
        return Ok(());
    }
    match cells {
        Cells::Text(v) => v.push(text(raw, field.datatype)),
        Cells::Float(v) => v.push(match field.datatype {
            Datatype::Float => f64::from(f32::from_be_bytes(array(raw))),
            _ => f64::from_be_bytes(array(raw)),
        }),
        Cells::Int(v) => {
            let value = match field.datatype {
                Datatype::UnsignedByte => i64::from(raw[0]),
                Datatype::Short => i64::from(i16::from_be_bytes(array(raw))),
                Datatype::Int => i64::from(i32::from_be_bytes(array(raw))),
                _ => i64::from_be_bytes(array(raw)),
            };
            v.push(Some(value).filter(|v| Some(*v) != field.null));
        }
        Cells::Bool(v) => v.push(match raw[0] {
            b'T' | b't' | b'1' => Some(true),
            b'F' | b'f' | b'0' => Some(false),
            _ => None,
        }),
    }
    Ok(())
}

fn text(raw: &[u8], datatype: Datatype) -> String {
    let text = if datatype == Datatype::UnicodeChar {
        let units: Vec<u16> = raw
            .chunks_exact(2)
            .map(|b| u16::from_be_bytes(array(b)))
            .collect();
        String::from_utf16_lossy(&units)
    } else {
        String::from_utf8_lossy(raw).into_owned()
    };
    text.split('\0').next().unwrap_or("").trim_end().to_owned()
}

fn take<'a>(rest: &mut &'a [u8], n: usize) -> Result<&'a [u8], FormatError> {
    let (head, tail) = rest.split_at_checked(n).ok_or_else(cut_short)?;
    *rest = tail;
    Ok(head)
}

fn cut_short() -> FormatError {
    FormatError::new("the end of the data", "the rest of the row")
}

fn array<const N: usize>(bytes: &[u8]) -> [u8; N] {
    let mut out = [0; N];
    out.copy_from_slice(bytes);
    out
}

/// Decodes base64 (RFC 4648), white space ignored.
pub(super) fn decode_base64(text: &str) -> Result<Vec<u8>, FormatError> {
    let mut out = Vec::with_capacity(text.len() / 4 * 3);
    let (mut bits, mut n_bits) = (0_u32, 0);
    for b in text.bytes() {
        let six = match b {
            b'A'..=b'Z' => b - b'A',
            b'a'..=b'z' => b - b'a' + 26,
            b'0'..=b'9' => b - b'0' + 52,
            b'+' => 62,
            b'/' => 63,
            b'=' => continue,
            _ if b.is_ascii_whitespace() => continue,
            _ => {
                return Err(FormatError::new(
                    format!("`{}`", char::from(b)),
                    "base64 characters",
                ));
            }
        };
        bits = (bits << 6) | u32::from(six);
        n_bits += 6;
        if n_bits >= 8 {
            n_bits -= 8;
            out.push((bits >> n_bits) as u8);
            bits &= (1 << n_bits) - 1;
        }
    }
    Ok(out)
}

/// Encodes base64 (RFC 4648).
#[cfg(test)]
pub(super) fn encode_base64(bytes: &[u8]) -> String {
    const ALPHABET: &[u8; 64] = b"ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let mut out = String::new();
    for chunk in bytes.chunks(3) {
        let padded = [
            chunk[0],
            *chunk.get(1).unwrap_or(&0),
            *chunk.get(2).unwrap_or(&0),
        ];
        let bits = u32::from_be_bytes([0, padded[0], padded[1], padded[2]]);
        for k in 0..4 {
            out.push(if k <= chunk.len() {
                char::from(ALPHABET[(bits >> (18 - 6 * k) & 63) as usize])
            } else {
                '='
            });
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn base64_as_in_rfc_4648() {
        // Test vectors of RFC 4648, section 10.
        for (plain, coded) in [("f", "Zg=="), ("fo", "Zm8="), ("foobar", "Zm9vYmFy")] {
            assert_eq!(encode_base64(plain.as_bytes()), coded);
            assert_eq!(decode_base64(coded).unwrap(), plain.as_bytes());
        }
    }
}
