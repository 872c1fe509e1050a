//! Tangles of the final tracks, and what is proven about each.
//!
//! A tangle's program holds its tracks (each may exist or not, at the evidence that does not
//! depend on single detections) and every option of every detection they could have. The
//! certificate speaks of that pool with motions held fixed.

use crate::link::tangles::{Claim, tangles};
use crate::model::flag::Flags;
use crate::model::result::Certificate;
use crate::resolve::exact::{Budget, certify};
use crate::resolve::joint::{Choices, Option_};
use crate::resolve::program::Builder;
use crate::resolve::work::Work;

use super::rivals::{self, Rivalry};

/// One tangle in the search's own numbering.
#[derive(Clone, Debug)]
pub struct Tangle {
    pub stars: Vec<u32>,
    pub n_detections: usize,
    pub n_epochs: usize,
    pub certificate: Certificate,
    pub work: u64,
    pub flags: Flags,
    /// Near explanations with one thing changed, best first.
    pub rivals: Vec<Rivalry>,
}

#[derive(Clone, Debug, Default)]
pub struct Proved {
    pub tangles: Vec<Tangle>,
}

/// Groups of stars that could have taken the same detection.
#[must_use]
pub fn groups(choices: &[Choices], n_stars: usize) -> Vec<Vec<u32>> {
    let mut claims = Vec::new();
    let mut base = 0u32;
    for c in choices {
        for (d, options) in c.options.iter().enumerate() {
            for o in options {
                for &k in o.stars.members() {
                    claims.push(Claim {
                        detection: base + d as u32,
                        track: k,
                    });
                }
            }
        }
        base += c.options.len() as u32;
    }
    claims.sort_unstable();
    claims.dedup();
    tangles(n_stars, &claims, &[])
}

/// Best gain of a detection when only the other stars of its group may make it; `options` are
/// best first.
fn gain_without(options: &[Option_], group: &Option_, star: u32) -> f64 {
    options
        .iter()
        .find(|o| !o.stars.has(star) && o.stars.members().iter().all(|&m| group.stars.has(m)))
        .map_or(0.0, |o| o.gain.max(0.0))
}

/// Certify one group.
#[must_use]
pub fn prove(work: &Work, choices: &[Choices], stars: &[u32]) -> Tangle {
    let mut local = std::collections::BTreeMap::new();
    let mut builder = Builder::default();
    // The part of a track's worth that is not in its options: without the track its detections
    // go to the best that the others can make of them, and exactly its worth is lost.
    for &k in stars {
        let star = &work.stars[k as usize];
        let mut in_options = 0.0;
        for (e, cell) in star.cells.iter().enumerate() {
            if let Some(d) = cell.detection()
                && let Some(o) = choices[e].options[d as usize]
                    .iter()
                    .find(|o| o.stars == *work.desks[e].holders.of(d as usize))
            {
                in_options += o.gain - gain_without(&choices[e].options[d as usize], o, k);
            }
        }
        let id = builder.track(star.worth - in_options);
        local.insert(k, id);
    }
    let mut n_detections = 0;
    let mut n_epochs = 0;
    let mut buf = Vec::new();
    for (e, c) in choices.iter().enumerate() {
        let before = n_detections;
        for (d, options) in c.options.iter().enumerate() {
            let mut any = false;
            for o in options {
                if o.stars.members().iter().all(|k| local.contains_key(k)) {
                    buf.clear();
                    buf.extend(o.stars.members().iter().map(|k| local[k]));
                    builder.source(e as u32, d as u32, &buf, o.gain);
                    any = true;
                }
            }
            n_detections += usize::from(any);
        }
        n_epochs += usize::from(n_detections > before);
    }
    let program = builder.finish();
    let mut incumbent = program.empty();
    incumbent.exists.fill(true);
    for (e, _) in choices.iter().enumerate() {
        for (d, g) in work.desks[e].holders.held() {
            if !g.members().iter().all(|k| local.contains_key(k)) {
                continue;
            }
            buf.clear();
            buf.extend(g.members().iter().map(|k| local[k]));
            buf.sort_unstable();
            if let Some((det, source)) = program.find(e as u32, d as u32, &buf) {
                incumbent.made_by[det] = source as u32;
            }
        }
    }
    let (certificate, steps) = match certify(&program, &incumbent, &Budget::default()) {
        Ok(p) => (p.of_incumbent(), p.work),
        Err(_) => (Certificate::None, 0),
    };
    let mut flags = Flags::default();
    if certificate == Certificate::None {
        flags.set(Flags::UNPROVEN);
    }
    if let Certificate::Bounded { .. } = certificate {
        flags.set(Flags::CAPPED);
    }
    Tangle {
        stars: stars.to_vec(),
        n_detections,
        n_epochs,
        certificate,
        work: steps,
        flags,
        rivals: rivals::find(&program, &incumbent, stars),
    }
}
