//! Writing a table as Parquet.
//!
//! Numbers that are "none" are nulls, a text that is "none" is empty. Units, descriptions and
//! descriptors go into the file's metadata under `table_meta_yaml`, the longest text of each
//! column under `table::len::` and its name: that is where astropy looks for them.

use std::io::{self, Write};
use std::sync::Arc;

use parquet::basic::{Compression, ConvertedType, Repetition, Type as Physical, ZstdLevel};
use parquet::data_type::{BoolType, ByteArray, ByteArrayType, DataType, DoubleType, Int64Type};
use parquet::errors::ParquetError;
use parquet::file::metadata::KeyValue;
use parquet::file::properties::WriterProperties;
use parquet::file::writer::{SerializedColumnWriter, SerializedFileWriter};
use parquet::schema::types::Type;

use super::ecsv_write;
use super::table::{Table, Values};

/// Rows of one row group.
const GROUP_ROWS: usize = 1 << 18;

/// Writes the whole table.
///
/// # Errors
/// Whatever the writer or the format's library reports.
pub fn write(table: &Table<'_>, out: &mut dyn Write) -> io::Result<()> {
    let bytes = encode(table).map_err(io::Error::other)?;
    out.write_all(&bytes)
}

fn encode(table: &Table<'_>) -> Result<Vec<u8>, ParquetError> {
    let fields = table
        .columns
        .iter()
        .map(|c| {
            let (physical, logical) = match &c.values {
                Values::Float(..) => (Physical::DOUBLE, ConvertedType::NONE),
                Values::Int(_) => (Physical::INT64, ConvertedType::NONE),
                Values::Bool(_) => (Physical::BOOLEAN, ConvertedType::NONE),
                Values::Text(_) => (Physical::BYTE_ARRAY, ConvertedType::UTF8),
            };
            Type::primitive_type_builder(&c.name, physical)
                .with_repetition(Repetition::OPTIONAL)
                .with_converted_type(logical)
                .build()
                .map(Arc::new)
        })
        .collect::<Result<Vec<_>, _>>()?;
    let schema = Type::group_type_builder("schema")
        .with_fields(fields)
        .build()?;
    let properties = WriterProperties::builder()
        .set_compression(Compression::ZSTD(ZstdLevel::default()))
        .set_created_by(format!(
            "{} {}",
            env!("CARGO_PKG_NAME"),
            env!("CARGO_PKG_VERSION")
        ))
        .set_key_value_metadata(Some(metadata(table)))
        .build();
    let mut writer = SerializedFileWriter::new(Vec::new(), Arc::new(schema), Arc::new(properties))?;
    let n = table.n_rows();
    for first in (0..n).step_by(GROUP_ROWS) {
        let rows = first..n.min(first + GROUP_ROWS);
        let mut group = writer.next_row_group()?;
        for c in &table.columns {
            let Some(mut into) = group.next_column()? else {
                return Err(ParquetError::General(
                    "fewer columns than fields".to_owned(),
                ));
            };
            let rows = rows.clone();
            match &c.values {
                Values::Float(s, _) => put::<DoubleType>(
                    &mut into,
                    rows.map(|k| Some(s.at(k)).filter(|v| v.is_finite())),
                ),
                Values::Int(s) => put::<Int64Type>(&mut into, rows.map(|k| s.at(k))),
                Values::Bool(s) => put::<BoolType>(&mut into, rows.map(|k| s.at(k))),
                Values::Text(t) => put::<ByteArrayType>(
                    &mut into,
                    rows.map(|k| Some(ByteArray::from(t.at(k).into_bytes()))),
                ),
            }?;
            into.close()?;
        }
        group.close()?;
    }
    writer.into_inner()
}

/// What astropy wants to know beyond the columns themselves.
fn metadata(table: &Table<'_>) -> Vec<KeyValue> {
    let mut all = vec![KeyValue::new(
        "table_meta_yaml".to_owned(),
        ecsv_write::yaml(table),
    )];
    for c in &table.columns {
        if let Values::Text(t) = &c.values {
            let mut text = String::new();
            let lengths = (0..table.n_rows()).map(|row| {
                text.clear();
                t.push(row, &mut text);
                text.chars().count()
            });
            let longest = lengths.max().unwrap_or(0).max(1);
            all.push(KeyValue::new(
                format!("table::len::{}", c.name),
                longest.to_string(),
            ));
        }
    }
    all
}

/// Writes values with their presence as definition levels.
fn put<T: DataType>(
    column: &mut SerializedColumnWriter<'_>,
    cells: impl Iterator<Item = Option<T::T>>,
) -> Result<(), ParquetError> {
    let mut levels = Vec::new();
    let mut values = Vec::new();
    for cell in cells {
        levels.push(i16::from(cell.is_some()));
        values.extend(cell);
    }
    column
        .typed::<T>()
        .write_batch(&values, Some(&levels), None)
        .map(|_| ())
}
