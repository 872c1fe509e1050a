//! Header cards: keyword, value, text continued over several cards.

use super::{BLOCK, CARD};
use crate::io::format_error::FormatError;

/// Keywords with the text of their values (quotes removed), in file order.
#[derive(Debug, Default)]
pub(super) struct Header {
    cards: Vec<(String, String)>,
    /// Bytes the header takes, whole blocks.
    pub n_bytes: usize,
}

impl Header {
    /// Reads the header at the start of the bytes.
    pub fn read(bytes: &[u8]) -> Result<Self, FormatError> {
        let mut cards: Vec<(String, String)> = Vec::new();
        for (k, card) in bytes.chunks_exact(CARD).enumerate() {
            let keyword = ascii(&card[..8]).trim_end().to_owned();
            match keyword.as_str() {
                "END" => {
                    let n_bytes = (k + 1) * CARD;
                    return Ok(Self {
                        cards,
                        n_bytes: n_bytes.div_ceil(BLOCK) * BLOCK,
                    });
                }
                "CONTINUE" => {
                    let more = value(&ascii(&card[8..]));
                    if let Some((_, text)) = cards.last_mut()
                        && text.ends_with('&')
                    {
                        text.pop();
                        text.push_str(&more);
                    }
                }
                _ if &card[8..10] == b"= " => cards.push((keyword, value(&ascii(&card[10..])))),
                _ => {}
            }
        }
        Err(FormatError::new(
            "a header that does not end",
            "a card END (is the file cut short?)",
        ))
    }

    pub fn text(&self, keyword: &str) -> Option<&str> {
        self.cards
            .iter()
            .find(|(k, _)| k == keyword)
            .map(|(_, v)| v.as_str())
    }

    pub fn whole(&self, keyword: &str) -> Result<usize, FormatError> {
        let found = self.text(keyword);
        found.and_then(|v| v.parse().ok()).ok_or_else(|| {
            FormatError::new(
                found.map_or_else(|| format!("no {keyword}"), |v| format!("{keyword} = {v}")),
                "a whole number",
            )
        })
    }

    pub fn number(&self, keyword: &str) -> Option<f64> {
        // FITS allows D for the exponent.
        self.text(keyword)?.replace(['D', 'd'], "E").parse().ok()
    }

    /// Bytes of data that follow the header, without the fill of the last block.
    pub fn data_bytes(&self) -> Result<usize, FormatError> {
        let n_axes = self.whole("NAXIS")?;
        if n_axes == 0 {
            return Ok(0);
        }
        let bits: i64 = self
            .text("BITPIX")
            .and_then(|v| v.parse().ok())
            .ok_or_else(|| FormatError::new("no BITPIX", "the bits of a value"))?;
        let mut n = 1_usize;
        for axis in 1..=n_axes {
            n = times(n, self.whole(&format!("NAXIS{axis}"))?)?;
        }
        let groups = self.whole("GCOUNT").unwrap_or(1);
        let heap = self.whole("PCOUNT").unwrap_or(0);
        let n = n
            .checked_add(heap)
            .ok_or_else(|| FormatError::new("a size beyond memory", "a table"))?;
        times(times(n, groups)?, (bits.unsigned_abs() / 8) as usize)
    }
}

pub(super) fn times(a: usize, b: usize) -> Result<usize, FormatError> {
    a.checked_mul(b)
        .ok_or_else(|| FormatError::new("a size beyond memory", "a table"))
}

fn ascii(bytes: &[u8]) -> String {
    bytes.iter().map(|&b| char::from(b)).collect()
}

/// The value of a card without quotes, fill and comment.
fn value(field: &str) -> String {
    let field = field.trim_start();
    let Some(quoted) = field.strip_prefix('\'') else {
        return field.split('/').next().unwrap_or("").trim().to_owned();
    };
    let mut out = String::new();
    let mut chars = quoted.chars().peekable();
    while let Some(c) = chars.next() {
        if c != '\'' {
            out.push(c);
        } else if chars.peek() == Some(&'\'') {
            chars.next();
            out.push('\'');
        } else {
            break;
        }
    }
    out.trim_end().to_owned()
}
