//! Writing a table as a FITS binary table.
//!
//! Format: FITS standard 4.0 (2018), sections 4.2.1.2 (long strings), 4.4 (keywords) and 7.3
//! (binary tables). A missing number is `NaN`, a missing whole number the value of `TNULLn`, a
//! missing truth value a zero byte, a missing text an empty one. Descriptions go into `TCOMMn`
//! and content descriptors into `TUCDn`, as is common practice. Texts must be ASCII there;
//! other characters become `?`.

use std::io::{self, Write};

use super::table::{Table, Values};
use super::unit_text::{Spelling, spell};

const BLOCK: usize = 2880;
const CARD: usize = 80;
/// Stands for a missing whole number.
const NULL_INT: i64 = i64::MIN;
/// Longest text of one card, quotes left out.
const LONGEST_TEXT: usize = 68;

/// Writes the whole table: an empty primary unit and one extension.
///
/// # Errors
/// Whatever the writer reports.
pub fn write(table: &Table<'_>, out: &mut dyn Write) -> io::Result<()> {
    let widths: Vec<usize> = table
        .columns
        .iter()
        .map(|c| match &c.values {
            Values::Float(..) | Values::Int(_) => 8,
            Values::Bool(_) => 1,
            Values::Text(t) => {
                let mut text = String::new();
                (0..table.n_rows())
                    .map(|row| {
                        text.clear();
                        t.push(row, &mut text);
                        text.chars().count()
                    })
                    .max()
                    .unwrap_or(0)
                    .max(1)
            }
        })
        .collect();
    out.write_all(&primary().finish())?;
    out.write_all(&extension(table, &widths).finish())?;
    let row_width: usize = widths.iter().sum();
    let mut row_bytes = Vec::with_capacity(row_width);
    let mut text = String::new();
    for row in 0..table.n_rows() {
        row_bytes.clear();
        for (c, &width) in table.columns.iter().zip(&widths) {
            match &c.values {
                Values::Float(s, _) => row_bytes.extend_from_slice(&s.at(row).to_be_bytes()),
                Values::Int(s) => {
                    row_bytes.extend_from_slice(&s.at(row).unwrap_or(NULL_INT).to_be_bytes());
                }
                Values::Bool(s) => row_bytes.push(match s.at(row) {
                    Some(true) => b'T',
                    Some(false) => b'F',
                    None => 0,
                }),
                Values::Text(t) => {
                    text.clear();
                    t.push(row, &mut text);
                    let end = row_bytes.len() + width;
                    row_bytes.extend(text.chars().map(ascii));
                    row_bytes.resize(end, 0);
                }
            }
        }
        out.write_all(&row_bytes)?;
    }
    let tail = (row_width * table.n_rows()) % BLOCK;
    if tail > 0 {
        out.write_all(&vec![0; BLOCK - tail])?;
    }
    Ok(())
}

fn ascii(c: char) -> u8 {
    if c.is_ascii() && !c.is_ascii_control() {
        c as u8
    } else {
        b'?'
    }
}

fn primary() -> Header {
    let mut h = Header::default();
    h.raw("SIMPLE", "T");
    h.raw("BITPIX", "8");
    h.raw("NAXIS", "0");
    h.raw("EXTEND", "T");
    h
}

fn extension(table: &Table<'_>, widths: &[usize]) -> Header {
    let mut h = Header::default();
    h.text("XTENSION", "BINTABLE");
    h.raw("BITPIX", "8");
    h.raw("NAXIS", "2");
    h.raw("NAXIS1", &widths.iter().sum::<usize>().to_string());
    h.raw("NAXIS2", &table.n_rows().to_string());
    h.raw("PCOUNT", "0");
    h.raw("GCOUNT", "1");
    h.raw("TFIELDS", &table.columns.len().to_string());
    h.text("EXTNAME", &table.name);
    for (k, (c, width)) in table.columns.iter().zip(widths).enumerate() {
        let key = |stem: &str| format!("{stem}{}", k + 1);
        h.text(&key("TTYPE"), &c.name);
        let form = match &c.values {
            Values::Float(..) => "D".to_owned(),
            Values::Int(_) => "K".to_owned(),
            Values::Bool(_) => "L".to_owned(),
            Values::Text(_) => format!("{width}A"),
        };
        h.text(&key("TFORM"), &form);
        if !c.unit.is_empty() {
            h.text(&key("TUNIT"), &spell(&c.unit, Spelling::Fits));
        }
        if matches!(c.values, Values::Int(_)) {
            h.raw(&key("TNULL"), &NULL_INT.to_string());
        }
        if let Some(ucd) = &c.ucd {
            h.text(&key("TUCD"), ucd);
        }
        if !c.description.is_empty() {
            h.text(&key("TCOMM"), &c.description);
        }
    }
    h
}

/// Cards of a header.
#[derive(Default)]
struct Header(Vec<u8>);

impl Header {
    fn card(&mut self, text: &str) {
        let end = self.0.len() + CARD;
        self.0.extend(text.chars().map(ascii));
        self.0.resize(end, b' ');
    }

    /// A number or a truth value, right-justified in columns 11 to 30.
    fn raw(&mut self, key: &str, value: &str) {
        self.card(&format!("{key:<8}= {value:>20}"));
    }

    /// A text; when too long for one card it goes on in `CONTINUE` cards.
    fn text(&mut self, key: &str, value: &str) {
        let safe: String = value.chars().map(|c| ascii(c) as char).collect();
        let mut pieces: Vec<String> = vec![String::new()];
        for c in safe.chars() {
            let unit = if c == '\'' {
                "''".to_owned()
            } else {
                c.to_string()
            };
            let last = pieces.len() - 1;
            // One place stays free for the `&` that says more follows.
            if pieces[last].len() + unit.len() > LONGEST_TEXT - 1 {
                pieces.push(unit);
            } else {
                pieces[last].push_str(&unit);
            }
        }
        let last = pieces.len() - 1;
        for (k, piece) in pieces.iter().enumerate() {
            let more = if k < last { "&" } else { "" };
            if k == 0 {
                // At least eight characters between the quotes (section 4.2.1.1).
                self.card(&format!("{key:<8}= '{:<8}'", format!("{piece}{more}")));
            } else {
                self.card(&format!("CONTINUE  '{piece}{more}'"));
            }
        }
    }

    fn finish(mut self) -> Vec<u8> {
        self.card("END");
        let full = self.0.len().next_multiple_of(BLOCK);
        self.0.resize(full, b' ');
        self.0
    }
}

#[cfg(test)]
mod tests {
    use super::super::table::Precision;
    use super::*;

    fn cards(bytes: &[u8]) -> Vec<String> {
        bytes
            .chunks(CARD)
            .map(|c| String::from_utf8_lossy(c).trim_end().to_owned())
            .collect()
    }

    #[test]
    fn blocks_cards_and_cells() {
        let long = "an extremely long description that cannot stand in one card of eighty characters, isn't it";
        let t = Table::new("t", "", 2)
            .float("v", "km / s", long, Precision::Full, |k| [1.5, f64::NAN][k])
            .int("n", "", |k| [None, Some(2)][k])
            .bool("b", "", |k| [Some(true), None][k])
            .text("s", "", |k, o| o.push_str(["ab", "caf\u{e9}"][k]));
        let mut out = Vec::new();
        write(&t, &mut out).unwrap();
        assert_eq!(out.len() % BLOCK, 0);
        let c = cards(&out[BLOCK..2 * BLOCK]);
        assert_eq!(c[0], "XTENSION= 'BINTABLE'");
        assert_eq!(c[3], "NAXIS1  =                   21");
        assert!(c.contains(&"TUNIT1  = 'km s-1  '".to_owned()));
        assert!(c.contains(&"TFORM4  = '4A      '".to_owned()));
        let at = c.iter().position(|l| l.starts_with("TCOMM1")).unwrap();
        assert!(c[at].ends_with("&'") && c[at + 1].starts_with("CONTINUE  '"));
        assert!(c[at + 1].ends_with("isn''t it'"));
        let data = &out[2 * BLOCK..];
        assert_eq!(data[..8], 1.5_f64.to_be_bytes());
        assert_eq!(data[8..16], i64::MIN.to_be_bytes());
        assert_eq!(&data[16..21], b"Tab\0\0");
        assert_eq!(&data[37..42], b"\0caf?");
    }
}
