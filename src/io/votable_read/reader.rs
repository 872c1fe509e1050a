//! Reading the first table with data of a VOTable document.

use quick_xml::Reader;
use quick_xml::XmlVersion;
use quick_xml::events::{BytesStart, Event};

use super::binary;
use super::fields::{Cells, Datatype, Field};
use crate::io::format_error::FormatError;
use crate::io::table::Table;

/// Reads the first table that has data.
///
/// # Errors
/// The first thing that does not follow the format.
pub fn read(bytes: &[u8]) -> Result<Table<'static>, FormatError> {
    let body = bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes);
    let text = std::str::from_utf8(body).map_err(|e| {
        FormatError::new(
            format!("byte {} that is not UTF-8", e.valid_up_to() + 1),
            "UTF-8 text",
        )
    })?;
    let mut reader = Reader::from_str(text);
    let mut document = Document::default();
    loop {
        let event = reader.read_event().map_err(|e| FormatError {
            line: Some(line_at(text, reader.error_position())),
            ..FormatError::new(e.to_string(), "well-formed XML")
        })?;
        let step = match &event {
            Event::Start(e) => document.open(e, false),
            Event::Empty(e) => document.open(e, true),
            Event::End(e) => document.close(e.local_name().as_ref()),
            Event::Text(t) => {
                document.text.push_str(&t.xml10_content());
                Ok(())
            }
            Event::CData(t) => {
                document.text.push_str(&t.xml10_content());
                Ok(())
            }
            Event::GeneralRef(r) => document.entity(r),
            Event::Eof => break,
            _ => Ok(()),
        };
        step.map_err(|e| FormatError {
            line: e
                .line
                .or_else(|| Some(line_at(text, reader.buffer_position()))),
            ..e
        })?;
        if document.done {
            break;
        }
    }
    document.table()
}

fn line_at(text: &str, at: u64) -> usize {
    let at = usize::try_from(at).unwrap_or(0).min(text.len());
    1 + memchr::memchr_iter(b'\n', &text.as_bytes()[..at]).count()
}

/// What has been read so far.
#[derive(Default)]
struct Document {
    is_votable: bool,
    name: String,
    description: String,
    fields: Vec<Field>,
    columns: Vec<Option<Cells>>,
    n_rows: usize,
    n_cells: usize,
    /// Text of the innermost element that matters.
    text: String,
    in_table: bool,
    in_field: bool,
    /// BINARY or BINARY2 (true = with a mask).
    binary: Option<bool>,
    base64: bool,
    done: bool,
}

impl Document {
    fn open(&mut self, e: &BytesStart<'_>, is_empty: bool) -> Result<(), FormatError> {
        match e.local_name().as_ref() {
            "VOTABLE" => self.is_votable = true,
            "TABLE" => {
                self.in_table = true;
                self.fields.clear();
                self.description.clear();
                self.name = attribute(e, "name")?.unwrap_or_default();
            }
            "FIELD" if self.in_table => {
                let field = read_field(e, self.fields.len())?;
                self.fields.push(field);
                self.in_field = !is_empty;
            }
            "VALUES" if self.in_field => {
                if let (Some(null), Some(field)) = (attribute(e, "null")?, self.fields.last_mut()) {
                    field.null = null.trim().parse().ok();
                }
            }
            "DESCRIPTION" | "TD" => {
                self.text.clear();
                if is_empty {
                    return self.close(e.local_name().as_ref());
                }
            }
            "DATA" => self.columns = self.fields.iter().map(Field::cells).collect(),
            "TR" => self.n_cells = 0,
            "BINARY" => self.binary = Some(false),
            "BINARY2" => self.binary = Some(true),
            "STREAM" => {
                self.text.clear();
                self.base64 = attribute(e, "encoding")?.as_deref() == Some("base64");
                if attribute(e, "href")?.is_some() || (!is_empty && !self.base64) {
                    return Err(FormatError::new(
                        "a stream outside the document, or not in base64",
                        "the data within the file, encoding=\"base64\"",
                    ));
                }
            }
            "FITS" => {
                return Err(FormatError::new(
                    "data as an embedded FITS file",
                    "TABLEDATA, BINARY or BINARY2",
                ));
            }
            _ => {}
        }
        Ok(())
    }

    fn close(&mut self, name: &str) -> Result<(), FormatError> {
        match name {
            "FIELD" => self.in_field = false,
            "DESCRIPTION" if self.in_table => {
                let text = self.text.trim().to_owned();
                match self.fields.last_mut() {
                    Some(field) if self.in_field => field.description = text,
                    None => self.description = text,
                    Some(_) => {}
                }
            }
            "TD" => {
                let k = self.n_cells;
                self.n_cells += 1;
                if let (Some(field), Some(Some(cells))) =
                    (self.fields.get(k), self.columns.get_mut(k))
                {
                    field
                        .push_text(cells, &self.text)
                        .map_err(|e| e.in_row(self.n_rows))?;
                }
            }
            "TR" => {
                if self.n_cells != self.fields.len() {
                    return Err(FormatError::new(
                        format!("{} cells", self.n_cells),
                        format!("{}, one for each FIELD", self.fields.len()),
                    )
                    .in_row(self.n_rows));
                }
                self.n_rows += 1;
            }
            "STREAM" => {
                if let Some(masked) = self.binary {
                    let bytes = binary::decode_base64(&self.text)?;
                    self.n_rows =
                        binary::read_rows(&bytes, masked, &self.fields, &mut self.columns)?;
                }
            }
            "DATA" => self.done = true,
            _ => {}
        }
        Ok(())
    }

    fn entity(&mut self, reference: &quick_xml::events::BytesRef<'_>) -> Result<(), FormatError> {
        let wrong = |name: &str| FormatError::new(format!("entity `&{name};`"), "an entity of XML");
        let name: &str = reference;
        if let Some(c) = reference.resolve_char_ref().map_err(|_| wrong(name))? {
            self.text.push(c);
            return Ok(());
        }
        let text = quick_xml::escape::resolve_predefined_entity(name).ok_or_else(|| wrong(name))?;
        self.text.push_str(text);
        Ok(())
    }

    fn table(self) -> Result<Table<'static>, FormatError> {
        if !self.is_votable {
            return Err(FormatError::new(
                "XML of another kind",
                "an element VOTABLE",
            ));
        }
        if !self.done {
            return Err(FormatError::new(
                "no table with data",
                "a TABLE with a DATA element (is the file cut short?)",
            ));
        }
        let mut table = Table::new(&self.name, &self.description, self.n_rows);
        for (field, cells) in self.fields.into_iter().zip(self.columns) {
            if let Some(cells) = cells {
                table.push(field.column(cells));
            }
        }
        Ok(table)
    }
}

fn attribute(e: &BytesStart<'_>, name: &str) -> Result<Option<String>, FormatError> {
    let wrong = |reason: String| FormatError::new(reason, "well-formed attributes");
    let Some(found) = e
        .try_get_attribute(name)
        .map_err(|e| wrong(e.to_string()))?
    else {
        return Ok(None);
    };
    let value = found
        .normalized_value(XmlVersion::Implicit1_0)
        .map_err(|e| wrong(e.to_string()))?;
    Ok(Some(value.into_owned()))
}

fn read_field(e: &BytesStart<'_>, k: usize) -> Result<Field, FormatError> {
    let name = match (attribute(e, "name")?, attribute(e, "ID")?) {
        (Some(name), _) if !name.is_empty() => name,
        (_, Some(id)) => id,
        _ => format!("col{}", k + 1),
    };
    let word = attribute(e, "datatype")?.unwrap_or_default();
    let datatype = Datatype::from_word(&word).ok_or_else(|| {
        FormatError::new(format!("datatype \"{word}\""), "a datatype of VOTable").in_column(&name)
    })?;
    let arraysize = attribute(e, "arraysize")?;
    let size = Field::size_of(arraysize.as_deref()).ok_or_else(|| {
        FormatError::new(
            format!("arraysize \"{}\"", arraysize.unwrap_or_default()),
            "a size such as 3, 2x3 or *",
        )
        .in_column(&name)
    })?;
    Ok(Field {
        datatype,
        size,
        unit: attribute(e, "unit")?.unwrap_or_default(),
        ucd: attribute(e, "ucd")?,
        description: String::new(),
        null: None,
        name,
    })
}
