//! Whole campaigns with unknown frames.

use asterskein::frame::{Anchor, SolveEnd, refine, register};
use asterskein::model::campaign::{Campaign, Distortion, FrameFreedom};
use asterskein::model::detection::RawList;
use rand::RngExt;

use super::made::{Camera, Star, campaign, expose, rng, sky};

const SCALE: f64 = 20.0;

fn cameras(seed: u64, n: usize) -> Vec<Camera> {
    let mut r = rng(seed);
    (0..n)
        .map(|_| Camera {
            pointing: [0, 1].map(|_| 200.0 * (2.0 * r.random::<f64>() - 1.0)),
            turn_deg: 2.0 * (2.0 * r.random::<f64>() - 1.0),
            scale_mas: SCALE * (1.0 + 0.004 * (2.0 * r.random::<f64>() - 1.0)),
            ..Camera::plain(SCALE, 1800.0)
        })
        .collect()
}

/// Lists of pixel epochs; epoch `known` (if any) is in mas and in the common frame.
fn observe(
    seed: u64,
    stars: &[Star],
    times: &[f64],
    cameras: &[Camera],
    known: Option<usize>,
) -> Vec<RawList> {
    let mut r = rng(seed + 77);
    times
        .iter()
        .zip(cameras)
        .enumerate()
        .map(|(k, (t, camera))| {
            if Some(k) != known {
                return expose(&mut r, stars, t - 2000.0, camera, 16.5, 0.6);
            }
            let plain = Camera::plain(1.0, 2500.0);
            let mut list = expose(&mut r, stars, t - 2000.0, &plain, 16.5, 0.6);
            for z in list.x.iter_mut().chain(list.y.iter_mut()) {
                *z -= 128.0;
            }
            list
        })
        .collect()
}

fn setting(n: usize, known: usize) -> (Vec<f64>, Vec<FrameFreedom>) {
    let times: Vec<f64> = (0..n).map(|k| 2000.0 + k as f64 * 1.1).collect();
    let mut frames = vec![FrameFreedom::Affine; n];
    frames[known] = FrameFreedom::Known;
    (times, frames)
}

/// Places of the stars under an epoch's map, less the truth: rms \[mas\].
fn rms_error(c: &Campaign, lists: &[RawList], epoch: usize, stars: &[Star]) -> f64 {
    let r = register(c, lists).unwrap();
    let dt = c.epochs[epoch].time.yr() - 2000.0;
    let mut sum = 0.0;
    let n = r.epochs[epoch].len();
    for row in 0..n {
        let star: usize = lists[epoch].ids.text(row).parse().unwrap();
        let (x, y) = stars[star].at(dt);
        let e = &r.epochs[epoch];
        sum += (e.x_mas[row] - x).powi(2) + (e.y_mas[row] - y).powi(2);
    }
    (sum / (2.0 * n as f64)).sqrt()
}

#[test]
fn a_turned_and_mirrored_epoch_is_found_and_told() {
    let (times, frames) = setting(6, 2);
    let mut r = rng(11);
    let stars = sky(&mut r, 400, 2200.0, 5.0);
    let mut cams = cameras(12, 6);
    cams[4].turn_deg = 143.0;
    cams[4].mirrored = true;
    cams[5].pointing = [900.0, -700.0];
    let lists = observe(13, &stars, &times, &cams, Some(2));
    let c = campaign(&times, &frames, SCALE, 5.0);
    let found = register(&c, &lists).unwrap();
    assert!(found.unplaced().is_empty(), "{:?}", found.notes);
    let note = found
        .notes
        .iter()
        .find(|n| n.what == "frame_start" && n.place == "e004")
        .expect("a note about the odd epoch");
    assert!(note.text.contains("mirrored"), "{}", note.text);
    // Drift of the gauge apart (sigma_v / sqrt(N) = 0.3 mas/yr over 3 yr), errors are detection errors.
    for e in 0..6 {
        let rms = rms_error(&c, &lists, e, &stars);
        assert!(rms < 5.0, "epoch {e}: {rms}");
    }
}

#[test]
fn an_epoch_of_another_field_is_left_out_and_named() {
    let (times, frames) = setting(5, 2);
    let mut r = rng(21);
    let stars = sky(&mut r, 400, 2200.0, 5.0);
    let elsewhere = sky(&mut r, 400, 2200.0, 5.0);
    let cams = cameras(22, 5);
    let mut lists = observe(23, &stars, &times, &cams, Some(2));
    lists[3] = observe(24, &elsewhere, &times, &cams, Some(2)).swap_remove(3);
    let c = campaign(&times, &frames, SCALE, 5.0);
    let found = register(&c, &lists).unwrap();
    assert_eq!(found.unplaced(), [3]);
    assert!(found.epochs[3].is_empty());
    assert!(
        found
            .notes
            .iter()
            .any(|n| n.what == "unplaced_epoch" && n.place == "e003")
    );
}

#[test]
fn without_a_known_frame_the_richest_epoch_defines_it() {
    let (times, mut frames) = setting(5, 0);
    frames[0] = FrameFreedom::Affine;
    let mut r = rng(31);
    let stars = sky(&mut r, 300, 2200.0, 5.0);
    let lists = observe(33, &stars, &times, &cameras(32, 5), None);
    let c = campaign(&times, &frames, SCALE, 5.0);
    let found = register(&c, &lists).unwrap();
    let references = found
        .solutions
        .iter()
        .filter(|s| s.end == SolveEnd::Reference)
        .count();
    assert_eq!(references, 1);
    assert!(found.unplaced().is_empty());
}

#[test]
fn a_shared_bend_is_found_in_every_epoch() {
    let (times, frames) = setting(8, 3);
    let frames: Vec<_> = frames
        .into_iter()
        .map(|f| {
            if f == FrameFreedom::Known {
                f
            } else {
                FrameFreedom::Quadratic
            }
        })
        .collect();
    let mut r = rng(41);
    let stars = sky(&mut r, 350, 2200.0, 5.0);
    let mut cams = cameras(42, 8);
    for c in &mut cams {
        c.bend = [[6.0, -3.0, 4.0], [2.0, 5.0, -4.0]];
    }
    let lists = observe(43, &stars, &times, &cams, Some(3));
    let mut c = campaign(&times, &frames, SCALE, 5.0);
    for e in &mut c.epochs {
        e.settings.distortion = Distortion::Shared;
    }
    let found = register(&c, &lists).unwrap();
    assert!(found.unplaced().is_empty());
    // x = ... - bend: the list's bend, undone by the map, per arcsec^2 of nominal mas.
    for e in [0, 5, 7] {
        let map = &found.solutions[e].map;
        let per = (1000.0 / map.chart.half_mas).powi(2);
        assert!(
            (map.coef[0][3] * per + 6.0).abs() < 0.8,
            "{:?}",
            map.coef[0]
        );
        assert!(
            (map.coef[1][5] * per - 4.0).abs() < 0.8,
            "{:?}",
            map.coef[1]
        );
    }
}

#[test]
fn refining_with_true_anchors_moves_little() {
    let (times, frames) = setting(6, 2);
    let mut r = rng(51);
    let stars = sky(&mut r, 300, 2200.0, 5.0);
    let lists = observe(53, &stars, &times, &cameras(52, 6), Some(2));
    let c = campaign(&times, &frames, SCALE, 5.0);
    let first = register(&c, &lists).unwrap();
    let anchors: Vec<Vec<Anchor>> = lists
        .iter()
        .map(|l| {
            (0..l.len())
                .map(|row| Anchor {
                    row: row as u32,
                    track: l.ids.text(row).parse().unwrap(),
                })
                .collect()
        })
        .collect();
    let (second, moved) = refine(&c, &lists, &first, &anchors).unwrap();
    assert!(moved < 3.0, "{moved}");
    let (_, again) = refine(&c, &lists, &second, &anchors).unwrap();
    assert!(again < 0.3, "{again}");
}

#[test]
fn the_order_of_epochs_changes_only_labels() {
    let (times, frames) = setting(5, 1);
    let mut r = rng(61);
    let stars = sky(&mut r, 300, 2200.0, 5.0);
    let lists = observe(63, &stars, &times, &cameras(62, 5), Some(1));
    let c = campaign(&times, &frames, SCALE, 5.0);
    let forward = register(&c, &lists).unwrap();
    let mut turned = c.clone();
    turned.epochs.reverse();
    let mut back = lists.clone();
    back.reverse();
    let backward = register(&turned, &back).unwrap();
    for e in 0..5 {
        let (a, b) = (&forward.epochs[e], &backward.epochs[4 - e]);
        for row in 0..a.len() {
            let d = (a.x_mas[row] - b.x_mas[row]).hypot(a.y_mas[row] - b.y_mas[row]);
            assert!(d < 0.05, "epoch {e}: {d}");
        }
    }
}
