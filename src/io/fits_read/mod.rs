//! Reading FITS binary tables.
//!
//! Format: FITS standard 4.0 (2018), sections 4 (headers) and 7.3 (binary tables). The first
//! binary table of a file is read; columns of arrays, bits and complex numbers are left out.
//! Missing values: `NaN` for numbers, `TNULL` for whole numbers, an empty text, a zero byte for
//! a logical. Descriptions and content descriptors travel in `TCOMMn` and `TUCDn` (a registered
//! custom shared by table programs, not part of the standard).

mod header;
mod reader;

pub use reader::read;

/// Files are made of blocks of this many bytes.
const BLOCK: usize = 2880;
/// A header is made of cards of this many bytes.
const CARD: usize = 80;

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::fits_write::write;
    use crate::io::table::{Precision, Table, Values};

    #[test]
    fn a_table_survives_writing_and_reading() {
        let x = [1.5, f64::NAN, -2.25e-7];
        let names = ["a", "", "seven"];
        let long = "a description that is longer than one card can hold, so that it goes on \
                    in a second card, which is how the standard writes long texts";
        let table = Table::new("members", "", 3)
            .float("x_mas", "mas", long, Precision::Full, |k| x[k])
            .ucd("pos.cartesian.x")
            .float("vx_mas_yr", "mas / yr", "", Precision::Full, |k| k as f64)
            .int("epoch", "index", |k| [Some(4), None, Some(-6)][k])
            .bool("merged", "", |k| [Some(true), None, Some(false)][k])
            .text("track", "it's quoted", |k, s| s.push_str(names[k]));
        let mut bytes = Vec::new();
        write(&table, &mut bytes).unwrap();
        assert_eq!(bytes.len() % BLOCK, 0);
        let back = read(&bytes).unwrap();
        assert_eq!((back.name.as_str(), back.n_rows()), ("members", 3));
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
        assert_eq!(column.description, long);
        assert_eq!(column.ucd.as_deref(), Some("pos.cartesian.x"));
        assert_eq!(back.column("vx_mas_yr").unwrap().unit, "mas yr-1");
        assert!(matches!(
            back.column("epoch").unwrap().values,
            Values::Int(_)
        ));
    }

    #[test]
    fn a_file_cut_short_is_refused() {
        let table = Table::new("t", "", 1000).float("x", "", "", Precision::Full, |k| k as f64);
        let mut bytes = Vec::new();
        write(&table, &mut bytes).unwrap();
        for keep in [10, BLOCK, 2 * BLOCK, 3 * BLOCK] {
            let error = read(&bytes[..keep]).unwrap_err();
            assert!(!error.found.is_empty(), "{keep}");
        }
    }
}
