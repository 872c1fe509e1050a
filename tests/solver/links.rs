//! The candidate graph against a scan over all pairs.

use asterskein::link::candidates::{CandidateGraph, Crowd, EpochLinks, Listed, links_from};
use asterskein::link::gate::{Centre, Gates, Mag};
use asterskein::maths::cov2::Cov2;
use asterskein::model::detection::FieldEpoch;
use asterskein::model::region::Region;
use asterskein::model::time::JulianYear;
use asterskein::near::Tree;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

const STARS: usize = 120;

/// Straight stars in a box of 1200 mas at irregular times; row k of each epoch is star k.
fn field(seed: u64, times: &[f64]) -> Vec<FieldEpoch> {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let stars: Vec<[f64; 5]> = (0..STARS)
        .map(|_| {
            let mut u = |a: f64, b: f64| rng.random_range(a..b);
            [
                u(-600.0, 600.0),
                u(-600.0, 600.0),
                u(-9.0, 9.0),
                u(-9.0, 9.0),
                u(14.0, 16.0),
            ]
        })
        .collect();
    times
        .iter()
        .map(|&t| {
            let mut noise = |s: f64| rng.random_range(-s..s);
            FieldEpoch {
                time: JulianYear(t),
                instrument: 0,
                fwhm_mas: 55.0,
                x_mas: stars
                    .iter()
                    .map(|s| s[0] + s[2] * (t - 2000.0) + noise(2.0))
                    .collect(),
                y_mas: stars
                    .iter()
                    .map(|s| s[1] + s[3] * (t - 2000.0) + noise(2.0))
                    .collect(),
                cov_mas2: vec![Cov2::round(2.0); STARS],
                mag: stars.iter().map(|s| s[4] + noise(0.1)).collect(),
                mag_err: vec![0.05; STARS],
                rv_km_s: Vec::new(),
                rv_err_km_s: Vec::new(),
                quality: Vec::new(),
                region: Region::default(),
            }
        })
        .collect()
}

fn gates() -> Gates {
    let centre = Centre {
        gm_mas3_yr2: 2.868e5,
        x_mas: 0.0,
        y_mas: 0.0,
        softening_mas: 25.0,
    };
    Gates::new(4.0, Some(centre))
}

fn all_links(epochs: &[FieldEpoch], gates: &Gates) -> Vec<EpochLinks> {
    let trees: Vec<_> = epochs
        .iter()
        .map(|e| Tree::build(&e.x_mas, &e.y_mas))
        .collect();
    let crowds: Vec<_> = epochs
        .iter()
        .zip(&trees)
        .map(|(e, t)| Crowd::of(e, t))
        .collect();
    let mut order: Vec<usize> = (0..epochs.len()).collect();
    order.sort_by(|&a, &b| epochs[a].time.yr().total_cmp(&epochs[b].time.yr()));
    let listed: Vec<Listed> = epochs
        .iter()
        .zip(trees.iter().zip(&crowds))
        .map(|(list, (tree, crowd))| Listed { list, tree, crowd })
        .collect();
    let mut parts = vec![EpochLinks::default(); epochs.len()];
    for place in 0..order.len() {
        parts[order[place]] = links_from(place, &order, &listed, gates);
    }
    parts
}

#[test]
fn links_are_the_pairs_a_scan_finds() {
    // Out of order in time, as campaign files may be; the last lies outside the window.
    let times = [2003.1, 2000.0, 2001.4, 2000.6, 2009.0];
    let epochs = field(5, &times);
    let gates = Gates {
        cap: usize::MAX,
        min_ln_odds: f64::NEG_INFINITY,
        ..gates()
    };
    let parts = all_links(&epochs, &gates);
    let mut n = 0;
    for (a, part) in parts.iter().enumerate() {
        for row in 0..STARS {
            let mut wanted = Vec::new();
            for b in 0..epochs.len() {
                let dt = times[b] - times[a];
                if dt <= 0.0 || dt > gates.window_yr {
                    continue;
                }
                let at = [epochs[a].x_mas[row], epochs[a].y_mas[row]];
                let radius = gates.motion_at(at[0], at[1]).reach_mas(dt) + gates.sigmas * 2.0;
                for k in 0..STARS {
                    let d = (epochs[b].x_mas[k] - at[0]).hypot(epochs[b].y_mas[k] - at[1]);
                    let mag = |e: usize, k: usize| Mag {
                        mag: epochs[e].mag[k],
                        err: 0.05,
                    };
                    if d <= radius && gates.magnitudes(mag(a, row), mag(b, k), 0.0).is_some() {
                        wanted.push((b as u32, k as u32));
                    }
                }
            }
            let range = part.first[row] as usize..part.first[row + 1] as usize;
            let found: Vec<_> = part.links[range].iter().map(|l| (l.epoch, l.row)).collect();
            assert_eq!(found, wanted, "epoch {a}, row {row}");
            n += found.len();
        }
        assert_eq!((part.capped_from, part.capped_to), (0, 0));
    }
    assert!(n > 2000, "only {n} links were compared");
}

#[test]
fn true_pairs_are_linked_and_lead() {
    let times = [2000.0, 2000.5, 2001.2, 2002.0];
    let epochs = field(11, &times);
    let graph = CandidateGraph::join(&all_links(&epochs, &gates()));
    let (mut linked, mut leading, mut total) = (0, 0, 0);
    for d in 0..3 * STARS {
        let (epoch, row) = graph.place(d);
        let next: Vec<_> = graph
            .later(d)
            .filter(|l| graph.place(l.0).0 == epoch + 1)
            .collect();
        let own = next.iter().find(|l| graph.place(l.0).1 == row);
        total += 1;
        linked += usize::from(own.is_some());
        leading += usize::from(own.is_some_and(|o| next.iter().all(|l| l.1 <= o.1)));
    }
    assert_eq!(linked, total);
    assert!(
        leading * 100 >= total * 95,
        "{leading} of {total} true pairs lead"
    );
}

#[test]
fn caps_are_counted_on_both_sides() {
    let epochs = field(3, &[2000.0, 2002.0]);
    let open = Gates {
        min_ln_odds: f64::NEG_INFINITY,
        cap: usize::MAX,
        ..gates()
    };
    let all: usize = all_links(&epochs, &open)
        .iter()
        .map(|p| p.links.len())
        .sum();
    let tight = Gates { cap: 1, ..open };
    let parts = all_links(&epochs, &tight);
    let mut into = vec![0; STARS];
    for row in 0..STARS {
        let range = parts[0].first[row] as usize..parts[0].first[row + 1] as usize;
        assert!(range.len() <= 1);
        for link in &parts[0].links[range] {
            into[link.row as usize] += 1;
        }
    }
    assert!(into.iter().all(|&n| n <= 1));
    let kept = parts[0].links.len() as u64;
    assert!(parts[0].capped_from > 0 && parts[0].capped_to > 0);
    assert_eq!(kept + parts[0].capped_from + parts[0].capped_to, all as u64);
}
