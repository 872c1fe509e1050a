//! Lists of claimed objects (CSV with a header; lines that begin with `#` are passed over).
//!
//! A bad row refuses its claim, not the list: every other claim of the file is still read.

use std::collections::BTreeMap;
use std::path::Path;

use super::fault::{FaultKind, Faults, Place, nearest};
use super::files::{self, Disk, Files};
use crate::model::campaign::Campaign;
use crate::model::claim::{Claim, ClaimBody, ClaimOrbit, ClaimPoint};
use crate::model::detection::RawList;
use crate::model::result::Solution;

const COLUMNS: [&str; 18] = [
    "claim",
    "epoch",
    "time_yr",
    "id",
    "x_mas",
    "y_mas",
    "x_err_mas",
    "y_err_mas",
    "mag",
    "mag_err",
    "track",
    "semi_major_mas",
    "period_yr",
    "eccentricity",
    "inclination_deg",
    "node_deg",
    "arg_pericentre_deg",
    "t_pericentre_yr",
];
const ELEMENTS: [&str; 6] = [
    "semi_major_mas",
    "eccentricity",
    "inclination_deg",
    "node_deg",
    "arg_pericentre_deg",
    "t_pericentre_yr",
];
/// A date within so many years of an epoch's is that epoch's (half a day).
const SAME_TIME_YR: f64 = 0.0014;
/// A date may lie outside the campaign by so many years.
const OUTSIDE_YR: f64 = 1.0;

/// The result that claims may refer to.
#[derive(Clone, Copy, Debug)]
pub struct Known<'a> {
    pub campaign: &'a Campaign,
    pub lists: &'a [RawList],
    pub solution: &'a Solution,
}

/// What a list of claims holds.
#[derive(Clone, Debug, Default)]
pub struct ReadClaims {
    /// In the order of the file.
    pub claims: Vec<Claim>,
    /// Claims that cannot be judged as they are written, each with its faults.
    pub refused: Vec<(String, Faults)>,
}

/// Reads a list of claims.
///
/// # Errors
/// The file cannot be read, is empty, or its header does not fit.
pub fn read_claims(path: &Path, known: Known<'_>) -> Result<ReadClaims, Faults> {
    read_claims_from(&Disk, path, known)
}

/// [`read_claims`] from any source of files.
///
/// # Errors
/// As [`read_claims`].
pub fn read_claims_from(
    files: &dyn Files,
    path: &Path,
    known: Known<'_>,
) -> Result<ReadClaims, Faults> {
    let bytes = files::read(files, path)?;
    let text = files::text(&bytes, path)?;
    let mut reader = csv::ReaderBuilder::new()
        .comment(Some(b'#'))
        .flexible(true)
        .trim(csv::Trim::All)
        .from_reader(text.trim_start_matches('\u{feff}').as_bytes());
    let heads: Vec<String> = match reader.headers() {
        Ok(h) => h.iter().map(str::to_owned).collect(),
        Err(e) => return Err(unreadable(path, &e)),
    };
    let table = Columns::new(path, &heads)?;
    let mut groups: BTreeMap<String, usize> = BTreeMap::new();
    let mut raw: Vec<(String, Vec<Row>, Faults)> = Vec::new();
    for record in reader.records() {
        let record = record.map_err(|e| unreadable(path, &e))?;
        let line = record.position().map_or(0, |p| p.line() as usize);
        let name = record.get(table.of["claim"]).unwrap_or_default().to_owned();
        let k = *groups.entry(name.clone()).or_insert_with(|| {
            raw.push((name.clone(), Vec::new(), Faults::default()));
            raw.len() - 1
        });
        if record.len() != heads.len() {
            raw[k].2.push(
                Place::line(path, line),
                FaultKind::FieldCount {
                    found: record.len(),
                    expected: heads.len(),
                },
            );
            continue;
        }
        if name.is_empty() {
            raw[k].2.push(
                Place::line(path, line).with_column("claim"),
                FaultKind::EmptyCell,
            );
            continue;
        }
        let cells = table
            .of
            .iter()
            .map(|(&name, &c)| (name, record[c].to_owned()))
            .filter(|(_, text)| !text.is_empty())
            .collect();
        raw[k].1.push(Row { line, cells });
    }
    if raw.is_empty() {
        return Err(Faults::one(Place::file(path), FaultKind::Empty));
    }
    let mut out = ReadClaims::default();
    for (name, rows, mut faults) in raw {
        let body = Reader {
            path,
            known,
            faults: &mut faults,
        }
        .body(&rows);
        match body {
            Some(body) if faults.is_empty() => out.claims.push(Claim {
                name,
                line: rows[0].line,
                body,
            }),
            _ => out.refused.push((name, faults)),
        }
    }
    Ok(out)
}

fn unreadable(path: &Path, e: &csv::Error) -> Faults {
    let place = match e.position() {
        Some(p) => Place::line(path, p.line() as usize),
        None => Place::file(path),
    };
    Faults::one(
        place,
        FaultKind::Unreadable {
            reason: e.to_string(),
        },
    )
}

/// Where each known column stands.
struct Columns {
    of: BTreeMap<&'static str, usize>,
}

impl Columns {
    fn new(path: &Path, heads: &[String]) -> Result<Self, Faults> {
        let place = Place::line(path, 1);
        let mut faults = Faults::default();
        let mut of = BTreeMap::new();
        for (c, head) in heads.iter().enumerate() {
            if let Some(&known) = COLUMNS.iter().find(|k| *k == head) {
                if of.insert(known, c).is_some() {
                    faults.push(
                        place.clone(),
                        FaultKind::Twice {
                            what: "column".to_owned(),
                            value: head.clone(),
                            first: "earlier in the header".to_owned(),
                            expected: "expected every name once".to_owned(),
                        },
                    );
                }
            } else if let Some(near) = nearest(head, COLUMNS) {
                faults.push(
                    place.clone().with_column(head),
                    FaultKind::UnknownName {
                        what: "column".to_owned(),
                        found: head.clone(),
                        nearest: Some(near),
                        known: Vec::new(),
                    },
                );
            }
        }
        let missing = |wanted: &str| FaultKind::NoColumn {
            wanted: wanted.to_owned(),
            found: heads.to_vec(),
            nearest: nearest(wanted, heads.iter().map(String::as_str)),
        };
        let has = |name: &str| of.contains_key(name);
        if !has("claim") {
            faults.push(place.clone(), missing("claim"));
        }
        let timed = has("epoch") || has("time_yr");
        let placed = (has("x_mas") && has("y_mas")) || has("id");
        if !(has("track") || has("semi_major_mas") || timed && placed) {
            faults.push(
                place,
                missing("epoch with x_mas and y_mas or id, or track, or semi_major_mas"),
            );
        }
        faults.or(Self { of })
    }
}

/// A row of a claim: the cells that are not empty.
struct Row {
    line: usize,
    cells: BTreeMap<&'static str, String>,
}

/// Turns the rows of one claim into what they mean.
struct Reader<'a> {
    path: &'a Path,
    known: Known<'a>,
    faults: &'a mut Faults,
}

impl Reader<'_> {
    fn fault(&mut self, row: &Row, column: &str, kind: FaultKind) {
        let place = Place::line(self.path, row.line).with_column(column);
        self.faults.push(place, kind);
    }

    fn bad(&mut self, row: &Row, column: &str, expected: &str) {
        let found = row.cells.get(column).cloned().unwrap_or_default();
        let expected = expected.to_owned();
        self.fault(row, column, FaultKind::Value { found, expected });
    }

    fn number(&mut self, row: &Row, column: &str) -> Option<f64> {
        let text = row.cells.get(column)?;
        match text.parse::<f64>() {
            Ok(v) if v.is_finite() => Some(v),
            _ => {
                self.bad(row, column, "a number");
                None
            }
        }
    }

    fn body(&mut self, rows: &[Row]) -> Option<ClaimBody> {
        let first = rows.first()?;
        let has = |name: &str| first.cells.contains_key(name);
        let single = if has("track") {
            self.track(first).map(ClaimBody::Track)
        } else if has("semi_major_mas") {
            self.orbit(first).map(ClaimBody::Orbit)
        } else {
            let points: Vec<ClaimPoint> = rows.iter().filter_map(|r| self.point(r)).collect();
            return self.checked(rows, points).map(ClaimBody::Points);
        };
        if let Some(second) = rows.get(1) {
            self.fault(
                second,
                "claim",
                FaultKind::Twice {
                    what: "claim".to_owned(),
                    value: second.cells.get("claim").cloned().unwrap_or_default(),
                    first: format!("in line {}", first.line),
                    expected: "a track or an orbit takes one row".to_owned(),
                },
            );
        }
        single
    }

    fn track(&mut self, row: &Row) -> Option<usize> {
        let name = &row.cells["track"];
        let tracks = &self.known.solution.tracks;
        let found = tracks.iter().position(|t| t.name == *name);
        if found.is_none() {
            let names = tracks.iter().map(|t| t.name.as_str());
            let nearest = nearest(name, names);
            self.fault(
                row,
                "track",
                FaultKind::UnknownName {
                    what: "track".to_owned(),
                    found: name.clone(),
                    nearest,
                    known: Vec::new(),
                },
            );
        }
        found
    }

    fn orbit(&mut self, row: &Row) -> Option<ClaimOrbit> {
        for name in ELEMENTS {
            if !row.cells.contains_key(name) {
                self.fault(row, name, FaultKind::EmptyCell);
            }
        }
        let period_yr = self.number(row, "period_yr");
        let [a, e, i, node, arg, t] = ELEMENTS.map(|name| self.number(row, name));
        if a.is_some_and(|a| a <= 0.0) {
            self.bad(row, "semi_major_mas", "a length above 0");
        }
        if e.is_some_and(|e| !(0.0..1.0).contains(&e)) {
            self.bad(
                row,
                "eccentricity",
                "a closed orbit, eccentricity from 0 to below 1",
            );
        }
        if period_yr.is_some_and(|p| p <= 0.0) {
            self.bad(row, "period_yr", "a time above 0");
        }
        if period_yr.is_none() && self.known.campaign.central.is_none() {
            self.fault(
                row,
                "period_yr",
                FaultKind::MissingKey {
                    table: "the claim".to_owned(),
                    key: "period_yr".to_owned(),
                    expected: "the campaign has no central mass, so that the orbit needs its own \
                               period"
                        .to_owned(),
                },
            );
        }
        Some(ClaimOrbit {
            semi_major_mas: a?,
            period_yr,
            eccentricity: e?,
            inclination_deg: i?,
            node_deg: node?,
            arg_pericentre_deg: arg?,
            t_pericentre_yr: t?,
            mag: self.number(row, "mag"),
        })
    }

    fn point(&mut self, row: &Row) -> Option<ClaimPoint> {
        let (epoch, t_yr) = self.when(row)?;
        let place = [self.number(row, "x_mas"), self.number(row, "y_mas")];
        let at_mas = match place {
            [Some(x), Some(y)] => Some([x, y]),
            _ => None,
        };
        let errors = [self.number(row, "x_err_mas"), self.number(row, "y_err_mas")];
        for (name, value) in [("x_err_mas", errors[0]), ("y_err_mas", errors[1])] {
            if value.is_some_and(|v| v <= 0.0) {
                self.bad(row, name, "an error above 0");
            }
        }
        let mut named = None;
        if row.cells.contains_key("id") {
            named = Some(self.detection(row, epoch)?);
        }
        if at_mas.is_none() && named.is_none() {
            let empty = if place[0].is_none() { "x_mas" } else { "y_mas" };
            self.fault(row, empty, FaultKind::EmptyCell);
            return None;
        }
        Some(ClaimPoint {
            epoch,
            t_yr,
            at_mas,
            err_mas: match errors {
                [Some(x), Some(y)] => Some([x, y]),
                _ => None,
            },
            row: named,
            mag: self.number(row, "mag"),
        })
    }

    /// The epoch of a row (by number or name), or its date.
    fn when(&mut self, row: &Row) -> Option<(Option<usize>, f64)> {
        let epochs = &self.known.campaign.epochs;
        if let Some(text) = row.cells.get("epoch") {
            let by_number = text.parse::<usize>().ok().filter(|&k| k < epochs.len());
            let found = by_number.or_else(|| epochs.iter().position(|e| e.name == *text));
            if found.is_none() {
                let expected = format!(
                    "an epoch of the campaign: 0 to {}, or its name",
                    epochs.len() - 1
                );
                self.bad(row, "epoch", &expected);
            }
            return found.map(|k| (Some(k), epochs[k].time.yr()));
        }
        if !row.cells.contains_key("time_yr") {
            self.fault(row, "epoch", FaultKind::EmptyCell);
            return None;
        }
        let t = self.number(row, "time_yr")?;
        let (first, last) = epochs
            .iter()
            .fold((f64::INFINITY, f64::NEG_INFINITY), |s, e| {
                (s.0.min(e.time.yr()), s.1.max(e.time.yr()))
            });
        if !(first - OUTSIDE_YR..=last + OUTSIDE_YR).contains(&t) {
            let expected = format!("a time within the campaign, {first:.2} to {last:.2}");
            self.bad(row, "time_yr", &expected);
            return None;
        }
        let near = (0..epochs.len())
            .min_by(|&a, &b| {
                let gap = |k: usize| (epochs[k].time.yr() - t).abs();
                gap(a).total_cmp(&gap(b)).then(a.cmp(&b))
            })
            .filter(|&k| (epochs[k].time.yr() - t).abs() < SAME_TIME_YR);
        Some((near, t))
    }

    fn detection(&mut self, row: &Row, epoch: Option<usize>) -> Option<usize> {
        let id = &row.cells["id"];
        let Some(e) = epoch else {
            self.bad(row, "id", "no detection where the date is no epoch's");
            return None;
        };
        let ids = &self.known.lists[e].ids;
        let found = (0..ids.len()).find(|&k| ids.text(k) == *id);
        if found.is_none() {
            let expected = format!(
                "a detection of epoch {}",
                self.known.campaign.epochs[e].name
            );
            self.bad(row, "id", &expected);
        }
        found
    }

    /// Points in order; a claim needs two, and one place at a time.
    fn checked(&mut self, rows: &[Row], points: Vec<ClaimPoint>) -> Option<Vec<ClaimPoint>> {
        if points.len() != rows.len() {
            return None;
        }
        for (k, p) in points.iter().enumerate() {
            if let Some(j) = points[..k].iter().position(|q| q.t_yr == p.t_yr) {
                let kind = FaultKind::Twice {
                    what: "epoch".to_owned(),
                    value: rows[k].cells.get("epoch").cloned().unwrap_or_default(),
                    first: format!("in line {}", rows[j].line),
                    expected: "an object is in one place at a time".to_owned(),
                };
                self.fault(&rows[k], "epoch", kind);
            }
        }
        if points.len() < 2 {
            let found = format!("{} position", points.len());
            let expected = "at least two positions".to_owned();
            self.fault(&rows[0], "claim", FaultKind::Value { found, expected });
            return None;
        }
        Some(points)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::campaign::read_campaign;
    use crate::io::lists::read_lists;

    fn read(rows: &str) -> Result<ReadClaims, Faults> {
        let folder = tempfile::tempdir().expect("a folder");
        let at = |name: &str| folder.path().join(name);
        let write = |name: &str, text: &str| std::fs::write(at(name), text).expect("a file");
        write(
            "field.toml",
            "[field]\nname = \"Lantern core\"\nreference_epoch = 2000.0\n\
             [stars]\nspeed_mas_yr = 6.0\n[instrument.a]\nfwhm_mas = 50.0\n\
             default_err_mas = 1.0\ndefault_mag_err = 0.1\n\
             [[epoch]]\nname = \"spring\"\ntime = 2000.2\nfile = \"a.csv\"\ninstrument = \"a\"\n\
             [[epoch]]\nname = \"autumn\"\ntime = 2000.8\nfile = \"b.csv\"\ninstrument = \"a\"\n",
        );
        write("a.csv", "id,x,y,mag\n1,0,0,12\n2,50,0,13\n");
        write("b.csv", "id,x,y,mag\n1,1,0,12\n2,51,0,13\n");
        write("claims.csv", rows);
        let (campaign, _) = read_campaign(&at("field.toml")).expect("a campaign");
        let (lists, _) = read_lists(&campaign).expect("lists");
        let solution = Solution::default();
        let known = Known {
            campaign: &campaign,
            lists: &lists,
            solution: &solution,
        };
        read_claims(&at("claims.csv"), known)
    }

    fn refusals(rows: &str) -> Vec<String> {
        let read = read(rows).expect("a table of claims");
        let shown = |f: &Faults| {
            let place = &f.kept()[0].place;
            format!(
                "{} {}: {}",
                place.line.unwrap_or(0),
                place.column.clone().unwrap_or_default(),
                f.kept()[0].kind
            )
        };
        read.refused
            .iter()
            .map(|(name, f)| format!("{name} {}", shown(f)))
            .collect()
    }

    #[test]
    fn epochs_by_number_name_and_date() {
        let r = read("claim,epoch,time_yr,x_mas,y_mas\na,0,,1,2\na,autumn,,3,4\na,,2000.5,2,2\n")
            .expect("claims");
        assert!(r.refused.is_empty());
        let ClaimBody::Points(p) = &r.claims[0].body else {
            panic!("positions were given");
        };
        assert_eq!(
            [p[0].epoch, p[1].epoch, p[2].epoch],
            [Some(0), Some(1), None]
        );
        assert_eq!(p[2].t_yr, 2000.5);
    }

    #[test]
    fn a_bad_claim_leaves_the_good_ones() {
        let rows = "claim,epoch,id,x_mas,y_mas\ngood,0,1,,\ngood,1,1,,\nfar,7,,1,1\nfar,1,,1,1\n\
                    who,0,9,,\nwho,1,1,,\nodd,0,,x,1\nodd,1,,1,1\none,0,,1,1\n";
        let r = read(rows).expect("claims");
        assert_eq!(r.claims.len(), 1);
        assert_eq!(
            refusals(rows),
            [
                "far 4 epoch: found `7`, expected an epoch of the campaign: 0 to 1, or its name",
                "who 6 id: found `9`, expected a detection of epoch spring",
                "odd 8 x_mas: found `x`, expected a number",
                "one 10 claim: found `1 position`, expected at least two positions",
            ]
        );
    }

    #[test]
    fn orbits_must_be_closed_and_have_a_mass() {
        let head = "claim,semi_major_mas,period_yr,eccentricity,inclination_deg,node_deg,\
                    arg_pericentre_deg,t_pericentre_yr\n";
        let rows = format!(
            "{head}a,100,4,0.5,10,20,30,2000\nb,100,4,1.0,10,20,30,2000\nc,100,,0.5,10,20,30,2000\n"
        );
        let r = read(&rows).expect("claims");
        assert_eq!(r.claims.len(), 1);
        let told = refusals(&rows);
        assert!(
            told[0].starts_with("b 3 eccentricity: found `1.0`"),
            "{told:?}"
        );
        assert!(
            told[1].starts_with("c 4 period_yr: the claim has no `period_yr`"),
            "{told:?}"
        );
    }

    #[test]
    fn a_header_that_does_not_fit_is_refused_whole() {
        assert!(read("claim,epok,x_mas,y_mas\na,0,1,2\n").is_err());
        assert!(read("claim,epoch,x_mas,y_mas\n").is_err());
    }
}
