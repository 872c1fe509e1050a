//! Units and descriptions as YAML in the file's metadata.

use yaml_rust2::{Yaml, YamlLoader};

/// What the metadata says of a column.
#[derive(Clone, Debug, Default)]
pub(super) struct ColumnMeta {
    pub unit: String,
    pub description: String,
    pub ucd: Option<String>,
}

/// The metadata of a table; nothing where there is none, or none that can be read.
#[derive(Debug, Default)]
pub(super) struct Meta {
    pub name: String,
    pub description: String,
    columns: Vec<(String, ColumnMeta)>,
}

impl Meta {
    pub fn read(yaml: &str) -> Self {
        let documents = YamlLoader::load_from_str(yaml).unwrap_or_default();
        let Some(head) = documents.first() else {
            return Self::default();
        };
        let columns = head["datatype"]
            .as_vec()
            .map(|columns| {
                columns
                    .iter()
                    .map(|c| {
                        let ucd = text(&entry(&c["meta"], "ucd"));
                        let meta = ColumnMeta {
                            unit: text(&c["unit"]),
                            description: text(&c["description"]),
                            ucd: Some(ucd).filter(|u| !u.is_empty()),
                        };
                        (text(&c["name"]), meta)
                    })
                    .collect()
            })
            .unwrap_or_default();
        Self {
            name: text(&entry(&head["meta"], "name")),
            description: text(&entry(&head["meta"], "description")),
            columns,
        }
    }

    pub fn column(&self, name: &str) -> ColumnMeta {
        let hit = self.columns.iter().find(|(n, _)| n == name);
        hit.map(|(_, m)| m.clone()).unwrap_or_default()
    }
}

/// An entry of a mapping, or of a list of one-entry mappings (an ordered map).
fn entry(yaml: &Yaml, key: &str) -> Yaml {
    match yaml {
        Yaml::Array(items) => items
            .iter()
            .map(|item| item[key].clone())
            .find(|v| !v.is_badvalue())
            .unwrap_or(Yaml::BadValue),
        other => other[key].clone(),
    }
}

fn text(yaml: &Yaml) -> String {
    yaml.as_str().unwrap_or("").to_owned()
}
