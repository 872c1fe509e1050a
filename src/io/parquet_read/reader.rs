//! Reading a Parquet file, all row groups in order.

use bytes::Bytes;
use parquet::basic::{LogicalType, Type};
use parquet::column::reader::{ColumnReader, ColumnReaderImpl};
use parquet::data_type::DataType;
use parquet::errors::ParquetError;
use parquet::file::reader::{FileReader, SerializedFileReader};
use parquet::schema::types::ColumnDescriptor;

use super::META_KEY;
use super::meta::Meta;
use crate::io::format_error::FormatError;
use crate::io::table::{Column, Precision, Source, Table, Texts, Values};

/// Reads the whole table.
///
/// # Errors
/// What the library cannot read.
pub fn read(bytes: &[u8]) -> Result<Table<'static>, FormatError> {
    let file = SerializedFileReader::new(Bytes::copy_from_slice(bytes)).map_err(|e| damaged(&e))?;
    let metadata = file.metadata();
    let about = metadata.file_metadata();
    let meta = about
        .key_value_metadata()
        .into_iter()
        .flatten()
        .find(|kv| kv.key == META_KEY)
        .and_then(|kv| kv.value.as_deref())
        .map(Meta::read)
        .unwrap_or_default();
    let n_rows = usize::try_from(about.num_rows())
        .map_err(|_| FormatError::new("a negative number of rows", "a table"))?;
    let mut table = Table::new(&meta.name, &meta.description, n_rows);
    for (k, descriptor) in about.schema_descr().columns().iter().enumerate() {
        let name = descriptor.path().string();
        let Some(mut cells) = Cells::of(descriptor) else {
            continue;
        };
        for group in 0..metadata.num_row_groups() {
            let reader = file.get_row_group(group).map_err(|e| damaged(&e))?;
            let n = usize::try_from(reader.metadata().num_rows()).unwrap_or(0);
            let column = reader
                .get_column_reader(k)
                .map_err(|e| damaged(&e).in_column(&name))?;
            cells
                .read(column, n, descriptor.max_def_level())
                .map_err(|e| damaged(&e).in_column(&name))?;
        }
        if cells.len() != n_rows {
            return Err(FormatError::new(
                format!("{} values", cells.len()),
                format!("{n_rows}, one for each row"),
            )
            .in_column(&name));
        }
        let about = meta.column(&name);
        table.push(Column {
            name,
            unit: about.unit,
            description: about.description,
            ucd: about.ucd,
            values: cells.into_values(),
        });
    }
    Ok(table)
}

fn damaged(e: &ParquetError) -> FormatError {
    FormatError::new(e.to_string(), "a Parquet file that is whole")
}

/// Values of a column while it grows.
enum Cells {
    Float(Vec<f64>),
    Int(Vec<Option<i64>>),
    Bool(Vec<Option<bool>>),
    Text(Vec<String>),
    /// Days since 1970-01-01, kept as the text of the date.
    Date(Vec<String>),
}

impl Cells {
    /// `None` for columns that are left out: lists, and types that hold no number or text.
    fn of(descriptor: &ColumnDescriptor) -> Option<Self> {
        if descriptor.max_rep_level() > 0 {
            return None;
        }
        match descriptor.physical_type() {
            Type::BOOLEAN => Some(Self::Bool(Vec::new())),
            Type::INT32 if matches!(descriptor.logical_type_ref(), Some(LogicalType::Date)) => {
                Some(Self::Date(Vec::new()))
            }
            Type::INT32 | Type::INT64 => Some(Self::Int(Vec::new())),
            Type::FLOAT | Type::DOUBLE => Some(Self::Float(Vec::new())),
            Type::BYTE_ARRAY => Some(Self::Text(Vec::new())),
            Type::INT96 | Type::FIXED_LEN_BYTE_ARRAY => None,
        }
    }

    fn len(&self) -> usize {
        match self {
            Self::Float(v) => v.len(),
            Self::Int(v) => v.len(),
            Self::Bool(v) => v.len(),
            Self::Text(v) | Self::Date(v) => v.len(),
        }
    }

    fn read(&mut self, column: ColumnReader, n: usize, max_def: i16) -> Result<(), ParquetError> {
        match (self, column) {
            (Self::Bool(out), ColumnReader::BoolColumnReader(c)) => {
                each(c, n, max_def, |v| out.push(v.copied()))
            }
            (Self::Int(out), ColumnReader::Int32ColumnReader(c)) => {
                each(c, n, max_def, |v| out.push(v.map(|&v| i64::from(v))))
            }
            (Self::Int(out), ColumnReader::Int64ColumnReader(c)) => {
                each(c, n, max_def, |v| out.push(v.copied()))
            }
            (Self::Date(out), ColumnReader::Int32ColumnReader(c)) => each(c, n, max_def, |v| {
                out.push(v.map_or_else(String::new, |&d| date(d)))
            }),
            (Self::Float(out), ColumnReader::FloatColumnReader(c)) => each(c, n, max_def, |v| {
                out.push(v.map_or(f64::NAN, |&v| f64::from(v)));
            }),
            (Self::Float(out), ColumnReader::DoubleColumnReader(c)) => {
                each(c, n, max_def, |v| out.push(v.copied().unwrap_or(f64::NAN)))
            }
            (Self::Text(out), ColumnReader::ByteArrayColumnReader(c)) => each(c, n, max_def, |v| {
                out.push(v.map_or_else(String::new, |v| {
                    String::from_utf8_lossy(v.data()).into_owned()
                }));
            }),
            _ => Err(ParquetError::General(
                "a column's values differ from its schema".to_owned(),
            )),
        }
    }

    fn into_values(self) -> Values<'static> {
        match self {
            Self::Float(v) => Values::Float(Source::Held(v), Precision::Full),
            Self::Int(v) => Values::Int(Source::Held(v)),
            Self::Bool(v) => Values::Bool(Source::Held(v)),
            Self::Text(v) | Self::Date(v) => Values::Text(Texts::Held(v)),
        }
    }
}

/// Hands over every value of a column chunk, `None` for a null.
fn each<T: DataType>(
    mut column: ColumnReaderImpl<T>,
    n_rows: usize,
    max_def: i16,
    mut take: impl FnMut(Option<&T::T>),
) -> Result<(), ParquetError> {
    let mut done = 0;
    let (mut levels, mut values) = (Vec::new(), Vec::new());
    while done < n_rows {
        levels.clear();
        values.clear();
        let (n, _, _) = column.read_records(n_rows - done, Some(&mut levels), None, &mut values)?;
        if n == 0 {
            break;
        }
        if max_def == 0 {
            values.iter().for_each(|v| take(Some(v)));
        } else {
            let mut next = values.iter();
            for &level in &levels {
                take(if level == max_def { next.next() } else { None });
            }
        }
        done += n;
    }
    Ok(())
}

/// `YYYY-MM-DD` of a day counted from 1970-01-01, in years that begin in March.
fn date(days: i32) -> String {
    let day = i64::from(days) + 719_468;
    let era = day.div_euclid(146_097);
    let of_era = day.rem_euclid(146_097);
    let year_of_era = (of_era - of_era / 1460 + of_era / 36_524 - of_era / 146_096) / 365;
    let of_year = of_era - (365 * year_of_era + year_of_era / 4 - year_of_era / 100);
    let month_from_march = (5 * of_year + 2) / 153;
    let day_of_month = of_year - (153 * month_from_march + 2) / 5 + 1;
    let month = (month_from_march + 2) % 12 + 1;
    let year = year_of_era + 400 * era + i64::from(month <= 2);
    format!("{year:04}-{month:02}-{day_of_month:02}")
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::dates::parse_date;

    /// Modified Julian date of 1970-01-01.
    const UNIX_MJD: f64 = 40_587.0;

    #[test]
    fn dates_read_back_as_the_same_day() {
        for days in [-141_427, -1, 0, 59, 11_016, 12_154, 20_000] {
            let mjd = parse_date(&date(days)).unwrap().mjd();
            assert!(
                (mjd - UNIX_MJD - f64::from(days)).abs() < 1e-6,
                "{}",
                date(days)
            );
        }
        assert_eq!(date(0), "1970-01-01");
    }
}
