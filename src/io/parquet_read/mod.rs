//! Reading Parquet tables (cargo feature `parquet`).
//!
//! Format: Apache Parquet, through its reference library for Rust. Names, units, descriptions
//! and content descriptors travel as YAML under the file's key `table_meta_yaml`, where astropy
//! keeps them. Nulls are "none"; repeated (list) columns are left out.

mod meta;
mod reader;

pub use reader::read;

/// Key of the file's metadata that holds units and descriptions.
const META_KEY: &str = "table_meta_yaml";

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::parquet_write::write;
    use crate::io::table::{Precision, Table};

    #[test]
    fn a_table_survives_writing_and_reading() {
        let x = [1.5, f64::NAN, -2.25e-7];
        let names = ["a", "", "Å: \"x\""];
        let table = Table::new("members", "what it: holds", 3)
            .float("x_mas", "mas", "toward: east", Precision::Full, |k| x[k])
            .ucd("pos.cartesian.x")
            .int("epoch", "index", |k| [Some(4), None, Some(-6)][k])
            .bool("merged", "", |k| [Some(true), None, Some(false)][k])
            .text("track", "", |k, s| s.push_str(names[k]));
        let mut bytes = Vec::new();
        write(&table, &mut bytes).unwrap();
        let back = read(&bytes).unwrap();
        assert_eq!((back.name.as_str(), back.n_rows()), ("members", 3));
        assert_eq!(back.description, "what it: holds");
        let v = back.floats("x_mas").unwrap();
        assert!(v[0] == x[0] && v[1].is_nan() && v[2] == x[2]);
        assert_eq!(back.ints("epoch").unwrap(), [Some(4), None, Some(-6)]);
        assert_eq!(
            back.bools("merged").unwrap(),
            [Some(true), None, Some(false)]
        );
        assert_eq!(back.texts("track").unwrap(), names);
        let column = back.column("x_mas").unwrap();
        assert_eq!(column.unit, "mas");
        assert_eq!(column.description, "toward: east");
        assert_eq!(column.ucd.as_deref(), Some("pos.cartesian.x"));
    }

    #[test]
    fn an_empty_table_and_a_damaged_file() {
        let table = Table::new("t", "", 0).float("x", "mas", "", Precision::Full, |_| 0.0);
        let mut bytes = Vec::new();
        write(&table, &mut bytes).unwrap();
        assert_eq!(read(&bytes).unwrap().n_rows(), 0);
        assert!(read(&bytes[..bytes.len() - 9]).is_err());
    }
}
