//! The two entry points: all lists into one frame, and once more with what linking has learned.

use nalgebra::DMatrix;

use crate::maths::cov2::Cov2;
use crate::model::campaign::{Campaign, Distortion, FrameFreedom};
use crate::model::detection::{FieldEpoch, RawList};
use crate::model::note::Note;
use crate::model::region::Region;

use super::adjust::{Adjusted, EpochSetup, Gauge, StarSetup, adjust};
use super::chain::{Chain, Placed, mapped};
use super::known::{self, FrameError, NominalMap};
use super::path::PriorLaw;
use super::place::{ACCEPT_NATS, Refusal, Start};
use super::refstars::{self, Members};
use super::solve::{Match, STARS_PER_PAIR, fit_supported};
use super::transform::{Chart, LADDER, PolyMap, n_params, place_covariance};
use super::zeropoint::{Magnitude, zero_points};

/// Rounds of matching and adjusting within `register`.
const ROUNDS: usize = 2;
/// A frame is weak when it rests on fewer stars per pair of parameters.
const WEAK_PER_PAIR: usize = 2 * STARS_PER_PAIR;
/// A handedness, turn or scale this far from the nominal one is worth a note.
const ODD_TURN_DEG: f64 = 10.0;
const ODD_SCALE: f64 = 0.05;

/// How an epoch's frame came about.
#[derive(Clone, Debug, PartialEq)]
pub enum SolveEnd {
    /// The campaign file says it is known.
    Known,
    /// No frame is known: this epoch's nominal frame is the common one.
    Reference,
    /// Solved from reference stars.
    Solved,
    /// Not placed, and why.
    Failed(String),
}

/// An epoch's way into the common frame.
#[derive(Clone, Debug)]
pub struct FrameSolution {
    pub end: SolveEnd,
    /// Freedom asked for and freedom that the anchors supported.
    pub asked: FrameFreedom,
    pub solved: FrameFreedom,
    /// From the nominal plane to the common frame.
    pub map: PolyMap,
    /// 12 x 12, of the map's coefficients; zero for a known frame.
    pub coef_cov: DMatrix<f64>,
    /// The same for list coordinates: x = c0 + c1 u + c2 v + c3 u^2 + c4 u v + c5 v^2, then y.
    /// For a list in degrees: of its tangent-plane position in mas.
    pub list_coef: [[f64; 6]; 2],
    pub list_coef_err: [[f64; 6]; 2],
    pub n_anchors: usize,
    pub rms_mas: Option<f64>,
    /// To be added to listed magnitudes, with its error; applied in `Registered::epochs`.
    pub zero_point_mag: Option<(f64, f64)>,
    /// Few anchors for the freedom that was asked for.
    pub weak: bool,
}

impl FrameSolution {
    /// Covariance \[mas^2\] that the frame gives a place of the nominal plane.
    #[must_use]
    pub fn frame_covariance(&self, u_mas: f64, v_mas: f64) -> Cov2 {
        let (s, t) = self.map.chart.scaled(u_mas, v_mas);
        place_covariance(&self.coef_cov, s, t)
    }
}

/// All lists in the common frame.
#[derive(Clone, Debug)]
pub struct Registered {
    /// An epoch that could not be placed has no rows.
    pub epochs: Vec<FieldEpoch>,
    pub solutions: Vec<FrameSolution>,
    pub gauge: Option<Gauge>,
    pub notes: Vec<Note>,
}

impl Registered {
    /// Whether an epoch has a place in the common frame.
    #[must_use]
    pub fn placed(&self, epoch: usize) -> bool {
        !matches!(self.solutions[epoch].end, SolveEnd::Failed(_))
    }

    /// Indices of epochs that were left out.
    #[must_use]
    pub fn unplaced(&self) -> Vec<usize> {
        (0..self.solutions.len())
            .filter(|&e| !self.placed(e))
            .collect()
    }

    /// Whether any frame was solved for.
    #[must_use]
    pub fn any_solved(&self) -> bool {
        self.solutions.iter().any(|s| s.end == SolveEnd::Solved)
    }
}

/// A detection that linking has given to a secure, unmerged, calm star.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Anchor {
    /// Row of the epoch's list.
    pub row: u32,
    /// The star it belongs to; any numbering.
    pub track: u32,
}

/// Brings all lists into the common frame.
///
/// # Errors
/// When a list cannot be taken to its nominal plane: see [`FrameError`]. Lists that cannot be
/// placed are no error: see [`Registered::placed`].
pub fn register(campaign: &Campaign, lists: &[RawList]) -> Result<Registered, FrameError> {
    let nominal = nominal(campaign, lists)?;
    if all_known(campaign) {
        return Ok(all_as_stated(campaign, nominal));
    }
    let Some(mut chain) = Chain::run(campaign, &nominal) else {
        return Ok(nothing_placed(campaign, &nominal));
    };
    let mut freedoms: Vec<FrameFreedom> = chain
        .placed
        .iter()
        .map(|p| match p {
            Some(Placed::Found(p)) => p.fit.freedom,
            _ => FrameFreedom::Known,
        })
        .collect();
    let mut adjusted = None;
    for round in 0..ROUNDS {
        let members: Vec<Members> = chain.stars.iter().map(|s| s.members.clone()).collect();
        let Some(next) = solve(
            campaign,
            &nominal,
            &chain.maps,
            &mut freedoms,
            &members,
            chain.t0_yr,
            round + 1 == ROUNDS,
        ) else {
            break;
        };
        let maps = next.maps.clone();
        adjusted = Some(next);
        if round + 1 < ROUNDS {
            chain.rematch(&maps);
        }
    }
    let Some(solved) = adjusted else {
        return Ok(nothing_placed(campaign, &nominal));
    };
    let mut notes = Vec::new();
    for (e, placed) in chain.placed.iter().enumerate() {
        if let Some(Placed::Found(p)) = placed
            && let Some(note) = start_note(campaign, e, &p.fit.map, p.start)
        {
            notes.push(note);
        }
    }
    let reasons = (0..nominal.len())
        .map(|e| why_not(&nominal[e], &chain, &solved, e))
        .collect();
    let known = |e: usize| campaign.epochs[e].settings.frame == FrameFreedom::Known;
    let defines = (!known(chain.reference)).then_some(chain.reference);
    let zero = chain.reference;
    Ok(assemble(
        campaign, &nominal, solved, reasons, defines, zero, notes,
    ))
}

/// Solves the frames again from anchors, and says by how much they moved: the largest rms shift
/// over an epoch's field in units of its error.
///
/// # Errors
/// As [`register`].
pub fn refine(
    campaign: &Campaign,
    lists: &[RawList],
    before: &Registered,
    anchors: &[Vec<Anchor>],
) -> Result<(Registered, f64), FrameError> {
    if !before.any_solved() {
        return Ok((before.clone(), 0.0));
    }
    let nominal = nominal(campaign, lists)?;
    let maps: Vec<Option<PolyMap>> = (0..nominal.len())
        .map(|e| before.placed(e).then(|| before.solutions[e].map))
        .collect();
    let mut freedoms: Vec<FrameFreedom> = before
        .solutions
        .iter()
        .map(|s| match s.end {
            SolveEnd::Solved => s.solved,
            _ => FrameFreedom::Known,
        })
        .collect();
    let mut by_track: std::collections::BTreeMap<u32, Members> = std::collections::BTreeMap::new();
    for (e, of_epoch) in anchors.iter().enumerate() {
        for a in of_epoch {
            by_track.entry(a.track).or_default().push((e as u32, a.row));
        }
    }
    let members: Vec<Members> = by_track.into_values().collect();
    let t0 = reference_time(campaign);
    let Some(solved) = solve(campaign, &nominal, &maps, &mut freedoms, &members, t0, true) else {
        return Ok((before.clone(), 0.0));
    };
    let reasons = (0..nominal.len())
        .map(|e| match (&before.solutions[e].end, &solved.maps[e]) {
            (SolveEnd::Failed(why), _) => Some(why.clone()),
            (_, None) => Some("too few anchors".to_owned()),
            _ => None,
        })
        .collect();
    let defines = before
        .solutions
        .iter()
        .position(|s| s.end == SolveEnd::Reference);
    let zero = before
        .solutions
        .iter()
        .position(|s| s.zero_point_mag.is_some_and(|z| z.0 == 0.0))
        .unwrap_or(0);
    let notes = before
        .notes
        .iter()
        .filter(|n| n.what == "frame_start")
        .cloned()
        .collect();
    let after = assemble(campaign, &nominal, solved, reasons, defines, zero, notes);
    let moved = movement(&nominal, before, &after);
    Ok((after, moved))
}

/// Lists in their nominal planes.
fn nominal(campaign: &Campaign, lists: &[RawList]) -> Result<Vec<FieldEpoch>, FrameError> {
    campaign
        .epochs
        .iter()
        .zip(lists)
        .map(|(epoch, list)| known::place(campaign, epoch, list))
        .collect()
}

fn all_known(campaign: &Campaign) -> bool {
    campaign
        .epochs
        .iter()
        .all(|e| e.settings.frame == FrameFreedom::Known)
}

fn reference_time(campaign: &Campaign) -> f64 {
    campaign.reference.yr()
}

/// Maps, anchors and zero points as found in one adjustment.
struct Solved {
    maps: Vec<Option<PolyMap>>,
    freedoms: Vec<FrameFreedom>,
    adjusted: Adjusted,
    zero_points: Vec<Magnitude>,
    n_stars: usize,
}

/// Chooses reference stars, settles the freedom of every epoch, adjusts.
fn solve(
    campaign: &Campaign,
    nominal: &[FieldEpoch],
    maps: &[Option<PolyMap>],
    freedoms: &mut [FrameFreedom],
    members: &[Members],
    t0_yr: f64,
    last: bool,
) -> Option<Solved> {
    let mut stars = refstars::choose(campaign, nominal, maps, members, t0_yr);
    let mut maps = maps.to_vec();
    let mut setups = setups(campaign, nominal, &maps, freedoms, t0_yr);
    settle_freedoms(campaign, &mut setups, freedoms, &mut maps, &mut stars);
    let n_instruments = campaign.instruments.len();
    let law = PriorLaw::of(campaign);
    let first = adjust(&setups, &stars, n_instruments, &law)?;
    // The paths are known now: what order do they support in each epoch?
    if last && reconsider_freedoms(campaign, &mut setups, freedoms, &stars, &first) {
        let second = adjust(&setups, &stars, n_instruments, &law)?;
        return Some(collect(nominal, maps, freedoms, second, &stars));
    }
    Some(collect(nominal, maps, freedoms, first, &stars))
}

fn collect(
    nominal: &[FieldEpoch],
    mut maps: Vec<Option<PolyMap>>,
    freedoms: &[FrameFreedom],
    adjusted: Adjusted,
    stars: &[StarSetup],
) -> Solved {
    for (map, fit) in maps.iter_mut().zip(&adjusted.epochs) {
        if let Some(m) = map {
            *m = fit.map;
        }
    }
    let mut zero_points = Vec::new();
    for (k, star) in stars.iter().enumerate() {
        for o in &star.seen {
            zero_points.push(Magnitude {
                epoch: o.epoch,
                star: k as u32,
                mag: nominal[o.epoch as usize].mag[o.row as usize],
            });
        }
    }
    Solved {
        maps,
        freedoms: freedoms.to_vec(),
        adjusted,
        zero_points,
        n_stars: stars.len(),
    }
}

fn setups(
    campaign: &Campaign,
    nominal: &[FieldEpoch],
    maps: &[Option<PolyMap>],
    freedoms: &[FrameFreedom],
    t0_yr: f64,
) -> Vec<EpochSetup> {
    let charts = charts(campaign, nominal);
    campaign
        .epochs
        .iter()
        .enumerate()
        .map(|(e, epoch)| {
            let shared = epoch.settings.distortion == Distortion::Shared
                && epoch.settings.frame == FrameFreedom::Quadratic;
            let map = maps[e].unwrap_or_else(|| PolyMap::identity(charts[e]));
            EpochSetup {
                dt_yr: epoch.time.yr() - t0_yr,
                chart: charts[e],
                freedom: if maps[e].is_none() {
                    FrameFreedom::Known
                } else if shared {
                    freedoms[e].min(FrameFreedom::Affine)
                } else {
                    freedoms[e]
                },
                mirrored: map.is_mirrored(),
                map: rechart(&map, charts[e]),
                instrument: epoch.instrument,
                shared: shared.then_some(epoch.instrument),
                fwhm_mas: nominal[e].fwhm_mas,
            }
        })
        .collect()
}

/// Chart per epoch; epochs that share a distortion share the chart of their instrument.
fn charts(campaign: &Campaign, nominal: &[FieldEpoch]) -> Vec<Chart> {
    let own: Vec<Chart> = nominal
        .iter()
        .map(|l| Chart::of(&l.x_mas, &l.y_mas))
        .collect();
    campaign
        .epochs
        .iter()
        .enumerate()
        .map(|(e, epoch)| {
            if epoch.settings.distortion != Distortion::Shared {
                return own[e];
            }
            let (mut u, mut v) = (Vec::new(), Vec::new());
            for (other, list) in campaign.epochs.iter().zip(nominal) {
                if other.instrument == epoch.instrument {
                    u.extend_from_slice(&list.x_mas);
                    v.extend_from_slice(&list.y_mas);
                }
            }
            Chart::of(&u, &v)
        })
        .collect()
}

/// The same map on another chart.
fn rechart(map: &PolyMap, chart: Chart) -> PolyMap {
    if map.chart == chart {
        return *map;
    }
    let h = chart.half_mas;
    let (coef, _) = map.in_list_units([h, 0.0, 0.0, h], chart.centre_mas, &DMatrix::zeros(12, 12));
    PolyMap { chart, coef }
}

/// No freedom beyond what the number of anchors carries; epochs with too few are dropped.
fn settle_freedoms(
    campaign: &Campaign,
    setups: &mut [EpochSetup],
    freedoms: &mut [FrameFreedom],
    maps: &mut [Option<PolyMap>],
    stars: &mut [StarSetup],
) {
    let mut n = vec![0usize; setups.len()];
    for star in stars.iter() {
        for o in &star.seen {
            n[o.epoch as usize] += 1;
        }
    }
    for (e, setup) in setups.iter_mut().enumerate() {
        if setup.freedom == FrameFreedom::Known {
            continue;
        }
        let most = LADDER
            .into_iter()
            .rev()
            .find(|f| n[e] >= STARS_PER_PAIR * n_params(*f) / 2);
        let mirrored_shift = most == Some(FrameFreedom::Shift) && setup.mirrored;
        match most {
            Some(most) if !mirrored_shift => {
                // A shift alone would throw away the turn and scale that were found.
                let least = FrameFreedom::Similarity.min(campaign.epochs[e].settings.frame);
                if most < least {
                    maps[e] = None;
                    setup.freedom = FrameFreedom::Known;
                } else {
                    setup.freedom = setup.freedom.min(most);
                    freedoms[e] = freedoms[e].min(most);
                }
            }
            _ => {
                maps[e] = None;
                setup.freedom = FrameFreedom::Known;
            }
        }
    }
    for star in stars.iter_mut() {
        star.seen.retain(|o| maps[o.epoch as usize].is_some());
    }
}

/// Settles every epoch's freedom by left-out stars against the paths; true when one changed.
fn reconsider_freedoms(
    campaign: &Campaign,
    setups: &mut [EpochSetup],
    freedoms: &mut [FrameFreedom],
    stars: &[StarSetup],
    found: &Adjusted,
) -> bool {
    let mut seen: Vec<Vec<Match>> = vec![Vec::new(); setups.len()];
    for (star, path) in stars.iter().zip(&found.paths) {
        let Some(path) = path else { continue };
        for o in &star.seen {
            let setup = &setups[o.epoch as usize];
            let law = &found.laws[setup.instrument];
            let (x, y, var) = path.at(setup.dt_yr);
            seen[o.epoch as usize].push(Match {
                u_mas: o.u_mas,
                v_mas: o.v_mas,
                x_mas: x,
                y_mas: y,
                var_mas2: law.var_factor * o.var_mas2 + law.floor_mas2 + var,
            });
        }
    }
    let mut changed = false;
    for (e, setup) in setups.iter_mut().enumerate() {
        if setup.freedom == FrameFreedom::Known || setup.shared.is_some() {
            continue;
        }
        let asked = campaign.epochs[e].settings.frame;
        if let Some(fit) = fit_supported(setup.chart, asked, setup.mirrored, &seen[e])
            && fit.freedom != setup.freedom
        {
            setup.freedom = fit.freedom;
            freedoms[e] = fit.freedom;
            changed = true;
        }
    }
    changed
}

/// Everything in the common frame, with reports and notes.
fn assemble(
    campaign: &Campaign,
    nominal: &[FieldEpoch],
    solved: Solved,
    reasons: Vec<Option<String>>,
    defines: Option<usize>,
    zero_reference: usize,
    mut notes: Vec<Note>,
) -> Registered {
    let zero = zero_points(
        &solved.zero_points,
        nominal.len(),
        solved.n_stars,
        zero_reference,
    );
    let mut epochs = Vec::with_capacity(nominal.len());
    let mut solutions = Vec::with_capacity(nominal.len());
    for (e, list) in nominal.iter().enumerate() {
        let asked = campaign.epochs[e].settings.frame;
        let fit = &solved.adjusted.epochs[e];
        let end = match &reasons[e] {
            Some(why) => SolveEnd::Failed(why.clone()),
            None if asked == FrameFreedom::Known => SolveEnd::Known,
            None if defines == Some(e) => SolveEnd::Reference,
            None => SolveEnd::Solved,
        };
        let freedom = match end {
            SolveEnd::Solved => solved.freedoms[e],
            _ => FrameFreedom::Known,
        };
        let name = &campaign.epochs[e].name;
        let weak = match &end {
            SolveEnd::Solved => fit.n < WEAK_PER_PAIR * n_params(asked) / 2,
            SolveEnd::Failed(_) => true,
            _ => false,
        };
        if let SolveEnd::Failed(why) = &end {
            notes.push(Note {
                what: "unplaced_epoch",
                place: name.clone(),
                text: format!("left out: {why}"),
            });
        } else if end == SolveEnd::Solved && freedom < asked {
            notes.push(Note {
                what: "frame_order",
                place: name.clone(),
                text: format!(
                    "{} anchors support {} where {} was asked for",
                    fit.n,
                    word(freedom),
                    word(asked)
                ),
            });
        }
        let (list_coef, list_coef_err) = list_coefficients(campaign, e, &fit.map, &fit.coef_cov);
        epochs.push(match &end {
            SolveEnd::Failed(_) => empty(list),
            _ => moved(list, &fit.map, zero[e].filter(|_| end != SolveEnd::Known)),
        });
        solutions.push(FrameSolution {
            end,
            asked,
            solved: freedom,
            map: fit.map,
            coef_cov: fit.coef_cov.clone(),
            list_coef,
            list_coef_err,
            n_anchors: fit.n,
            rms_mas: (fit.n > 0).then_some(fit.rms_mas),
            zero_point_mag: zero[e],
            weak,
        });
    }
    if let Some(g) = &solved.adjusted.gauge {
        notes.push(gauge_note(g));
    }
    Registered {
        epochs,
        solutions,
        gauge: solved.adjusted.gauge,
        notes,
    }
}

fn gauge_note(g: &Gauge) -> Note {
    let text = if g.tied {
        format!(
            "known epochs fix drift, rotation and scale rate: to {:.3} mas/yr (x), {:.3} mas/yr (y), {:.3} and {:.3} mas/yr at 1000 mas",
            g.drift_err_mas_yr[0], g.drift_err_mas_yr[1], g.rotation_err_mas_yr, g.scale_err_mas_yr
        )
    } else {
        format!(
            "no list fixes drift, rotation and scale rate: the mean motion, rotation and expansion of {} reference stars is set to zero; that is uncertain by {:.2} mas/yr (x), {:.2} mas/yr (y), {:.2} and {:.2} mas/yr at 1000 mas; the central mass enters only through the curvature of their paths",
            g.n_stars,
            g.drift_err_mas_yr[0],
            g.drift_err_mas_yr[1],
            g.rotation_err_mas_yr,
            g.scale_err_mas_yr
        )
    };
    Note {
        what: "frame_gauge",
        place: "common frame".to_owned(),
        text,
    }
}

/// A note when a list lies otherwise than the campaign file says.
fn start_note(campaign: &Campaign, e: usize, map: &PolyMap, start: Start) -> Option<Note> {
    let (turn, scale) = (map.turn_deg(), map.scale_ratio());
    let mirrored = map.is_mirrored();
    let odd = mirrored || turn.abs() > ODD_TURN_DEG || (scale - 1.0).abs() > ODD_SCALE;
    if !odd && start == Start::Nominal {
        return None;
    }
    let hand = if mirrored {
        "; the list is mirrored: `handedness` is likely wrong"
    } else {
        ""
    };
    Some(Note {
        what: "frame_start",
        place: campaign.epochs[e].name.clone(),
        text: format!(
            "found by the pattern of its stars: turned by {turn:.1} deg and scaled by {scale:.3} against the campaign file{hand}"
        ),
    })
}

fn why_not(list: &FieldEpoch, chain: &Chain, solved: &Solved, e: usize) -> Option<String> {
    if solved.maps[e].is_some() {
        return None;
    }
    if list.is_empty() {
        return Some("the list is empty".to_owned());
    }
    Some(match chain.refused[e] {
        Some(Refusal {
            best_ln_odds: Some(best),
            n_list,
            n_sky,
        }) => format!(
            "its {n_list} detections do not settle on {n_sky} predicted stars (best log-odds {best:.0}, needed {ACCEPT_NATS:.0})"
        ),
        Some(Refusal { n_list, n_sky, .. }) => format!(
            "no turn, scale and shift lays its {n_list} detections on {n_sky} predicted stars"
        ),
        None => "too few reference stars".to_owned(),
    })
}

/// A list under a map, with its magnitudes on the common zero point.
fn moved(list: &FieldEpoch, map: &PolyMap, zero: Option<(f64, f64)>) -> FieldEpoch {
    let (x_mas, y_mas) = mapped(list, map);
    let cov_mas2 = (0..list.len())
        .map(|k| list.cov_mas2[k].mapped(map.jacobian(list.x_mas[k], list.y_mas[k])))
        .collect();
    let shift = zero.map_or(0.0, |z| z.0);
    let region = Region {
        outline_mas: list
            .region
            .outline_mas
            .iter()
            .map(|p| map.apply(p[0], p[1]).into())
            .collect(),
        holes_mas: list
            .region
            .holes_mas
            .iter()
            .map(|h| {
                let (x, y) = map.apply(h[0], h[1]);
                let [a, b, c, d] = map.jacobian(h[0], h[1]);
                [x, y, h[2] * (a * d - b * c).abs().sqrt()]
            })
            .collect(),
    };
    FieldEpoch {
        x_mas,
        y_mas,
        cov_mas2,
        mag: list.mag.iter().map(|m| m + shift).collect(),
        region,
        ..list.clone()
    }
}

/// A place where no star is: the outline of an epoch that shows nothing.
const NOWHERE_MAS: f64 = 1e12;

/// An epoch that is left out: its time and instrument, no rows, and no place where a star could
/// have been seen, so that none counts as missing.
fn empty(list: &FieldEpoch) -> FieldEpoch {
    FieldEpoch {
        time: list.time,
        instrument: list.instrument,
        fwhm_mas: list.fwhm_mas,
        x_mas: Vec::new(),
        y_mas: Vec::new(),
        cov_mas2: Vec::new(),
        mag: Vec::new(),
        mag_err: Vec::new(),
        rv_km_s: Vec::new(),
        rv_err_km_s: Vec::new(),
        quality: Vec::new(),
        region: Region {
            outline_mas: vec![
                [NOWHERE_MAS, NOWHERE_MAS],
                [NOWHERE_MAS + 1e3, NOWHERE_MAS],
                [NOWHERE_MAS, NOWHERE_MAS + 1e3],
            ],
            holes_mas: Vec::new(),
        },
    }
}

fn list_coefficients(
    campaign: &Campaign,
    e: usize,
    map: &PolyMap,
    cov: &DMatrix<f64>,
) -> ([[f64; 6]; 2], [[f64; 6]; 2]) {
    let linear = NominalMap::new(campaign, &campaign.epochs[e])
        .ok()
        .and_then(|m| m.linear())
        .unwrap_or([1.0, 0.0, 0.0, 1.0]);
    let (coef, cov) = map.in_list_units(linear, [0.0; 2], cov);
    let err = std::array::from_fn(|axis| {
        std::array::from_fn(|k| cov[(6 * axis + k, 6 * axis + k)].max(0.0).sqrt())
    });
    (coef, err)
}

fn solution_as_stated(
    campaign: &Campaign,
    e: usize,
    list: &FieldEpoch,
    end: SolveEnd,
) -> FrameSolution {
    let map = PolyMap::identity(Chart::of(&list.x_mas, &list.y_mas));
    let coef_cov = DMatrix::zeros(12, 12);
    let (list_coef, list_coef_err) = list_coefficients(campaign, e, &map, &coef_cov);
    FrameSolution {
        weak: matches!(end, SolveEnd::Failed(_)),
        end,
        asked: campaign.epochs[e].settings.frame,
        solved: FrameFreedom::Known,
        map,
        coef_cov,
        list_coef,
        list_coef_err,
        n_anchors: 0,
        rms_mas: None,
        zero_point_mag: None,
    }
}

fn all_as_stated(campaign: &Campaign, nominal: Vec<FieldEpoch>) -> Registered {
    let solutions = nominal
        .iter()
        .enumerate()
        .map(|(e, list)| solution_as_stated(campaign, e, list, SolveEnd::Known))
        .collect();
    Registered {
        epochs: nominal,
        solutions,
        gauge: None,
        notes: Vec::new(),
    }
}

/// Known epochs as stated, all others left out.
fn nothing_placed(campaign: &Campaign, nominal: &[FieldEpoch]) -> Registered {
    let mut notes = Vec::new();
    let mut epochs = Vec::new();
    let mut solutions = Vec::new();
    for (e, list) in nominal.iter().enumerate() {
        if campaign.epochs[e].settings.frame == FrameFreedom::Known {
            epochs.push(list.clone());
            solutions.push(solution_as_stated(campaign, e, list, SolveEnd::Known));
            continue;
        }
        let why = "no reference stars link it to other epochs".to_owned();
        notes.push(Note {
            what: "unplaced_epoch",
            place: campaign.epochs[e].name.clone(),
            text: format!("left out: {why}"),
        });
        epochs.push(empty(list));
        solutions.push(solution_as_stated(campaign, e, list, SolveEnd::Failed(why)));
    }
    Registered {
        epochs,
        solutions,
        gauge: None,
        notes,
    }
}

/// Largest rms shift over an epoch's field in units of its error.
fn movement(nominal: &[FieldEpoch], before: &Registered, after: &Registered) -> f64 {
    let mut largest: f64 = 0.0;
    for (e, list) in nominal.iter().enumerate() {
        let (old, new) = (&before.solutions[e], &after.solutions[e]);
        if new.end != SolveEnd::Solved {
            continue;
        }
        let chart = Chart::of(&list.x_mas, &list.y_mas);
        let (mut sum, mut n) = (0.0, 0.0);
        for k in 0..25 {
            let u = chart.centre_mas[0] + chart.half_mas * (f64::from(k % 5) / 2.0 - 1.0);
            let v = chart.centre_mas[1] + chart.half_mas * (f64::from(k / 5) / 2.0 - 1.0);
            let (p, q) = (old.map.apply(u, v), new.map.apply(u, v));
            let cov = new.frame_covariance(u, v) + Cov2::round(1e-12);
            sum += 0.5 * cov.chi2(p.0 - q.0, p.1 - q.1);
            n += 1.0;
        }
        largest = largest.max((sum / n).sqrt());
    }
    largest
}

fn word(freedom: FrameFreedom) -> &'static str {
    match freedom {
        FrameFreedom::Known => "known",
        FrameFreedom::Shift => "shift",
        FrameFreedom::Similarity => "similarity",
        FrameFreedom::Affine => "affine",
        FrameFreedom::Quadratic => "quadratic",
    }
}
