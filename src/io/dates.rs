//! Calendar dates to Julian years.
//!
//! Days are counted in years that begin in March, so that the leap day comes last (common
//! practice). Differences between time scales (about a minute) are ignored.

use crate::model::time::JulianYear;

/// Modified Julian date of a Gregorian calendar date at 0 h, `None` for a day that does not exist.
#[must_use]
pub fn mjd_of_date(year: i64, month: i64, day: i64) -> Option<f64> {
    const DAYS: [i64; 12] = [31, 28, 31, 30, 31, 30, 31, 31, 30, 31, 30, 31];
    let leap = (year % 4 == 0 && year % 100 != 0) || year % 400 == 0;
    let in_month = DAYS.get(usize::try_from(month.checked_sub(1)?).ok()?)?;
    if day < 1 || day > in_month + i64::from(leap && month == 2) {
        return None;
    }
    let m = (month + 9) % 12;
    let y = year - m / 10;
    let day_number =
        365 * y + y.div_euclid(4) - y.div_euclid(100) + y.div_euclid(400) + (153 * m + 2) / 5 + day
            - 1;
    // 0000-03-01 is MJD -678881.
    Some((day_number - 678_881) as f64)
}

/// Reads `YYYY-MM-DD` or `YYYY-MM-DDThh:mm[:ss[.s]][Z]` (UTC); `None` when it is neither.
#[must_use]
pub fn parse_date(text: &str) -> Option<JulianYear> {
    let text = text.trim();
    let text = text.strip_suffix('Z').unwrap_or(text);
    let (date, clock) = match text.split_once(['T', ' ']) {
        Some((d, c)) => (d, Some(c)),
        None => (text, None),
    };
    let mut parts = date.splitn(3, '-');
    let (y, m, d) = (parts.next()?, parts.next()?, parts.next()?);
    if y.len() != 4 || m.len() != 2 || d.len() != 2 {
        return None;
    }
    let mjd = mjd_of_date(whole(y)?, whole(m)?, whole(d)?)?;
    let day_fraction = match clock {
        None => 0.0,
        Some(clock) => {
            let mut parts = clock.splitn(3, ':');
            let hours = whole(parts.next()?)?;
            let minutes = whole(parts.next()?)?;
            let seconds: f64 = parts.next().map_or(Some(0.0), |s| s.parse().ok())?;
            if hours > 23 || minutes > 59 || !(0.0..61.0).contains(&seconds) {
                return None;
            }
            (hours * 3600 + minutes * 60) as f64 / 86_400.0 + seconds / 86_400.0
        }
    };
    Some(JulianYear::from_mjd(mjd + day_fraction))
}

fn whole(digits: &str) -> Option<i64> {
    digits
        .bytes()
        .all(|b| b.is_ascii_digit())
        .then(|| digits.parse().ok())?
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn days_agree_with_published_dates() {
        // J2000.0 = 2000 January 1.5 TT = JD 2451545.0 (IAU definition).
        assert_eq!(mjd_of_date(2000, 1, 1), Some(51_544.0));
        // MJD 0 = 1858 November 17, 0 h (definition of the modified Julian date).
        assert_eq!(mjd_of_date(1858, 11, 17), Some(0.0));
        // Meeus, Astronomical Algorithms (2nd ed. 1998), example 7.a: 1957 October 4.81 is
        // JD 2436116.31 (from memory).
        assert_eq!(mjd_of_date(1957, 10, 4), Some(36_115.0));
        assert_eq!(mjd_of_date(1900, 2, 29), None);
        assert!(mjd_of_date(2000, 2, 29).is_some());
    }

    #[test]
    fn dates_and_clocks() {
        let t = parse_date("2000-01-01T12:00:00").unwrap();
        assert!((t.yr() - 2000.0).abs() < 1e-12);
        assert_eq!(
            parse_date("1996-05-08"),
            Some(JulianYear::from_mjd(50_211.0))
        );
        assert!(parse_date("1996-5-8").is_none());
        assert!(parse_date("1996-13-01").is_none());
        assert!(parse_date("2000-01-01T24:00").is_none());
    }
}
