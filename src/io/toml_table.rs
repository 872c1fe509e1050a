//! One table of a TOML file, read key by key with faults collected.
//!
//! Every getter remembers the key it asked for, so [`Keys::finish`] knows which keys of the
//! table nobody wanted: the list of known keys cannot drift from the code that reads them.

use std::cell::RefCell;
use std::ops::Range;
use std::path::Path;

use toml::Spanned;
use toml::de::{DeTable, DeValue};

use super::fault::{FaultKind, Faults, Place, nearest};

/// The file being read, with the faults found so far.
pub(super) struct Source<'a> {
    pub path: &'a Path,
    pub text: &'a str,
    pub faults: RefCell<Faults>,
}

impl Source<'_> {
    /// Line and character of a byte offset.
    pub fn place(&self, span: &Range<usize>) -> Place {
        let at = span.start.min(self.text.len());
        let before = &self.text.as_bytes()[..at];
        let line_start = memchr::memrchr(b'\n', before).map_or(0, |k| k + 1);
        let character = 1 + String::from_utf8_lossy(&before[line_start..])
            .chars()
            .count();
        Place {
            character: Some(character),
            ..Place::line(self.path, self.line(span))
        }
    }

    pub fn line(&self, span: &Range<usize>) -> usize {
        let at = span.start.min(self.text.len());
        1 + memchr::memchr_iter(b'\n', &self.text.as_bytes()[..at]).count()
    }

    pub fn fault(&self, span: &Range<usize>, kind: FaultKind) {
        self.faults.borrow_mut().push(self.place(span), kind);
    }

    pub fn bad(&self, span: &Range<usize>, key: &str, found: String, expected: &str) {
        self.fault(
            span,
            FaultKind::BadValue {
                key: key.to_owned(),
                found,
                expected: expected.to_owned(),
            },
        );
    }
}

/// What a number must satisfy.
#[derive(Clone, Copy)]
pub(super) enum Rule {
    Finite,
    Positive,
    NotNegative,
    /// 0..=1.
    Fraction,
    /// lo..=hi.
    Within(f64, f64),
}

impl Rule {
    fn holds(self, v: f64) -> bool {
        v.is_finite()
            && match self {
                Self::Finite => true,
                Self::Positive => v > 0.0,
                Self::NotNegative => v >= 0.0,
                Self::Fraction => (0.0..=1.0).contains(&v),
                Self::Within(lo, hi) => (lo..=hi).contains(&v),
            }
    }
    fn words(self) -> String {
        match self {
            Self::Finite => "a finite number".to_owned(),
            Self::Positive => "a number above 0".to_owned(),
            Self::NotNegative => "a number of 0 or more".to_owned(),
            Self::Fraction => "a number from 0 to 1".to_owned(),
            Self::Within(lo, hi) => format!("a number from {lo} to {hi}"),
        }
    }
}

pub(super) type Value<'a> = Spanned<DeValue<'a>>;

/// A table, with the keys asked for so far.
pub(super) struct Keys<'a> {
    pub source: &'a Source<'a>,
    /// As a person writes it: `[field]`, `[[epoch]] number 3`.
    pub name: String,
    pub span: Range<usize>,
    map: &'a DeTable<'a>,
    asked: RefCell<Vec<&'static str>>,
}

impl<'a> Keys<'a> {
    pub fn new(
        source: &'a Source<'a>,
        name: String,
        span: Range<usize>,
        map: &'a DeTable<'a>,
    ) -> Self {
        Self {
            source,
            name,
            span,
            map,
            asked: RefCell::default(),
        }
    }

    /// The value of a key.
    pub fn get(&self, key: &'static str) -> Option<&'a Value<'a>> {
        self.asked.borrow_mut().push(key);
        self.map.get(key)
    }

    pub fn missing(&self, key: &str, expected: &str) {
        self.source.fault(
            &self.span,
            FaultKind::MissingKey {
                table: self.name.clone(),
                key: key.to_owned(),
                expected: expected.to_owned(),
            },
        );
    }

    pub fn number(&self, key: &'static str, rule: Rule) -> Option<f64> {
        let value = self.get(key)?;
        self.check_number(key, value, rule)
    }

    pub fn check_number(&self, key: &str, value: &Value<'a>, rule: Rule) -> Option<f64> {
        match number(value.get_ref()) {
            Some(v) if rule.holds(v) => Some(v),
            _ => {
                self.bad(value, key, &rule.words());
                None
            }
        }
    }

    pub fn needed_number(&self, key: &'static str, rule: Rule) -> Option<f64> {
        if !self.has(key) {
            self.missing(key, &format!("expected {}", rule.words()));
        }
        self.number(key, rule)
    }

    pub fn text(&self, key: &'static str) -> Option<(String, Range<usize>)> {
        let value = self.get(key)?;
        match value.get_ref() {
            DeValue::String(s) if !s.trim().is_empty() => Some((s.to_string(), value.span())),
            _ => {
                self.bad(value, key, "a text in quotes");
                None
            }
        }
    }

    pub fn flag(&self, key: &'static str) -> Option<bool> {
        let value = self.get(key)?;
        let found = value.get_ref().as_bool();
        if found.is_none() {
            self.bad(value, key, "true or false");
        }
        found
    }

    /// One of a few words.
    pub fn choice<T: Copy>(&self, key: &'static str, words: &[(&str, T)]) -> Option<T> {
        let value = self.get(key)?;
        let word = value.get_ref().as_str().unwrap_or("");
        let hit = words.iter().find(|(w, _)| *w == word).map(|&(_, t)| t);
        if hit.is_none() {
            let known: Vec<&str> = words.iter().map(|&(w, _)| w).collect();
            let hint = nearest(word, known.iter().copied())
                .map_or_else(String::new, |n| format!("; did you mean \"{n}\"?"));
            self.bad(
                value,
                key,
                &format!("one of \"{}\"{hint}", known.join("\", \"")),
            );
        }
        hit
    }

    pub fn table(&self, key: &'static str, name: &str) -> Option<Keys<'a>> {
        let value = self.get(key)?;
        self.as_table(key, value, name)
    }

    pub fn as_table(&self, key: &str, value: &'a Value<'a>, name: &str) -> Option<Keys<'a>> {
        match value.get_ref() {
            DeValue::Table(map) => Some(Keys::new(self.source, name.to_owned(), value.span(), map)),
            _ => {
                self.bad(value, key, "a table");
                None
            }
        }
    }

    pub fn texts(&self, key: &'static str) -> Option<Vec<(String, Range<usize>)>> {
        let value = self.get(key)?;
        let all = value.get_ref().as_array().and_then(|array| {
            array
                .iter()
                .map(|v| Some((v.get_ref().as_str()?.to_owned(), v.span())))
                .collect()
        });
        if all.is_none() {
            self.bad(value, key, "a list of texts");
        }
        all
    }

    pub fn has(&self, key: &'static str) -> bool {
        self.asked.borrow_mut().push(key);
        self.map.contains_key(key)
    }

    pub fn entries(&self) -> impl Iterator<Item = (&'a str, Range<usize>, &'a Value<'a>)> {
        self.map
            .iter()
            .map(|(k, v)| (k.get_ref().as_ref(), k.span(), v))
    }

    /// Says that keys exclude each other, at the place of the second.
    pub fn clash(&self, keys: &[&str], expected: &str) {
        let span = self
            .map
            .iter()
            .filter(|(k, _)| keys.contains(&k.get_ref().as_ref()))
            .map(|(k, _)| k.span())
            .max_by_key(|s| s.start)
            .unwrap_or_else(|| self.span.clone());
        self.source.fault(
            &span,
            FaultKind::Clash {
                table: self.name.clone(),
                keys: keys.iter().map(|&k| k.to_owned()).collect(),
                expected: expected.to_owned(),
            },
        );
    }

    pub fn bad(&self, value: &Value<'a>, key: &str, expected: &str) {
        let found = show(value, self.source.text);
        self.source.bad(&value.span(), key, found, expected);
    }

    /// Reports every key of the table that was never asked for.
    pub fn finish(self) {
        let mut known = self.asked.into_inner();
        known.sort_unstable();
        known.dedup();
        for (key, _) in self.map {
            let word = key.get_ref().as_ref();
            if !known.contains(&word) {
                self.source.fault(
                    &key.span(),
                    FaultKind::UnknownKey {
                        table: self.name.clone(),
                        key: word.to_owned(),
                        nearest: nearest(word, known.iter().copied()),
                        known: known.iter().map(|&k| k.to_owned()).collect(),
                    },
                );
            }
        }
    }
}

/// A whole or decimal number; `nan` and `inf` come through and are refused by the rules.
pub(super) fn number(value: &DeValue<'_>) -> Option<f64> {
    match value {
        DeValue::Float(f) => f.as_str().parse().ok(),
        DeValue::Integer(i) if i.radix() == 10 => i.as_str().parse().ok(),
        DeValue::Integer(i) => i64::from_str_radix(i.as_str(), i.radix())
            .ok()
            .map(|v| v as f64),
        _ => None,
    }
}

/// The value as it stands in the file, cut short.
fn show(value: &Value<'_>, text: &str) -> String {
    const LONGEST: usize = 40;
    let span = value.span();
    let raw = text.get(span).unwrap_or("");
    let line = raw.lines().next().unwrap_or("");
    if raw.chars().count() > LONGEST {
        let head: String = line.chars().take(LONGEST - 3).collect();
        format!("{head}...")
    } else {
        line.to_owned()
    }
}
