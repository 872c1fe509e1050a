//! Number columns packed for a page that must stay small.
//!
//! Each column of whole numbers is optionally turned into differences, mapped to unsigned
//! (0, -1, 1, -2, ...) so that small values have empty high bytes, and written byte plane by
//! byte plane; planes that are empty throughout are left out. Everything together, with a JSON
//! header in front, goes through zlib (RFC 1950) and base64 (RFC 4648), which a browser undoes
//! with what it has on board. Base64 also means that no text of a list can end the script
//! element it is stored in.

use std::io::{self, Write};

use flate2::Compression;
use flate2::write::ZlibEncoder;
use serde::Serialize;

/// Where a column lies in the packed bytes.
#[derive(Clone, Debug, Serialize, PartialEq, Eq)]
pub struct ColumnSpec {
    pub name: &'static str,
    pub n: usize,
    /// Bytes kept per value, 0..=4.
    pub planes: usize,
    /// True when the column holds differences (wrapping).
    pub delta: bool,
}

/// Columns one after the other.
#[derive(Clone, Debug, Default)]
pub struct Columns {
    pub specs: Vec<ColumnSpec>,
    bytes: Vec<u8>,
}

impl Columns {
    /// Appends a column.
    pub fn push(&mut self, name: &'static str, values: &[i32], delta: bool) {
        let mut previous = 0_i32;
        let coded: Vec<u32> = values
            .iter()
            .map(|&v| {
                let d = if delta { v.wrapping_sub(previous) } else { v };
                previous = v;
                zigzag(d)
            })
            .collect();
        let used = coded.iter().fold(0, |a, &c| a | c);
        let planes = 4 - (used.leading_zeros() / 8) as usize;
        for plane in 0..planes {
            let shift = 8 * plane as u32;
            self.bytes.extend(coded.iter().map(|c| (c >> shift) as u8));
        }
        self.specs.push(ColumnSpec {
            name,
            n: values.len(),
            planes,
            delta,
        });
    }
}

fn zigzag(v: i32) -> u32 {
    ((v << 1) ^ (v >> 31)) as u32
}

/// Header (JSON) and columns as one base64 text: a 4-byte little-endian length of the JSON,
/// the JSON, the columns; all of it deflated.
///
/// # Errors
/// Only when the compressor fails.
pub fn payload(header_json: &[u8], columns: &Columns) -> io::Result<String> {
    let mut z = ZlibEncoder::new(Vec::new(), Compression::new(6));
    let length = u32::try_from(header_json.len()).map_err(io::Error::other)?;
    z.write_all(&length.to_le_bytes())?;
    z.write_all(header_json)?;
    z.write_all(&columns.bytes)?;
    Ok(base64(&z.finish()?))
}

/// Standard alphabet with padding (RFC 4648, section 4).
#[must_use]
pub fn base64(bytes: &[u8]) -> String {
    const ALPHABET: &[u8; 64] = b"ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789+/";
    let mut out = String::with_capacity(bytes.len().div_ceil(3) * 4);
    for chunk in bytes.chunks(3) {
        let word =
            chunk.iter().fold(0_u32, |w, &b| (w << 8) | u32::from(b)) << (8 * (3 - chunk.len()));
        for k in 0..4 {
            if k <= chunk.len() {
                let index = (word >> (18 - 6 * k)) & 63;
                out.push(char::from(ALPHABET[index as usize]));
            } else {
                out.push('=');
            }
        }
    }
    out
}

/// A real number as a multiple of `quantum`, clamped to the range of the column.
#[must_use]
pub fn quantise(value: f64, quantum: f64) -> i32 {
    // `as` saturates, and turns a NaN into 0.
    (value / quantum).round() as i32
}

#[cfg(test)]
mod tests {
    use super::*;
    use flate2::read::ZlibDecoder;
    use std::io::Read;

    fn unpack(spec: &ColumnSpec, bytes: &[u8]) -> Vec<i32> {
        let mut previous = 0_i32;
        (0..spec.n)
            .map(|k| {
                let c = (0..spec.planes).fold(0_u32, |c, p| {
                    c | (u32::from(bytes[p * spec.n + k]) << (8 * p))
                });
                let d = ((c >> 1) as i32) ^ -((c & 1) as i32);
                previous = if spec.delta {
                    previous.wrapping_add(d)
                } else {
                    d
                };
                previous
            })
            .collect()
    }

    #[test]
    fn columns_come_back() {
        let values = [0, -1, 1, i32::MAX, i32::MIN, 700, -70_000];
        for delta in [false, true] {
            let mut c = Columns::default();
            c.push("a", &values, delta);
            assert_eq!(unpack(&c.specs[0], &c.bytes), values);
        }
        let mut c = Columns::default();
        c.push("small", &[3, -4, 100], false);
        c.push("zero", &[0, 0], true);
        assert_eq!((c.specs[0].planes, c.specs[1].planes), (1, 0));
        assert_eq!(c.bytes.len(), 3);
    }

    /// Test vectors of RFC 4648, section 10.
    #[test]
    fn base64_vectors() {
        for (plain, coded) in [
            ("", ""),
            ("f", "Zg=="),
            ("fo", "Zm8="),
            ("foo", "Zm9v"),
            ("foob", "Zm9vYg=="),
            ("fooba", "Zm9vYmE="),
            ("foobar", "Zm9vYmFy"),
        ] {
            assert_eq!(base64(plain.as_bytes()), coded);
        }
    }

    #[test]
    fn payload_is_zlib_of_length_header_columns() {
        let mut c = Columns::default();
        c.push("a", &[1, 2, 3], false);
        let text = payload(b"{}", &c).unwrap();
        assert!(!text.contains('<'));
        let alphabet = |ch: u8| {
            let from = |lo: u8, base: u8| u32::from(ch - lo + base);
            match ch {
                b'A'..=b'Z' => from(b'A', 0),
                b'a'..=b'z' => from(b'a', 26),
                b'0'..=b'9' => from(b'0', 52),
                b'+' => 62,
                _ => 63,
            }
        };
        let clean = text.trim_end_matches('=');
        let mut packed = Vec::new();
        for quad in clean.as_bytes().chunks(4) {
            let word =
                quad.iter().fold(0, |w, &ch| (w << 6) | alphabet(ch)) << (6 * (4 - quad.len()));
            packed.extend((0..quad.len() - 1).map(|k| (word >> (16 - 8 * k)) as u8));
        }
        let mut plain = Vec::new();
        ZlibDecoder::new(&packed[..])
            .read_to_end(&mut plain)
            .unwrap();
        assert_eq!(plain, [&[2, 0, 0, 0, b'{', b'}'][..], &[2, 4, 6]].concat());
    }

    #[test]
    fn numbers_that_do_not_fit_saturate() {
        assert_eq!(quantise(1e30, 1e-3), i32::MAX);
        assert_eq!(quantise(f64::NAN, 1e-3), 0);
        assert_eq!(quantise(-1.0004, 1e-3), -1000);
    }
}
