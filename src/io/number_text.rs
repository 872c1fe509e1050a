//! Numbers as text, in the fewest characters that keep the stated precision. `NaN` and
//! infinities become nothing at all: an empty cell.

use std::io::Write;

use super::table::Precision;

/// Largest number a fixed-point text is made from through a whole number.
const WHOLE_LIMIT: f64 = 9_007_199_254_740_992.0; // 2^53
const POWERS_OF_TEN: [f64; 10] = [1.0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9];

/// Appends a number.
pub fn push_float(out: &mut Vec<u8>, value: f64, precision: Precision) {
    if !value.is_finite() {
        return;
    }
    match precision {
        Precision::Decimals(d) if usize::from(d) < POWERS_OF_TEN.len() => {
            let scaled = (value * POWERS_OF_TEN[usize::from(d)]).round();
            if scaled.abs() < WHOLE_LIMIT {
                push_fixed(out, scaled as i64, usize::from(d));
            } else {
                push_shortest(out, value);
            }
        }
        Precision::Single => {
            let v = value as f32;
            if v.is_finite() && (v != 0.0 || value == 0.0) {
                push_shortest_single(out, v);
            } else {
                push_shortest(out, value);
            }
        }
        _ => push_shortest(out, value),
    }
}

/// Appends a whole number.
pub fn push_int(out: &mut Vec<u8>, value: i64) {
    if value < 0 {
        out.push(b'-');
    }
    push_digits(out, value.unsigned_abs(), 1);
}

/// `scaled` / 10^decimals without trailing zeros.
fn push_fixed(out: &mut Vec<u8>, scaled: i64, decimals: usize) {
    if scaled < 0 {
        out.push(b'-');
    }
    let first = out.len();
    push_digits(out, scaled.unsigned_abs(), decimals + 1);
    let zeros = out[first..]
        .iter()
        .rev()
        .take(decimals)
        .take_while(|&&c| c == b'0')
        .count();
    out.truncate(out.len() - zeros);
    let kept = decimals - zeros;
    if kept > 0 {
        let point = out.len() - kept;
        out.insert(point, b'.');
    }
}

/// At least `width` digits.
fn push_digits(out: &mut Vec<u8>, mut n: u64, width: usize) {
    let mut digits = [b'0'; 20];
    let mut at = digits.len();
    while n > 0 {
        at -= 1;
        digits[at] = b'0' + (n % 10) as u8;
        n /= 10;
    }
    at = at.min(digits.len() - width.min(digits.len()));
    out.extend_from_slice(&digits[at..]);
}

// Writing to a vector cannot fail, so the results below carry no news.

fn push_shortest(out: &mut Vec<u8>, value: f64) {
    let size = value.abs();
    let _ = if value == 0.0 {
        out.write_all(b"0")
    } else if (1e-4..1e15).contains(&size) {
        write!(out, "{value}")
    } else {
        write!(out, "{value:e}")
    };
}

fn push_shortest_single(out: &mut Vec<u8>, value: f32) {
    let size = value.abs();
    let _ = if value == 0.0 {
        out.write_all(b"0")
    } else if (1e-4..1e15).contains(&size) {
        write!(out, "{value}")
    } else {
        write!(out, "{value:e}")
    };
}

#[cfg(test)]
mod tests {
    use super::*;

    fn text(value: f64, precision: Precision) -> String {
        let mut out = Vec::new();
        push_float(&mut out, value, precision);
        String::from_utf8(out).unwrap()
    }

    #[test]
    fn fixed_point_drops_trailing_zeros() {
        let d = Precision::Decimals(4);
        assert_eq!(text(1.5, d), "1.5");
        assert_eq!(text(-0.000_04, d), "0");
        assert_eq!(text(-0.01, d), "-0.01");
        assert_eq!(text(1200.0, d), "1200");
        assert_eq!(text(0.999_96, d), "1");
        assert_eq!(text(1e14, d), "100000000000000");
        assert_eq!(text(123.456_789, d), "123.4568");
    }

    #[test]
    fn shortest_text_reads_back_the_same() {
        for v in [0.1 + 0.2, 1e-300, -2.5e17, 1996.3762, f64::MIN_POSITIVE] {
            assert_eq!(text(v, Precision::Full).parse::<f64>().unwrap(), v);
        }
        assert_eq!(text(0.1_f32.into(), Precision::Single), "0.1");
        assert_eq!(text(1e-60, Precision::Single), "1e-60");
    }

    #[test]
    fn no_number_is_no_text() {
        for v in [f64::NAN, f64::INFINITY, f64::NEG_INFINITY] {
            assert_eq!(text(v, Precision::Full), "");
        }
    }
}
