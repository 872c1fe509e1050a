//! The campaign file: TOML to a checked [`Campaign`] with all defaults filled in.

use std::collections::BTreeMap;
use std::ops::Range;
use std::path::{Path, PathBuf};

use toml::de::{DeTable, DeValue};

use super::dates::parse_date;
use super::fault::{FaultKind, Faults, nearest};
use super::files::{self, Disk, Files};
use super::instrument::{self, Draft};
use super::toml_table::{Keys, Rule, Source, number};
use crate::maths::units::gm_mas3_yr2;
use crate::model::campaign::{
    Campaign, CentralMass, CentralSource, Epoch, ExtendedMass, Foreground, KnownStars, ListSource,
    OneTable, SkyOrigin, StarMotions, Velocities,
};
use crate::model::note::Note;
use crate::model::time::JulianYear;

/// Years outside this range are taken for a slip of the pen.
const YEARS: (f64, f64) = (1600.0, 2200.0);
/// Radius within which a radial velocity is given to a star unless the campaign says otherwise.
const DEFAULT_RV_TOLERANCE_MAS: f64 = 15.0;

/// Reads a campaign file.
///
/// # Errors
/// All faults of the file: TOML syntax, unknown, missing or wrong keys, names given twice,
/// files that do not exist; each with line and character.
pub fn read_campaign(path: &Path) -> Result<(Campaign, Vec<Note>), Faults> {
    read_campaign_from(&Disk, path)
}

/// [`read_campaign`] from any source of files.
///
/// # Errors
/// As [`read_campaign`].
pub fn read_campaign_from(files: &dyn Files, path: &Path) -> Result<(Campaign, Vec<Note>), Faults> {
    let bytes = files::read(files, path)?;
    let text = files::text(&bytes, path)?;
    let source = Source {
        path,
        text,
        faults: Faults::default().into(),
    };
    let (document, errors) = DeTable::parse_recoverable(text);
    if !errors.is_empty() {
        for e in &errors {
            let message = e.message().replace('\n', "; ");
            source.fault(&e.span().unwrap_or(0..0), FaultKind::Toml { message });
        }
        return source.faults.into_inner().or(unreachable_campaign());
    }
    let top = Keys::new(
        &source,
        "the top level".to_owned(),
        0..0,
        document.get_ref(),
    );
    let mut reader = Reader {
        files,
        source: &source,
        folder: path.parent().unwrap_or(Path::new("")).to_owned(),
        notes: Vec::new(),
    };
    let campaign = reader.campaign(path, &top);
    top.finish();
    let notes = reader.notes;
    source.faults.into_inner().or((campaign, notes))
}

struct Reader<'a> {
    files: &'a dyn Files,
    source: &'a Source<'a>,
    folder: PathBuf,
    notes: Vec<Note>,
}

impl<'a> Reader<'a> {
    /// Wrong or missing values become placeholders: with any fault the result is dropped.
    fn campaign(&mut self, path: &Path, top: &Keys<'a>) -> Campaign {
        let (name, reference, origin) = self.field(top);
        let central = top
            .table("central_mass", "[central_mass]")
            .map(|keys| central_mass(keys));
        let stars = self.stars(top);
        let lists = top.table("lists", "[lists]").map(|keys| {
            let file = self.needed_file(&keys);
            let epoch_column = keys.text("epoch_column").map(|(t, _)| t);
            if !keys.has("epoch_column") {
                keys.missing(
                    "epoch_column",
                    "expected the column that holds each epoch's key",
                );
            }
            keys.finish();
            OneTable {
                file,
                epoch_column: epoch_column.unwrap_or_default(),
            }
        });
        let drafts = self.instruments(top);
        let epochs = self.epochs(top, &drafts, lists.is_some());
        let known_stars = top
            .table("known_stars", "[known_stars]")
            .map(|keys| self.known_stars(keys));
        let velocities = top.table("velocities", "[velocities]").map(|keys| {
            let file = self.needed_file(&keys);
            let tolerance_mas = keys
                .number("tolerance_mas", Rule::Positive)
                .unwrap_or(DEFAULT_RV_TOLERANCE_MAS);
            keys.finish();
            Velocities {
                file,
                tolerance_mas,
            }
        });
        if origin.is_none() {
            for (k, epoch) in epochs.iter().enumerate() {
                if epoch.settings.unit == crate::model::campaign::Unit::Deg {
                    self.source.fault(
                        &(0..0),
                        FaultKind::MissingKey {
                            table: "[field]".to_owned(),
                            key: "origin".to_owned(),
                            expected: format!(
                                "epoch {} (`{}`) is in degrees and needs a tangent point: \
                                 origin = {{ ra_deg = ..., dec_deg = ... }}",
                                k + 1,
                                epoch.name
                            ),
                        },
                    );
                    break;
                }
            }
        }
        Campaign {
            path: path.to_owned(),
            name,
            reference,
            origin,
            central,
            stars,
            instruments: drafts.into_iter().map(|d| d.settings).collect(),
            epochs,
            lists,
            known_stars,
            velocities,
        }
    }

    fn field(&self, top: &Keys<'a>) -> (String, JulianYear, Option<SkyOrigin>) {
        let Some(keys) = top.table("field", "[field]") else {
            if !top.has("field") {
                top.missing("[field]", "expected a table with name and reference_epoch");
            }
            return (String::new(), JulianYear(2000.0), None);
        };
        let name = keys.text("name").map(|(t, _)| t);
        if !keys.has("name") {
            keys.missing("name", "expected a text in quotes");
        }
        let reference = keys.needed_number("reference_epoch", Rule::Within(YEARS.0, YEARS.1));
        let origin = keys.table("origin", "origin").map(|o| {
            let ra_deg = o.needed_number("ra_deg", Rule::Within(-180.0, 360.0));
            let dec_deg = o.needed_number("dec_deg", Rule::Within(-90.0, 90.0));
            o.finish();
            SkyOrigin {
                ra_deg: ra_deg.unwrap_or(0.0),
                dec_deg: dec_deg.unwrap_or(0.0),
            }
        });
        keys.finish();
        (
            name.unwrap_or_default(),
            JulianYear(reference.unwrap_or(2000.0)),
            origin,
        )
    }

    fn stars(&self, top: &Keys<'a>) -> StarMotions {
        let mut stars = StarMotions {
            speed_mas_yr: 1.0,
            foreground: None,
        };
        let Some(keys) = top.table("stars", "[stars]") else {
            if !top.has("stars") {
                top.missing(
                    "[stars]",
                    "expected a table with speed_mas_yr, the velocity dispersion per axis",
                );
            }
            return stars;
        };
        if let Some(speed) = keys.needed_number("speed_mas_yr", Rule::Positive) {
            stars.speed_mas_yr = speed;
        }
        stars.foreground = keys.table("foreground", "foreground").and_then(|f| {
            let fraction = f.needed_number("fraction", Rule::Fraction);
            let speed_mas_yr = f.needed_number("speed_mas_yr", Rule::Positive);
            f.finish();
            Some(Foreground {
                fraction: fraction?,
                speed_mas_yr: speed_mas_yr?,
            })
        });
        keys.finish();
        stars
    }

    fn instruments(&self, top: &Keys<'a>) -> Vec<Draft> {
        let mut drafts = Vec::new();
        if let Some(all) = top.table("instrument", "[instrument]") {
            // In the order of the file, which is the order a person expects.
            let mut entries: Vec<_> = all.entries().collect();
            entries.sort_by_key(|(_, span, _)| span.start);
            for (name, span, value) in entries {
                match value.get_ref() {
                    DeValue::Table(map) => {
                        let title = format!("[instrument.{name}]");
                        let keys = Keys::new(self.source, title, value.span(), map);
                        drafts.push(instrument::read(name, keys));
                    }
                    _ => self.source.bad(
                        &span,
                        name,
                        "not a table".to_owned(),
                        "a table [instrument.NAME]",
                    ),
                }
            }
        } else if !top.has("instrument") {
            top.missing(
                "[instrument.NAME]",
                "expected at least one instrument with fwhm_mas",
            );
        }
        drafts
    }

    fn epochs(&mut self, top: &Keys<'a>, drafts: &[Draft], one_table: bool) -> Vec<Epoch> {
        let mut epochs = Vec::new();
        let Some(value) = top.get("epoch") else {
            top.missing("[[epoch]]", "expected one table for each list");
            return epochs;
        };
        let Some(array) = value.get_ref().as_array().filter(|a| !a.is_empty()) else {
            top.bad(value, "epoch", "tables [[epoch]], one for each list");
            return epochs;
        };
        let mut names = BTreeMap::new();
        let mut sources = BTreeMap::new();
        for (k, item) in array.iter().enumerate() {
            let title = format!("[[epoch]] number {}", k + 1);
            let Some(keys) = top.as_table("epoch", item, &title) else {
                continue;
            };
            let span = keys.span.clone();
            let epoch = self.epoch(keys, drafts, one_table);
            let Some((epoch, name_span, source_span)) = epoch else {
                continue;
            };
            self.once(&mut names, "epoch name", &epoch.name, &name_span);
            let (what, shown) = match &epoch.source {
                ListSource::File(f) => ("list file", f.display().to_string()),
                ListSource::Key(key) => ("key", key.clone()),
            };
            self.once(&mut sources, what, &shown, &source_span.unwrap_or(span));
            epochs.push(epoch);
        }
        if epochs.len() == 1 && array.len() == 1 {
            self.notes.push(Note {
                what: "one_epoch",
                place: self.source.path.display().to_string(),
                text: "only one epoch: there is nothing to link until a second is added".to_owned(),
            });
        }
        epochs
    }

    /// Refuses a value seen before.
    fn once(
        &self,
        seen: &mut BTreeMap<String, usize>,
        what: &str,
        value: &str,
        span: &Range<usize>,
    ) {
        let line = self.source.line(span);
        if let Some(first) = seen.get(value) {
            self.source.fault(
                span,
                FaultKind::Twice {
                    what: what.to_owned(),
                    value: value.to_owned(),
                    first: format!("in line {first}"),
                    expected: format!("expected a different {what} for every epoch"),
                },
            );
        } else {
            seen.insert(value.to_owned(), line);
        }
    }

    #[allow(clippy::type_complexity)]
    fn epoch(
        &self,
        keys: Keys<'a>,
        drafts: &[Draft],
        one_table: bool,
    ) -> Option<(Epoch, Range<usize>, Option<Range<usize>>)> {
        let time = self.time(&keys);
        let source = self.list_source(&keys, one_table);
        let given_name = keys.text("name");
        let instrument = self.epoch_instrument(&keys, drafts);
        let footprint = footprint(&keys);
        let mask = keys
            .text("mask")
            .map(|(file, span)| self.existing(&file, &span));
        let settings = instrument.map(|k| instrument::overridden(&drafts[k], &keys));
        if instrument.is_none() {
            // Ask for the keys that could be overridden, so that they are not called unknown.
            let _ = instrument::read_keys(Draft::new(""), &keys);
        }
        let span = keys.span.clone();
        keys.finish();
        let (source, source_span) = match source {
            Some((s, span)) => (s, Some(span)),
            None => (ListSource::Key(String::new()), None),
        };
        let name = given_name.as_ref().map_or_else(
            || match &source {
                ListSource::File(f) => f
                    .file_stem()
                    .map_or_else(String::new, |s| s.to_string_lossy().into_owned()),
                ListSource::Key(key) => key.clone(),
            },
            |(name, _)| name.clone(),
        );
        let name_span = given_name
            .map(|(_, span)| span)
            .or_else(|| source_span.clone())
            .unwrap_or(span);
        source_span.as_ref()?;
        Some((
            Epoch {
                name,
                time: time?,
                source,
                instrument: instrument?,
                settings: settings?,
                footprint,
                mask,
            },
            name_span,
            source_span,
        ))
    }

    fn time(&self, keys: &Keys<'a>) -> Option<JulianYear> {
        const KINDS: [&str; 3] = ["time", "mjd", "date"];
        let given: Vec<&str> = KINDS.into_iter().filter(|k| keys.has(k)).collect();
        if given.len() != 1 {
            let expected = "expected exactly one of time (Julian year), mjd, date (\"1996-05-08\")";
            if given.is_empty() {
                keys.missing("time", expected);
            } else {
                keys.clash(&given, expected);
            }
            return None;
        }
        let mjd_of = |yr: f64| JulianYear(yr).mjd();
        match given[0] {
            "time" => keys
                .number("time", Rule::Within(YEARS.0, YEARS.1))
                .map(JulianYear),
            "mjd" => keys
                .number(
                    "mjd",
                    Rule::Within(mjd_of(YEARS.0).round(), mjd_of(YEARS.1).round()),
                )
                .map(JulianYear::from_mjd),
            _ => {
                let value = keys.get("date")?;
                let text = match value.get_ref() {
                    DeValue::String(s) => s.to_string(),
                    DeValue::Datetime(d) => d.to_string(),
                    _ => String::new(),
                };
                let time = parse_date(&text);
                if time.is_none() {
                    keys.bad(
                        value,
                        "date",
                        "a date as \"1996-05-08\" or \"1996-05-08T03:20:00\" (UTC)",
                    );
                }
                time
            }
        }
    }

    fn list_source(&self, keys: &Keys<'a>, one_table: bool) -> Option<(ListSource, Range<usize>)> {
        let (file, key) = (keys.has("file"), keys.has("key"));
        match (file, key) {
            (true, true) => {
                keys.clash(&["file", "key"], "expected one of the two");
                None
            }
            (true, false) => {
                let (file, span) = keys.text("file")?;
                Some((ListSource::File(self.existing(&file, &span)), span))
            }
            (false, true) if one_table => {
                let value = keys.get("key")?;
                let text = match value.get_ref() {
                    DeValue::String(s) => s.to_string(),
                    DeValue::Integer(i) => i.as_str().to_owned(),
                    DeValue::Float(f) => f.as_str().to_owned(),
                    DeValue::Datetime(d) => d.to_string(),
                    _ => {
                        keys.bad(value, "key", "the value in the epoch column");
                        return None;
                    }
                };
                Some((ListSource::Key(text), value.span()))
            }
            (false, true) => {
                keys.missing("file", "`key` works only with a [lists] table at the top");
                None
            }
            (false, false) => {
                keys.missing(
                    if one_table { "key" } else { "file" },
                    "expected the list of this epoch",
                );
                None
            }
        }
    }

    fn epoch_instrument(&self, keys: &Keys<'a>, drafts: &[Draft]) -> Option<usize> {
        if !keys.has("instrument") {
            // One instrument needs no naming.
            if drafts.len() == 1 {
                return Some(0);
            }
            keys.missing(
                "instrument",
                "expected the name of an [instrument.NAME] table",
            );
            return None;
        }
        let (name, span) = keys.text("instrument")?;
        let hit = drafts.iter().position(|d| d.settings.name == name);
        if hit.is_none() {
            let known: Vec<String> = drafts.iter().map(|d| d.settings.name.clone()).collect();
            self.source.fault(
                &span,
                FaultKind::UnknownName {
                    what: "instrument".to_owned(),
                    nearest: nearest(&name, known.iter().map(String::as_str)),
                    found: name,
                    known,
                },
            );
        }
        hit
    }

    fn known_stars(&self, keys: Keys<'a>) -> KnownStars {
        let file = self.needed_file(&keys);
        let uses = keys
            .texts("use")
            .unwrap_or_else(|| vec![("names".to_owned(), 0..0)]);
        const WORDS: [&str; 3] = ["names", "priors", "frame"];
        for (word, span) in &uses {
            if !WORDS.contains(&word.as_str()) {
                self.source.fault(
                    span,
                    FaultKind::UnknownName {
                        what: "use".to_owned(),
                        found: word.clone(),
                        nearest: nearest(word, WORDS),
                        known: WORDS.map(str::to_owned).to_vec(),
                    },
                );
            }
        }
        keys.finish();
        let has = |word: &str| uses.iter().any(|(w, _)| w == word);
        KnownStars {
            file,
            for_names: has("names"),
            for_priors: has("priors"),
            for_frame: has("frame"),
        }
    }

    fn needed_file(&self, keys: &Keys<'a>) -> PathBuf {
        if !keys.has("file") {
            keys.missing("file", "expected a path, relative to the campaign file");
        }
        keys.text("file")
            .map(|(file, span)| self.existing(&file, &span))
            .unwrap_or_default()
    }

    /// Path against the campaign's folder; a fault when nothing is there.
    fn existing(&self, file: &str, span: &Range<usize>) -> PathBuf {
        let path = self.folder.join(file);
        if !self.files.is_file(&path) {
            let kind = match files::no_file(self.files, &path) {
                FaultKind::NoFile { nearest } => FaultKind::BadValue {
                    key: "file".to_owned(),
                    found: format!("\"{file}\""),
                    expected: format!(
                        "an existing file (none at {}{})",
                        path.display(),
                        nearest.map_or_else(String::new, |n| format!("; did you mean `{n}`?"))
                    ),
                },
                other => other,
            };
            self.source.fault(span, kind);
        }
        path
    }
}

fn central_mass(keys: Keys<'_>) -> CentralMass {
    let mass_msun = keys.number("mass_msun", Rule::Positive);
    let distance_pc = keys.number("distance_pc", Rule::Positive);
    let gm = keys.number("gm_mas3_yr2", Rule::Positive);
    let gm_mas3_yr2 = match (keys.has("mass_msun"), keys.has("gm_mas3_yr2")) {
        (true, true) => {
            keys.clash(
                &["mass_msun", "gm_mas3_yr2"],
                "expected mass_msun with distance_pc, or gm_mas3_yr2",
            );
            1.0
        }
        (true, false) => {
            if !keys.has("distance_pc") {
                keys.missing("distance_pc", "mass_msun needs it");
            }
            match (mass_msun, distance_pc) {
                (Some(m), Some(d)) => gm_mas3_yr2(m, d),
                _ => 1.0,
            }
        }
        (false, true) => gm.unwrap_or(1.0),
        (false, false) => {
            keys.missing(
                "mass_msun",
                "expected mass_msun with distance_pc, or gm_mas3_yr2",
            );
            1.0
        }
    };
    let optional = |key, rule| keys.number(key, rule).unwrap_or(0.0);
    let central = CentralMass {
        mass_msun,
        distance_pc,
        gm_mas3_yr2,
        gm_err_mas3_yr2: keys.number("gm_err_mas3_yr2", Rule::NotNegative),
        x_mas: optional("x_mas", Rule::Finite),
        y_mas: optional("y_mas", Rule::Finite),
        x_err_mas: optional("x_err_mas", Rule::NotNegative),
        y_err_mas: optional("y_err_mas", Rule::NotNegative),
        vx_mas_yr: optional("vx_mas_yr", Rule::Finite),
        vy_mas_yr: optional("vy_mas_yr", Rule::Finite),
        rv_km_s: keys.number("rv_km_s", Rule::Finite),
        rv_err_km_s: keys.number("rv_err_km_s", Rule::NotNegative),
        source: keys.table("source", "source").map(|s| {
            let mag = s.needed_number("mag", Rule::Finite);
            let mag_scatter = s.number("mag_scatter", Rule::NotNegative);
            s.finish();
            CentralSource {
                mag: mag.unwrap_or(0.0),
                mag_scatter: mag_scatter.unwrap_or(0.0),
            }
        }),
        light_time: keys.flag("light_time").unwrap_or(false),
        relativity: keys.flag("relativity").unwrap_or(false),
        extended: keys.table("extended", "extended").map(|e| {
            let mass = e.needed_number("mass_msun", Rule::Positive);
            let inside = e.needed_number("inside_pc", Rule::Positive);
            let slope = e.needed_number("slope", Rule::Within(0.0, 2.99));
            e.finish();
            ExtendedMass {
                mass_msun: mass.unwrap_or(1.0),
                inside_pc: inside.unwrap_or(1.0),
                slope: slope.unwrap_or(1.0),
            }
        }),
    };
    let needs_distance = [
        ("light_time", central.light_time),
        ("relativity", central.relativity),
        ("extended", central.extended.is_some()),
    ];
    for (key, wanted) in needs_distance {
        if wanted && !keys.has("distance_pc") {
            keys.missing("distance_pc", &format!("`{key}` needs it"));
        }
    }
    keys.finish();
    central
}

fn footprint(keys: &Keys<'_>) -> Option<Vec<[f64; 2]>> {
    const EXPECTED: &str = "three or more corners [[x, y], ...] in the list's unit";
    let value = keys.get("footprint")?;
    let corners: Option<Vec<[f64; 2]>> = value.get_ref().as_array().and_then(|array| {
        array
            .iter()
            .map(|corner| {
                let pair = corner.get_ref().as_array().filter(|p| p.len() == 2)?;
                let mut xy = [0.0; 2];
                for (slot, v) in xy.iter_mut().zip(pair.iter()) {
                    *slot = number(v.get_ref()).filter(|v| v.is_finite())?;
                }
                Some(xy)
            })
            .collect()
    });
    let corners = corners.filter(|c| c.len() >= 3);
    if corners.is_none() {
        keys.bad(value, "footprint", EXPECTED);
    }
    corners
}

/// Stands in for a campaign that could not be read; never returned, since faults exist.
fn unreachable_campaign() -> (Campaign, Vec<Note>) {
    (
        Campaign {
            path: PathBuf::new(),
            name: String::new(),
            reference: JulianYear(2000.0),
            origin: None,
            central: None,
            stars: StarMotions {
                speed_mas_yr: 1.0,
                foreground: None,
            },
            instruments: Vec::new(),
            epochs: Vec::new(),
            lists: None,
            known_stars: None,
            velocities: None,
        },
        Vec::new(),
    )
}
