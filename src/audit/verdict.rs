//! From odds to careful words.

use super::path::Part;
use super::rivals::Rivals;
use super::search::Candidate;
use crate::maths::lnprob::logistic;

/// ln odds above which a claim stands, and below whose negative a rival wins \[nats\].
const STANDS_NATS: f64 = 3.0;
const FALLS_NATS: f64 = 3.0;
/// Chance rate below which a claim may stand.
const STANDS_P: f64 = 0.01;
/// ln odds of a claim too short for any path \[nats\].
const NO_PATH_NATS: f64 = 0.0;
/// Beyond so many nats odds grow only a third as fast, and end: what else can be wrong than was
/// thought of weighs more than the numbers.
const SOFT_NATS: f64 = 3.0;
const MOST_NATS: f64 = 30.0;
/// Nats are divided by this before they become odds: models are never quite right.
const TEMPERATURE: f64 = 3.0;
/// Share of a claim's positions on the path of its star, and of any other star it touches.
const RIGHT_OF_REAL: f64 = 0.9;
const RIGHT_OF_OTHER: f64 = 0.35;
/// A known star that explains a detection this well \[nats\] is robbed when the claim takes it, at
/// the cost of being missed there.
const ROBBED_GAIN: f64 = 4.0;
const ROBBED_NATS: f64 = -1.5;
/// Shares of a claim's detections that name the winning rival.
const MOSTLY_FREE: f64 = 0.5;
const MOSTLY_ONE: f64 = 0.6;
const MOSTLY_BLENDS: f64 = 0.74;

/// What is thought of a claim.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum Verdict {
    /// A star of its own, as far as these lists can tell.
    Stands,
    /// One known star, seen in passing.
    KnownStar,
    /// Blends of known stars.
    Blend,
    /// Detections of several known stars.
    StrungTogether,
    /// Something that keeps to a bright star.
    Artefact,
    /// Unconnected, probably false detections.
    Chance,
    /// The lists do not decide.
    Undecided,
}

impl Verdict {
    pub const ALL: [Self; 7] = [
        Self::Stands,
        Self::KnownStar,
        Self::Blend,
        Self::StrungTogether,
        Self::Artefact,
        Self::Chance,
        Self::Undecided,
    ];

    /// The word used in tables.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Stands => "stands",
            Self::KnownStar => "known_star",
            Self::Blend => "blend",
            Self::StrungTogether => "strung_together",
            Self::Artefact => "artefact",
            Self::Chance => "chance",
            Self::Undecided => "undecided",
        }
    }

    /// A sentence for people.
    #[must_use]
    pub fn sentence(self) -> &'static str {
        match self {
            Self::Stands => "the lists favour a star of its own",
            Self::KnownStar => "the lists favour one known star seen in passing",
            Self::Blend => "the lists favour blends of known stars",
            Self::StrungTogether => "the lists favour detections of several known stars",
            Self::Artefact => "the lists favour an artefact that keeps to a bright star",
            Self::Chance => "the lists favour unconnected, probably false detections",
            Self::Undecided => "the lists do not decide",
        }
    }
}

/// Odds of a claim: that it is one real star of its own.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Odds {
    pub ln_odds: f64,
    /// What it is made of \[nats\]: the path through the claimed positions, epochs at which the
    /// claim is silent, known stars robbed of detections they explain well.
    pub path: f64,
    pub silent: f64,
    pub robbed: f64,
}

impl Odds {
    #[must_use]
    pub fn of(candidate: Option<&Candidate>, rivals: &Rivals) -> Self {
        let Some(c) = candidate else {
            return Self {
                ln_odds: NO_PATH_NATS,
                path: NO_PATH_NATS,
                silent: 0.0,
                robbed: 0.0,
            };
        };
        let robbed = (0..rivals.places.len())
            .filter(|&k| c.part(k) == Some(Part::Core))
            .filter(|&k| {
                let w = &rivals.places[k];
                w.holders.len() == 1 && w.gain > ROBBED_GAIN
            })
            .count() as f64
            * ROBBED_NATS;
        let mut sum = c.path.ln_odds + c.silent_nats() + robbed;
        // A path that misses a good part of the claim may be a star's, but not the claimed one's,
        // however much better it is than no path at all.
        let strangers = c.path.count(Part::Stranger) as f64;
        let held = c.used.len() as f64 - strangers;
        let same = held * (RIGHT_OF_REAL / RIGHT_OF_OTHER).ln()
            + strangers * ((1.0 - RIGHT_OF_REAL) / (1.0 - RIGHT_OF_OTHER)).ln();
        if same < 0.0 {
            sum = sum.min(TEMPERATURE * same);
        }
        Self {
            ln_odds: tempered(sum / TEMPERATURE),
            path: c.path.ln_odds,
            silent: c.silent_nats(),
            robbed,
        }
    }

    #[must_use]
    pub fn p_real(self) -> f64 {
        logistic(self.ln_odds)
    }
}

/// Large odds made modest.
fn tempered(nats: f64) -> f64 {
    let beyond = (nats.abs() - SOFT_NATS).max(0.0);
    let size = nats.abs().min(SOFT_NATS) + beyond / 3.0;
    size.min(MOST_NATS).copysign(nats)
}

/// Would a path of so many nats stand by its odds, were it a claim?
#[must_use]
pub fn would_stand(path_nats: f64) -> bool {
    path_nats / TEMPERATURE > STANDS_NATS
}

/// The verdict on odds, chance and the rivals.
#[must_use]
pub fn verdict(odds: Odds, chance_p: f64, rivals: &Rivals) -> Verdict {
    if odds.ln_odds > STANDS_NATS && chance_p < STANDS_P {
        Verdict::Stands
    } else if odds.ln_odds < -FALLS_NATS {
        best_rival(rivals)
    } else {
        Verdict::Undecided
    }
}

/// The rival that explains most of the claim's detections.
#[must_use]
pub fn best_rival(r: &Rivals) -> Verdict {
    if r.free >= MOSTLY_FREE {
        if r.is_artefact() {
            Verdict::Artefact
        } else {
            Verdict::Chance
        }
    } else if r.main.is_some_and(|(_, share)| share >= MOSTLY_ONE) {
        Verdict::KnownStar
    } else if r.blend + r.free >= MOSTLY_BLENDS {
        Verdict::Blend
    } else {
        Verdict::StrungTogether
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn large_odds_are_made_modest_in_order() {
        assert_eq!(tempered(2.0), 2.0);
        assert_eq!(tempered(-2.0), -2.0);
        assert_eq!(tempered(9.0), 5.0);
        assert_eq!(tempered(-9.0), -5.0);
        assert_eq!(tempered(1e6), MOST_NATS);
        assert!(tempered(3.1) > tempered(3.0));
    }

    #[test]
    fn words_are_unique() {
        let mut words: Vec<&str> = Verdict::ALL.iter().map(|v| v.word()).collect();
        words.sort_unstable();
        words.dedup();
        assert_eq!(words.len(), Verdict::ALL.len());
    }
}
