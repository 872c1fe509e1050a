//! A table's columns to a checked [`RawList`] in canonical order.

use std::cmp::Ordering;
use std::path::Path;

use super::delimited::{Column, Table};
use super::fault::{FaultKind, Faults};
use crate::maths::cov2::Cov2;
use crate::model::campaign::{Instrument, Unit};
use crate::model::detection::{Ids, RawList};

/// Checks every value and sorts the rows by (x, y, magnitude, id).
///
/// # Errors
/// Values that cannot be used: places not given, errors of zero or less, correlations of one or
/// more, identifiers given twice, errors that are neither in the list nor in the campaign.
pub(super) fn build(
    mut table: Table,
    path: &Path,
    instrument: &Instrument,
) -> Result<RawList, Faults> {
    let n = table.n_rows;
    let mut checks = Checks {
        path,
        faults: Faults::default(),
    };
    let mut numbers = |role: &str| -> Vec<f64> {
        let Some((c, factor)) = table.plan.role(role) else {
            return Vec::new();
        };
        let mut values = match &mut table.columns[c] {
            Column::Numbers(v) => std::mem::take(v),
            _ => Vec::new(),
        };
        if factor != 1.0 {
            values.iter_mut().for_each(|v| *v *= factor);
        }
        values
    };
    let x = numbers("x");
    let y = numbers("y");
    let errors = Errors {
        x: numbers("x_err"),
        y: numbers("y_err"),
        corr: numbers("xy_corr"),
        major: numbers("err_major"),
        minor: numbers("err_minor"),
        pa_deg: numbers("err_pa_deg"),
    };
    let mag = filled(numbers("mag"), n);
    let mag_err = filled(numbers("mag_err"), n);
    let rv_km_s = numbers("rv_km_s");
    let rv_err_km_s = numbers("rv_err_km_s");
    let quality = numbers("quality");

    checks.places(&table, &x, &y, instrument.unit);
    let err = checks.errors(&table, &errors, n, instrument);
    checks.positive(&table, "mag_err", &mag_err);
    checks.magnitude_errors(&table, &mag, &mag_err, instrument);
    checks.positive(&table, "rv_err_km_s", &rv_err_km_s);
    for (row, (v, e)) in rv_km_s.iter().zip(&rv_err_km_s).enumerate() {
        if !v.is_nan() && e.is_nan() {
            checks.fault(&table, row, "rv_err_km_s", FaultKind::EmptyCell);
        }
    }
    for (row, &q) in quality.iter().enumerate() {
        if !q.is_nan() && !(0.0..=1.0).contains(&q) {
            checks.wrong(&table, row, "quality", q, "a number from 0 to 1");
        }
    }
    let ids = match table.plan.role("id").map(|(c, _)| c) {
        Some(c) => match std::mem::replace(&mut table.columns[c], Column::Skipped) {
            Column::Ids(ids) => ids,
            _ => Ids::default(),
        },
        None => Ids::Numbers((0..n).map(|k| u64::from(table.file_row(k)) + 1).collect()),
    };
    checks.ids(&table, &ids);
    let given_name = match table.plan.role("given_name") {
        Some((c, _)) => texts(&mut table.columns[c]),
        None => Vec::new(),
    };
    let kept: Vec<(String, Vec<String>)> = std::mem::take(&mut table.plan.keep)
        .into_iter()
        .map(|(name, c)| (name, texts(&mut table.columns[c])))
        .collect();

    let order = canonical_order(&x, &y, &mag, &ids);
    let list = RawList {
        file_row: order
            .iter()
            .map(|&k| table.file_row(k as usize) + 1)
            .collect(),
        x: picked(&x, &order),
        y: picked(&y, &order),
        err: picked(&err, &order),
        mag: picked(&mag, &order),
        mag_err: picked(&mag_err, &order),
        rv_km_s: picked(&rv_km_s, &order),
        rv_err_km_s: picked(&rv_err_km_s, &order),
        quality: picked(&quality, &order),
        given_name: picked(&given_name, &order),
        kept: kept
            .into_iter()
            .map(|(name, values)| (name, picked(&values, &order)))
            .collect(),
        ids: match &ids {
            Ids::Numbers(v) => Ids::Numbers(picked(v, &order)),
            Ids::Text(v) => Ids::Text(picked(v, &order)),
        },
        mask: Vec::new(),
    };
    checks.faults.or(list)
}

/// Error columns as they stand; empty when the list has none.
struct Errors {
    x: Vec<f64>,
    y: Vec<f64>,
    corr: Vec<f64>,
    major: Vec<f64>,
    minor: Vec<f64>,
    pa_deg: Vec<f64>,
}

struct Checks<'a> {
    path: &'a Path,
    faults: Faults,
}

impl Checks<'_> {
    fn fault(&mut self, table: &Table, row: usize, role: &str, kind: FaultKind) {
        let name = table
            .plan
            .role(role)
            .map_or(role, |(c, _)| table.heads[c].name.as_str());
        let place = table.place(self.path, row).with_column(name);
        self.faults.push(place, kind);
    }

    fn wrong(&mut self, table: &Table, row: usize, role: &str, found: f64, expected: &str) {
        self.fault(table, row, role, not_as_expected(found, expected));
    }

    fn places(&mut self, table: &Table, x: &[f64], y: &[f64], unit: Unit) {
        let sky = unit == Unit::Deg;
        for row in 0..table.n_rows {
            for (role, v) in [("x", x[row]), ("y", y[row])] {
                if v.is_nan() {
                    self.fault(table, row, role, FaultKind::EmptyCell);
                }
            }
            if sky && !(-180.0..=360.0).contains(&x[row]) && !x[row].is_nan() {
                self.wrong(
                    table,
                    row,
                    "x",
                    x[row],
                    "a right ascension in degrees, -180 to 360",
                );
            }
            if sky && y[row].abs() > 90.0 {
                self.wrong(
                    table,
                    row,
                    "y",
                    y[row],
                    "a declination in degrees, -90 to 90",
                );
            }
        }
    }

    fn positive(&mut self, table: &Table, role: &str, values: &[f64]) {
        for (row, &v) in values.iter().enumerate() {
            if v <= 0.0 {
                self.wrong(table, row, role, v, "an error above 0");
            }
        }
    }

    /// Covariance of every row; `None` where the campaign's default must serve.
    fn errors(
        &mut self,
        table: &Table,
        e: &Errors,
        n: usize,
        instrument: &Instrument,
    ) -> Vec<Option<Cov2>> {
        self.positive(table, "x_err", &e.x);
        self.positive(table, "y_err", &e.y);
        self.positive(table, "err_major", &e.major);
        self.positive(table, "err_minor", &e.minor);
        for (row, &c) in e.corr.iter().enumerate() {
            if c.abs() >= 1.0 {
                self.wrong(
                    table,
                    row,
                    "xy_corr",
                    c,
                    "a correlation between -1 and 1, both excluded",
                );
            }
        }
        let covariance = |row: usize| -> Option<Cov2> {
            let c = if e.x.is_empty() {
                let pa = e.pa_deg.get(row)?.to_radians();
                ellipse(*e.major.get(row)?, *e.minor.get(row)?, pa)
            } else {
                let corr = e.corr.get(row).copied().filter(|c| !c.is_nan());
                Cov2::from_sigmas(e.x[row], *e.y.get(row)?, corr.unwrap_or(0.0))
            };
            (c.xx.is_finite() && c.xy.is_finite() && c.yy.is_finite()).then_some(c)
        };
        let err: Vec<Option<Cov2>> = (0..n).map(covariance).collect();
        if instrument.default_err_mas.is_none()
            && let Some(row) = err.iter().position(Option::is_none)
        {
            let role = if e.major.is_empty() {
                "x_err"
            } else {
                "err_major"
            };
            let what = missing_count("the error of the position", &err, Option::is_none);
            self.no_default(table, row, role, what, "default_err_mas", instrument);
        }
        err
    }

    fn magnitude_errors(
        &mut self,
        table: &Table,
        mag: &[f64],
        mag_err: &[f64],
        instrument: &Instrument,
    ) {
        if instrument.default_mag_err.is_some() {
            return;
        }
        let rows: Vec<(f64, f64)> = mag.iter().copied().zip(mag_err.iter().copied()).collect();
        let lacks = |(m, e): &(f64, f64)| !m.is_nan() && e.is_nan();
        if let Some(row) = rows.iter().position(lacks) {
            let what = missing_count("the error of the magnitude", &rows, lacks);
            self.no_default(table, row, "mag_err", what, "default_mag_err", instrument);
        }
    }

    fn no_default(
        &mut self,
        table: &Table,
        row: usize,
        role: &str,
        what: String,
        default: &str,
        instrument: &Instrument,
    ) {
        self.fault(
            table,
            row,
            role,
            FaultKind::NoDefault {
                what,
                instrument: format!("instrument `{}`", instrument.name),
                default: default.to_owned(),
            },
        );
    }

    fn ids(&mut self, table: &Table, ids: &Ids) {
        if table.plan.role("id").is_none() {
            return;
        }
        if let Ids::Text(texts) = ids
            && let Some(row) = texts.iter().position(String::is_empty)
        {
            self.fault(table, row, "id", FaultKind::EmptyCell);
        }
        for (first, second) in repeated(ids) {
            let first_place = table.place(self.path, first);
            let first = match (first_place.line, first_place.row) {
                (Some(line), _) => format!("in line {line}"),
                (_, Some(row)) => format!("in row {row}"),
                _ => String::new(),
            };
            self.fault(
                table,
                second,
                "id",
                FaultKind::Twice {
                    what: "id".to_owned(),
                    value: ids.text(second),
                    first,
                    expected: "expected every id once in a list".to_owned(),
                },
            );
        }
    }
}

/// The value of a cell against what it should have been.
pub(super) fn not_as_expected(found: f64, expected: &str) -> FaultKind {
    if found.is_nan() {
        return FaultKind::EmptyCell;
    }
    FaultKind::Value {
        found: found.to_string(),
        expected: expected.to_owned(),
    }
}

fn missing_count<T>(what: &str, rows: &[T], lacks: impl Fn(&T) -> bool) -> String {
    let n = rows.iter().filter(|r| lacks(r)).count();
    format!("{what} ({n} of {} rows)", rows.len())
}

/// Covariance of an error ellipse; the position angle runs from +y toward +x, which is north
/// through east when x points east.
fn ellipse(major: f64, minor: f64, pa_rad: f64) -> Cov2 {
    let (s, c) = pa_rad.sin_cos();
    let (a2, b2) = (major * major, minor * minor);
    Cov2 {
        xx: a2 * s * s + b2 * c * c,
        xy: (a2 - b2) * s * c,
        yy: a2 * c * c + b2 * s * s,
    }
}

/// Pairs (first row, later row) that carry the same identifier; empty texts do not count.
fn repeated(ids: &Ids) -> Vec<(usize, usize)> {
    let n = ids.len();
    let same = |a: usize, b: usize| match ids {
        Ids::Numbers(v) => v[a] == v[b],
        Ids::Text(v) => v[a] == v[b] && !v[a].is_empty(),
    };
    if let Ids::Numbers(v) = ids
        && v.windows(2).all(|w| w[0] < w[1])
    {
        return Vec::new();
    }
    let mut order: Vec<usize> = (0..n).collect();
    match ids {
        Ids::Numbers(v) => order.sort_by_key(|&k| v[k]),
        Ids::Text(v) => order.sort_by(|&a, &b| v[a].cmp(&v[b])),
    }
    let mut pairs = Vec::new();
    let mut first = 0;
    for k in 1..n {
        if same(order[first], order[k]) {
            pairs.push((order[first], order[k]));
        } else {
            first = k;
        }
    }
    pairs.sort_unstable_by_key(|&(_, later)| later);
    pairs
}

fn canonical_order(x: &[f64], y: &[f64], mag: &[f64], ids: &Ids) -> Vec<u32> {
    let by_id = |a: usize, b: usize| -> Ordering {
        match ids {
            Ids::Numbers(v) => v[a].cmp(&v[b]),
            Ids::Text(v) => v[a].cmp(&v[b]),
        }
    };
    // Sorting whole numbers in the order of the floats is faster; few rows share an x.
    let mut keyed: Vec<(i64, u32)> = x.iter().map(|&x| total_order_key(x)).zip(0..).collect();
    keyed.sort_unstable();
    for run in keyed.chunk_by_mut(|a, b| a.0 == b.0) {
        if run.len() > 1 {
            run.sort_unstable_by(|&(_, a), &(_, b)| {
                let (a, b) = (a as usize, b as usize);
                y[a].total_cmp(&y[b])
                    .then_with(|| mag[a].total_cmp(&mag[b]))
                    .then_with(|| by_id(a, b))
            });
        }
    }
    keyed.into_iter().map(|(_, k)| k).collect()
}

/// A whole number that sorts as the float does (IEEE 754 totalOrder).
fn total_order_key(v: f64) -> i64 {
    let bits = v.to_bits().cast_signed();
    bits ^ ((bits >> 63).cast_unsigned() >> 1).cast_signed()
}

fn filled(values: Vec<f64>, n: usize) -> Vec<f64> {
    if values.is_empty() {
        vec![f64::NAN; n]
    } else {
        values
    }
}

fn texts(column: &mut Column) -> Vec<String> {
    match column {
        Column::Texts(t) => std::mem::take(t),
        Column::Numbers(v) => v.iter().map(f64::to_string).collect(),
        Column::Ids(ids) => (0..ids.len()).map(|k| ids.text(k)).collect(),
        Column::Skipped => Vec::new(),
    }
}

fn picked<T: Clone>(values: &[T], order: &[u32]) -> Vec<T> {
    if values.is_empty() {
        return Vec::new();
    }
    order.iter().map(|&k| values[k as usize].clone()).collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ellipse_along_north_and_east() {
        let north = ellipse(3.0, 1.0, 0.0);
        assert_eq!((north.xx, north.yy), (1.0, 9.0));
        let east = ellipse(3.0, 1.0, std::f64::consts::FRAC_PI_2);
        assert!((east.xx - 9.0).abs() < 1e-12 && (east.yy - 1.0).abs() < 1e-12);
        let between = ellipse(3.0, 1.0, std::f64::consts::FRAC_PI_4);
        assert!(
            between.xy > 0.0,
            "a major axis toward north-east correlates x and y"
        );
    }

    #[test]
    fn keys_sort_as_floats_do() {
        let mut v = [3.5, -2.0, 0.0, -1e300, 1e-300, 7e8, -3.0];
        let mut w = v;
        v.sort_by(f64::total_cmp);
        w.sort_by_key(|&x| total_order_key(x));
        assert_eq!(v, w);
    }

    #[test]
    fn repeated_ids_point_at_the_first() {
        let ids = Ids::Numbers(vec![5, 3, 5, 5]);
        assert_eq!(repeated(&ids), vec![(0, 2), (0, 3)]);
        let ids = Ids::Text(vec!["a".into(), "b".into(), "a".into()]);
        assert_eq!(repeated(&ids), vec![(0, 2)]);
    }
}
