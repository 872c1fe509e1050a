//! The tree of neighbours against a plain scan, ties included.

use asterskein::near::{Hit, Tree};
use proptest::prelude::*;

fn scan(x: &[f64], y: &[f64], at: [f64; 2], radius: f64) -> Vec<Hit> {
    let mut hits: Vec<Hit> = (0..x.len())
        .filter(|&k| x[k].is_finite() && y[k].is_finite())
        .map(|k| Hit {
            dist_mas: ((x[k] - at[0]).powi(2) + (y[k] - at[1]).powi(2)).sqrt(),
            x_mas: x[k],
            y_mas: y[k],
            row: k as u32,
        })
        .filter(|h| h.dist_mas <= radius)
        .collect();
    hits.sort_by(|a, b| {
        let key = |h: &Hit| (h.dist_mas, h.x_mas, h.y_mas, h.row);
        key(a).partial_cmp(&key(b)).expect("finite keys")
    });
    hits
}

/// Whole numbers (many ties and identical points), plain floats, and now and then no number.
fn coordinate() -> impl Strategy<Value = f64> {
    prop_oneof![
        10 => (0i32..6).prop_map(f64::from),
        10 => 0.0..6.0f64,
        1 => Just(f64::NAN),
        1 => Just(f64::INFINITY),
    ]
}

/// Where to look: on the lattice of whole numbers (ties) or anywhere.
fn place() -> impl Strategy<Value = [f64; 2]> {
    let axis = || prop_oneof![(0i32..6).prop_map(f64::from), 0.0..6.0f64];
    [axis(), axis()]
}

fn points(n: usize) -> impl Strategy<Value = (Vec<f64>, Vec<f64>)> {
    prop::collection::vec((coordinate(), coordinate()), 0..n)
        .prop_map(|p: Vec<(f64, f64)>| p.into_iter().unzip())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 400, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn within_equals_a_scan(
        (x, y) in points(300),
        at in place(),
        radius in prop_oneof![(0i32..4).prop_map(f64::from), 0.0..4.0f64],
    ) {
        let mut hits = Vec::new();
        Tree::build(&x, &y).within(at[0], at[1], radius, &mut hits);
        prop_assert_eq!(hits, scan(&x, &y, at, radius));
    }

    #[test]
    fn nearest_equal_a_scan((x, y) in points(300), at in place(), n in 0usize..40) {
        let mut hits = Vec::new();
        Tree::build(&x, &y).nearest_n(at[0], at[1], n, &mut hits);
        let mut wanted = scan(&x, &y, at, f64::INFINITY);
        wanted.truncate(n);
        prop_assert_eq!(hits, wanted);
    }

    #[test]
    fn pairs_equal_a_scan((xa, ya) in points(60), (xb, yb) in points(60), radius in 0.0..3.0f64) {
        let (a, b) = (Tree::build(&xa, &ya), Tree::build(&xb, &yb));
        let found: Vec<_> = a.pairs_within(&b, radius).iter().map(|p| (p.left, p.right)).collect();
        let mut wanted = Vec::new();
        for k in 0..xa.len() {
            if xa[k].is_finite() && ya[k].is_finite() {
                let mut right: Vec<_> =
                    scan(&xb, &yb, [xa[k], ya[k]], radius).iter().map(|h| (k as u32, h.row)).collect();
                right.sort_unstable();
                wanted.extend(right);
            }
        }
        prop_assert_eq!(found, wanted);
    }

    /// The order of hits does not depend on the order in which points were given.
    #[test]
    fn order_of_rows_does_not_matter((x, y) in points(200), at in place()) {
        let places = |x: &[f64], y: &[f64]| {
            let mut hits = Vec::new();
            Tree::build(x, y).within(at[0], at[1], 3.0, &mut hits);
            hits.iter().map(|h| (h.x_mas, h.y_mas)).collect::<Vec<_>>()
        };
        let (xr, yr): (Vec<_>, Vec<_>) = (x.iter().rev().copied().collect(), y.iter().rev().copied().collect());
        prop_assert_eq!(places(&x, &y), places(&xr, &yr));
    }
}
