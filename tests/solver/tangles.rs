//! The exact choice and its bound against trying everything, and against HiGHS.

use std::path::Path;

use asterskein::model::result::Certificate;
use asterskein::resolve::bound::Dual;
use asterskein::resolve::exact::{Budget, NotAnExplanation, certify};
use asterskein::resolve::program::{Builder, Explanation, FALSE, Program};
use proptest::prelude::*;
use serde::Deserialize;

/// Largest gain over all sets of tracks and all makers of all detections, by trying them all.
fn try_everything(p: &Program) -> f64 {
    let n = p.n_tracks();
    let mut best = f64::NEG_INFINITY;
    for mask in 0..1u32 << n {
        let exists: Vec<bool> = (0..n).map(|k| mask >> k & 1 == 1).collect();
        let mut e = Explanation {
            exists,
            made_by: vec![FALSE; p.n_detections()],
        };
        if p.value(&e).is_some() {
            best = best.max(try_makers(p, &mut e, 0));
        }
    }
    best
}

fn try_makers(p: &Program, e: &mut Explanation, d: usize) -> f64 {
    if d == p.n_detections() {
        return p.value(e).unwrap_or(f64::NEG_INFINITY);
    }
    e.made_by[d] = FALSE;
    let mut best = try_makers(p, e, d + 1);
    for s in p.sources(d) {
        e.made_by[d] = s as u32;
        // Whoever breaks a rule with what is decided so far breaks it later as well.
        let rest: Vec<u32> = e.made_by[d + 1..].to_vec();
        e.made_by[d + 1..].fill(FALSE);
        let fits = p.value(e).is_some();
        e.made_by[d + 1..].copy_from_slice(&rest);
        if fits {
            best = best.max(try_makers(p, e, d + 1));
        }
    }
    e.made_by[d] = FALSE;
    best
}

/// Tangles of `tracks` tracks over a few epochs: singles and groups of up to three, gains and
/// worths of the same size, so that much is undecided; now and then alternatives or a track
/// that must exist.
pub fn tangle(tracks: std::ops::RangeInclusive<usize>) -> impl Strategy<Value = Program> {
    tracks.prop_flat_map(|n| {
        let base = prop::collection::vec(-12.0..1.0f64, n);
        let member = prop::collection::vec(0..n as u32, 1..=3);
        let source = (
            0u32..3,
            0u32..3,
            member,
            prop_oneof![-1.0..9.0f64, (0i32..6).prop_map(f64::from)],
        );
        let sources = prop::collection::vec(source, 0..4 * n + 2);
        let ties = prop::collection::vec((0..n as u32, 0..n as u32), 0..2);
        (
            base,
            sources,
            ties,
            prop::option::weighted(0.2, 0..n as u32),
        )
            .prop_map(|(base, sources, ties, forced)| {
                let mut b = Builder::default();
                for base in base {
                    b.track(base);
                }
                for (x, y) in ties {
                    b.alternatives(x, y);
                }
                if let Some(k) = forced {
                    b.force(k);
                }
                for (epoch, detection, mut tracks, gain) in sources {
                    tracks.sort_unstable();
                    tracks.dedup();
                    b.source(epoch, detection, &tracks, gain);
                }
                b.finish()
            })
    })
}

fn assert_proven(p: &Program, budget: &Budget, wanted: Certificate) -> Result<(), TestCaseError> {
    let proof = certify(p, &p.empty(), budget).expect("the empty explanation is one");
    let best = try_everything(p);
    prop_assert!(
        (proof.gain - best).abs() < 1e-9,
        "{} for {best}",
        proof.gain
    );
    prop_assert_eq!(
        p.value(&proof.best).map(|v| (v - best).abs() < 1e-9),
        Some(true)
    );
    prop_assert_eq!(proof.certificate, wanted);
    prop_assert!(proof.bound >= best - 1e-9 && proof.bound <= best + 1e-5);
    Ok(())
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 600, failure_persistence: None, ..ProptestConfig::default() })]

    #[test]
    fn up_to_four_stars_agree_with_trying_everything(p in tangle(1..=4)) {
        assert_proven(&p, &Budget::default(), Certificate::All)?;
    }

    #[test]
    fn larger_tangles_agree_with_trying_everything(p in tangle(5..=6)) {
        assert_proven(&p, &Budget::default(), Certificate::Pool)?;
    }

    /// Whatever the budget, no explanation gains more than the bound says.
    #[test]
    fn a_spent_budget_states_a_true_gap(p in tangle(5..=6), nodes in 0u64..4, steps in 0usize..30) {
        let budget = Budget {
            smooth_steps: steps, polish_steps: steps, node_steps: 2, nodes, pack_nodes: 20 * nodes,
        };
        let proof = certify(&p, &p.empty(), &budget).expect("the empty explanation is one");
        let best = try_everything(&p);
        prop_assert!(proof.bound >= best - 1e-9, "bound {} below {best}", proof.bound);
        prop_assert!(proof.gain <= best + 1e-9);
        match proof.certificate {
            Certificate::Pool => prop_assert!(best - proof.gain <= 1e-6 + 1e-9),
            Certificate::Bounded { gap_nats } => {
                prop_assert!((proof.gain + gap_nats - proof.bound).abs() < 1e-9);
            }
            other => prop_assert!(false, "{other:?}"),
        }
        let given = proof.gain - proof.improved_nats;
        if let Certificate::Bounded { gap_nats } = proof.of_incumbent() {
            prop_assert!(best - given <= gap_nats + 1e-9);
        }
    }

    /// Prices of any kind bound the gain, and a descent never loosens the bound.
    #[test]
    fn the_bound_holds_and_only_falls(p in tangle(3..=5)) {
        let best = try_everything(&p);
        let mut dual = Dual::new(&p);
        let first = dual.first_guess();
        prop_assert!(first.bound >= best - 1e-9);
        let smooth = dual.smooth(first.clone(), 50);
        let polished = dual.polish(smooth.clone(), best, 0.0, 50);
        prop_assert!(smooth.bound <= first.bound && polished.bound <= smooth.bound);
        prop_assert!(polished.bound >= best - 1e-9);
        prop_assert_eq!(dual.bound(&polished.of_cell), polished.bound);
    }
}

#[test]
fn an_explanation_that_is_none_is_refused() {
    let mut b = Builder::default();
    let k = b.track(-1.0);
    b.source(0, 0, &[k], 5.0);
    let p = b.finish();
    let broken = Explanation {
        exists: vec![false],
        made_by: vec![0],
    };
    assert_eq!(
        certify(&p, &broken, &Budget::default()).err(),
        Some(NotAnExplanation)
    );
}

#[derive(Deserialize)]
struct Tangle {
    name: String,
    base: Vec<f64>,
    family: Vec<u32>,
    sources: Vec<(u32, u32, Vec<u32>, f64)>,
    lp: f64,
    optimum: f64,
}

/// 50 tangles solved by HiGHS through scipy (fixtures/tangles/WHY.md): equal optimum, all
/// proven, and a root bound within a tenth of a nat of the linear relaxation.
#[test]
fn fifty_tangles_agree_with_highs() {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("fixtures/tangles/highs.jsonl");
    let text = std::fs::read_to_string(path).expect("the tangles can be read");
    assert_eq!(text.lines().count(), 50);
    for line in text.lines() {
        let t: Tangle = serde_json::from_str(line).expect("a tangle per line");
        let mut b = Builder::default();
        for &base in &t.base {
            b.track(base);
        }
        for (k, &first) in t.family.iter().enumerate() {
            b.alternatives(first, k as u32);
        }
        for (epoch, detection, tracks, gain) in &t.sources {
            b.source(*epoch, *detection, tracks, *gain);
        }
        let p = b.finish();
        let mut dual = Dual::new(&p);
        let start = dual.first_guess();
        let smooth = dual.smooth(start, 400);
        let root = dual.polish(smooth, t.optimum, 1e-6, 600).bound;
        assert!(
            root >= t.lp - 1e-5,
            "{}: bound {root} below the relaxation {}",
            t.name,
            t.lp
        );
        assert!(
            root <= t.lp + 0.1,
            "{}: bound {root}, relaxation {}",
            t.name,
            t.lp
        );
        let proof = certify(&p, &p.empty(), &Budget::default()).expect("the empty one is valid");
        assert!(
            (proof.gain - t.optimum).abs() < 1e-5,
            "{}: {} for {}",
            t.name,
            proof.gain,
            t.optimum
        );
        let full = if t.base.len() <= 4 {
            Certificate::All
        } else {
            Certificate::Pool
        };
        assert_eq!(proof.certificate, full, "{}", t.name);
    }
}
