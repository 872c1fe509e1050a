//! Reading ECSV: our own results, and lists that others wrote in this format.
//!
//! Format: see [`super::ecsv_write`]. Any delimiter of the format (comma, blank) is accepted;
//! columns of arrays or objects are kept as their text.

use std::fmt;

use csv::ByteRecord;
use yaml_rust2::{Yaml, YamlLoader};

use super::table::{Column, Precision, Source, Table, Texts, Values};

/// What is wrong with an ECSV file, and where. Lines count from 1.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct EcsvError {
    pub line: usize,
    pub column: Option<String>,
    pub found: String,
    pub expected: String,
}

impl fmt::Display for EcsvError {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "line {}", self.line)?;
        if let Some(c) = &self.column {
            write!(f, ", column `{c}`")?;
        }
        write!(f, ": found {}, expected {}", self.found, self.expected)
    }
}

impl std::error::Error for EcsvError {}

/// Does a file begin like ECSV?
#[must_use]
pub fn looks_like_ecsv(bytes: &[u8]) -> bool {
    bytes.starts_with(b"# %ECSV")
}

/// Reads a whole table.
///
/// # Errors
/// The first thing that does not follow the format.
pub fn read(bytes: &[u8]) -> Result<Table<'static>, EcsvError> {
    let head = Head::read(bytes)?;
    let mut reader = csv::ReaderBuilder::new()
        .delimiter(head.delimiter)
        .flexible(true)
        .comment(Some(b'#'))
        .from_reader(&bytes[head.n_bytes..]);
    let at = |line: u64| head.n_lines + line as usize;
    let names = reader
        .byte_headers()
        .map_err(|e| {
            fault(
                head.n_lines + 1,
                None,
                &e.to_string(),
                "a line of column names",
            )
        })?
        .clone();
    if names.len() != head.columns.len()
        || names
            .iter()
            .zip(&head.columns)
            .any(|(n, c)| n != c.name.as_bytes())
    {
        let found = String::from_utf8_lossy(names.as_slice()).into_owned();
        return Err(fault(
            head.n_lines + 1,
            None,
            &format!("{} names ({found})", names.len()),
            &format!("the {} names of the header", head.columns.len()),
        ));
    }
    let mut cells: Vec<Cells> = head.columns.iter().map(|c| c.kind.cells()).collect();
    let mut record = ByteRecord::new();
    let mut n_rows = 0;
    loop {
        match reader.read_byte_record(&mut record) {
            Ok(false) => break,
            Ok(true) => {}
            Err(e) => {
                let line = e.position().map_or(0, csv::Position::line);
                return Err(fault(at(line), None, &e.to_string(), "a row of the table"));
            }
        }
        let line = at(record.position().map_or(0, csv::Position::line));
        if record.len() != cells.len() {
            return Err(fault(
                line,
                None,
                &format!("{} cells", record.len()),
                &format!("{}", cells.len()),
            ));
        }
        for ((cell, into), head) in record.iter().zip(&mut cells).zip(&head.columns) {
            into.push(cell).map_err(|expected| {
                let found = format!("`{}`", String::from_utf8_lossy(cell));
                fault(line, Some(&head.name), &found, expected)
            })?;
        }
        n_rows += 1;
    }
    let mut table = Table::new(&head.name, &head.description, n_rows);
    for (h, c) in head.columns.into_iter().zip(cells) {
        table.push(Column {
            name: h.name,
            unit: h.unit,
            description: h.description,
            ucd: h.ucd,
            values: c.into_values(),
        });
    }
    Ok(table)
}

fn fault(line: usize, column: Option<&str>, found: &str, expected: &str) -> EcsvError {
    EcsvError {
        line,
        column: column.map(str::to_owned),
        found: found.to_owned(),
        expected: expected.to_owned(),
    }
}

/// What the YAML header says.
pub(super) struct Head {
    pub delimiter: u8,
    pub columns: Vec<ColumnHead>,
    name: String,
    description: String,
    /// Lines and bytes of the header, without the line of names.
    pub n_lines: usize,
    pub n_bytes: usize,
}

pub(super) struct ColumnHead {
    pub name: String,
    pub unit: String,
    description: String,
    ucd: Option<String>,
    kind: Kind,
}

#[derive(Clone, Copy)]
enum Kind {
    Float,
    Int,
    Bool,
    Text,
}

impl Head {
    pub(super) fn read(bytes: &[u8]) -> Result<Self, EcsvError> {
        let (yaml, n_lines, n_bytes) = comment_block(bytes)?;
        let bad = |found: &str, expected: &str| fault(1, None, found, expected);
        let documents = YamlLoader::load_from_str(&yaml)
            .map_err(|e| fault(e.marker().line() + 1, None, e.info(), "a YAML header"))?;
        let head = documents
            .first()
            .ok_or_else(|| bad("an empty header", "a YAML header"))?;
        let delimiter = match head["delimiter"].as_str() {
            None | Some(" ") => b' ',
            Some(",") => b',',
            Some(other) => return Err(bad(&format!("delimiter `{other}`"), "`,` or a blank")),
        };
        let columns = head["datatype"]
            .as_vec()
            .ok_or_else(|| bad("no `datatype`", "a list of columns under `datatype`"))?
            .iter()
            .map(ColumnHead::read)
            .collect::<Result<_, _>>()?;
        let meta = |key: &str| text_of(&entry(&head["meta"], key));
        Ok(Self {
            delimiter,
            columns,
            name: meta("name"),
            description: meta("description"),
            n_lines,
            n_bytes,
        })
    }
}

impl ColumnHead {
    fn read(yaml: &Yaml) -> Result<Self, EcsvError> {
        let name = text_of(&yaml["name"]);
        if name.is_empty() {
            return Err(fault(1, None, "a column without `name`", "a name"));
        }
        let datatype = text_of(&yaml["datatype"]);
        let kind = match datatype.as_str() {
            "bool" => Kind::Bool,
            "string" | "str" | "object" => Kind::Text,
            t if t.starts_with("int") || t.starts_with("uint") => Kind::Int,
            t if t.starts_with("float") => Kind::Float,
            other => {
                return Err(fault(
                    1,
                    Some(&name),
                    &format!("datatype `{other}`"),
                    "bool, string, or a size of int, uint or float",
                ));
            }
        };
        let ucd = text_of(&entry(&yaml["meta"], "ucd"));
        Ok(Self {
            kind: if yaml["subtype"].is_badvalue() {
                kind
            } else {
                Kind::Text
            },
            unit: text_of(&yaml["unit"]),
            description: text_of(&yaml["description"]),
            ucd: (!ucd.is_empty()).then_some(ucd),
            name,
        })
    }
}

/// The commented lines at the head without their `# `, with their number and length in bytes.
fn comment_block(bytes: &[u8]) -> Result<(String, usize, usize), EcsvError> {
    if !looks_like_ecsv(bytes) {
        return Err(fault(1, None, "another beginning", "`# %ECSV 1.0`"));
    }
    let mut yaml = String::new();
    let (mut n_lines, mut n_bytes) = (0, 0);
    for line in bytes.split_inclusive(|&b| b == b'\n') {
        let Some(rest) = line.strip_prefix(b"#") else {
            break;
        };
        n_lines += 1;
        n_bytes += line.len();
        let rest = rest.strip_prefix(b" ").unwrap_or(rest);
        let text = std::str::from_utf8(rest)
            .map_err(|_| fault(n_lines, None, "bytes that are not UTF-8", "UTF-8 text"))?;
        let text = text.trim_end();
        // The first line names the format; `---` opens the YAML document.
        let yaml_line = if text.starts_with("%ECSV") || text == "---" {
            ""
        } else {
            text
        };
        yaml.push_str(yaml_line);
        yaml.push('\n');
    }
    Ok((yaml, n_lines, n_bytes))
}

/// An entry of a mapping, or of a list of one-entry mappings (`!!omap`).
fn entry(yaml: &Yaml, key: &str) -> Yaml {
    match yaml {
        Yaml::Array(items) => items
            .iter()
            .map(|i| &i[key])
            .find(|v| !v.is_badvalue())
            .cloned()
            .unwrap_or(Yaml::BadValue),
        other => other[key].clone(),
    }
}

fn text_of(yaml: &Yaml) -> String {
    match yaml {
        Yaml::String(s) | Yaml::Real(s) => s.clone(),
        Yaml::Integer(i) => i.to_string(),
        Yaml::Boolean(b) => b.to_string(),
        _ => String::new(),
    }
}

enum Cells {
    Float(Vec<f64>),
    Int(Vec<Option<i64>>),
    Bool(Vec<Option<bool>>),
    Text(Vec<String>),
}

impl Kind {
    fn cells(self) -> Cells {
        match self {
            Self::Float => Cells::Float(Vec::new()),
            Self::Int => Cells::Int(Vec::new()),
            Self::Bool => Cells::Bool(Vec::new()),
            Self::Text => Cells::Text(Vec::new()),
        }
    }
}

impl Cells {
    /// Adds a cell, or says what was expected.
    fn push(&mut self, cell: &[u8]) -> Result<(), &'static str> {
        match self {
            Self::Float(v) => v.push(if cell.is_empty() {
                f64::NAN
            } else {
                fast_float2::parse(cell).map_err(|_| "a number")?
            }),
            Self::Int(v) => v.push(if cell.is_empty() {
                None
            } else {
                Some(
                    std::str::from_utf8(cell)
                        .ok()
                        .and_then(|t| t.parse().ok())
                        .ok_or("a whole number")?,
                )
            }),
            Self::Bool(v) => v.push(match cell {
                b"" => None,
                b"True" | b"true" | b"1" => Some(true),
                b"False" | b"false" | b"0" => Some(false),
                _ => return Err("True or False"),
            }),
            Self::Text(v) => v.push(
                std::str::from_utf8(cell)
                    .map_err(|_| "UTF-8 text")?
                    .to_owned(),
            ),
        }
        Ok(())
    }

    fn into_values(self) -> Values<'static> {
        match self {
            Self::Float(v) => Values::Float(Source::Held(v), Precision::Full),
            Self::Int(v) => Values::Int(Source::Held(v)),
            Self::Bool(v) => Values::Bool(Source::Held(v)),
            Self::Text(v) => Values::Text(Texts::Held(v)),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::super::ecsv_write;
    use super::*;

    #[test]
    fn what_is_written_is_read_back() {
        let t = Table::new("stars", "a: b", 3)
            .text("id", "name: of, a 'star'", |k, out| {
                out.push_str(["7", "a,b", ""][k])
            })
            .float("ax_mas_yr2", "mas / yr2", "pull", Precision::Full, |k| {
                [0.1, f64::NAN, -3e-9][k]
            })
            .ucd("pos.pm;arith.diff")
            .int("n", "count", |k| [Some(4), None, Some(-1)][k])
            .bool("ok", "", |k| [Some(true), Some(false), None][k]);
        let mut bytes = Vec::new();
        ecsv_write::write(&t, &mut bytes).unwrap();
        let r = read(&bytes).unwrap();
        assert_eq!((r.name.as_str(), r.description.as_str()), ("stars", "a: b"));
        assert_eq!(r.n_rows(), 3);
        assert_eq!(r.texts("id").unwrap(), ["7", "a,b", ""]);
        let a = r.floats("ax_mas_yr2").unwrap();
        assert!(a[0] == 0.1 && a[1].is_nan() && a[2] == -3e-9);
        assert_eq!(r.ints("n").unwrap(), [Some(4), None, Some(-1)]);
        let c = r.column("ax_mas_yr2").unwrap();
        assert_eq!(c.unit, "mas / yr2");
        assert_eq!(c.ucd.as_deref(), Some("pos.pm;arith.diff"));
        assert_eq!(r.column("id").unwrap().description, "name: of, a 'star'");
    }

    #[test]
    fn blank_delimiter_and_ordered_meta() {
        // Laid out as the proposal's own example: blank-delimited, `!!omap` meta.
        let text = "# %ECSV 0.9\n# ---\n# datatype:\n# - {name: a, unit: mas, datatype: float32}\n\
                    # - name: b\n#   datatype: string\n# meta: !!omap\n# - {name: tiny}\n\
                    # schema: astropy-2.0\na b\n1.5 \"two words\"\n\"\" x\n";
        let t = read(text.as_bytes()).unwrap();
        assert_eq!(t.name, "tiny");
        assert_eq!(t.texts("b").unwrap(), ["two words", "x"]);
        assert!(t.floats("a").unwrap()[1].is_nan());
    }

    #[test]
    fn faults_name_line_and_column() {
        let text = "# %ECSV 1.0\n# ---\n# delimiter: ','\n# datatype:\n\
                    # - {name: a, datatype: int64}\na\n1\nx\n";
        let e = read(text.as_bytes()).unwrap_err();
        assert_eq!((e.line, e.column.as_deref()), (8, Some("a")));
        assert_eq!(
            e.to_string(),
            "line 8, column `a`: found `x`, expected a whole number"
        );
        assert_eq!(read(b"a,b\n").unwrap_err().line, 1);
    }
}
