//! Which module may import which: lower layers know nothing of higher ones.

use std::collections::BTreeSet;
use std::fs;
use std::path::{Path, PathBuf};

/// Modules, lowest first, each with the modules it may import. `DEVELOPERS.md` shows the same
/// table with what each module owns.
pub const MAY_IMPORT: &[(&str, &[&str])] = &[
    ("maths", &[]),
    ("model", &["maths"]),
    ("motion", &["maths", "model"]),
    ("near", &["maths", "model"]),
    ("io", &["maths", "model"]),
    ("sensor", &["maths", "model", "near"]),
    ("frame", &["maths", "model", "motion", "near", "sensor"]),
    ("link", &["maths", "model", "motion", "near", "sensor"]),
    (
        "resolve",
        &["maths", "model", "motion", "near", "sensor", "link"],
    ),
    (
        "track",
        &[
            "maths", "model", "motion", "near", "sensor", "link", "resolve",
        ],
    ),
    (
        "engine",
        &[
            "maths", "model", "motion", "near", "sensor", "frame", "link", "resolve", "track",
        ],
    ),
    (
        "audit",
        &[
            "maths", "model", "motion", "near", "sensor", "io", "frame", "link", "resolve",
            "track", "engine",
        ],
    ),
    (
        "inject",
        &[
            "maths", "model", "motion", "near", "sensor", "io", "frame", "engine", "audit",
        ],
    ),
    (
        "output",
        &[
            "maths", "model", "motion", "near", "sensor", "io", "frame", "engine", "audit",
            "inject",
        ],
    ),
];

/// Modules that may run in parallel.
const MAY_USE_RAYON: &[&str] = &["engine", "io"];

fn source() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("src")
}

/// All Rust files of a module: `src/name.rs` and everything under `src/name/`.
fn files_of(module: &str) -> Vec<PathBuf> {
    let mut found = Vec::new();
    let single = source().join(format!("{module}.rs"));
    if single.exists() {
        found.push(single);
    }
    let mut folders = vec![source().join(module)];
    while let Some(folder) = folders.pop() {
        let Ok(entries) = fs::read_dir(&folder) else {
            continue;
        };
        for entry in entries {
            let path = entry.expect("a readable folder").path();
            if path.is_dir() {
                folders.push(path);
            } else if path.extension().is_some_and(|e| e == "rs") {
                found.push(path);
            }
        }
    }
    found
}

/// The modules a text names after `crate::`, comments left out.
fn imports(text: &str) -> BTreeSet<String> {
    let code = text
        .lines()
        .map(|l| l.split("//").next().unwrap_or(""))
        .collect::<Vec<_>>()
        .join("\n");
    code.match_indices("crate::")
        .filter(|(at, _)| !code[..*at].ends_with('$'))
        .map(|(at, found)| {
            code[at + found.len()..]
                .chars()
                .take_while(|c| c.is_alphanumeric() || *c == '_')
                .collect()
        })
        .collect()
}

#[test]
fn modules_import_only_what_lies_below() {
    let mut wrong = Vec::new();
    for (module, allowed) in MAY_IMPORT {
        for file in files_of(module) {
            let text = fs::read_to_string(&file).expect("a readable source file");
            for import in imports(&text) {
                if import != *module && !allowed.contains(&import.as_str()) {
                    wrong.push(format!("{} imports crate::{import}", file.display()));
                }
            }
            if text.contains("rayon::") && !MAY_USE_RAYON.contains(module) {
                wrong.push(format!("{} uses rayon", file.display()));
            }
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn the_table_names_every_module() {
    let listed: BTreeSet<&str> = MAY_IMPORT.iter().map(|(m, _)| *m).collect();
    let lib = fs::read_to_string(source().join("lib.rs")).expect("a readable lib.rs");
    let declared: BTreeSet<&str> = lib
        .lines()
        .filter_map(|l| l.strip_prefix("pub mod ")?.strip_suffix(';'))
        .collect();
    let unknown: Vec<&&str> = declared.difference(&listed).collect();
    assert!(unknown.is_empty(), "not in the table: {unknown:?}");
}

#[test]
fn the_library_does_not_print() {
    // Clippy enforces it (lib.rs denies it); this keeps the lint from being removed.
    let lib = fs::read_to_string(source().join("lib.rs")).expect("a readable lib.rs");
    assert!(lib.contains("#![deny(clippy::print_stdout, clippy::print_stderr)]"));
}

#[test]
fn imports_are_found_where_they_stand() {
    let text = "use crate::maths::cov2;\n// crate::engine\nlet x = crate::io::table::f();\n";
    let found: Vec<String> = imports(text).into_iter().collect();
    assert_eq!(found, ["io", "maths"]);
}
