//! Rulings of a human (`rulings.toml`): read, bound to detections and checked against each
//! other. Every fault carries file, line and character; a ruling that names nothing or
//! contradicts another is a fault, never passed over.

use std::ops::Range;
use std::path::Path;

use toml::de::{DeTable, DeValue};

use super::fault::{FaultKind, Faults, nearest};
use super::files::{self, Disk, Files};
use super::toml_table::{Keys, Source};
use crate::model::campaign::Campaign;
use crate::model::detection::RawList;
use crate::model::ruling::{Decision, DetectionAt, Ruling};

/// Reads a rulings file.
///
/// # Errors
/// All faults: TOML syntax, unknown or missing keys, epochs and detections that do not exist,
/// contradictions.
pub fn read_rulings(
    path: &Path,
    campaign: &Campaign,
    lists: &[RawList],
) -> Result<Vec<Ruling>, Faults> {
    read_rulings_from(&Disk, path, campaign, lists)
}

/// [`read_rulings`] from any source of files.
///
/// # Errors
/// As [`read_rulings`].
pub fn read_rulings_from(
    files: &dyn Files,
    path: &Path,
    campaign: &Campaign,
    lists: &[RawList],
) -> Result<Vec<Ruling>, Faults> {
    let bytes = files::read(files, path)?;
    let text = files::text(&bytes, path)?;
    let source = Source {
        path,
        text,
        faults: Faults::default().into(),
    };
    let (document, errors) = DeTable::parse_recoverable(text);
    for e in &errors {
        let message = e.message().replace('\n', "; ");
        source.fault(&e.span().unwrap_or(0..0), FaultKind::Toml { message });
    }
    if !errors.is_empty() {
        return source.faults.into_inner().or(Vec::new());
    }
    let top = Keys::new(
        &source,
        "the top level".to_owned(),
        0..0,
        document.get_ref(),
    );
    let reader = Reader {
        source: &source,
        campaign,
        lists,
    };
    let mut found: Vec<(Range<usize>, Ruling)> = Vec::new();
    for kind in ["together", "apart", "discard", "name"] {
        reader.rulings(&top, kind, &mut found);
    }
    top.finish();
    found.sort_by_key(|(span, _)| span.start);
    if source.faults.borrow().is_empty() {
        check(&source, &found);
    }
    let rulings = found.into_iter().map(|(_, r)| r).collect();
    source.faults.into_inner().or(rulings)
}

struct Reader<'a> {
    source: &'a Source<'a>,
    campaign: &'a Campaign,
    lists: &'a [RawList],
}

impl<'a> Reader<'a> {
    /// Every `[[kind]]` of the file.
    fn rulings(&self, top: &Keys<'a>, kind: &'static str, found: &mut Vec<(Range<usize>, Ruling)>) {
        let Some(value) = top.get(kind) else { return };
        let DeValue::Array(items) = value.get_ref() else {
            top.bad(value, kind, &format!("an array of tables: [[{kind}]]"));
            return;
        };
        for (k, item) in items.iter().enumerate() {
            let name = format!("[[{kind}]] number {}", k + 1);
            let Some(keys) = top.as_table(kind, item, &name) else {
                continue;
            };
            let decision = self.decision(&keys, kind);
            let reason = keys.text("reason").map(|(t, _)| t);
            // A name needs no grounds, a constraint does.
            if !keys.has("reason") && kind != "name" {
                keys.missing("reason", "say why, for those who read the result");
            }
            let author = keys.text("author").map(|(t, _)| t);
            let span = keys.span.clone();
            keys.finish();
            if let Some(decision) = decision {
                let ruling = Ruling {
                    decision,
                    reason: reason.unwrap_or_default(),
                    author,
                    line: self.source.line(&span),
                };
                found.push((span, ruling));
            }
        }
    }

    fn decision(&self, keys: &Keys<'a>, kind: &str) -> Option<Decision> {
        match kind {
            "together" => self.several(keys).map(Decision::Together),
            "apart" => self.several(keys).map(Decision::Apart),
            "discard" => self.one(keys).map(Decision::Discard),
            _ => {
                let detection = self.one(keys);
                let name = keys.text("name");
                if !keys.has("name") {
                    keys.missing("name", "expected the name of the star");
                }
                let (name, span) = name?;
                if name.contains([';', ',', '"', '\n']) {
                    let expected = "a name without semicolon, comma, quote or line break";
                    self.source
                        .bad(&span, "name", format!("\"{name}\""), expected);
                    return None;
                }
                Some(Decision::Name(detection?, name))
            }
        }
    }

    fn one(&self, keys: &Keys<'a>) -> Option<DetectionAt> {
        let text = keys.text("detection");
        if !keys.has("detection") {
            keys.missing("detection", "expected \"epoch name:id\"");
        }
        let (text, span) = text?;
        self.detection(&text, &span)
    }

    fn several(&self, keys: &Keys<'a>) -> Option<Vec<DetectionAt>> {
        let texts = keys.texts("detections");
        if !keys.has("detections") {
            keys.missing("detections", "expected two or more of \"epoch name:id\"");
        }
        let texts = texts?;
        let mut all: Vec<DetectionAt> = Vec::new();
        let mut sound = true;
        for (text, span) in &texts {
            match self.detection(text, span) {
                Some(d) if all.contains(&d) => {
                    self.source.fault(
                        span,
                        FaultKind::Twice {
                            what: "detection".to_owned(),
                            value: text.clone(),
                            first: "in the same ruling".to_owned(),
                            expected: "each once".to_owned(),
                        },
                    );
                    sound = false;
                }
                Some(d) => all.push(d),
                None => sound = false,
            }
        }
        if sound && all.len() < 2 {
            let found = format!("{} detection(s)", all.len());
            self.source
                .bad(&keys.span, "detections", found, "two or more detections");
            sound = false;
        }
        sound.then_some(all)
    }

    /// `epoch name:id`. Names and identifiers may hold colons themselves: the longest epoch
    /// name that fits counts.
    fn detection(&self, text: &str, span: &Range<usize>) -> Option<DetectionAt> {
        let epochs = &self.campaign.epochs;
        let fit = text
            .match_indices(':')
            .map(|(at, _)| (text[..at].trim(), text[at + 1..].trim()))
            .rev()
            .find_map(|(name, id)| {
                let e = epochs.iter().position(|e| e.name == name)?;
                Some((e, id))
            });
        let Some((epoch, id)) = fit else {
            let Some((name, _)) = text.split_once(':') else {
                self.source.bad(
                    span,
                    "detection",
                    format!("\"{text}\""),
                    "\"epoch name:id\"",
                );
                return None;
            };
            let known: Vec<&str> = epochs.iter().map(|e| e.name.as_str()).collect();
            self.source.fault(
                span,
                FaultKind::UnknownName {
                    what: "epoch".to_owned(),
                    found: name.trim().to_owned(),
                    nearest: nearest(name.trim(), known.iter().copied()),
                    known: known.iter().map(|&k| k.to_owned()).collect(),
                },
            );
            return None;
        };
        let ids = &self.lists[epoch].ids;
        let mut text = String::new();
        let row = (0..ids.len()).find(|&row| {
            text.clear();
            ids.push(row, &mut text);
            text == id
        });
        if row.is_none() {
            self.source.fault(
                span,
                FaultKind::UnknownName {
                    what: format!("detection of epoch `{}`", epochs[epoch].name),
                    found: id.to_owned(),
                    nearest: None,
                    known: Vec::new(),
                },
            );
        }
        Some(DetectionAt { epoch, row: row? })
    }
}

/// Detections joined by `together`, as a forest.
#[derive(Default)]
struct Joined {
    members: Vec<DetectionAt>,
    parent: Vec<usize>,
}

impl Joined {
    fn index(&mut self, d: DetectionAt) -> usize {
        if let Some(k) = self.members.iter().position(|m| *m == d) {
            return k;
        }
        self.members.push(d);
        self.parent.push(self.parent.len());
        self.parent.len() - 1
    }
    fn root(&self, mut k: usize) -> usize {
        while self.parent[k] != k {
            k = self.parent[k];
        }
        k
    }
    fn root_of(&mut self, d: DetectionAt) -> usize {
        let k = self.index(d);
        self.root(k)
    }
    fn join(&mut self, a: DetectionAt, b: DetectionAt) {
        let (a, b) = (self.root_of(a), self.root_of(b));
        self.parent[b] = a;
    }
}

/// Finds rulings that cannot all hold.
fn check(source: &Source<'_>, found: &[(Range<usize>, Ruling)]) {
    let clash = |span: &Range<usize>, line: usize, reason: &str| {
        source.fault(
            span,
            FaultKind::Contradiction {
                line,
                reason: reason.to_owned(),
            },
        );
    };
    let mut joined = Joined::default();
    let mut discarded: Vec<(DetectionAt, usize)> = Vec::new();
    for (_, ruling) in found {
        match &ruling.decision {
            Decision::Together(all) => all.windows(2).for_each(|w| joined.join(w[0], w[1])),
            Decision::Discard(d) => discarded.push((*d, ruling.line)),
            _ => {}
        }
    }
    // The star of a ruling that joins, one line per star, for messages.
    let joiner = |joined: &mut Joined, d: DetectionAt| {
        let root = joined.root_of(d);
        found
            .iter()
            .filter_map(|(_, r)| match &r.decision {
                Decision::Together(all) if joined.root_of(all[0]) == root => Some(r.line),
                _ => None,
            })
            .next()
            .unwrap_or(0)
    };
    let mut names: Vec<(usize, &str, usize)> = Vec::new();
    for (span, ruling) in found {
        let line = ruling.line;
        let uses: &[DetectionAt] = match &ruling.decision {
            Decision::Together(all) | Decision::Apart(all) => all,
            Decision::Name(d, _) => std::slice::from_ref(d),
            Decision::Discard(_) => &[],
        };
        for d in uses {
            if let Some((_, other)) = discarded.iter().find(|(x, _)| x == d) {
                clash(
                    span,
                    *other,
                    "a detection that is discarded belongs to no star",
                );
            }
        }
        match &ruling.decision {
            Decision::Together(all) => {
                let root = joined.root_of(all[0]);
                let mut star: Vec<DetectionAt> = Vec::new();
                for k in 0..joined.members.len() {
                    if joined.root(k) == root {
                        star.push(joined.members[k]);
                    }
                }
                star.sort_unstable();
                let twice = star.windows(2).find(|w| w[0].epoch == w[1].epoch);
                // Said once, where the second of the two is brought in.
                if let Some(w) = twice
                    && all.contains(&w[1])
                {
                    let other = joiner(&mut joined, w[0]);
                    let reason = "a star has one detection in an epoch; discard the other, or leave it to the run";
                    clash(span, other, reason);
                }
            }
            Decision::Apart(all) => {
                for (k, &a) in all.iter().enumerate() {
                    for &b in &all[k + 1..] {
                        if joined.root_of(a) == joined.root_of(b) {
                            let other = joiner(&mut joined, a);
                            clash(
                                span,
                                other,
                                "there the detections are the same star, here they are not",
                            );
                        }
                    }
                }
            }
            Decision::Name(d, name) => {
                let root = joined.root_of(*d);
                for &(other_root, other_name, other_line) in &names {
                    if other_root == root && other_name != name {
                        clash(span, other_line, "one star cannot have two names");
                    }
                    if other_root != root && other_name == name {
                        let reason = "two stars cannot have one name; if they are one star, say so with [[together]]";
                        clash(span, other_line, reason);
                    }
                }
                names.push((root, name, line));
            }
            Decision::Discard(_) => {}
        }
    }
}
