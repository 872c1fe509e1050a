//! Units as files spell them: ECSV `km / s`, FITS `km s-1`, VOTable `km.s**-1` and the like.

use crate::model::campaign::Unit;

/// What a unit must measure, and the unit wanted.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub(super) enum Quantity {
    /// A coordinate of a list: offsets on the tangent plane, pixels, or (deg) a direction.
    Place(Unit),
    /// A small length on the sky, or pixels.
    Length(Unit),
    /// A position angle, wanted in degrees.
    Angle,
    Magnitude,
    /// A proper motion, wanted in mas/yr.
    Motion,
    /// Wanted in km/s.
    Speed,
    Bare,
}

/// The word for a unit in the campaign file.
pub(super) fn word(unit: Unit) -> &'static str {
    match unit {
        Unit::Mas => "mas",
        Unit::Arcsec => "arcsec",
        Unit::Deg => "deg",
        Unit::Pixel => "pixel",
    }
}

/// Factor that turns a stated unit into the wanted one; `None` when they do not fit.
///
/// Degrees (and radians) of a coordinate are taken for directions on the sky only: a list of
/// offsets in degrees cannot be told from right ascension and declination.
pub(super) fn factor(stated: &str, wanted: Quantity) -> Option<f64> {
    let plain: String = stated
        .chars()
        .filter(|c| !c.is_whitespace() && !matches!(c, '\'' | '"'))
        .collect();
    match wanted {
        Quantity::Place(Unit::Pixel) | Quantity::Length(Unit::Pixel) => {
            matches!(plain.as_str(), "pix" | "pixel" | "pixels").then_some(1.0)
        }
        Quantity::Place(Unit::Deg) => Some(mas(&plain)? / mas("deg")?),
        Quantity::Place(unit) => {
            let is_direction = matches!(
                plain.as_str(),
                "deg" | "degree" | "degrees" | "rad" | "h" | "hourangle"
            );
            if is_direction {
                return None;
            }
            Some(mas(&plain)? / mas(word(unit))?)
        }
        Quantity::Length(unit) => Some(mas(&plain)? / mas(word(unit))?),
        Quantity::Angle => Some(mas(&plain)? / mas("deg")?),
        Quantity::Magnitude => match plain.as_str() {
            "mag" | "mag(AB)" | "mag(ST)" => Some(1.0),
            "mmag" => Some(1e-3),
            _ => None,
        },
        Quantity::Motion => {
            let per_year = [
                "/yr", "yr-1", ".yr-1", ".yr**-1", "*yr-1", "yr**-1", ".yr^-1",
            ];
            let length = per_year
                .iter()
                .rev()
                .find_map(|end| plain.strip_suffix(end))?;
            mas(length.trim_end_matches(['.', '*']))
        }
        Quantity::Speed => match plain.as_str() {
            "km/s" | "kms-1" | "km.s-1" | "km.s**-1" | "km*s-1" | "kms**-1" | "kms^-1"
            | "km.s^-1" => Some(1.0),
            "m/s" | "ms-1" | "m.s-1" | "m.s**-1" | "ms**-1" => Some(1e-3),
            _ => None,
        },
        Quantity::Bare => matches!(plain.as_str(), "-" | "1").then_some(1.0),
    }
}

/// Milliarcseconds in an angular unit.
fn mas(plain: &str) -> Option<f64> {
    use crate::maths::units::{MAS_PER_DEG, MAS_PER_RAD};
    Some(match plain {
        "uas" | "microarcsec" | "µas" => 1e-3,
        "mas" | "milliarcsec" => 1.0,
        "arcsec" | "arcsecond" | "as" => 1e3,
        "arcmin" => 6e4,
        "deg" | "degree" | "degrees" => MAS_PER_DEG,
        "h" | "hourangle" => 15.0 * MAS_PER_DEG,
        "rad" => MAS_PER_RAD,
        "mrad" => 1e-3 * MAS_PER_RAD,
        _ => return None,
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_same_speed_in_every_standard_spelling() {
        for spelling in ["km / s", "km s-1", "km.s**-1", "km/s"] {
            assert_eq!(factor(spelling, Quantity::Speed), Some(1.0), "{spelling}");
        }
    }

    #[test]
    fn the_same_proper_motion_in_every_standard_spelling() {
        for spelling in ["mas / yr", "mas yr-1", "mas.yr**-1", "mas/yr"] {
            assert_eq!(factor(spelling, Quantity::Motion), Some(1.0), "{spelling}");
        }
        assert_eq!(factor("arcsec / yr", Quantity::Motion), Some(1000.0));
    }

    #[test]
    fn angles_convert_and_directions_are_not_offsets() {
        assert_eq!(factor("arcsec", Quantity::Place(Unit::Mas)), Some(1000.0));
        assert_eq!(factor("deg", Quantity::Place(Unit::Mas)), None);
        assert_eq!(factor("mas", Quantity::Place(Unit::Pixel)), None);
        let rad = factor("rad", Quantity::Place(Unit::Deg)).unwrap();
        assert!((rad - 57.295_779_513_082_32).abs() < 1e-12);
    }
}
