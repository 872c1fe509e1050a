//! Reading the first binary table of a FITS file.

use super::BLOCK;
use super::header::{Header, times};
use crate::io::format_error::FormatError;
use crate::io::table::{Column, Precision, Source, Table, Texts, Values};

/// Reads the first binary table.
///
/// # Errors
/// The first thing that does not follow the format: a file cut short, no binary table, sizes
/// that disagree.
pub fn read(bytes: &[u8]) -> Result<Table<'static>, FormatError> {
    let (header, data) = first_table(bytes)?;
    let row_bytes = header.whole("NAXIS1")?;
    let n_rows = header.whole("NAXIS2")?;
    let n_fields = header.whole("TFIELDS")?;
    if row_bytes == 0 && n_rows > 0 {
        return Err(FormatError::new("NAXIS1 = 0", "rows that hold something"));
    }
    let data = data.get(..times(row_bytes, n_rows)?).ok_or_else(|| {
        FormatError::new(
            format!("{} bytes of data", data.len()),
            format!("{n_rows} rows of {row_bytes} bytes (is the file cut short?)"),
        )
    })?;
    let mut table = Table::new(header.text("EXTNAME").unwrap_or(""), "", n_rows);
    let mut at = 0;
    for k in 1..=n_fields {
        let field = Field::read(&header, k)?;
        let width = times(field.repeat, field.code_bytes())?;
        let width = if field.code == b'X' {
            field.repeat.div_ceil(8)
        } else {
            width
        };
        if width > row_bytes - at {
            return Err(FormatError::new(
                format!("columns wider than a row of {row_bytes} bytes"),
                "TFORM of all columns to add up to NAXIS1",
            )
            .in_column(&field.name));
        }
        let cells = Cells {
            data,
            row_bytes,
            at,
            n_rows,
        };
        if let Some(values) = field.values(&cells) {
            table.push(Column {
                unit: field.unit,
                description: field.description,
                ucd: field.ucd,
                name: field.name,
                values,
            });
        }
        at += width;
    }
    Ok(table)
}

/// Header and data of the first extension that is a binary table.
fn first_table(bytes: &[u8]) -> Result<(Header, &[u8]), FormatError> {
    let mut rest = bytes;
    while !rest.is_empty() {
        let header = Header::read(rest)?;
        let data = rest.get(header.n_bytes..).unwrap_or(&[]);
        if header.text("XTENSION") == Some("BINTABLE") {
            return Ok((header, data));
        }
        let skip = header.data_bytes()?.div_ceil(BLOCK) * BLOCK;
        rest = data.get(skip..).unwrap_or(&[]);
        // Fill after the last unit is allowed.
        if rest.iter().all(|b| *b == 0 || *b == b' ') {
            break;
        }
    }
    Err(FormatError::new(
        "no binary table",
        "an extension XTENSION = 'BINTABLE'",
    ))
}

struct Field {
    name: String,
    repeat: usize,
    code: u8,
    unit: String,
    description: String,
    ucd: Option<String>,
    null: Option<i64>,
    scale: f64,
    zero: f64,
}

impl Field {
    fn read(header: &Header, k: usize) -> Result<Self, FormatError> {
        let text = |stem: &str| header.text(&format!("{stem}{k}")).unwrap_or("").to_owned();
        let name = match text("TTYPE") {
            t if t.is_empty() => format!("col{k}"),
            t => t,
        };
        let form = text("TFORM");
        let digits = form.bytes().take_while(u8::is_ascii_digit).count();
        let code = form.as_bytes().get(digits).copied().unwrap_or(0);
        let repeat = if digits == 0 {
            Some(1)
        } else {
            form[..digits].parse().ok()
        };
        let field = Self {
            repeat: repeat.unwrap_or(0),
            code,
            unit: text("TUNIT"),
            description: text("TCOMM"),
            ucd: Some(text("TUCD")).filter(|u| !u.is_empty()),
            null: header
                .text(&format!("TNULL{k}"))
                .and_then(|v| v.parse().ok()),
            scale: header.number(&format!("TSCAL{k}")).unwrap_or(1.0),
            zero: header.number(&format!("TZERO{k}")).unwrap_or(0.0),
            name,
        };
        if repeat.is_none() || field.code_bytes() == 0 {
            return Err(FormatError::new(
                format!("TFORM{k} = '{form}'"),
                "a form of FITS binary tables",
            )
            .in_column(&field.name));
        }
        Ok(field)
    }

    /// Bytes of one element; 0 for an unknown code.
    fn code_bytes(&self) -> usize {
        match self.code {
            b'L' | b'X' | b'B' | b'A' => 1,
            b'I' => 2,
            b'J' | b'E' => 4,
            b'K' | b'D' | b'C' | b'P' => 8,
            b'M' | b'Q' => 16,
            _ => 0,
        }
    }

    /// `None` for columns of arrays, bits and complex numbers.
    fn values(&self, cells: &Cells<'_>) -> Option<Values<'static>> {
        if self.code == b'A' {
            let texts = cells.each(self.repeat, text).collect();
            return Some(Values::Text(Texts::Held(texts)));
        }
        if self.repeat != 1 {
            return None;
        }
        let floats = |v: Vec<f64>| Some(Values::Float(Source::Held(v), Precision::Full));
        let scaled = |v: f64| self.zero + self.scale * v;
        match self.code {
            b'L' => {
                let of = |b: &[u8]| match b[0] {
                    b'T' => Some(true),
                    b'F' => Some(false),
                    _ => None,
                };
                Some(Values::Bool(Source::Held(cells.each(1, of).collect())))
            }
            b'B' => Some(self.whole(cells.each(1, |b| i64::from(b[0])))),
            b'I' => Some(self.whole(cells.each(2, |b| i64::from(i16::from_be_bytes(array(b)))))),
            b'J' => Some(self.whole(cells.each(4, |b| i64::from(i32::from_be_bytes(array(b)))))),
            b'K' => Some(self.whole(cells.each(8, |b| i64::from_be_bytes(array(b))))),
            b'E' => floats(
                cells
                    .each(4, |b| scaled(f64::from(f32::from_be_bytes(array(b)))))
                    .collect(),
            ),
            b'D' => floats(
                cells
                    .each(8, |b| scaled(f64::from_be_bytes(array(b))))
                    .collect(),
            ),
            _ => None,
        }
    }

    /// Whole numbers stay whole when the scale leaves them so (`TZERO` marks unsigned ones).
    fn whole(&self, raw: impl Iterator<Item = i64>) -> Values<'static> {
        let null = self.null;
        let some = move |v: i64| (Some(v) != null).then_some(v);
        if self.scale == 1.0 && self.zero.fract() == 0.0 && self.zero.abs() < 9e18 {
            let zero = self.zero as i64;
            let values = raw.map(|v| some(v)?.checked_add(zero)).collect();
            return Values::Int(Source::Held(values));
        }
        let (scale, zero) = (self.scale, self.zero);
        let values = raw
            .map(|v| some(v).map_or(f64::NAN, |v| zero + scale * v as f64))
            .collect();
        Values::Float(Source::Held(values), Precision::Full)
    }
}

/// The cells of one column.
struct Cells<'a> {
    data: &'a [u8],
    row_bytes: usize,
    at: usize,
    n_rows: usize,
}

impl Cells<'_> {
    fn each<'b, T>(
        &'b self,
        width: usize,
        of: impl Fn(&[u8]) -> T + 'b,
    ) -> impl Iterator<Item = T> + 'b {
        (0..self.n_rows).map(move |row| {
            let start = row * self.row_bytes + self.at;
            of(&self.data[start..start + width])
        })
    }
}

fn array<const N: usize>(bytes: &[u8]) -> [u8; N] {
    let mut out = [0; N];
    out.copy_from_slice(bytes);
    out
}

/// A text ends at the first zero byte; trailing blanks are fill.
fn text(bytes: &[u8]) -> String {
    let end = memchr::memchr(0, bytes).unwrap_or(bytes.len());
    String::from_utf8_lossy(&bytes[..end]).trim_end().to_owned()
}
