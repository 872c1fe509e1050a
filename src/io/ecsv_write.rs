//! Writing a table as ECSV: comma-separated values under a YAML header with names, types,
//! units and descriptions.
//!
//! Format: Enhanced Character Separated Values 1.0, as laid down in astropy's proposal for
//! enhancement 6 (Aldcroft 2018). An empty cell is "none"; a content descriptor goes into the
//! column's `meta`. Rows are formatted in blocks by all threads and written in order, so the
//! bytes do not depend on the number of threads.

use std::io::{self, Write};

use rayon::prelude::*;

use super::number_text::{push_float, push_int};
use super::table::{Column, Table, Values};

/// Rows formatted as one piece of work.
const BLOCK_ROWS: usize = 8192;
/// Blocks held in memory at a time.
const BLOCKS_AT_ONCE: usize = 16;

/// Writes the whole table.
///
/// # Errors
/// Whatever the writer reports.
pub fn write(table: &Table<'_>, out: &mut dyn Write) -> io::Result<()> {
    out.write_all(header(table).as_bytes())?;
    let n = table.n_rows();
    let blocks: Vec<usize> = (0..n).step_by(BLOCK_ROWS).collect();
    for some in blocks.chunks(BLOCKS_AT_ONCE) {
        let texts: Vec<Vec<u8>> = some
            .par_iter()
            .map(|&first| block(table, first, n.min(first + BLOCK_ROWS)))
            .collect();
        for text in texts {
            out.write_all(&text)?;
        }
    }
    Ok(())
}

/// The YAML header in comment lines, and the line of names.
fn header(table: &Table<'_>) -> String {
    let mut h = String::from("# %ECSV 1.0\n# ---\n# delimiter: ','\n");
    for line in yaml(table).lines() {
        h.push_str("# ");
        h.push_str(line);
        h.push('\n');
    }
    let mut names = Vec::new();
    for (k, c) in table.columns.iter().enumerate() {
        if k > 0 {
            names.push(b',');
        }
        push_text(&mut names, &c.name);
    }
    h.push_str(&String::from_utf8_lossy(&names));
    h.push('\n');
    h
}

/// Names, types, units and descriptions as YAML.
pub(super) fn yaml(table: &Table<'_>) -> String {
    let mut h = String::from("datatype:\n");
    for c in &table.columns {
        h.push_str("- {name: ");
        h.push_str(&quoted(&c.name));
        if !c.unit.is_empty() {
            h.push_str(", unit: ");
            h.push_str(&c.unit);
        }
        h.push_str(", datatype: ");
        h.push_str(datatype(c));
        if !c.description.is_empty() {
            h.push_str(", description: ");
            h.push_str(&quoted(&c.description));
        }
        if let Some(ucd) = &c.ucd {
            h.push_str(", meta: {ucd: ");
            h.push_str(&quoted(ucd));
            h.push('}');
        }
        h.push_str("}\n");
    }
    h.push_str("meta: {name: ");
    h.push_str(&quoted(&table.name));
    h.push_str(", description: ");
    h.push_str(&quoted(&table.description));
    h.push_str("}\nschema: astropy-2.0\n");
    h
}

/// A YAML scalar on one line, in single quotes.
fn quoted(text: &str) -> String {
    let one_line = text.replace(['\n', '\r', '\t'], " ");
    format!("'{}'", one_line.replace('\'', "''"))
}

fn datatype(column: &Column<'_>) -> &'static str {
    match column.values {
        Values::Float(..) => "float64",
        Values::Int(_) => "int64",
        Values::Bool(_) => "bool",
        Values::Text(_) => "string",
    }
}

fn block(table: &Table<'_>, first: usize, end: usize) -> Vec<u8> {
    let mut out = Vec::with_capacity((end - first) * table.columns.len() * 10);
    let mut text = String::new();
    for row in first..end {
        for (k, c) in table.columns.iter().enumerate() {
            if k > 0 {
                out.push(b',');
            }
            match &c.values {
                Values::Float(s, precision) => push_float(&mut out, s.at(row), *precision),
                Values::Int(s) => {
                    if let Some(v) = s.at(row) {
                        push_int(&mut out, v);
                    }
                }
                Values::Bool(s) => out.extend_from_slice(match s.at(row) {
                    Some(true) => b"True",
                    Some(false) => b"False",
                    None => b"",
                }),
                Values::Text(t) => {
                    text.clear();
                    t.push(row, &mut text);
                    push_text(&mut out, &text);
                }
            }
        }
        // A lone empty cell would be an empty line, which readers skip.
        if table.columns.len() == 1 && matches!(out.last(), None | Some(b'\n')) {
            out.extend_from_slice(b"\"\"");
        }
        out.push(b'\n');
    }
    out
}

/// A cell of text, in double quotes where it must be (RFC 4180).
fn push_text(out: &mut Vec<u8>, text: &str) {
    let plain = !text
        .bytes()
        .any(|b| matches!(b, b',' | b'"' | b'\n' | b'\r' | b'#'))
        && !text.starts_with(' ')
        && !text.ends_with(' ');
    if plain {
        out.extend_from_slice(text.as_bytes());
        return;
    }
    out.push(b'"');
    out.extend_from_slice(text.replace('"', "\"\"").as_bytes());
    out.push(b'"');
}

#[cfg(test)]
mod tests {
    use super::super::table::Precision;
    use super::*;

    fn written(table: &Table<'_>) -> String {
        let mut out = Vec::new();
        write(table, &mut out).unwrap();
        String::from_utf8(out).unwrap()
    }

    #[test]
    fn header_and_rows() {
        let t = Table::new("t", "It's a table", 2)
            .text("id", "a, b", |k, out| out.push_str(["q\"x", "plain"][k]))
            .float("vx_mas_yr", "mas / yr", "speed", Precision::Full, |k| {
                [f64::NAN, 0.25][k]
            })
            .ucd("pos.pm")
            .int("n", "", |k| [Some(-7), None][k])
            .bool("ok", "", |k| [Some(true), None][k]);
        assert_eq!(
            written(&t),
            "# %ECSV 1.0\n# ---\n# delimiter: ','\n# datatype:\n\
             # - {name: 'id', datatype: string, description: 'a, b'}\n\
             # - {name: 'vx_mas_yr', unit: mas / yr, datatype: float64, description: 'speed', meta: {ucd: 'pos.pm'}}\n\
             # - {name: 'n', datatype: int64}\n# - {name: 'ok', datatype: bool}\n\
             # meta: {name: 't', description: 'It''s a table'}\n# schema: astropy-2.0\n\
             id,vx_mas_yr,n,ok\n\"q\"\"x\",,-7,True\nplain,0.25,,\n"
        );
    }

    #[test]
    fn blocks_join_without_a_seam() {
        let n = BLOCK_ROWS * (BLOCKS_AT_ONCE + 1) + 3;
        let t = Table::new("t", "", n).int("k", "", |k| Some(k as i64));
        let text = written(&t);
        let rows: Vec<usize> = text.lines().filter_map(|l| l.parse().ok()).collect();
        assert!(rows.iter().copied().eq(0..n));
    }
}
