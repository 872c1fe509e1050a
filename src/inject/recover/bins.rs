//! Tables of what became of made-up stars.

use super::{Outcome, Recovered};
use crate::io::table::{Precision, Table};

/// One row per made-up star.
#[must_use]
pub fn injected_table(stars: &[Recovered]) -> Table<'_> {
    let int = |v: u32| Some(i64::from(v));
    // Few enough digits that a table made in one go equals one that was resumed from text.
    let digits = Precision::Decimals(4);
    Table::new(
        "injected",
        "Made-up stars put into the lists, and what became of them",
        stars.len(),
    )
    .int("star", "number of the made-up star", |k| Some(k as i64))
    .int(
        "batch",
        "stars of one batch were in the lists together",
        move |k| int(stars[k].batch),
    )
    .float("mag", "mag", "magnitude", digits, |k| stars[k].mag)
    .float(
        "x_mas",
        "mas",
        "east of the mass or origin at the reference epoch",
        digits,
        |k| stars[k].x_mas,
    )
    .float(
        "y_mas",
        "mas",
        "north of the mass or origin at the reference epoch",
        digits,
        |k| stars[k].y_mas,
    )
    .float(
        "vx_mas_yr",
        "mas / yr",
        "velocity toward east",
        digits,
        |k| stars[k].vx_mas_yr,
    )
    .float(
        "vy_mas_yr",
        "mas / yr",
        "velocity toward north",
        digits,
        |k| stars[k].vy_mas_yr,
    )
    .float(
        "radius_mas",
        "mas",
        "distance from the mass or origin on the sky",
        digits,
        |k| stars[k].radius_mas,
    )
    .float(
        "pericentre_mas",
        "mas",
        "least distance from the mass",
        digits,
        |k| stars[k].pericentre_mas.unwrap_or(f64::NAN),
    )
    .float("period_yr", "yr", "period of the orbit", digits, |k| {
        stars[k].period_yr.unwrap_or(f64::NAN)
    })
    .int(
        "pair",
        "number shared by two stars that pass close by each other",
        move |k| stars[k].pair.and_then(int),
    )
    .int(
        "n_present",
        "detections in which it gives more than 5 % of the light",
        move |k| int(stars[k].n_present),
    )
    .int("n_merged", "those it shares with another star", move |k| {
        int(stars[k].n_merged)
    })
    .int(
        "n_track",
        "members of the track that holds most of them",
        move |k| int(stars[k].n_track),
    )
    .int(
        "n_shared",
        "members of that track that are this star's",
        move |k| int(stars[k].n_shared),
    )
    .int(
        "n_links",
        "steps from member to member of that track",
        move |k| int(stars[k].n_links),
    )
    .int(
        "n_wrong_links",
        "steps that do not stay with this star",
        move |k| int(stars[k].n_wrong_links),
    )
    .text(
        "outcome",
        "whole, found, lost, or unseen (fewer than two detections)",
        |k, out| {
            out.push_str(stars[k].outcome.word());
        },
    )
    .bool(
        "fakes_orbit",
        "a track mixed from this pair claims a short orbit that neither has",
        |k| stars[k].pair.map(|_| stars[k].fakes_orbit),
    )
}

/// Counts of one range of one quantity.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Bin {
    by: &'static str,
    low: f64,
    high: f64,
    n: u32,
    n_seen: u32,
    n_found: u32,
    n_whole: u32,
    n_confused: u32,
    members: u32,
    members_right: u32,
    links: u32,
    links_wrong: u32,
    pairs: u32,
    fakes: u32,
}

impl Bin {
    fn add(&mut self, s: &Recovered) {
        self.n += 1;
        self.n_seen += u32::from(s.outcome != Outcome::Unseen);
        self.n_whole += u32::from(s.outcome == Outcome::Whole);
        if s.pair.is_some() {
            self.pairs += 1;
            self.fakes += u32::from(s.fakes_orbit);
        }
        if s.outcome.is_found() {
            self.n_found += 1;
            self.n_confused += u32::from(s.outcome == Outcome::Found && s.n_track > s.n_shared);
            self.members += s.n_track;
            self.members_right += s.n_shared;
            self.links += s.n_links;
            self.links_wrong += s.n_wrong_links;
        }
    }
}

/// Value of a quantity, where a star has it.
type ValueOf = fn(&Recovered) -> Option<f64>;

/// Counts of all stars, then by magnitude, radius and pericentre.
#[must_use]
pub fn bins(stars: &[Recovered]) -> Vec<Bin> {
    let mut bins = vec![Bin {
        by: "all",
        low: f64::NAN,
        high: f64::NAN,
        ..Bin::default()
    }];
    for s in stars {
        bins[0].add(s);
    }
    let magnitudes: ValueOf = |s| Some(s.mag);
    let radii: ValueOf = |s| Some(s.radius_mas);
    bins.extend(binned(
        "mag",
        stars,
        magnitudes,
        |v| v.floor(),
        |low| low + 1.0,
    ));
    bins.extend(binned("radius_mas", stars, radii, power_of_two, |low| {
        2.0 * low
    }));
    bins.extend(binned(
        "pericentre_mas",
        stars,
        |s| s.pericentre_mas,
        power_of_four,
        |low| 4.0 * low,
    ));
    bins
}

fn power_of_two(v: f64) -> f64 {
    v.max(1.0).log2().floor().exp2()
}

fn power_of_four(v: f64) -> f64 {
    (0.5 * v.max(1.0).log2()).floor().exp2().powi(2)
}

fn binned(
    by: &'static str,
    stars: &[Recovered],
    value: ValueOf,
    low_of: impl Fn(f64) -> f64,
    high_of: impl Fn(f64) -> f64,
) -> Vec<Bin> {
    let mut lows: Vec<f64> = stars.iter().filter_map(value).map(&low_of).collect();
    lows.sort_by(f64::total_cmp);
    lows.dedup();
    lows.into_iter()
        .map(|low| {
            let mut bin = Bin {
                by,
                low,
                high: high_of(low),
                ..Bin::default()
            };
            for s in stars {
                if value(s).is_some_and(|v| low_of(v) == low) {
                    bin.add(s);
                }
            }
            bin
        })
        .collect()
}

/// Completeness, purity, wrong links and confusion of [`bins`]. Errors are binomial, 68 %
/// (Wilson 1927, J. Am. Stat. Assoc. 22, 209).
#[must_use]
pub fn completeness_table(bins: &[Bin]) -> Table<'_> {
    let single = Precision::Single;
    let fraction = |a: u32, b: u32| {
        if b == 0 {
            f64::NAN
        } else {
            f64::from(a) / f64::from(b)
        }
    };
    let mut t = Table::new(
        "completeness",
        "What became of made-up stars, by range; errors are binomial (68 %)",
        bins.len(),
    )
    .text("by", "the quantity", |k, out| out.push_str(bins[k].by))
    .float("low", "", "from", single, |k| bins[k].low)
    .float("high", "", "to", single, |k| bins[k].high)
    .int("n", "made-up stars", |k| Some(i64::from(bins[k].n)))
    .int("n_seen", "present in two detections or more", |k| {
        Some(i64::from(bins[k].n_seen))
    })
    .int("n_found", "found in one track", |k| {
        Some(i64::from(bins[k].n_found))
    })
    .int(
        "n_whole",
        "found with nothing missing and nothing foreign",
        |k| Some(i64::from(bins[k].n_whole)),
    );
    for (name, what, counts) in QUANTITIES {
        let (n, of) = (
            move |k: usize| counts(&bins[k]).0,
            move |k: usize| counts(&bins[k]).1,
        );
        t = t
            .float(name, "", what, single, move |k| fraction(n(k), of(k)))
            .float(
                &format!("{name}_low"),
                "",
                "lower end of its 68 % range",
                single,
                move |k| wilson(n(k), of(k)).0,
            )
            .float(
                &format!("{name}_high"),
                "",
                "upper end of its 68 % range",
                single,
                move |k| wilson(n(k), of(k)).1,
            );
    }
    t
}

/// A fraction: its name, what it says, its counts.
type Quantity = (&'static str, &'static str, fn(&Bin) -> (u32, u32));

const QUANTITIES: [Quantity; 6] = [
    ("completeness", "found / made-up stars", |b| {
        (b.n_found, b.n)
    }),
    (
        "completeness_seen",
        "found / stars present in two detections or more",
        |b| (b.n_found, b.n_seen),
    ),
    (
        "purity",
        "right members / members of the found tracks",
        |b| (b.members_right, b.members),
    ),
    (
        "wrong_links",
        "wrong steps / steps of the found tracks",
        |b| (b.links_wrong, b.links),
    ),
    (
        "confused",
        "found tracks with foreign members / found",
        |b| (b.n_confused, b.n_found),
    ),
    (
        "fake_orbits",
        "stars of pairs whose mixture claims a short orbit / stars of pairs",
        |b| (b.fakes, b.pairs),
    ),
];

/// One-sigma score interval of a binomial fraction; `NaN` without trials.
fn wilson(successes: u32, trials: u32) -> (f64, f64) {
    if trials == 0 {
        return (f64::NAN, f64::NAN);
    }
    let (n, p) = (f64::from(trials), f64::from(successes) / f64::from(trials));
    let middle = (p + 0.5 / n) / (1.0 + 1.0 / n);
    let half = (p * (1.0 - p) / n + 0.25 / (n * n)).sqrt() / (1.0 + 1.0 / n);
    ((middle - half).max(0.0), (middle + half).min(1.0))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn wilson_intervals() {
        // By hand for z = 1: p = 0 gives (0, 1 / (n + 1)); p = 1/2 gives 1/2 -+ 1 / (2 sqrt(n + 1)).
        assert_eq!(wilson(0, 9).0, 0.0);
        assert!((wilson(0, 9).1 - 0.1).abs() < 1e-12);
        let (low, high) = wilson(8, 16);
        let half = 0.5 / 17f64.sqrt();
        assert!((low - (0.5 - half)).abs() < 1e-12 && (high - (0.5 + half)).abs() < 1e-12);
        assert!(wilson(0, 0).0.is_nan());
    }

    #[test]
    fn ranges_hold_their_values() {
        assert_eq!((power_of_two(100.0), power_of_four(100.0)), (64.0, 64.0));
        assert_eq!((power_of_two(20.0), power_of_four(20.0)), (16.0, 16.0));
    }
}
