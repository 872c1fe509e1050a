//! Things that are allowed and rarely meant.

use std::collections::BTreeMap;

use super::{Placed, width};
use crate::io::dates::parse_date;
use crate::maths::order::median;
use crate::model::campaign::{Campaign, SkyOrigin, Unit};
use crate::model::detection::RawList;
use crate::model::note::Note;

/// All oddities, those of the campaign first.
pub(super) fn find(campaign: &Campaign, lists: &[Placed]) -> Vec<Note> {
    let mut notes = Vec::new();
    notes.extend(out_of_order(campaign));
    notes.extend(same_time(campaign));
    notes.extend(calendar_years(campaign));
    for placed in lists {
        let place = || campaign.epochs[placed.epoch].name.clone();
        notes.extend(repeated_rows(&placed.list, place()));
        notes.extend(stand_in_magnitudes(&placed.list, place()));
        notes.extend(all_errors_alike(&placed.list, place()));
        let unit = campaign.epochs[placed.epoch].settings.unit;
        notes.extend(wrong_angle_unit(
            &placed.list,
            unit,
            campaign.origin,
            place(),
        ));
    }
    notes.extend(copied_lists(campaign, lists));
    notes.extend(odd_widths(campaign, lists));
    notes
}

fn note(what: &'static str, place: String, text: String) -> Note {
    Note { what, place, text }
}

fn out_of_order(campaign: &Campaign) -> Option<Note> {
    let pair = campaign
        .epochs
        .windows(2)
        .find(|w| w[1].time.yr() < w[0].time.yr())?;
    Some(note(
        "out_of_order",
        pair[1].name.clone(),
        format!(
            "its time {:.4} lies before {:.4} of `{}` above it in the campaign; a slip in one of them?",
            pair[1].time.yr(),
            pair[0].time.yr(),
            pair[0].name
        ),
    ))
}

fn same_time(campaign: &Campaign) -> Vec<Note> {
    let mut first: BTreeMap<(u64, usize), &str> = BTreeMap::new();
    let mut notes = Vec::new();
    for epoch in &campaign.epochs {
        let key = (epoch.time.yr().to_bits(), epoch.instrument);
        if let Some(other) = first.get(&key) {
            notes.push(note(
                "same_time",
                epoch.name.clone(),
                format!(
                    "the same time and instrument as `{other}`: two lists of one image would count every star twice"
                ),
            ));
        } else {
            first.insert(key, &epoch.name);
        }
    }
    notes
}

/// Times that look like a bare calendar year, or disagree with a date in the epoch's name.
fn calendar_years(campaign: &Campaign) -> Vec<Note> {
    let mut notes = Vec::new();
    let whole: Vec<&str> = campaign
        .epochs
        .iter()
        .filter(|e| e.time.yr().fract() == 0.0)
        .map(|e| e.name.as_str())
        .collect();
    if let Some(first) = whole.first() {
        notes.push(note(
            "calendar_year",
            (*first).to_owned(),
            format!(
                "{} epoch(s) have a whole number for a time; a Julian year of .0 is noon of 1 January (2000.0), \
                 give or take a day: was only the calendar year meant?",
                whole.len()
            ),
        ));
    }
    for epoch in &campaign.epochs {
        let Some(dated) = epoch.name.get(..10).and_then(parse_date) else {
            continue;
        };
        let days = (epoch.time.mjd() - dated.mjd()).abs();
        // Nights run over midnight, and time zones over a day.
        if days > 2.0 {
            notes.push(note(
                "date_in_name",
                epoch.name.clone(),
                format!(
                    "its time {:.4} is {days:.1} days from the date in its name ({:.4})",
                    epoch.time.yr(),
                    dated.yr()
                ),
            ));
        }
    }
    notes
}

fn repeated_rows(list: &RawList, place: String) -> Option<Note> {
    // Canonical order puts equal places side by side.
    let repeats: Vec<usize> = (1..list.len())
        .filter(|&k| list.x[k] == list.x[k - 1] && list.y[k] == list.y[k - 1])
        .collect();
    let &k = repeats.first()?;
    Some(note(
        "repeated_rows",
        place,
        format!(
            "{} row(s) repeat the place of another, first `{}` and `{}` at ({}, {})",
            repeats.len(),
            list.ids.text(k - 1),
            list.ids.text(k),
            list.x[k],
            list.y[k]
        ),
    ))
}

/// Numbers such as 99.99 that stand for "not measured" in some lists.
fn stand_in_magnitudes(list: &RawList, place: String) -> Option<Note> {
    const NO_STAR: f64 = 50.0;
    let odd: Vec<f64> = list
        .mag
        .iter()
        .copied()
        .filter(|m| m.abs() >= NO_STAR)
        .collect();
    let first = odd.first()?;
    Some(note(
        "stand_in_magnitude",
        place,
        format!(
            "{} magnitude(s) such as {first} are no star's; leave the cell empty for \"not measured\"",
            odd.len()
        ),
    ))
}

fn all_errors_alike(list: &RawList, place: String) -> Option<Note> {
    const FEWEST: usize = 20;
    let first = list.err.first().copied().flatten()?;
    let alike = list.len() >= FEWEST && list.err.iter().all(|e| *e == Some(first));
    alike.then(|| {
        note(
            "errors_alike",
            place,
            "every row has the same error of the position; errors that grow toward faint stars link better"
                .to_owned(),
        )
    })
}

/// Radians taken for degrees, or degrees for another unit, seen against the field's origin.
fn wrong_angle_unit(
    list: &RawList,
    unit: Unit,
    origin: Option<SkyOrigin>,
    place: String,
) -> Option<Note> {
    const NEAR_DEG: f64 = 3.0;
    let origin = origin?;
    let x = median(&mut list.x.clone())?;
    let y = median(&mut list.y.clone())?;
    let off = |ra: f64, dec: f64| {
        let dra = (ra - origin.ra_deg + 180.0).rem_euclid(360.0) - 180.0;
        (dra * dec.to_radians().cos()).hypot(dec - origin.dec_deg)
    };
    let as_degrees = off(x, y);
    let as_radians = off(x.to_degrees(), y.to_degrees());
    let in_hours = off(15.0 * x, y);
    let spread = width(&list.x).max(width(&list.y));
    let text = match unit {
        Unit::Deg if as_degrees <= NEAR_DEG => return None,
        Unit::Deg if as_radians <= NEAR_DEG => {
            "its coordinates fit the field's origin as radians, not as the degrees the campaign states"
                .to_owned()
        }
        Unit::Deg if in_hours <= NEAR_DEG => {
            "its right ascensions fit the field's origin as hours, not as degrees".to_owned()
        }
        Unit::Deg => format!(
            "its middle ({x:.4}, {y:.4}) lies {as_degrees:.1} degrees from the field's origin ({}, {})",
            origin.ra_deg, origin.dec_deg
        ),
        // Offsets of a field this small round a direction are not offsets.
        _ if as_degrees <= NEAR_DEG && spread < NEAR_DEG && x.hypot(y) > 10.0 * spread => {
            "its coordinates look like right ascension and declination in degrees: unit = \"deg\"?"
                .to_owned()
        }
        _ => return None,
    };
    Some(note("angle_unit", place, text))
}

fn copied_lists(campaign: &Campaign, lists: &[Placed]) -> Vec<Note> {
    let mut notes = Vec::new();
    for (k, a) in lists.iter().enumerate() {
        let twin = lists[..k]
            .iter()
            .find(|b| a.list.x == b.list.x && a.list.y == b.list.y);
        if let Some(b) = twin {
            notes.push(note(
                "copied_list",
                campaign.epochs[a.epoch].name.clone(),
                format!(
                    "holds the same positions as `{}`",
                    campaign.epochs[b.epoch].name
                ),
            ));
        }
    }
    notes
}

/// Lists a hundred times wider or narrower than the others: a wrong unit.
fn odd_widths(campaign: &Campaign, lists: &[Placed]) -> Vec<Note> {
    const FEWEST_STARS: usize = 5;
    const TOO_MUCH: f64 = 100.0;
    let widths: Vec<(usize, f64)> = lists
        .iter()
        .filter(|p| p.list.len() >= FEWEST_STARS)
        .map(|p| (p.epoch, width(&p.x_mas).max(width(&p.y_mas))))
        .collect();
    let mut sorted: Vec<f64> = widths.iter().map(|w| w.1).collect();
    let Some(middle) = median(&mut sorted).filter(|m| *m > 0.0) else {
        return Vec::new();
    };
    widths
        .iter()
        .filter(|(_, w)| *w > TOO_MUCH * middle || *w * TOO_MUCH < middle)
        .map(|&(epoch, w)| {
            note(
                "odd_width",
                campaign.epochs[epoch].name.clone(),
                format!(
                    "is {w:.4} mas wide where the lists of the campaign are {middle:.0} mas (median): is its unit right?"
                ),
            )
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    fn list(x: &[f64], y: &[f64], mag: f64) -> RawList {
        RawList {
            ids: crate::model::detection::Ids::Numbers((1..=x.len() as u64).collect()),
            x: x.to_vec(),
            y: y.to_vec(),
            err: vec![None; x.len()],
            mag: vec![mag; x.len()],
            ..RawList::default()
        }
    }
    const ORIGIN: Option<SkyOrigin> = Some(SkyOrigin {
        ra_deg: 197.15,
        dec_deg: -41.02,
    });

    #[test]
    fn radians_hours_and_degrees_are_told_apart() {
        let told = |x: f64, y: f64, unit| {
            let l = list(&[x, x + 1e-5, x + 2e-5], &[y, y, y + 1e-5], 14.0);
            wrong_angle_unit(&l, unit, ORIGIN, String::new()).map(|n| n.text)
        };
        assert_eq!(told(197.15, -41.02, Unit::Deg), None);
        assert!(
            told(3.4409, -0.7159, Unit::Deg)
                .unwrap()
                .contains("radians")
        );
        assert!(told(13.1433, -41.02, Unit::Deg).unwrap().contains("hours"));
        assert!(
            told(20.0, -41.02, Unit::Deg)
                .unwrap()
                .contains("degrees from")
        );
        assert!(told(197.15, -41.02, Unit::Mas).unwrap().contains("deg"));
        assert_eq!(told(-3.0, 12.0, Unit::Mas), None);
    }

    #[test]
    fn repeated_places_and_stand_ins_are_counted() {
        let l = list(&[1.0, 1.0, 2.0], &[5.0, 5.0, 5.0], 99.99);
        let n = repeated_rows(&l, String::new()).unwrap();
        assert!(n.text.starts_with("1 row(s) repeat"), "{}", n.text);
        let n = stand_in_magnitudes(&l, String::new()).unwrap();
        assert!(
            n.text.starts_with("3 magnitude(s) such as 99.99"),
            "{}",
            n.text
        );
    }
}
