//! Which column of a table plays which role: names, near misses, units.

use super::fault::{FaultKind, Faults, Place, nearest, squashed};
use super::units::{Quantity, factor};
use crate::model::campaign::{ColumnRef, Instrument, Unit};

/// Column names a list may have, in the order of the format.
pub(super) const ROLES: [&str; 15] = [
    "x",
    "y",
    "id",
    "x_err",
    "y_err",
    "err_major",
    "err_minor",
    "err_pa_deg",
    "mag",
    "mag_err",
    "xy_corr",
    "rv_km_s",
    "rv_err_km_s",
    "quality",
    "given_name",
];

/// What a reader knows of a column before it reads rows.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Head {
    pub name: String,
    /// Unit as spelled in the file; `None` when the file says nothing.
    pub unit: Option<String>,
}

/// How a column is to be read.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Want {
    Skip,
    /// Numbers, `NaN` for an empty cell.
    Number,
    Text,
    /// Whole numbers while all of them are, else text.
    Id,
}

/// Which columns to read, and as what.
#[derive(Clone, Debug, Default)]
pub(super) struct Plan {
    /// One entry per column of the file.
    pub wants: Vec<Want>,
    /// (role, column, factor that turns the file's unit into the list's).
    pub roles: Vec<(&'static str, usize, f64)>,
    /// Columns carried through as text: (name, column).
    pub keep: Vec<(String, usize)>,
    /// Columns nobody asked for.
    pub unknown: Vec<String>,
    /// Column of the epoch key, for one table with all epochs.
    pub key: Option<usize>,
}

impl Plan {
    /// Column and unit factor of a role.
    pub fn role(&self, name: &str) -> Option<(usize, f64)> {
        self.roles
            .iter()
            .find(|(r, _, _)| *r == name)
            .map(|&(_, c, f)| (c, f))
    }
}

/// The instrument names columns by number only: the table has no header.
pub(super) fn headerless(instrument: &Instrument) -> bool {
    let by_number = |role: &str| {
        instrument
            .columns
            .iter()
            .any(|(r, c)| r == role && matches!(c, ColumnRef::Number(_)))
    };
    by_number("x")
        && by_number("y")
        && instrument
            .columns
            .iter()
            .all(|(_, c)| matches!(c, ColumnRef::Number(_)))
}

/// Decides on every column of a header.
///
/// # Errors
/// Columns that are missing, named twice, or nearly named as a known one; units that do not fit.
pub(super) fn plan(
    heads: &[Head],
    instrument: &Instrument,
    key: Option<&str>,
    place: &Place,
) -> Result<Plan, Faults> {
    let mut faults = Faults::default();
    let names: Vec<String> = heads.iter().map(|h| h.name.clone()).collect();
    for (k, name) in names.iter().enumerate() {
        if !name.is_empty() && names[..k].contains(name) {
            faults.push(
                place.clone(),
                FaultKind::Twice {
                    what: "column".to_owned(),
                    value: name.clone(),
                    first: "earlier in the header".to_owned(),
                    expected: "expected every name once".to_owned(),
                },
            );
        }
    }
    let mut plan = Plan {
        wants: vec![Want::Skip; heads.len()],
        ..Plan::default()
    };
    let bare = headerless(instrument);
    let mut used = vec![false; heads.len()];
    for role in ROLES {
        let given = instrument.columns.iter().find(|(r, _)| r == role);
        let column = match given {
            Some((_, ColumnRef::Number(n))) if *n <= heads.len() => Some(n - 1),
            Some((_, ColumnRef::Number(n))) => {
                faults.push(
                    place.clone(),
                    FaultKind::NoColumn {
                        wanted: format!("{role} = {n}"),
                        found: vec![format!("{} columns", heads.len())],
                        nearest: None,
                    },
                );
                continue;
            }
            Some((_, ColumnRef::Name(name))) => {
                let hit = names.iter().position(|n| n == name);
                if hit.is_none() {
                    missing(&mut faults, place, name, &names);
                    continue;
                }
                hit
            }
            None if bare => None,
            None => names.iter().position(|n| n == role),
        };
        if let Some(c) = column {
            used[c] = true;
            plan.wants[c] = match role {
                "id" => Want::Id,
                "given_name" => Want::Text,
                _ => Want::Number,
            };
            match unit_factor(role, heads[c].unit.as_deref(), instrument) {
                Ok(f) => plan.roles.push((role, c, f)),
                Err(kind) => faults.push(place.clone().with_column(&names[c]), kind),
            }
        }
    }
    for name in &instrument.keep {
        match names.iter().position(|n| n == name) {
            Some(c) => {
                // A column that also plays a role is written from its text by the caller.
                if plan.wants[c] == Want::Skip {
                    plan.wants[c] = Want::Text;
                }
                used[c] = true;
                plan.keep.push((name.clone(), c));
            }
            None => missing(&mut faults, place, name, &names),
        }
    }
    if let Some(key) = key {
        match names.iter().position(|n| n == key) {
            Some(c) => {
                plan.wants[c] = Want::Text;
                used[c] = true;
                plan.key = Some(c);
            }
            None => missing(&mut faults, place, key, &names),
        }
    }
    if !bare {
        strangers(&mut faults, &mut plan, place, &names, &used, instrument);
    }
    complete(&mut faults, &plan, place, &names);
    faults.or(plan)
}

/// Columns without a role: a near miss of a known name is a fault, others are ignored.
fn strangers(
    faults: &mut Faults,
    plan: &mut Plan,
    place: &Place,
    names: &[String],
    used: &[bool],
    instrument: &Instrument,
) {
    for (name, used) in names.iter().zip(used) {
        if *used || name.is_empty() {
            continue;
        }
        let free = ROLES.iter().filter(|&&role| {
            !names.iter().any(|n| n == role) && !instrument.columns.iter().any(|(r, _)| r == role)
        });
        let near = free
            .into_iter()
            .find(|role| squashed(role) == squashed(name) || one_slip(role, name));
        match near {
            Some(role) => faults.push(
                place.clone().with_column(name),
                FaultKind::NearlyNamed {
                    known: (*role).to_owned(),
                },
            ),
            None => plan.unknown.push(name.clone()),
        }
    }
}

/// One slip of the pen apart; short names are all one slip apart and do not count.
fn one_slip(known: &str, name: &str) -> bool {
    const SHORTEST: usize = 5;
    known.len() >= SHORTEST
        && name.chars().count() >= SHORTEST - 1
        && strsim::damerau_levenshtein(known, &name.to_lowercase()) == 1
}

/// Roles that need each other.
fn complete(faults: &mut Faults, plan: &Plan, place: &Place, names: &[String]) {
    let has = |role: &str| plan.role(role).is_some();
    let broken = |faults: &Faults, role: &str| {
        faults.kept().iter().any(|f| match &f.kind {
            FaultKind::NearlyNamed { known } => known == role,
            FaultKind::Unit { .. } => f.place.column.as_deref() == Some(role),
            FaultKind::NoColumn { wanted, .. } => wanted.starts_with(role),
            _ => false,
        })
    };
    let groups: [(&[&str], bool); 5] = [
        (&["x", "y"], true),
        (&["x_err", "y_err"], false),
        (&["err_major", "err_minor", "err_pa_deg"], false),
        (&["rv_km_s", "rv_err_km_s"], false),
        (&["xy_corr", "x_err"], false),
    ];
    for (group, always) in groups {
        // A correlation needs errors; errors do not need a correlation.
        let needed = always
            || if group[0] == "xy_corr" {
                has("xy_corr")
            } else {
                group.iter().any(|r| has(r))
            };
        if !needed {
            continue;
        }
        for role in group {
            if !has(role) && !broken(faults, role) {
                missing(faults, place, role, names);
            }
        }
    }
    if has("x_err") && has("err_major") {
        faults.push(
            place.clone(),
            FaultKind::Clash {
                table: "the header".to_owned(),
                keys: vec!["x_err".to_owned(), "err_major".to_owned()],
                expected: "expected x_err, y_err or err_major, err_minor, err_pa_deg".to_owned(),
            },
        );
    }
}

fn missing(faults: &mut Faults, place: &Place, wanted: &str, names: &[String]) {
    faults.push(
        place.clone(),
        FaultKind::NoColumn {
            wanted: wanted.to_owned(),
            found: names.to_vec(),
            nearest: nearest(wanted, names.iter().map(String::as_str)),
        },
    );
}

/// Factor from the unit a file states to the unit the campaign states.
fn unit_factor(role: &str, unit: Option<&str>, instrument: &Instrument) -> Result<f64, FaultKind> {
    let Some(unit) = unit.map(str::trim).filter(|u| !u.is_empty()) else {
        return Ok(1.0);
    };
    let quantity = match role {
        "x" | "y" => Quantity::Place(instrument.unit),
        "x_err" | "y_err" | "err_major" | "err_minor" => Quantity::Length(instrument.error_unit),
        "err_pa_deg" => Quantity::Angle,
        "mag" | "mag_err" => Quantity::Magnitude,
        "rv_km_s" | "rv_err_km_s" => Quantity::Speed,
        "xy_corr" | "quality" => Quantity::Bare,
        _ => return Ok(1.0),
    };
    factor(unit, quantity).ok_or_else(|| FaultKind::Unit {
        found: unit.to_owned(),
        expected: match quantity {
            Quantity::Place(Unit::Deg) => {
                "an angle on the sky, as the campaign's unit = \"deg\" says".to_owned()
            }
            Quantity::Place(u) => format!(
                "the campaign's unit = \"{}\" or one like it; if these are right ascension and declination, say unit = \"deg\"",
                super::units::word(u)
            ),
            Quantity::Length(u) => format!("the campaign's error_unit = \"{}\" or one like it", super::units::word(u)),
            Quantity::Angle => "deg or rad".to_owned(),
            Quantity::Magnitude => "mag".to_owned(),
            Quantity::Speed => "km / s or m / s".to_owned(),
            Quantity::Motion => "mas / yr".to_owned(),
            Quantity::Bare => "no unit".to_owned(),
        },
    })
}

/// A plan for a small table with fixed names: all of `needed`, any of `optional`.
///
/// # Errors
/// Columns that are missing or nearly named, units that do not fit.
pub(super) fn plan_of(
    heads: &[Head],
    needed: &[&'static str],
    optional: &[(&'static str, Want)],
    place: &Place,
) -> Result<Plan, Faults> {
    let names: Vec<String> = heads.iter().map(|h| h.name.clone()).collect();
    let mut faults = Faults::default();
    let mut plan = Plan {
        wants: vec![Want::Skip; heads.len()],
        ..Plan::default()
    };
    let all = needed
        .iter()
        .map(|&role| (role, Want::Number, true))
        .chain(optional.iter().map(|&(role, want)| (role, want, false)));
    let mut known: Vec<&'static str> = Vec::new();
    for (role, want, is_needed) in all {
        known.push(role);
        let Some(c) = names.iter().position(|n| n == role) else {
            if is_needed {
                missing(&mut faults, place, role, &names);
            }
            continue;
        };
        plan.wants[c] = want;
        match named_unit_factor(role, heads[c].unit.as_deref()) {
            Ok(f) => plan.roles.push((role, c, f)),
            Err(kind) => faults.push(place.clone().with_column(role), kind),
        }
    }
    for name in names.iter().filter(|n| !known.contains(&n.as_str())) {
        let near = known.iter().find(|role| {
            plan.role(role).is_none() && (squashed(role) == squashed(name) || one_slip(role, name))
        });
        if let Some(role) = near
            && !needed.contains(role)
        {
            faults.push(
                place.clone().with_column(name),
                FaultKind::NearlyNamed {
                    known: (*role).to_owned(),
                },
            );
        }
    }
    faults.or(plan)
}

/// Factor from the unit a file states to the unit a column of ours has in its name.
fn named_unit_factor(role: &str, unit: Option<&str>) -> Result<f64, FaultKind> {
    let Some(unit) = unit.map(str::trim).filter(|u| !u.is_empty()) else {
        return Ok(1.0);
    };
    let (quantity, expected) = if role.ends_with("_mas_yr") {
        (Quantity::Motion, "mas / yr")
    } else if role.ends_with("_mas") {
        (Quantity::Length(Unit::Mas), "mas, arcsec or deg")
    } else if role.ends_with("_km_s") {
        (Quantity::Speed, "km / s or m / s")
    } else if role == "mag" {
        (Quantity::Magnitude, "mag")
    } else {
        return Ok(1.0);
    };
    factor(unit, quantity).ok_or_else(|| FaultKind::Unit {
        found: unit.to_owned(),
        expected: expected.to_owned(),
    })
}
