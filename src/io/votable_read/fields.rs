//! FIELD elements and the values they describe.

use crate::io::format_error::FormatError;
use crate::io::table::{Column, Precision, Source, Texts, Values};

/// Primitive types of the format.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Datatype {
    Boolean,
    Bit,
    UnsignedByte,
    Short,
    Int,
    Long,
    Char,
    UnicodeChar,
    Float,
    Double,
    FloatComplex,
    DoubleComplex,
}

impl Datatype {
    pub fn from_word(word: &str) -> Option<Self> {
        Some(match word {
            "boolean" => Self::Boolean,
            "bit" => Self::Bit,
            "unsignedByte" => Self::UnsignedByte,
            "short" => Self::Short,
            "int" => Self::Int,
            "long" => Self::Long,
            "char" => Self::Char,
            "unicodeChar" => Self::UnicodeChar,
            "float" => Self::Float,
            "double" => Self::Double,
            "floatComplex" => Self::FloatComplex,
            "doubleComplex" => Self::DoubleComplex,
            _ => return None,
        })
    }

    /// Bytes of one element in the binary serialisations (bits are packed).
    pub fn bytes(self) -> usize {
        match self {
            Self::Boolean | Self::Bit | Self::UnsignedByte | Self::Char => 1,
            Self::Short | Self::UnicodeChar => 2,
            Self::Int | Self::Float => 4,
            Self::Long | Self::Double | Self::FloatComplex => 8,
            Self::DoubleComplex => 16,
        }
    }
}

/// How many elements a cell holds.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Size {
    Fixed(usize),
    Variable,
}

/// One FIELD.
#[derive(Clone, Debug)]
pub(super) struct Field {
    pub name: String,
    pub datatype: Datatype,
    pub size: Size,
    pub unit: String,
    pub ucd: Option<String>,
    pub description: String,
    pub null: Option<i64>,
}

impl Field {
    /// Reads `arraysize`: `3`, `2x3`, `*`, `12*`, `2x*`.
    pub fn size_of(arraysize: Option<&str>) -> Option<Size> {
        let Some(text) = arraysize.map(str::trim).filter(|t| !t.is_empty()) else {
            return Some(Size::Fixed(1));
        };
        if text.ends_with('*') {
            return Some(Size::Variable);
        }
        let mut n = 1_usize;
        for part in text.split('x') {
            n = n.checked_mul(part.trim().parse().ok()?)?;
        }
        Some(Size::Fixed(n))
    }

    fn is_text(&self) -> bool {
        matches!(self.datatype, Datatype::Char | Datatype::UnicodeChar)
    }

    /// An empty column; `None` for arrays, bits and complex numbers, which are left out.
    pub fn cells(&self) -> Option<Cells> {
        if self.is_text() {
            return Some(Cells::Text(Vec::new()));
        }
        if self.size != Size::Fixed(1) {
            return None;
        }
        match self.datatype {
            Datatype::Boolean => Some(Cells::Bool(Vec::new())),
            Datatype::UnsignedByte | Datatype::Short | Datatype::Int | Datatype::Long => {
                Some(Cells::Int(Vec::new()))
            }
            Datatype::Float | Datatype::Double => Some(Cells::Float(Vec::new())),
            _ => None,
        }
    }

    /// Adds the cell of a TABLEDATA row.
    pub fn push_text(&self, cells: &mut Cells, text: &str) -> Result<(), FormatError> {
        let word = text.trim();
        let wrong = |expected: &str| {
            FormatError::new(format!("`{word}`"), expected.to_owned()).in_column(&self.name)
        };
        match cells {
            Cells::Text(v) => v.push(text.to_owned()),
            Cells::Float(v) => v.push(match word {
                "" | "NaN" | "nan" => f64::NAN,
                "+Inf" | "Inf" => f64::INFINITY,
                "-Inf" => f64::NEG_INFINITY,
                _ => fast_float2::parse(word).map_err(|_| wrong("a number"))?,
            }),
            Cells::Int(v) => {
                let value = if word.is_empty() {
                    None
                } else if let Some(hex) = word.strip_prefix("0x") {
                    Some(i64::from_str_radix(hex, 16).map_err(|_| wrong("a whole number"))?)
                } else {
                    Some(word.parse().map_err(|_| wrong("a whole number"))?)
                };
                v.push(value.filter(|v| Some(*v) != self.null));
            }
            Cells::Bool(v) => v.push(match word {
                "T" | "t" | "1" | "true" | "TRUE" | "True" => Some(true),
                "F" | "f" | "0" | "false" | "FALSE" | "False" => Some(false),
                "" | "?" | " " => None,
                _ => return Err(wrong("T, F or ?")),
            }),
        }
        Ok(())
    }

    /// The finished column.
    pub fn column(self, cells: Cells) -> Column<'static> {
        let values = match cells {
            Cells::Text(v) => Values::Text(Texts::Held(v)),
            Cells::Float(v) => Values::Float(Source::Held(v), Precision::Full),
            Cells::Int(v) => Values::Int(Source::Held(v)),
            Cells::Bool(v) => Values::Bool(Source::Held(v)),
        };
        Column {
            name: self.name,
            unit: self.unit,
            description: self.description,
            ucd: self.ucd,
            values,
        }
    }
}

/// Values of a column while it grows.
#[derive(Clone, Debug)]
pub(super) enum Cells {
    Float(Vec<f64>),
    Int(Vec<Option<i64>>),
    Bool(Vec<Option<bool>>),
    Text(Vec<String>),
}

impl Cells {
    pub fn push_none(&mut self) {
        match self {
            Self::Float(v) => v.push(f64::NAN),
            Self::Int(v) => v.push(None),
            Self::Bool(v) => v.push(None),
            Self::Text(v) => v.push(String::new()),
        }
    }
}
