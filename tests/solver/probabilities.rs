//! Marginals and rivals of small tangles against sums and maxima over all explanations.

use asterskein::resolve::exact::{Budget, certify};
use asterskein::resolve::pack::Packer;
use asterskein::resolve::posterior::{EpochMarginals, mixture, of_epoch};
use asterskein::resolve::program::{Builder, Explanation, FALSE, Program};
use asterskein::resolve::rivals::{Cause, Reach, Step, near};
use proptest::prelude::*;

use super::tangles::tangle;

/// Calls `visit` with every valid explanation that has these tracks.
fn every(p: &Program, exists: &[bool], visit: &mut dyn FnMut(&Explanation, f64)) {
    let mut e = Explanation {
        exists: exists.to_vec(),
        made_by: vec![FALSE; p.n_detections()],
    };
    every_from(p, &mut e, 0, visit);
}

fn every_from(
    p: &Program,
    e: &mut Explanation,
    d: usize,
    visit: &mut dyn FnMut(&Explanation, f64),
) {
    let Some(value) = p.value(e) else { return };
    if d == p.n_detections() {
        visit(e, value);
        return;
    }
    every_from(p, e, d + 1, visit);
    for s in p.sources(d) {
        e.made_by[d] = s as u32;
        every_from(p, e, d + 1, visit);
    }
    e.made_by[d] = FALSE;
}

fn all_epochs(p: &Program, exists: &[bool], temperature: f64) -> Vec<EpochMarginals> {
    let mut packer = Packer::default();
    (0..p.n_epochs())
        .map(|e| of_epoch(p, e, exists, temperature, &mut packer))
        .collect()
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 400, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn marginals_equal_the_sum_over_all_assignments(
        p in tangle(1..=5),
        out in prop::collection::vec(prop::bool::weighted(0.2), 5),
        temperature in 0.5..3.0f64,
    ) {
        let mut exists: Vec<bool> = (0..p.n_tracks()).map(|k| p.is_forced(k) || !out[k]).collect();
        for family in p.families() {
            let one = family.iter().copied().find(|&k| p.is_forced(k as usize)).unwrap_or(family[0]);
            family.iter().filter(|&&k| k != one).for_each(|&k| exists[k as usize] = false);
        }
        let base: f64 = (0..p.n_tracks()).filter(|&k| exists[k]).map(|k| p.base(k)).sum();
        let mut weight = vec![0.0; p.n_sources()];
        let mut total = 0.0;
        every(&p, &exists, &mut |e, value| {
            let w = ((value - base) / temperature).exp();
            total += w;
            e.made_by.iter().filter(|&&s| s != FALSE).for_each(|&s| weight[s as usize] += w);
        });
        let found = all_epochs(&p, &exists, temperature);
        let flat: Vec<f64> = found.iter().flat_map(|m| m.probability.clone()).collect();
        prop_assert_eq!(flat.len(), weight.len());
        for (s, (f, w)) in flat.iter().zip(&weight).enumerate() {
            prop_assert!((f - w / total).abs() < 1e-9, "source {}: {} for {}", s, f, w / total);
        }
        for (e, m) in found.iter().enumerate() {
            prop_assert!(m.exact);
            for d in p.epoch(e) {
                let made: f64 = p.sources(d).map(|s| flat[s]).sum();
                prop_assert!((m.p_false(&p, d) - (1.0 - made)).abs() < 1e-9);
            }
            for c in m.memberships(&p) {
                let sum: f64 = p
                    .sources(c.detection as usize)
                    .filter(|&s| p.tracks(s).any(|k| k == c.track as usize))
                    .map(|s| flat[s])
                    .sum();
                prop_assert!((c.probability - sum).abs() < 1e-12);
            }
        }
    }

    /// Every rival's odds are those of the best explanation that obeys its cause; nobody within
    /// reach is forgotten.
    #[test]
    fn rivals_are_min_marginals(p in tangle(2..=5)) {
        let proof = certify(&p, &p.empty(), &Budget::default()).expect("the empty one is valid");
        let best = proof.best;
        let reach = Reach { within_nats: 1e3, ..Reach::default() };
        let found = near(&p, &best, &reach);
        for rival in &found {
            let mut exists = best.exists.clone();
            match rival.cause {
                Cause::Without { track } => exists[track as usize] = false,
                Cause::With { track } => {
                    p.family_of(track as usize).iter().for_each(|&k| exists[k as usize] = k == track);
                }
                Cause::Otherwise { .. } => {}
            }
            let mut most = f64::NEG_INFINITY;
            every(&p, &exists, &mut |e, value| {
                let allowed = match rival.cause {
                    Cause::Otherwise { detection } => {
                        e.made_by[detection as usize] != best.made_by[detection as usize]
                    }
                    _ => true,
                };
                if allowed {
                    most = most.max(value);
                }
            });
            let odds = most - proof.gain;
            prop_assert!((rival.ln_odds - odds).abs() < 1e-6, "{:?}: {}", rival, odds);
            prop_assert!(rival.ln_odds <= 1e-6);
        }
        for pair in found.windows(2) {
            prop_assert!(pair[0].ln_odds >= pair[1].ln_odds);
        }
        let vanishing: Vec<usize> =
            (0..p.n_tracks()).filter(|&k| best.exists[k] && !p.is_forced(k)).collect();
        for k in vanishing {
            let told = |s: &Step| *s == Step::Vanishes { track: k as u32 };
            prop_assert!(found.iter().any(|r| r.steps.iter().any(told)));
        }
    }
}

/// Two tracks, two detections, both ways round: the words say who takes what from whom.
#[test]
fn an_exchange_is_told_as_two_takes() {
    let mut b = Builder::default();
    let (p, q) = (b.track(-1.0), b.track(-1.0));
    for (d, own, other) in [(0, p, q), (1, q, p)] {
        b.source(0, d, &[own], 9.0);
        b.source(0, d, &[other], 8.0);
    }
    let program = b.finish();
    let proof = certify(&program, &program.empty(), &Budget::default()).expect("valid");
    let rivals = near(
        &program,
        &proof.best,
        &Reach {
            within_nats: 3.0,
            ..Reach::default()
        },
    );
    assert_eq!(rivals.len(), 1);
    assert!((rivals[0].ln_odds + 2.0).abs() < 1e-12);
    assert_eq!(
        rivals[0].steps,
        [
            Step::Takes {
                track: 1,
                detection: 0,
                from: Some(0)
            },
            Step::Takes {
                track: 0,
                detection: 1,
                from: Some(1)
            },
        ]
    );
    // Odds exp(18) to exp(16), and a little for each detection alone.
    let m = of_epoch(&program, 0, &proof.best.exists, 1.0, &mut Packer::default());
    let sum: f64 = [18.0, 16.0, 9.0, 9.0, 8.0, 8.0, 0.0f64]
        .iter()
        .map(|g| g.exp())
        .sum();
    let straight = (18.0f64.exp() + 9.0f64.exp()) / sum;
    assert!((m.memberships(&program)[0].probability - straight).abs() < 1e-12);
}

/// Two sets of tracks of equal weight: the mean of their probabilities.
#[test]
fn a_mixture_is_a_weighted_mean() {
    let mut b = Builder::default();
    let (p, q) = (b.track(-1.0), b.track(-1.0));
    b.source(0, 0, &[p], 3.0);
    b.source(0, 0, &[q], 3.0);
    let program = b.finish();
    let of = |exists: [bool; 2]| of_epoch(&program, 0, &exists, 1.0, &mut Packer::default());
    let both = mixture(&[(-4.0, of([true, false])), (-4.0, of([false, true]))]).expect("two parts");
    let alone = 3.0f64.exp() / (1.0 + 3.0f64.exp());
    assert!(
        both.probability
            .iter()
            .all(|p| (p - 0.5 * alone).abs() < 1e-12)
    );
    assert_eq!(mixture(&[]), None);
}
