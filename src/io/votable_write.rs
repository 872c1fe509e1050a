//! Writing a table as a VOTable.
//!
//! Format: IVOA VOTable 1.4 (2019), rows as `TABLEDATA`; an empty cell is "none" for every
//! type (section 6). Units as in IVOA VOUnits 1.0, descriptors as in UCD1+.

use std::io::{self, Write};

use quick_xml::escape::escape;

use super::number_text::{push_float, push_int};
use super::table::{Table, Values};
use super::unit_text::{Spelling, spell};

/// Writes the whole document.
///
/// # Errors
/// Whatever the writer reports.
pub fn write(table: &Table<'_>, out: &mut dyn Write) -> io::Result<()> {
    writeln!(out, "<?xml version=\"1.0\" encoding=\"UTF-8\"?>")?;
    writeln!(
        out,
        "<VOTABLE version=\"1.4\" xmlns=\"http://www.ivoa.net/xml/VOTable/v1.3\">\n<RESOURCE>"
    )?;
    writeln!(
        out,
        "<TABLE name=\"{}\" nrows=\"{}\">",
        escape(table.name.as_str()),
        table.n_rows()
    )?;
    description(out, &table.description)?;
    for c in &table.columns {
        let datatype = match c.values {
            Values::Float(..) => "datatype=\"double\"",
            Values::Int(_) => "datatype=\"long\"",
            Values::Bool(_) => "datatype=\"boolean\"",
            Values::Text(_) => "datatype=\"unicodeChar\" arraysize=\"*\"",
        };
        write!(
            out,
            "<FIELD name=\"{}\" {datatype}",
            escape(c.name.as_str())
        )?;
        if !c.unit.is_empty() {
            write!(
                out,
                " unit=\"{}\"",
                escape(spell(&c.unit, Spelling::VoUnits))
            )?;
        }
        if let Some(ucd) = &c.ucd {
            write!(out, " ucd=\"{}\"", escape(ucd.as_str()))?;
        }
        writeln!(out, ">")?;
        description(out, &c.description)?;
        writeln!(out, "</FIELD>")?;
    }
    writeln!(out, "<DATA>\n<TABLEDATA>")?;
    let mut line = Vec::new();
    let mut text = String::new();
    for row in 0..table.n_rows() {
        line.clear();
        line.extend_from_slice(b"<TR>");
        for c in &table.columns {
            line.extend_from_slice(b"<TD>");
            match &c.values {
                Values::Float(s, precision) => push_float(&mut line, s.at(row), *precision),
                Values::Int(s) => {
                    if let Some(v) = s.at(row) {
                        push_int(&mut line, v);
                    }
                }
                Values::Bool(s) => line.extend_from_slice(match s.at(row) {
                    Some(true) => b"T",
                    Some(false) => b"F",
                    None => b"",
                }),
                Values::Text(t) => {
                    text.clear();
                    t.push(row, &mut text);
                    line.extend_from_slice(escape(text.as_str()).as_bytes());
                }
            }
            line.extend_from_slice(b"</TD>");
        }
        line.extend_from_slice(b"</TR>\n");
        out.write_all(&line)?;
    }
    writeln!(
        out,
        "</TABLEDATA>\n</DATA>\n</TABLE>\n</RESOURCE>\n</VOTABLE>"
    )
}

fn description(out: &mut dyn Write, text: &str) -> io::Result<()> {
    if text.is_empty() {
        return Ok(());
    }
    writeln!(out, "<DESCRIPTION>{}</DESCRIPTION>", escape(text))
}

#[cfg(test)]
mod tests {
    use super::super::table::Precision;
    use super::*;

    #[test]
    fn fields_and_cells() {
        let t = Table::new("t", "a < b", 1)
            .float("v", "km / s", "", Precision::Full, |_| f64::NAN)
            .ucd("phys.veloc")
            .text("s", "R&D", |_, o| o.push_str("<&>"))
            .bool("b", "", |_| Some(false));
        let mut out = Vec::new();
        write(&t, &mut out).unwrap();
        let text = String::from_utf8(out).unwrap();
        for part in [
            "<DESCRIPTION>a &lt; b</DESCRIPTION>",
            "<FIELD name=\"v\" datatype=\"double\" unit=\"km.s**-1\" ucd=\"phys.veloc\">",
            "<TR><TD></TD><TD>&lt;&amp;&gt;</TD><TD>F</TD></TR>",
        ] {
            assert!(text.contains(part), "{part}\n{text}");
        }
    }
}
