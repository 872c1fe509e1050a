//! Made-up campaigns whose truth is known, and made-up stars in real lists.
//!
//! The laws here (who is told apart, who is seen, how wrong positions are) are written apart
//! from those that linking estimates, so that one checks the other.

mod blending;
mod crowding;
mod exposure;
mod falses;
mod plan;
pub mod recover;
pub mod settings;
mod stars;
mod truth;
mod write;

use rand::seq::SliceRandom;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

pub use exposure::Detected;
pub use plan::{Lie, NoInstrument, Planned};
use settings::MockSettings;
pub use stars::{DrawnOrbit, Sky, TrueStar, Wave};
pub use write::write_campaign;

/// A star counts as present in a detection above this flux share.
const PRESENT_SHARE: f64 = 0.05;
/// Width of the empty rim beyond the field's radius that lists still cover.
const RIM_MAS: f64 = 200.0;

/// A made-up campaign in memory.
#[derive(Clone, Debug)]
pub struct MockCampaign {
    pub settings: MockSettings,
    pub seed: u64,
    pub sky: Sky,
    pub epochs: Vec<MockEpoch>,
    pub classes: Vec<StarClass>,
}

/// One list: row k has the identifier `ids[k]`.
#[derive(Clone, Debug)]
pub struct MockEpoch {
    pub plan: Planned,
    pub detected: Vec<Detected>,
    pub ids: Vec<u32>,
}

#[derive(Clone, Copy, Debug)]
pub struct StarClass {
    /// Detections in which the star is present.
    pub n_det: u32,
    pub strong: bool,
    pub encounter: bool,
    pub departure_mas: f64,
}

/// Numbers that describe a campaign.
#[derive(Clone, Copy, Debug, serde::Serialize)]
pub struct MockCounts {
    pub stars: usize,
    pub epochs: usize,
    pub detections: usize,
    pub false_detections: usize,
    pub merged_detections: usize,
    pub curved_stars: usize,
    pub strong_stars: usize,
    /// Bound stars with a period below the span of the campaign, seen at least five times.
    pub full_orbits: usize,
    pub stars_seen_five_times: usize,
}

/// Independent streams of random numbers, so that one part's draws never shift another's.
fn stream(seed: u64, number: u64) -> ChaCha8Rng {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    rng.set_stream(number);
    rng
}

const PLAN: u64 = 1;
const STARS: u64 = 2;
const CROWDING: u64 = 3;
const COMPANIONS: u64 = 4;
const FIRST_EPOCH: u64 = 1000;

/// Makes a campaign; the same recipe and seed give the same campaign on every machine that
/// rounds alike.
///
/// # Errors
/// When no instrument covers the time of some exposure.
pub fn make_campaign(settings: MockSettings, seed: u64) -> Result<MockCampaign, NoInstrument> {
    let plan = plan::plan(&settings, &mut stream(seed, PLAN))?;
    let times: Vec<f64> = plan.iter().map(|p| p.time_yr).collect();
    let sky = Sky::draw(&settings, &times, &mut stream(seed, STARS));
    let mut walk = stream(seed, CROWDING);
    let mut crowding = crowding::Crowding::new(&settings, &sky, &mut walk);
    let companions = falses::companions(&settings, &sky, &mut stream(seed, COMPANIONS));
    let half_width = settings.stars.radius_mas + RIM_MAS;
    let mut encounters = truth::Encounters::default();
    let mut n_det = vec![0; sky.stars.len()];
    let mut epochs = Vec::with_capacity(plan.len());
    for (k, planned) in plan.into_iter().enumerate() {
        let mut rng = stream(seed, FIRST_EPOCH + k as u64);
        let instrument = &settings.instrument[planned.instrument];
        let places = sky.positions_mas(planned.time_yr);
        let mags = sky.mags(planned.time_yr);
        crowding.advance(planned.time_yr, instrument.fwhm_mas, &mut walk);
        let now = exposure::Instant {
            places_mas: &places,
            mags: &mags,
            time_yr: planned.time_yr,
        };
        let mut exposed = exposure::expose(
            &settings,
            instrument,
            now,
            &crowding,
            &companions,
            half_width,
            &mut rng,
        );
        encounters.add(&exposed.approaches, &mags);
        for (star, _) in exposed
            .detected
            .iter()
            .flat_map(|d| &d.parts)
            .filter(|p| p.1 > PRESENT_SHARE)
        {
            n_det[*star as usize] += 1;
        }
        exposed.detected.shuffle(&mut rng);
        // Identifiers rise along the list but leave gaps, as those of cleaned lists do.
        let mut id = 0;
        let ids = (exposed.detected.iter())
            .map(|_| {
                id += 1 + u32::from(rng.random::<f64>() < 0.1);
                id
            })
            .collect();
        epochs.push(MockEpoch {
            plan: planned,
            detected: exposed.detected,
            ids,
        });
    }
    let met = encounters.stars(sky.stars.len());
    let classes = (0..sky.stars.len())
        .map(|star| {
            let departure_mas = sky.departure_mas(star, &times);
            StarClass {
                n_det: n_det[star],
                strong: truth::is_strong(&sky, departure_mas),
                encounter: met[star],
                departure_mas,
            }
        })
        .collect();
    Ok(MockCampaign {
        settings,
        seed,
        sky,
        epochs,
        classes,
    })
}

impl MockCampaign {
    #[must_use]
    pub fn counts(&self) -> MockCounts {
        let all = || self.epochs.iter().flat_map(|e| &e.detected);
        let present = |d: &Detected| d.parts.iter().filter(|p| p.1 > PRESENT_SHARE).count();
        let span_yr = match (self.epochs.first(), self.epochs.last()) {
            (Some(a), Some(b)) => b.plan.time_yr - a.plan.time_yr,
            _ => 0.0,
        };
        let full = |(s, c): &(&TrueStar, &StarClass)| {
            c.n_det >= 5 && s.orbit.is_some_and(|o| o.period_yr < span_yr)
        };
        MockCounts {
            stars: self.sky.stars.len(),
            epochs: self.epochs.len(),
            detections: all().count(),
            false_detections: all().filter(|d| d.parts.is_empty()).count(),
            merged_detections: all().filter(|d| present(d) >= 2).count(),
            curved_stars: self.sky.stars.iter().filter(|s| s.curved).count(),
            strong_stars: self.classes.iter().filter(|c| c.strong).count(),
            full_orbits: self
                .sky
                .stars
                .iter()
                .zip(&self.classes)
                .filter(full)
                .count(),
            stars_seen_five_times: self.classes.iter().filter(|c| c.n_det >= 5).count(),
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn small() -> MockSettings {
        let mut s = MockSettings::default();
        s.stars.count = 60;
        s.stars.inner = 5;
        s.stars.radius_mas = 500.0;
        s.times.epochs = 12;
        s
    }

    #[test]
    fn a_seed_repeats_and_another_differs() {
        let text = |seed| format!("{:?}", make_campaign(small(), seed).unwrap());
        assert_eq!(text(3), text(3));
        assert_ne!(text(3), text(4));
    }

    #[test]
    fn shares_add_up_and_detections_are_near_their_stars() {
        let c = make_campaign(small(), 5).unwrap();
        for e in &c.epochs {
            let fwhm = c.settings.instrument[e.plan.instrument].fwhm_mas;
            for d in e.detected.iter().filter(|d| !d.parts.is_empty()) {
                let sum: f64 = d.parts.iter().map(|p| p.1).sum();
                assert!((sum - 1.0).abs() < 0.01, "{sum}");
                let lead = d.parts.iter().max_by(|a, b| a.1.total_cmp(&b.1)).unwrap();
                let p = c.sky.position_mas(lead.0 as usize, e.plan.time_yr);
                let gap = (p[0] - d.at_mas[0]).hypot(p[1] - d.at_mas[1]);
                assert!(
                    gap < 1.5 * fwhm,
                    "{gap} mas from a star that gives most of the light"
                );
            }
        }
        let n = c.counts();
        assert!(n.merged_detections > 0 && n.false_detections > 0 && n.full_orbits > 0);
    }
}
