//! Reading VOTable.
//!
//! Format: IVOA VOTable 1.4 (2019). The first table with data is read, in any of its
//! serialisations TABLEDATA, BINARY and BINARY2; columns of arrays and complex numbers are left
//! out.

mod binary;
mod fields;
mod reader;

pub use reader::read;

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::table::{Precision, Table};
    use crate::io::votable_write::write;

    #[test]
    fn a_table_survives_writing_and_reading() {
        let x = [1.5, f64::NAN, -2.25e-7];
        let names = ["a<b & \"c\"", "", "Å"];
        let table = Table::new("members", "what it holds", 3)
            .float("x_mas", "mas", "toward east", Precision::Full, |k| x[k])
            .ucd("pos.cartesian.x")
            .float("vx_mas_yr", "mas / yr", "", Precision::Full, |k| k as f64)
            .int("epoch", "index", |k| [Some(4), None, Some(-6)][k])
            .bool("merged", "", |k| [Some(true), None, Some(false)][k])
            .text("track", "", |k, s| s.push_str(names[k]));
        let mut bytes = Vec::new();
        write(&table, &mut bytes).unwrap();
        let back = read(&bytes).unwrap();
        assert_eq!((back.name.as_str(), back.n_rows()), ("members", 3));
        assert_eq!(back.description, "what it holds");
        let v = back.floats("x_mas").unwrap();
        assert!(v[0] == x[0] && v[1].is_nan() && v[2] == x[2]);
        assert_eq!(back.ints("epoch").unwrap(), [Some(4), None, Some(-6)]);
        assert_eq!(
            back.bools("merged").unwrap(),
            [Some(true), None, Some(false)]
        );
        assert_eq!(back.texts("track").unwrap(), names);
        let column = back.column("x_mas").unwrap();
        assert_eq!(
            (column.unit.as_str(), column.description.as_str()),
            ("mas", "toward east")
        );
        assert_eq!(column.ucd.as_deref(), Some("pos.cartesian.x"));
        assert_eq!(back.column("vx_mas_yr").unwrap().unit, "mas.yr**-1");
    }

    #[test]
    fn binary_and_binary2_read_alike() {
        // Two rows (7, 1.5, "ab") and (none, NaN, ""), encoded by hand as section 5.4 says.
        let row = |id: i32, x: f64, text: &str| {
            let mut b = id.to_be_bytes().to_vec();
            b.extend(x.to_be_bytes());
            b.extend(u32::try_from(text.len()).unwrap().to_be_bytes());
            b.extend(text.as_bytes());
            b
        };
        let plain = [row(7, 1.5, "ab"), row(-1, f64::NAN, "")].concat();
        let masked = [
            vec![0_u8],
            row(7, 1.5, "ab"),
            vec![0b1110_0000],
            row(0, 0.0, "x"),
        ]
        .concat();
        for (kind, bytes) in [("BINARY", plain), ("BINARY2", masked)] {
            let text = format!(
                "<?xml version='1.0'?><v:VOTABLE xmlns:v='u'><v:RESOURCE><v:TABLE>\
                 <v:FIELD name='id' datatype='int'><v:VALUES null='-1'/></v:FIELD>\
                 <v:FIELD name='x' datatype='double' unit='arcsec'/>\
                 <v:FIELD name='t' datatype='char' arraysize='*'/>\
                 <v:DATA><v:{kind}><v:STREAM encoding='base64'>\n {}\n</v:STREAM></v:{kind}>\
                 </v:DATA></v:TABLE></v:RESOURCE></v:VOTABLE>",
                binary::encode_base64(&bytes)
            );
            let t = read(text.as_bytes()).unwrap_or_else(|e| panic!("{kind}: {e}"));
            assert_eq!(t.ints("id").unwrap(), [Some(7), None], "{kind}");
            let x = t.floats("x").unwrap();
            assert!(x[0] == 1.5 && x[1].is_nan(), "{kind}");
            assert_eq!(t.texts("t").unwrap(), ["ab", ""], "{kind}");
        }
    }

    #[test]
    fn damage_is_refused_with_its_place() {
        let head =
            "<VOTABLE><RESOURCE><TABLE>\n<FIELD name='x' datatype='double'/><DATA><TABLEDATA>\n";
        let tail = "</TABLEDATA></DATA></TABLE></RESOURCE></VOTABLE>";
        let error = read(format!("{head}<TR><TD>1;5</TD></TR>{tail}").as_bytes()).unwrap_err();
        assert_eq!((error.row, error.column.as_deref()), (Some(1), Some("x")));
        let error =
            read(format!("{head}<TR><TD>1</TD><TD>2</TD></TR>{tail}").as_bytes()).unwrap_err();
        assert_eq!(error.found, "2 cells");
        let error = read(format!("{head}<TR><TD>1</TR>{tail}").as_bytes()).unwrap_err();
        assert_eq!(error.line, Some(3));
        assert!(read(b"<html/>").is_err());
    }
}
