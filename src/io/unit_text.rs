//! Spellings of units: the standards write the same unit in different ways.
//!
//! Sources: FITS 4.0, section 4.3 (`km s-1`); IVOA VOUnits 1.0, section 2 (`km.s**-1`); the
//! form with a solidus (`km / s`) is what astropy's generic format writes into ECSV.

/// Whose spelling.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Spelling {
    Ecsv,
    Fits,
    VoUnits,
}

/// A unit of ours (`mas2 / yr`) in the given spelling.
#[must_use]
pub fn spell(unit: &str, spelling: Spelling) -> String {
    if unit.is_empty() || spelling == Spelling::Ecsv {
        return unit.to_owned();
    }
    let mut out = String::new();
    let mut sign = 1;
    for token in unit.split(' ').filter(|t| !t.is_empty()) {
        if token == "/" {
            sign = -1;
            continue;
        }
        let digits = token.trim_start_matches(|c: char| !c.is_ascii_digit());
        let base = &token[..token.len() - digits.len()];
        let power = sign * digits.parse::<i32>().unwrap_or(1);
        if !out.is_empty() {
            out.push(if spelling == Spelling::Fits { ' ' } else { '.' });
        }
        out.push_str(base);
        if power != 1 {
            if spelling == Spelling::VoUnits {
                out.push_str("**");
            }
            out.push_str(&power.to_string());
        }
    }
    out
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn spellings_of_the_standards() {
        // Forms as in the examples of FITS 4.0 table 5 and VOUnits 1.0 section 2.
        assert_eq!(spell("km / s", Spelling::Fits), "km s-1");
        assert_eq!(spell("km / s", Spelling::VoUnits), "km.s**-1");
        assert_eq!(spell("mas2 / yr3", Spelling::Fits), "mas2 yr-3");
        assert_eq!(spell("mas2 / yr3", Spelling::VoUnits), "mas**2.yr**-3");
        assert_eq!(spell("mas / yr2", Spelling::Ecsv), "mas / yr2");
        assert_eq!(spell("", Spelling::Fits), "");
    }
}
