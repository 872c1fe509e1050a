//! The only place that turns findings into words on a terminal.
//!
//! Standard output carries results (a summary, a table, JSON); everything else goes to
//! standard error. Meaning never rests on colour alone.

use std::io::{self, IsTerminal, Write};

use asterskein::model::note::Note;
use serde_json::{Map, Value};

use super::args::Global;

/// Notes of one kind shown one by one; more are counted.
const SHOWN_OF_A_KIND: usize = 5;

/// What may be said, and how.
#[derive(Clone, Debug)]
pub struct Printer {
    pub quiet: bool,
    pub verbose: bool,
    pub json: bool,
    /// Progress may be drawn, not only written.
    pub draws: bool,
    colour: bool,
}

impl Printer {
    pub fn new(global: &Global) -> Self {
        let terminal = io::stderr().is_terminal();
        // no-color.org: any value but the empty one.
        let no_colour = std::env::var_os("NO_COLOR").is_some_and(|v| !v.is_empty());
        Self {
            quiet: global.quiet,
            verbose: global.verbose,
            json: global.json,
            draws: terminal,
            colour: terminal && !no_colour,
        }
    }

    /// Something about to be done or just done.
    pub fn talk(&self, text: &str) {
        if !self.quiet {
            say(&mut io::stderr(), text);
        }
    }

    pub fn warning(&self, text: &str) {
        if !self.quiet {
            say(
                &mut io::stderr(),
                &format!("{}: {text}", self.painted("warning", "33")),
            );
        }
    }

    /// An error with its causes, one per line.
    pub fn error(&self, error: &anyhow::Error) {
        let mut text = format!("{}: {error}", self.painted("error", "31"));
        let mut shown = error.to_string();
        for cause in error.chain().skip(1) {
            let cause = cause.to_string();
            // Library errors often repeat their source; once is enough.
            if !shown.contains(&cause) {
                text.push_str(&format!("\n  because: {cause}"));
                shown = cause;
            }
        }
        say(&mut io::stderr(), &text);
    }

    /// Findings that did not stop the run; many of one kind are shortened.
    pub fn notes(&self, notes: &[Note]) {
        let mut done: Vec<&str> = Vec::new();
        for note in notes {
            if done.contains(&note.what) {
                continue;
            }
            done.push(note.what);
            let alike: Vec<&Note> = notes.iter().filter(|n| n.what == note.what).collect();
            let shown = if self.verbose {
                alike.len()
            } else {
                SHOWN_OF_A_KIND
            };
            for n in alike.iter().take(shown) {
                self.warning(&words(n));
            }
            if alike.len() > shown {
                self.warning(&format!(
                    "{} more of this kind ({}); --verbose shows all",
                    alike.len() - shown,
                    note.what
                ));
            }
        }
    }

    /// Data on standard output, even when quiet.
    pub fn data(&self, text: &str) {
        say(&mut io::stdout(), text.strip_suffix('\n').unwrap_or(text));
    }

    /// The summary that ends a command.
    pub fn summary(&self, summary: &Summary) {
        if self.json {
            let object: Map<String, Value> = summary
                .lines
                .iter()
                .map(|l| (l.key.to_owned(), l.value.clone()))
                .collect();
            self.data(&Value::Object(object).to_string());
        } else if !self.quiet {
            self.data(&summary.to_string());
        }
    }

    fn painted(&self, word: &str, code: &str) -> String {
        if self.colour {
            format!("\x1b[1;{code}m{word}\x1b[0m")
        } else {
            word.to_owned()
        }
    }
}

/// A note in words.
fn words(note: &Note) -> String {
    if note.place.is_empty() {
        note.text.clone()
    } else {
        format!("{}: {}", note.place, note.text)
    }
}

/// Writes a line; a closed pipe (`| head`) is no error.
fn say(to: &mut dyn Write, text: &str) {
    let _ = writeln!(to, "{text}");
}

/// Lines of a summary: each for people and for programs.
#[derive(Debug, Default)]
pub struct Summary {
    lines: Vec<Line>,
}

#[derive(Debug)]
struct Line {
    key: &'static str,
    label: &'static str,
    text: String,
    value: Value,
}

impl Summary {
    /// Adds a line: its name in JSON, its label, its text for people and its value.
    pub fn line(
        &mut self,
        key: &'static str,
        label: &'static str,
        text: impl Into<String>,
        value: impl Into<Value>,
    ) {
        self.lines.push(Line {
            key,
            label,
            text: text.into(),
            value: value.into(),
        });
    }
}

impl std::fmt::Display for Summary {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        let shown = || self.lines.iter().filter(|l| !l.label.is_empty());
        let width = shown().map(|l| l.label.chars().count()).max().unwrap_or(0);
        for line in shown() {
            writeln!(f, "{:width$}  {}", line.label, line.text)?;
        }
        Ok(())
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_summary_lines_up() {
        let mut s = Summary::default();
        s.line("tracks", "tracks", "12", 12);
        s.line("hidden", "", "", 1);
        s.line("memberships", "memberships", "340", 340);
        assert_eq!(s.to_string(), "tracks       12\nmemberships  340\n");
    }
}
