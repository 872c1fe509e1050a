//! The generated sections of the README say what the program says.
//! `ASTERSKEIN_ACCEPT=1` rewrites them.

use std::fmt::Write;
use std::fs;
use std::path::{Path, PathBuf};

use asterskein::io::result_tables;
use asterskein::io::table::Values;
use asterskein::model::flag;

use crate::results::sample::Sample;

fn readme() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("README.md")
}

/// Compares the text between `<!-- name: ...` and `<!-- name end -->`, or replaces it.
fn section(name: &str, made: &str) {
    let text = fs::read_to_string(readme()).expect("a README");
    let open = text
        .find(&format!("<!-- {name}:"))
        .expect("the section begins");
    let begin = open + text[open..].find("-->\n").expect("a marker") + 4;
    let end = text
        .find(&format!("<!-- {name} end -->"))
        .expect("the section ends");
    let wanted = format!("\n{made}\n");
    if std::env::var_os("ASTERSKEIN_ACCEPT").is_some() {
        let new = format!("{}{wanted}{}", &text[..begin], &text[end..]);
        fs::write(readme(), new).expect("a writable README");
    } else {
        assert!(
            text[begin..end] == wanted,
            "the section `{name}` of the README is out of date (ASTERSKEIN_ACCEPT=1 renews it)"
        );
    }
}

/// Both sections in one test: rewriting one file from two threads would lose one of them.
#[test]
fn generated_sections_are_up_to_date() {
    let mut flags = String::from("| flag | meaning |\n|---|---|\n");
    for (_, word, meaning) in flag::TABLE {
        let _ = writeln!(flags, "| `{word}` | {meaning} |");
    }
    section("flags", &flags);

    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    let mut columns = String::new();
    for table in result_tables::all(sample.view()) {
        let _ = write!(
            columns,
            "<details><summary><code>{}.ecsv</code>: {}</summary>\n\n\
             | column | type | unit | meaning |\n|---|---|---|---|\n",
            table.name, table.description
        );
        for c in &table.columns {
            // Columns that a campaign carries through are its own.
            if c.description.starts_with("carried through") {
                continue;
            }
            let kind = match c.values {
                Values::Float(..) => "number",
                Values::Int(_) => "whole number",
                Values::Bool(_) => "true or false",
                Values::Text(_) => "text",
            };
            let _ = writeln!(
                columns,
                "| `{}` | {kind} | {} | {} |",
                c.name, c.unit, c.description
            );
        }
        columns.push_str("\n</details>\n\n");
    }
    section("columns", columns.trim_end());
}

#[test]
fn the_readme_names_every_file_of_a_result() {
    let text = fs::read_to_string(readme()).expect("a README");
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    for table in result_tables::all(sample.view()) {
        assert!(
            text.contains(&format!("| `{}.ecsv` |", table.name)),
            "{}",
            table.name
        );
    }
}

#[test]
fn the_table_of_modules_is_that_of_the_developers_page() {
    let text = fs::read_to_string(Path::new(env!("CARGO_MANIFEST_DIR")).join("DEVELOPERS.md"))
        .expect("a DEVELOPERS.md");
    for (module, _) in crate::layering::MAY_IMPORT {
        assert!(
            text.contains(&format!("\n| `{module}` |")),
            "{module} is not in DEVELOPERS.md"
        );
    }
}
