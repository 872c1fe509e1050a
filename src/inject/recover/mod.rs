//! What would this campaign have found? Made-up stars are put into the real lists, the lists are
//! linked again, and what became of every made-up star is counted.
//!
//! Completeness, purity and confusion measured this way hold for stars like those drawn, in the
//! field as it is: real neighbours, real depth, real gaps in time. Few stars are added at a
//! time, so that the field does not become more crowded than it is.
//!
//! Limits: resolution and depth follow the laws of `sensor`, fitted to the run's own tracks, so
//! they share its blind spots (stars never found teach it nothing about depth); real stars too
//! faint to be listed do not disturb the made-up ones.

mod bins;
mod insert;
mod judge;
mod laws;
mod population;

use serde::{Deserialize, Serialize};

pub use bins::{Bin, bins, completeness_table, injected_table};

use super::stream;
use crate::engine::{self, EngineError, Settings};
use crate::model::campaign::Campaign;
use crate::model::detection::FieldEpoch;
use crate::model::result::Solution;
use laws::EpochLaw;
use population::Population;

/// Stars added at a time, as a share of the tracks there are.
const BATCH_SHARE: f64 = 0.03;
/// Fewest stars added at a time.
const LEAST_BATCH: usize = 8;
/// Of every so many stars two are a pair that passes close by each other.
const PAIR_EVERY: usize = 5;
/// First stream of random numbers used by batches.
const FIRST_BATCH: u64 = 1_000_000;

/// What became of one made-up star.
#[derive(Clone, Debug, PartialEq, Serialize, Deserialize)]
pub struct Recovered {
    pub batch: u32,
    pub mag: f64,
    /// Position and velocity on the sky at the reference epoch.
    pub x_mas: f64,
    pub y_mas: f64,
    pub vx_mas_yr: f64,
    pub vy_mas_yr: f64,
    /// Distance from the mass (or the origin) on the sky at the reference epoch.
    pub radius_mas: f64,
    /// `None` without a mass, or for an orbit that is not bound.
    pub pericentre_mas: Option<f64>,
    pub period_yr: Option<f64>,
    /// Number shared by the two stars of a pair.
    pub pair: Option<u32>,
    /// Detections in which it gives a fair share of the light, and those it shares.
    pub n_present: u32,
    pub n_merged: u32,
    /// Members of the track that holds most of them, and how many of those are the star's.
    pub n_track: u32,
    pub n_shared: u32,
    /// Steps from member to member of that track, and those that leave the star.
    pub n_links: u32,
    pub n_wrong_links: u32,
    pub outcome: Outcome,
    /// A track made of this pair claims an orbit shorter than either star's and than the
    /// campaign.
    pub fakes_orbit: bool,
}

/// What became of a made-up star, from best to worst.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize)]
#[serde(rename_all = "snake_case")]
pub enum Outcome {
    /// One track with at least 95 % of its detections and nothing foreign.
    Whole,
    /// One track with at least half of its detections that is for the most part this star.
    Found,
    /// Seen at least twice, but no such track.
    Lost,
    /// Present in fewer than two detections: nothing to be linked.
    Unseen,
}

impl Outcome {
    /// The word used in tables.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Whole => "whole",
            Self::Found => "found",
            Self::Lost => "lost",
            Self::Unseen => "unseen",
        }
    }

    #[must_use]
    pub fn is_found(self) -> bool {
        matches!(self, Self::Whole | Self::Found)
    }
}

/// A result with the lists it was made from, in the common frame.
#[derive(Clone, Copy, Debug)]
pub struct Linked<'a> {
    pub campaign: &'a Campaign,
    pub epochs: &'a [FieldEpoch],
    pub solution: &'a Solution,
}

/// A run prepared for adding stars; every batch depends on its number and the seed alone, so
/// batches may be done in any order, or be taken from an earlier attempt.
#[derive(Debug)]
pub struct Recovery<'a> {
    run: Linked<'a>,
    laws: Vec<EpochLaw>,
    population: Population,
    seed: u64,
    n_stars: usize,
    per_batch: usize,
}

impl<'a> Recovery<'a> {
    /// Fits the laws of resolution and depth to a run.
    #[must_use]
    pub fn new(run: Linked<'a>, n_stars: usize, seed: u64) -> Self {
        let share = (BATCH_SHARE * run.solution.tracks.len() as f64) as usize;
        Self {
            laws: laws::fitted(run),
            population: Population::of(run),
            run,
            seed,
            n_stars,
            per_batch: share.max(LEAST_BATCH),
        }
    }

    #[must_use]
    pub fn n_batches(&self) -> usize {
        self.n_stars.div_ceil(self.per_batch)
    }

    /// Adds one batch of stars, links, and judges.
    ///
    /// # Errors
    /// When the lists cannot be linked.
    pub fn batch(&self, number: usize, settings: &Settings) -> Result<Vec<Recovered>, EngineError> {
        let mut rng = stream(self.seed, FIRST_BATCH + number as u64);
        let first = number * self.per_batch;
        let n = self.per_batch.min(self.n_stars - first);
        let stars = self.population.draw(n, PAIR_EVERY, first as u32, &mut rng);
        let mut epochs = self.run.epochs.to_vec();
        let mut fates = vec![Vec::new(); stars.len()];
        for (e, (epoch, law)) in epochs.iter_mut().zip(&self.laws).enumerate() {
            let t_yr = epoch.time.yr();
            let placed: Vec<([f64; 2], f64)> = (stars.iter())
                .map(|s| (self.population.place(s, t_yr), s.mag))
                .collect();
            insert::insert(e as u32, epoch, law, &placed, &mut fates, &mut rng);
        }
        let solution = engine::link(self.run.campaign, &epochs, settings, &engine::Silent)?;
        Ok(judge::judge(
            number as u32,
            &self.population,
            &stars,
            &fates,
            &solution,
        ))
    }
}
