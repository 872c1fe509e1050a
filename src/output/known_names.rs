//! Names from outside: those of a list of known stars, and those that the detection lists give.
//!
//! A known star is the track that passes nearest to its place at its own time, if each is the
//! other's nearest and the distance is within three standard errors (fit and list together, the
//! star's own motion included where the list has none) plus a quarter of the resolution.

use std::collections::BTreeMap;

use crate::io::result_tables::RunView;
use crate::model::campaign::Campaign;
use crate::model::known::KnownStar;
use crate::model::motion::MotionKind;
use crate::model::note::Note;
use crate::model::result::Track;
use crate::motion::kepler;
use crate::near::Tree;

/// Standard errors within which a place agrees.
const SIGMAS: f64 = 3.0;
/// Part of the resolution within which a place always agrees.
const ALWAYS_FWHM: f64 = 0.25;
/// Known stars and tracks differ by at most so many magnitudes.
const SAME_MAG: f64 = 2.5;

/// The name of each track that is a known star.
#[must_use]
pub fn known_names(view: RunView<'_>, stars: &[KnownStar]) -> Vec<Option<String>> {
    let tracks = &view.solution.tracks;
    let mut pairs: Vec<(f64, usize, usize)> = Vec::new();
    // Stars of one epoch are looked up together.
    let mut by_time: BTreeMap<u64, Vec<usize>> = BTreeMap::new();
    for (k, star) in stars.iter().enumerate() {
        by_time.entry(star.epoch_yr.to_bits()).or_default().push(k);
    }
    let fwhm_mas = view
        .campaign
        .instruments
        .iter()
        .map(|i| i.fwhm_mas)
        .fold(f64::INFINITY, f64::min);
    let mut hits = Vec::new();
    for (bits, group) in by_time {
        let t_yr = f64::from_bits(bits);
        let places: Vec<[f64; 3]> = tracks
            .iter()
            .map(|t| place(view.campaign, t, t_yr))
            .collect();
        let column = |i: usize| places.iter().map(|p| p[i]).collect::<Vec<f64>>();
        let tree = Tree::build(&column(0), &column(1));
        for k in group {
            let star = &stars[k];
            tree.nearest_n(star.x_mas, star.y_mas, 4, &mut hits);
            for hit in &hits {
                let n = hit.row as usize;
                let reach_mas = ALWAYS_FWHM * fwhm_mas
                    + SIGMAS * error_mas(star, &tracks[n], places[n][2], view.campaign);
                let mags = star.mag.zip(tracks[n].mag);
                let alike = mags.is_none_or(|(a, b)| (a - b).abs() <= SAME_MAG);
                if hit.dist_mas <= reach_mas && alike {
                    pairs.push((hit.dist_mas, k, n));
                }
            }
        }
    }
    pairs.sort_by(|a, b| a.0.total_cmp(&b.0).then((a.1, a.2).cmp(&(b.1, b.2))));
    let mut names = vec![None; tracks.len()];
    let mut taken = vec![false; stars.len()];
    for (_, k, n) in pairs {
        if !taken[k] && names[n].is_none() {
            taken[k] = true;
            names[n] = Some(stars[k].name.clone());
        }
    }
    names
}

/// Place of a track at a time and the standard error of its fit there: (x, y, error) \[mas\].
fn place(campaign: &Campaign, track: &Track, t_yr: f64) -> [f64; 3] {
    let since_mean = t_yr - track.mean_epoch_yr;
    let err = track.x_mean_err_mas.max(track.y_mean_err_mas)
        + track.vx_mean_err_mas_yr.max(track.vy_mean_err_mas_yr) * since_mean.abs();
    let m = &track.motion;
    let dt = t_yr - m.t_ref_yr;
    if m.kind == MotionKind::Keplerian
        && let Some(c) = &campaign.central
    {
        let t0 = m.t_ref_yr - campaign.reference.yr();
        let centre = |dt: f64| (c.x_mas + c.vx_mas_yr * dt, c.y_mas + c.vy_mas_yr * dt);
        let (x0, y0) = centre(t0);
        let r0 = [m.p[0] - x0, m.p[1] - y0, m.p[2]];
        let v0 = [m.p[3] - c.vx_mas_yr, m.p[4] - c.vy_mas_yr, m.p[5]];
        let (r, _) = kepler::propagate(c.gm_mas3_yr2, r0, v0, dt);
        let (x, y) = centre(t0 + dt);
        return [x + r[0], y + r[1], err];
    }
    let p = &track.sky.p;
    [
        p[0] + (p[2] + 0.5 * p[4] * dt) * dt,
        p[1] + (p[3] + 0.5 * p[5] * dt) * dt,
        err,
    ]
}

/// Standard error of the difference of a known star and a track.
fn error_mas(star: &KnownStar, track: &Track, fit_mas: f64, campaign: &Campaign) -> f64 {
    let list = star
        .x_err_mas
        .unwrap_or(0.0)
        .max(star.y_err_mas.unwrap_or(0.0));
    // Without a motion in the list nothing is lost: the track is taken to the star's time, and
    // only an epoch outside the track's own span adds what the track may have done since.
    let outside = (track.first_yr - star.epoch_yr)
        .max(star.epoch_yr - track.last_yr)
        .max(0.0);
    let drift = if track.n_members < 3 {
        campaign.stars.speed_mas_yr * outside
    } else {
        0.0
    };
    list.hypot(fit_mas).hypot(drift)
}

/// Disagreements of the names that lists give with the tracks: one star under two names, one
/// name on two stars.
#[must_use]
pub fn given_name_notes(view: RunView<'_>) -> Vec<Note> {
    let mut of_track: BTreeMap<usize, BTreeMap<&str, usize>> = BTreeMap::new();
    let mut of_name: BTreeMap<&str, BTreeMap<usize, usize>> = BTreeMap::new();
    // Only detections that belong to one star speak.
    for m in view.solution.members.iter().filter(|m| m.share >= 1.0) {
        let Some(name) = view.lists[m.epoch].given_name.get(m.row) else {
            continue;
        };
        if !name.is_empty() {
            *of_track
                .entry(m.track)
                .or_default()
                .entry(name)
                .or_default() += 1;
            *of_name.entry(name).or_default().entry(m.track).or_default() += 1;
        }
    }
    let track_name = |t: usize| view.solution.tracks[t].name.as_str();
    let counted = |parts: Vec<(&str, usize)>| {
        let words: Vec<String> = parts.iter().map(|(w, n)| format!("{w} ({n})")).collect();
        words.join(", ")
    };
    let several_names = of_track
        .iter()
        .filter(|(_, n)| n.len() > 1)
        .map(|(&t, n)| Note {
            what: "given_names_differ",
            place: track_name(t).to_owned(),
            text: format!(
                "the lists give its detections several names: {}",
                counted(n.iter().map(|(&w, &k)| (w, k)).collect())
            ),
        });
    let several_tracks = of_name
        .iter()
        .filter(|(_, t)| t.len() > 1)
        .map(|(&name, t)| Note {
            what: "given_name_on_several",
            place: name.to_owned(),
            text: format!(
                "the lists give this name to detections of several tracks: {}",
                counted(t.iter().map(|(&t, &k)| (track_name(t), k)).collect())
            ),
        });
    several_names.chain(several_tracks).collect()
}
