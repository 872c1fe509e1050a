//! What became of the made-up stars of one batch.

use super::insert::Presence;
use super::population::{MadeStar, Population};
use super::{Outcome, Recovered};
use crate::inject::PRESENT_SHARE;
use crate::model::result::Solution;

/// A whole star has this share of its detections in its track.
const WHOLE: f64 = 0.95;
/// Fewest members of each star of a pair in a track that mixes them.
const MIXED_MEMBERS: usize = 2;

pub fn judge(
    batch: u32,
    population: &Population,
    stars: &[MadeStar],
    fates: &[Vec<Presence>],
    solution: &Solution,
) -> Vec<Recovered> {
    // Members by track, in order of time as far as epochs are.
    let mut members: Vec<Vec<(u32, u32)>> = vec![Vec::new(); solution.tracks.len()];
    for m in &solution.members {
        members[m.track].push((m.epoch as u32, m.row as u32));
    }
    let mut out: Vec<Recovered> = (stars.iter().zip(fates))
        .map(|(star, fate)| one(batch, population, star, fate, &members))
        .collect();
    for k in 1..stars.len() {
        if stars[k].pair.is_some() && stars[k].pair == stars[k - 1].pair {
            let fake = fakes_orbit(
                population,
                [&out[k - 1], &out[k]],
                [&fates[k - 1], &fates[k]],
                &members,
                solution,
            );
            out[k - 1].fakes_orbit = fake;
            out[k].fakes_orbit = fake;
        }
    }
    out
}

fn held(fate: &[Presence], member: &(u32, u32), least_share: f64) -> bool {
    fate.iter()
        .any(|p| (p.epoch, p.row) == *member && p.share > least_share)
}

fn one(
    batch: u32,
    population: &Population,
    star: &MadeStar,
    fate: &[Presence],
    members: &[Vec<(u32, u32)>],
) -> Recovered {
    let n_present = fate.iter().filter(|p| p.share > PRESENT_SHARE).count();
    let merged = |p: &&Presence| p.share > PRESENT_SHARE && p.share < 1.0 - PRESENT_SHARE;
    let shared = |track: &[(u32, u32)]| {
        let own = track.iter().filter(|m| held(fate, m, PRESENT_SHARE));
        own.count()
    };
    let best = members
        .iter()
        .map(|track| (shared(track), track))
        .filter(|(n, _)| *n > 0)
        .max_by_key(|(n, track)| (*n, usize::MAX - track.len()));
    let (n_shared, track): (usize, &[(u32, u32)]) = best.map_or((0, &[]), |(n, t)| (n, t));
    // A member with a trace of the star is neither right nor wrong.
    let foreign = track.iter().filter(|m| !held(fate, m, 0.0)).count();
    let wrong = |w: &&[(u32, u32)]| {
        let own = [0, 1].map(|k| held(fate, &w[k], 0.0));
        own != [true, true]
    };
    let outcome = if n_present < 2 {
        Outcome::Unseen
    } else if n_shared as f64 >= WHOLE * n_present as f64 && foreign == 0 {
        Outcome::Whole
    } else if 2 * n_shared >= n_present && n_shared > foreign {
        Outcome::Found
    } else {
        Outcome::Lost
    };
    let (pericentre_mas, period_yr) = population.orbit(star);
    Recovered {
        batch,
        mag: star.mag,
        x_mas: star.r_mas[0],
        y_mas: star.r_mas[1],
        vx_mas_yr: star.v_mas_yr[0],
        vy_mas_yr: star.v_mas_yr[1],
        radius_mas: star.r_mas[0].hypot(star.r_mas[1]),
        pericentre_mas,
        period_yr,
        pair: star.pair,
        n_present: n_present as u32,
        n_merged: fate.iter().filter(merged).count() as u32,
        n_track: track.len() as u32,
        n_shared: n_shared as u32,
        n_links: track.len().saturating_sub(1) as u32,
        n_wrong_links: track.windows(2).filter(wrong).count() as u32,
        outcome,
        fakes_orbit: false,
    }
}

/// Does some track made of both stars of a pair claim an orbit shorter than the campaign and
/// than either star's own?
fn fakes_orbit(
    population: &Population,
    pair: [&Recovered; 2],
    fates: [&Vec<Presence>; 2],
    members: &[Vec<(u32, u32)>],
    solution: &Solution,
) -> bool {
    let own = pair.iter().filter_map(|s| s.period_yr);
    let shortest = own.fold(population.span_yr(), f64::min);
    solution.tracks.iter().zip(members).any(|(track, members)| {
        let claimed = track.orbit.as_ref().and_then(|o| o.period_yr);
        let of = |k: usize| {
            members
                .iter()
                .filter(|m| held(fates[k], m, PRESENT_SHARE))
                .count()
        };
        // Half of either star's period would still be a mistake, not a rounding.
        claimed.is_some_and(|(period, _)| period < 0.5 * shortest)
            && of(0) >= MIXED_MEMBERS
            && of(1) >= MIXED_MEMBERS
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn fate(rows: &[(u32, u32, f64)]) -> Vec<Presence> {
        rows.iter()
            .map(|&(epoch, row, share)| Presence { epoch, row, share })
            .collect()
    }

    #[test]
    fn members_of_a_track_are_right_wrong_or_traces() {
        let f = fate(&[(0, 1, 1.0), (1, 4, 0.3), (2, 2, 0.02)]);
        assert!(held(&f, &(0, 1), PRESENT_SHARE) && held(&f, &(1, 4), PRESENT_SHARE));
        assert!(!held(&f, &(2, 2), PRESENT_SHARE) && held(&f, &(2, 2), 0.0));
        assert!(!held(&f, &(1, 1), 0.0));
    }
}
