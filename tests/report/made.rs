//! A made-up result: what a report of a given size looks like, without linking anything.
//!
//! Stars move on straight, accelerated or Keplerian paths; two that come close share a
//! detection, form a tangle and get rivals. The numbers hang together (residuals, shares,
//! chi2), so that a page can be compared with the tables written from the same result.

use std::collections::BTreeMap;
use std::path::PathBuf;

use asterskein::maths::cov2::Cov2;
use asterskein::model::campaign::{
    Campaign, CentralMass, Epoch, Instrument, ListSource, StarMotions,
};
use asterskein::model::change::{Change, DetectionName};
use asterskein::model::detection::{FieldEpoch, Ids, RawList};
use asterskein::model::flag::Flags;
use asterskein::model::motion::{Motion, MotionKind};
use asterskein::model::note::Note;
use asterskein::model::region::Region;
use asterskein::model::result::{
    Certificate, EpochReport, Leftover, Membership, OrbitColumns, Rival, SkyMotion, Solution,
    TangleReport, Track,
};
use asterskein::model::time::JulianYear;
use asterskein::motion::kepler;
use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, StandardNormal};

pub const FWHM_MAS: f64 = 50.0;
const REFERENCE_YR: f64 = 2008.0;
/// A name that would end a script or start a tag if it were not escaped.
pub const HOSTILE_NAME: &str = "K \"east\" </script><img src=x onerror=alert(1)>";

pub struct Made {
    pub campaign: Campaign,
    pub lists: Vec<RawList>,
    pub epochs: Vec<FieldEpoch>,
    pub solution: Solution,
}

struct Star {
    mag: f64,
    motion: Motion,
    sky: SkyMotion,
}

/// So many tracks in so many epochs.
pub fn made(n_tracks: usize, n_epochs: usize, seed: u64) -> Made {
    let mut rng = ChaCha8Rng::seed_from_u64(seed);
    let half_mas = 0.5 * (n_tracks as f64).sqrt() * 160.0;
    let campaign = campaign(n_epochs);
    let mass = campaign.central.clone().expect("the made field has a mass");
    let stars: Vec<Star> = (0..n_tracks)
        .map(|k| star(&mut rng, k, n_tracks, half_mas, &mass))
        .collect();
    let mut solution = Solution::default();
    let (mut lists, mut epochs) = (Vec::new(), Vec::new());
    let mut members: Vec<Membership> = Vec::new();
    let mut pairs: BTreeMap<(usize, usize), Vec<(usize, usize)>> = BTreeMap::new();
    for e in 0..n_epochs {
        let list = one_epoch(&mut rng, &campaign, &stars, e, half_mas);
        for (row, d) in list.iter().enumerate() {
            for &(track, share) in &d.owners {
                members.push(Membership {
                    track,
                    epoch: e,
                    row,
                    probability: if d.owners.len() > 1 { 0.83 } else { 0.9987 },
                    share,
                    dx_mas: d.residual[0],
                    dy_mas: d.residual[1],
                    flags: if d.owners.len() > 1 {
                        Flags::MERGED
                    } else {
                        Flags::default()
                    },
                });
            }
            if let [(a, _), (b, _)] = d.owners[..] {
                pairs.entry((a, b)).or_default().push((e, row));
            }
            if d.owners.is_empty() {
                solution.leftovers.push(Leftover {
                    epoch: e,
                    row,
                    p_false: 0.8,
                    nearest: None,
                    flags: Flags::default(),
                });
            }
        }
        let n_unmatched = list.iter().filter(|d| d.owners.is_empty()).count();
        solution.epochs.push(EpochReport {
            n_list: list.len(),
            n_matched: list.len() - n_unmatched,
            n_unmatched,
            coef: [
                [1.5, 1.0, 0.002, 0.0, 0.0, 0.0],
                [-0.7, -0.002, 1.0, 0.0, 0.0, 0.0],
            ],
            coef_err: [
                [0.02, 1e-5, 1e-5, 0.0, 0.0, 0.0],
                [0.02, 1e-5, 1e-5, 0.0, 0.0, 0.0],
            ],
            n_anchors: list.len() / 3,
            rms_mas: Some(1.3),
            error_factor: 1.2,
            error_floor_mas: 0.3,
            limit_mag: Some(17.5),
            zero_point_mag: Some(0.02),
            zero_point_err_mag: Some(0.004),
            ..EpochReport::default()
        });
        let (raw, field) = columns(&campaign, e, &list, half_mas);
        lists.push(raw);
        epochs.push(field);
    }
    members.sort_by_key(|m| (m.track, m.epoch));
    solution.tracks = tracks(&campaign, &stars, &members);
    solution.members = members;
    tangles(&mut solution, &campaign, &lists, &pairs);
    solution.notes.push(Note {
        what: "unknown_column",
        place: "lists/e000.csv".to_owned(),
        text: "column `sharp` is not used; nothing <b>depends</b> on it".to_owned(),
    });
    Made {
        campaign,
        lists,
        epochs,
        solution,
    }
}

fn campaign(n_epochs: usize) -> Campaign {
    let epochs = (0..n_epochs)
        .map(|e| {
            let t = 1996.3 + 20.0 * e as f64 / (n_epochs.max(2) - 1) as f64;
            Epoch {
                name: format!("{t:.2}-night"),
                time: JulianYear(t),
                source: ListSource::File(PathBuf::from(format!("lists/e{e:03}.csv"))),
                instrument: 0,
                settings: Instrument::new("first", FWHM_MAS),
                footprint: None,
                mask: None,
            }
        })
        .collect();
    Campaign {
        path: PathBuf::from("field.toml"),
        name: "Lantern core".to_owned(),
        reference: JulianYear(REFERENCE_YR),
        origin: None,
        central: Some(CentralMass::point(2.6e6, 7100.0, 0.0, 0.0)),
        stars: StarMotions {
            speed_mas_yr: 6.0,
            foreground: None,
        },
        instruments: vec![Instrument::new("first", FWHM_MAS)],
        epochs,
        lists: None,
        known_stars: None,
        velocities: None,
    }
}

fn normal(rng: &mut ChaCha8Rng) -> f64 {
    StandardNormal.sample(rng)
}

fn star(rng: &mut ChaCha8Rng, k: usize, n: usize, half_mas: f64, mass: &CentralMass) -> Star {
    let mag = 12.0 + 5.5 * ((k + 1) as f64 / n as f64).sqrt();
    let mut cov = nalgebra::SMatrix::<f64, 6, 6>::zeros();
    for (i, err) in [0.4, 0.4, 0.06, 0.06, 0.0, 0.0].into_iter().enumerate() {
        cov[(i, i)] = err * err;
    }
    let place = |rng: &mut ChaCha8Rng| half_mas * rng.random_range(-1.0..1.0);
    let mut p = nalgebra::SVector::<f64, 6>::zeros();
    p[0] = place(rng);
    p[1] = place(rng);
    (p[2], p[3]) = (6.0 * normal(rng), 6.0 * normal(rng));
    let mut kind = MotionKind::Linear;
    if k % 5 == 1 {
        kind = MotionKind::Accelerated;
        (p[4], p[5]) = (0.15 * normal(rng), 0.15 * normal(rng));
        (cov[(4, 4)], cov[(5, 5)]) = (1e-4, 1e-4);
    }
    let mut sky = SkyMotion {
        p: p.into(),
        cov: cov.into(),
    };
    if k % 100 == 2 {
        // An inclined, eccentric orbit seen near its outermost point.
        kind = MotionKind::Keplerian;
        let r = 60.0 + 3.0 * (k as f64 / 100.0);
        let v = 0.62 * (mass.gm_mas3_yr2 / r).sqrt();
        let turn = k as f64;
        p[0] = r * turn.cos();
        p[1] = r * turn.sin();
        p[2] = 0.3 * r;
        (p[3], p[4], p[5]) = (-v * turn.sin(), v * turn.cos(), 0.2 * v);
        for (i, err) in [0.4, 0.4, 3.0, 0.06, 0.06, 0.3].into_iter().enumerate() {
            cov[(i, i)] = err * err;
        }
        let r3 = (p[0] * p[0] + p[1] * p[1] + p[2] * p[2]).powf(1.5);
        let pull = -mass.gm_mas3_yr2 / r3;
        sky.p = [p[0], p[1], p[3], p[4], pull * p[0], pull * p[1]];
    }
    Star {
        mag,
        motion: Motion {
            kind,
            t_ref_yr: REFERENCE_YR,
            p,
            cov,
        },
        sky,
    }
}

fn place_at(star: &Star, mass: &CentralMass, t: f64) -> [f64; 2] {
    let dt = t - REFERENCE_YR;
    let p = &star.motion.p;
    if star.motion.kind == MotionKind::Keplerian {
        let (r, _) =
            kepler::propagate(mass.gm_mas3_yr2, [p[0], p[1], p[2]], [p[3], p[4], p[5]], dt);
        return [r[0], r[1]];
    }
    [
        p[0] + dt * (p[2] + 0.5 * dt * p[4]),
        p[1] + dt * (p[3] + 0.5 * dt * p[5]),
    ]
}

struct Listed {
    place: [f64; 2],
    residual: [f64; 2],
    err_mas: f64,
    mag: f64,
    /// (track, flux share).
    owners: Vec<(usize, f64)>,
}

fn one_epoch(
    rng: &mut ChaCha8Rng,
    campaign: &Campaign,
    stars: &[Star],
    e: usize,
    half_mas: f64,
) -> Vec<Listed> {
    let mass = campaign.central.as_ref().expect("mass");
    let t = campaign.epochs[e].time.yr();
    let mut places: Vec<(usize, [f64; 2])> = stars
        .iter()
        .enumerate()
        .map(|(k, s)| (k, place_at(s, mass, t)))
        .filter(|_| rng.random::<f64>() < 0.96)
        .collect();
    places.sort_by(|a, b| a.1[0].total_cmp(&b.1[0]));
    let mut taken = vec![false; places.len()];
    let mut out = Vec::new();
    for i in 0..places.len() {
        if taken[i] {
            continue;
        }
        let mut group = vec![i];
        for j in i + 1..places.len() {
            let dx = places[j].1[0] - places[i].1[0];
            if dx > 0.5 * FWHM_MAS {
                break;
            }
            if !taken[j] && dx.hypot(places[j].1[1] - places[i].1[1]) < 0.5 * FWHM_MAS {
                taken[j] = true;
                group.push(j);
                break;
            }
        }
        let flux: Vec<f64> = group
            .iter()
            .map(|&g| 10_f64.powf(-0.4 * stars[places[g].0].mag))
            .collect();
        let total: f64 = flux.iter().sum();
        let mag = -2.5 * total.log10();
        let err_mas = 0.4 + 0.6 * 10_f64.powf(0.25 * (mag - 15.0));
        let residual = [err_mas * normal(rng), err_mas * normal(rng)];
        let centre = |axis: usize| {
            group
                .iter()
                .zip(&flux)
                .map(|(&g, f)| f * places[g].1[axis])
                .sum::<f64>()
                / total
        };
        let mut owners: Vec<(usize, f64)> = group
            .iter()
            .zip(&flux)
            .map(|(&g, f)| (places[g].0, f / total))
            .collect();
        owners.sort_by_key(|o| o.0);
        out.push(Listed {
            place: [centre(0) + residual[0], centre(1) + residual[1]],
            residual,
            err_mas,
            mag: mag + 0.04 * normal(rng),
            owners,
        });
    }
    for _ in 0..stars.len() / 12 {
        out.push(Listed {
            place: [
                half_mas * rng.random_range(-1.0..1.0),
                half_mas * rng.random_range(-1.0..1.0),
            ],
            residual: [0.0; 2],
            err_mas: 4.0,
            mag: rng.random_range(16.5..18.0),
            owners: Vec::new(),
        });
    }
    out.sort_by(|a, b| a.place[0].total_cmp(&b.place[0]));
    out
}

fn columns(campaign: &Campaign, e: usize, list: &[Listed], half_mas: f64) -> (RawList, FieldEpoch) {
    let n = list.len();
    let x: Vec<f64> = list.iter().map(|d| d.place[0]).collect();
    let y: Vec<f64> = list.iter().map(|d| d.place[1]).collect();
    let mag: Vec<f64> = list.iter().map(|d| d.mag).collect();
    let cov: Vec<Cov2> = list
        .iter()
        .map(|d| Cov2::round(d.err_mas * d.err_mas))
        .collect();
    // Row numbers as a finder would give them: unrelated to the order in x.
    let step = 7919 % n.max(1);
    let numbers = (0..n).map(|k| 1 + ((k * step) % n) as u64).collect();
    let raw = RawList {
        ids: if e == 1 {
            Ids::Text((0..n).map(|k| format!("s{k}\"<i>")).collect())
        } else if (1..n).all(|k| !(k * step).is_multiple_of(n)) {
            Ids::Numbers(numbers)
        } else {
            Ids::Numbers((1..=n as u64).collect())
        },
        file_row: (0..n as u32).collect(),
        x: x.clone(),
        y: y.clone(),
        err: cov.iter().copied().map(Some).collect(),
        mag: mag.clone(),
        mag_err: vec![0.04; n],
        ..RawList::default()
    };
    let edge = half_mas + 60.0;
    let field = FieldEpoch {
        time: campaign.epochs[e].time,
        instrument: 0,
        fwhm_mas: FWHM_MAS,
        x_mas: x,
        y_mas: y,
        cov_mas2: cov,
        mag,
        mag_err: vec![0.04; n],
        rv_km_s: Vec::new(),
        rv_err_km_s: Vec::new(),
        quality: Vec::new(),
        region: Region {
            outline_mas: vec![[-edge, -edge], [edge, -edge], [edge, edge], [-edge, edge]],
            holes_mas: Vec::new(),
        },
    };
    (raw, field)
}

fn tracks(campaign: &Campaign, stars: &[Star], members: &[Membership]) -> Vec<Track> {
    let mut rows: Vec<Vec<&Membership>> = vec![Vec::new(); stars.len()];
    for m in members {
        rows[m.track].push(m);
    }
    stars
        .iter()
        .enumerate()
        .map(|(k, s)| {
            let own = &rows[k];
            let time = |m: &&&Membership| campaign.epochs[m.epoch].time.yr();
            let chi2 = own
                .iter()
                .map(|m| (m.dx_mas * m.dx_mas + m.dy_mas * m.dy_mas) / 1.2)
                .sum();
            let p = &s.sky.p;
            Track {
                name: if k == 3 {
                    HOSTILE_NAME.to_owned()
                } else {
                    format!("L{:05}", k + 1)
                },
                motion: s.motion,
                n_members: own.len(),
                first_yr: own.first().as_ref().map_or(REFERENCE_YR, time),
                last_yr: own.last().as_ref().map_or(REFERENCE_YR, time),
                mean_epoch_yr: REFERENCE_YR,
                x_mean_mas: p[0],
                y_mean_mas: p[1],
                x_mean_err_mas: 0.31,
                y_mean_err_mas: 0.32,
                vx_mean_mas_yr: p[2],
                vy_mean_mas_yr: p[3],
                vx_mean_err_mas_yr: 0.051,
                vy_mean_err_mas_yr: 0.052,
                sky: s.sky,
                mag: Some(s.mag),
                mag_scatter: Some(0.05),
                chi2,
                dof: (2 * own.len()).saturating_sub(4),
                ln_evidence: -0.5 * chi2 - 20.0,
                probability: if k % 17 == 0 { 0.914 } else { 0.99982 },
                tangle: None,
                orbit: (s.motion.kind == MotionKind::Keplerian).then_some(OrbitColumns {
                    z_mas: (s.motion.p[2], 3.0),
                    vz_km_s: None,
                    semi_major_mas: Some((52.1, 1.2)),
                    semi_major_au: Some((370.0, 9.0)),
                    eccentricity: (0.62, 0.03),
                    inclination_deg: (41.0, 2.0),
                    node_deg: (77.0, 3.0),
                    arg_pericentre_deg: (121.0, 4.0),
                    t_pericentre_yr: (2003.42, 0.11),
                    period_yr: Some((9.8, 0.2)),
                    pericentre_au: Some((140.0, 6.0)),
                    apocentre_au: Some((600.0, 14.0)),
                    pericentre_speed_km_s: Some((5200.0, 120.0)),
                    sign_known: false,
                }),
                flags: if own.len() < 5 {
                    Flags::FEW_EPOCHS
                } else {
                    Flags::default()
                },
            }
        })
        .collect()
}

/// Pairs that shared a detection are tangles; chains of them are one tangle.
fn tangles(
    solution: &mut Solution,
    campaign: &Campaign,
    lists: &[RawList],
    pairs: &BTreeMap<(usize, usize), Vec<(usize, usize)>>,
) {
    let mut root: Vec<usize> = (0..solution.tracks.len()).collect();
    fn find(root: &[usize], mut k: usize) -> usize {
        while root[k] != k {
            k = root[k];
        }
        k
    }
    for &(a, b) in pairs.keys() {
        let (a, b) = (find(&root, a), find(&root, b));
        root[a.max(b)] = a.min(b);
    }
    let mut groups: BTreeMap<usize, Vec<usize>> = BTreeMap::new();
    for k in 0..root.len() {
        groups.entry(find(&root, k)).or_default().push(k);
    }
    let mut tangle_of = BTreeMap::new();
    for (first, tracks) in groups.into_iter().filter(|(_, t)| t.len() > 1) {
        let number = solution.tangles.len();
        tangle_of.insert(first, number);
        for &k in &tracks {
            solution.tracks[k].tangle = Some(number);
            solution.tracks[k].flags.set(Flags::MERGED);
            if number.is_multiple_of(3) {
                solution.tracks[k].flags.set(Flags::AMBIGUOUS);
            }
        }
        solution.tangles.push(TangleReport {
            n_detections: tracks.iter().map(|&k| solution.tracks[k].n_members).sum(),
            n_epochs: campaign.epochs.len(),
            certificate: match number % 4 {
                0 => Certificate::All,
                1 => Certificate::PricedOut,
                2 => Certificate::Bounded { gap_nats: 0.7 },
                _ => Certificate::None,
            },
            work: 12_345,
            flags: if number % 4 == 3 {
                Flags::UNPROVEN
            } else {
                Flags::default()
            },
            tracks,
        });
    }
    let mut rank = BTreeMap::new();
    for (&(a, b), places) in pairs {
        let tangle = tangle_of[&find(&root, a)];
        let rank: &mut usize = rank.entry(tangle).or_default();
        if *rank > 3 {
            continue;
        }
        *rank += 1;
        let (e, row) = places[0];
        let detection = DetectionName {
            epoch_name: campaign.epochs[e].name.clone(),
            id: lists[e].ids.text(row),
        };
        let mut changes = vec![Change::Drops {
            track: solution.tracks[b].name.clone(),
            detection,
        }];
        let own = solution
            .members
            .iter()
            .find(|m| m.track == b && m.share == 1.0);
        if let Some(m) = own {
            changes.push(Change::Takes {
                track: solution.tracks[a].name.clone(),
                detection: DetectionName {
                    epoch_name: campaign.epochs[m.epoch].name.clone(),
                    id: lists[m.epoch].ids.text(m.row),
                },
                from: Some(solution.tracks[b].name.clone()),
            });
        }
        solution.rivals.push(Rival {
            tangle,
            rank: *rank,
            ln_odds: -1.3 * *rank as f64,
            change: Change::sentence(&changes),
        });
    }
    solution.rivals.sort_by_key(|r| (r.tangle, r.rank));
}
