//! Instrument keys of the campaign file, and their overrides in an epoch.

use toml::de::DeValue;

use super::columns::ROLES;
use super::fault::{FaultKind, nearest};
use super::toml_table::{Keys, Rule};
use crate::model::campaign::{
    BlendLaw, ColumnRef, Distortion, FrameFreedom, Handedness, Instrument, Selection, Unit,
};

/// An instrument as read so far, with what a later override needs to know.
#[derive(Clone, Debug)]
pub(super) struct Draft {
    pub settings: Instrument,
    /// `error_unit` was given, so it does not follow `unit`.
    error_unit_given: bool,
}

impl Draft {
    pub fn new(name: &str) -> Self {
        Self {
            settings: Instrument::new(name, 1.0),
            error_unit_given: false,
        }
    }
}

const UNITS: [(&str, Unit); 4] = [
    ("mas", Unit::Mas),
    ("arcsec", Unit::Arcsec),
    ("deg", Unit::Deg),
    ("pixel", Unit::Pixel),
];

/// Reads an `[instrument.NAME]` table.
pub(super) fn read(name: &str, keys: Keys<'_>) -> Draft {
    if !keys.has("fwhm_mas") {
        keys.missing(
            "fwhm_mas",
            "expected the resolution in mas, a number above 0",
        );
    }
    let draft = read_keys(Draft::new(name), &keys);
    keys.finish();
    draft
}

/// An instrument with an epoch's overrides, checked as a whole.
pub(super) fn overridden(base: &Draft, keys: &Keys<'_>) -> Instrument {
    let draft = read_keys(base.clone(), keys);
    let s = draft.settings;
    if s.unit == Unit::Pixel && s.scale_mas.is_none() {
        keys.missing(
            "scale_mas",
            &format!(
                "instrument `{}` is in pixels and needs the nominal scale in mas per pixel",
                s.name
            ),
        );
    }
    if s.unit != Unit::Pixel && s.error_unit == Unit::Pixel {
        keys.missing(
            "error_unit",
            &format!(
                "instrument `{}` is not in pixels, so its errors cannot be: expected mas, arcsec or deg",
                s.name
            ),
        );
    }
    s
}

/// Applies every instrument key that is present.
pub(super) fn read_keys(mut draft: Draft, keys: &Keys<'_>) -> Draft {
    let s = &mut draft.settings;
    set(&mut s.fwhm_mas, keys.number("fwhm_mas", Rule::Positive));
    set_some(&mut s.limit_mag, keys.number("limit_mag", Rule::Finite));
    set_some(
        &mut s.bright_limit_mag,
        keys.number("bright_limit_mag", Rule::Finite),
    );
    set_some(&mut s.band, keys.text("band").map(|(t, _)| t));
    set(&mut s.unit, keys.choice("unit", &UNITS));
    if let Some(unit) = keys.choice("error_unit", &UNITS) {
        s.error_unit = unit;
        draft.error_unit_given = true;
    } else if !draft.error_unit_given {
        s.error_unit = s.unit;
    }
    set_some(&mut s.scale_mas, keys.number("scale_mas", Rule::Positive));
    set(
        &mut s.angle_deg,
        keys.number("angle_deg", Rule::Within(-360.0, 360.0)),
    );
    set(
        &mut s.handedness,
        keys.choice(
            "handedness",
            &[
                ("east_right", Handedness::EastRight),
                ("east_left", Handedness::EastLeft),
            ],
        ),
    );
    set(
        &mut s.frame,
        keys.choice(
            "frame",
            &[
                ("known", FrameFreedom::Known),
                ("shift", FrameFreedom::Shift),
                ("similarity", FrameFreedom::Similarity),
                ("affine", FrameFreedom::Affine),
                ("quadratic", FrameFreedom::Quadratic),
            ],
        ),
    );
    set(
        &mut s.distortion,
        keys.choice(
            "distortion",
            &[
                ("per_epoch", Distortion::PerEpoch),
                ("shared", Distortion::Shared),
            ],
        ),
    );
    set(
        &mut s.selection,
        keys.choice(
            "selection",
            &[
                ("blind", Selection::Blind),
                ("targeted", Selection::Targeted),
            ],
        ),
    );
    set_some(
        &mut s.blend,
        keys.choice(
            "blend",
            &[("psf", BlendLaw::Psf), ("centroid", BlendLaw::Centroid)],
        ),
    );
    set_some(
        &mut s.default_err_mas,
        keys.number("default_err_mas", Rule::Positive),
    );
    set_some(
        &mut s.default_mag_err,
        keys.number("default_mag_err", Rule::Positive),
    );
    if let Some(names) = keys.texts("keep") {
        s.keep = names.into_iter().map(|(t, _)| t).collect();
    }
    if let Some(columns) = columns(keys) {
        s.columns = columns;
    }
    draft
}

fn set<T>(slot: &mut T, value: Option<T>) {
    if let Some(v) = value {
        *slot = v;
    }
}

fn set_some<T>(slot: &mut Option<T>, value: Option<T>) {
    if value.is_some() {
        *slot = value;
    }
}

/// The `columns` table: our name = their name, or a number counted from 1.
fn columns(keys: &Keys<'_>) -> Option<Vec<(String, ColumnRef)>> {
    let table = keys.table("columns", "columns")?;
    let mut out = Vec::new();
    for (key, span, value) in table.entries() {
        if !ROLES.contains(&key) {
            table.source.fault(
                &span,
                FaultKind::UnknownKey {
                    table: "columns".to_owned(),
                    key: key.to_owned(),
                    nearest: nearest(key, ROLES),
                    known: ROLES.map(str::to_owned).to_vec(),
                },
            );
            continue;
        }
        let column = match value.get_ref() {
            DeValue::String(s) if !s.is_empty() => Some(ColumnRef::Name(s.to_string())),
            DeValue::Integer(i) => i
                .as_str()
                .parse()
                .ok()
                .filter(|n| *n >= 1)
                .map(ColumnRef::Number),
            _ => None,
        };
        match column {
            Some(c) => out.push((key.to_owned(), c)),
            None => table.bad(value, key, "a column's name, or its number counted from 1"),
        }
    }
    Some(out)
}
