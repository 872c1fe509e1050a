//! The whole audit of one claim: the star behind it, its rivals, chance, verdict, evidence.

use super::chance::{self, Null};
use super::claims::Case;
use super::evidence::{self, Row, Settling};
use super::path::Part;
use super::rivals::{self, Rivals};
use super::search::{self, Candidate};
use super::verdict::{self, Odds, Verdict};
use crate::engine::reopen::Reopened;
use crate::resolve::scene::Scene;
use crate::resolve::star::Cell;
use crate::resolve::work::Work;

/// What became of one claim.
#[derive(Clone, Debug)]
pub struct Judged {
    pub case: Case,
    pub verdict: Verdict,
    pub odds: Odds,
    pub chance_p: f64,
    /// ln odds of the best path in each scrambled campaign.
    pub scrambled: Vec<f64>,
    /// Expected number of as rich sets of detections by chance (analytic).
    pub chance_expected: f64,
    /// The rival explanation that comes nearest.
    pub rival: Verdict,
    pub candidate: Option<Candidate>,
    pub rivals: Rivals,
    pub rows: Vec<Row>,
    pub settling: Vec<Settling>,
}

impl Judged {
    /// Claimed positions that known stars explain without the claimed one.
    #[must_use]
    pub fn n_explained(&self) -> usize {
        let of = |w: &&rivals::Without| !w.holders.is_empty();
        self.rivals.places.iter().filter(of).count()
    }
}

impl Judged {
    /// Claimed positions of a kind on the best path.
    #[must_use]
    pub fn count(&self, part: Part) -> usize {
        self.candidate.as_ref().map_or(0, |c| c.path.count(part))
    }
}

/// Audits one claim, chance left open.
#[must_use]
pub fn judge(run: &Reopened<'_>, case: Case) -> Judged {
    let (scene, work) = (&run.scene, &run.work);
    let candidate = search::best(scene, work, &case);
    let own = candidate.as_ref().and_then(|c| c.own);
    let rivals = rivals::without(scene, work, &case, own);
    let odds = Odds::of(candidate.as_ref(), &rivals);
    Judged {
        verdict: Verdict::Undecided,
        odds,
        chance_p: 1.0,
        scrambled: Vec::new(),
        chance_expected: expected_by_chance(scene, work, &case, candidate.as_ref()),
        rival: verdict::best_rival(&rivals),
        rows: evidence::rows(scene, work, &case, candidate.as_ref(), &rivals),
        settling: (candidate.as_ref())
            .map_or_else(Vec::new, |c| evidence::settling(scene, work, c)),
        case,
        candidate,
        rivals,
    }
}

impl Judged {
    /// The same search in one scrambled campaign: ln odds of the best path there. Depends on
    /// run, claim, seed and stream alone.
    #[must_use]
    pub fn scramble(&self, run: &Reopened<'_>, seed: u64, stream: u64) -> f64 {
        // Leftovers are turned for a claim made of them, epochs exchanged for any other.
        let unheld = self.rivals.places.iter().filter(|w| w.holders.is_empty());
        let null = if 2 * unheld.count() > self.rivals.places.len() {
            Null::Turned
        } else {
            Null::Exchanged
        };
        let own = self.candidate.as_ref().and_then(|c| c.own);
        let fit = self.candidate.as_ref().map(|c| &c.path.fit);
        let how = (null, own, fit);
        chance::scrambled(&run.scene, &run.work, &self.case, how, seed, stream)
    }

    /// Takes the scrambled campaigns into account and decides.
    pub fn conclude(&mut self, scrambled: Vec<f64>) {
        let value = (self.candidate.as_ref()).map_or(f64::NEG_INFINITY, |c| c.path.ln_odds);
        self.chance_p = chance::empirical_p(value, &scrambled);
        self.scrambled = scrambled;
        self.verdict = verdict::verdict(self.odds, self.chance_p, &self.rivals);
    }
}

/// The analytic chance of as many detections on one orbit, within the claim's own radius.
fn expected_by_chance(scene: &Scene, work: &Work, case: &Case, c: Option<&Candidate>) -> f64 {
    let Some(c) = c else { return f64::NAN };
    let radius = case
        .places
        .iter()
        .map(|p| {
            let (cx, cy) = scene.dynamics.centre_at(p.t_yr);
            (p.x_mas - cx).hypot(p.y_mas - cy)
        })
        .fold(50.0, f64::max);
    let (mut free, mut gate, mut n_epochs, mut n_held) = (0.0, 0.0, 0_usize, 0);
    for (e, s) in scene.sights.iter().enumerate() {
        let ((x, y), cov) = c.star.fit.predict(&scene.dynamics, s.t_yr);
        if !s.data.region.contains(x, y) {
            continue;
        }
        let (cx, cy) = scene.dynamics.centre_at(s.t_yr);
        n_epochs += 1;
        for d in 0..s.len() {
            let r = (s.data.x_mas[d] - cx).hypot(s.data.y_mas[d] - cy);
            if r < radius && chance::is_free(work.desks[e].holders.of(d), c.own) {
                free += 1.0;
            }
        }
        let floor = s.sensor.errors.floor_mas;
        gate += 9.0 * (cov.max_var() + floor * floor);
        n_held += usize::from(matches!(c.star.cells[e], Cell::Alone(_)));
    }
    if n_epochs == 0 {
        return f64::NAN;
    }
    let k = free / n_epochs as f64;
    let area = std::f64::consts::PI * radius * radius;
    let mu = std::f64::consts::PI * (gate / n_epochs as f64) * k / area;
    chance::expected_by_chance(n_epochs, k, mu, n_held)
}
