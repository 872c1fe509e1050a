//! The model behind the page: a JSON header and packed columns, built from a run.
//!
//! Tracks are written column by column, detections by epoch and row, memberships by track and
//! epoch. Positions are multiples of a quantum (0.001 mas on ordinary fields), so numbers on the
//! page are those of the tables rounded to that.

use std::collections::{BTreeMap, BTreeSet};

use serde::Serialize;

use super::columns::{ColumnSpec, Columns, quantise};
use super::path::{Path, round, round_significant, sample};
use super::select::{Selection, member_ranges};
use super::{ExtraTable, ReportInput};
use crate::model::campaign::CentralMass;
use crate::model::change::{Change, DetectionName};
use crate::model::flag::{Flags, TABLE};
use crate::model::motion::{Motion, MotionKind};
use crate::model::result::{Certificate, OrbitColumns, Track};
use crate::motion::kepler;

/// Stands for "not measured" in the magnitude columns (millimagnitudes).
const NO_MAG: i32 = 99_999;
/// Smallest step in which positions and errors are stored.
const QUANTUM_MAS: f64 = 1e-3;

#[derive(Debug, Serialize)]
pub(super) struct Header<'a> {
    program: String,
    field: &'a str,
    reference_yr: f64,
    origin: Option<[f64; 2]>,
    central: Option<Central>,
    quantum_mas: f64,
    no_mag: i32,
    counts: Counts,
    left_out: &'a [String],
    flags: Vec<FlagRow>,
    epochs: Vec<EpochRow<'a>>,
    tracks: TrackColumns<'a>,
    paths: BTreeMap<usize, Path>,
    orbits: BTreeMap<usize, Vec<OrbitRow>>,
    tangles: Vec<TangleRow<'a>>,
    notes: Vec<[&'a str; 3]>,
    extras: &'a [ExtraTable],
    columns: Vec<ColumnSpec>,
}

#[derive(Debug, Serialize)]
struct Central {
    x_mas: f64,
    y_mas: f64,
    mass_msun: Option<f64>,
    distance_pc: Option<f64>,
    gm_mas3_yr2: f64,
}

/// Of the whole run, whatever the page shows of it.
#[derive(Debug, Serialize)]
struct Counts {
    epochs: usize,
    detections: usize,
    tracks: usize,
    memberships: usize,
    leftovers: usize,
    tangles: usize,
    merged_detections: usize,
    expected_wrong: f64,
}

#[derive(Debug, Serialize)]
struct FlagRow {
    bit: u32,
    word: &'static str,
    meaning: &'static str,
    tracks: usize,
    members: usize,
}

#[derive(Debug, Serialize)]
struct EpochRow<'a> {
    name: &'a str,
    time_yr: f64,
    instrument: &'a str,
    band: Option<&'a str>,
    frame: &'static str,
    fwhm_mas: f64,
    n_list: usize,
    n_matched: usize,
    n_unmatched: usize,
    coef: [[f64; 6]; 2],
    coef_err: [[f64; 6]; 2],
    n_anchors: usize,
    rms_mas: Option<f64>,
    error_factor: f64,
    error_floor_mas: f64,
    limit_mag: Option<f64>,
    zero_point_mag: Option<f64>,
    zero_point_err_mag: Option<f64>,
    failed: Option<&'a str>,
    flags: u32,
    outline_mas: Vec<[f64; 2]>,
    holes_mas: &'a [[f64; 3]],
    /// Detections of this epoch that are on the page.
    shown: usize,
    /// Identifiers, where they are not whole numbers that fit a column.
    ids: Option<Vec<String>>,
}

/// One entry per track on the page in each column.
#[derive(Debug, Default, Serialize)]
struct TrackColumns<'a> {
    name: Vec<&'a str>,
    kind: Vec<u8>,
    detailed: Vec<u8>,
    n_members: Vec<usize>,
    first_yr: Vec<f64>,
    last_yr: Vec<f64>,
    mean_epoch_yr: Vec<f64>,
    /// x, y, their errors, vx, vy, their errors at the mean epoch.
    mean: Vec<[f64; 8]>,
    /// x, y, vx, vy, ax, ay at the reference epoch.
    sky: Vec<[f64; 6]>,
    /// Covariance of (x, vx, ax): xx, xv, xa, vv, va, aa; then of (y, vy, ay).
    cov: Vec<[f64; 12]>,
    mag: Vec<Option<f64>>,
    mag_scatter: Vec<Option<f64>>,
    chi2: Vec<f64>,
    dof: Vec<usize>,
    ln_evidence: Vec<f64>,
    probability: Vec<f64>,
    /// Index into the tangles of the page, -1 for none.
    tangle: Vec<i64>,
    flags: Vec<u32>,
}

#[derive(Debug, Serialize)]
struct OrbitRow {
    rank: usize,
    ln_evidence: Option<f64>,
    chi2: Option<f64>,
    /// (name, unit, value, error), in the order in which they are shown.
    elements: Vec<(&'static str, &'static str, f64, f64)>,
    sign_known: bool,
}

#[derive(Debug, Serialize)]
struct TangleRow<'a> {
    /// Number of the tangle in the tables.
    number: usize,
    /// Indices of its tracks on the page.
    tracks: Vec<usize>,
    n_tracks: usize,
    n_detections: usize,
    n_epochs: usize,
    certificate: &'static str,
    gap_nats: Option<f64>,
    work: u64,
    flags: u32,
    rivals: Vec<RivalRow<'a>>,
}

#[derive(Debug, Serialize)]
struct RivalRow<'a> {
    rank: usize,
    ln_odds: f64,
    change: &'a str,
    /// Clauses that name what is on the page: what (0 takes, 1 shares, 2 drops, 3 vanishes),
    /// track (-1 for a star
    /// that only the rival has), detection (place in its epoch on the page), epoch, loser; -1
    /// for none.
    drawn: Vec<[i64; 5]>,
}

/// Builds the header and the columns.
pub(super) fn build<'a>(
    input: &ReportInput<'a>,
    selection: &'a Selection,
) -> (Header<'a>, Columns) {
    let quantum_mas = quantum(input);
    let mut columns = Columns::default();
    detections(input, selection, quantum_mas, &mut columns);
    members(input, selection, quantum_mas, &mut columns);
    let page_track: BTreeMap<usize, usize> = selection
        .tracks
        .iter()
        .enumerate()
        .map(|(page, &k)| (k, page))
        .collect();
    let (tangles, page_tangle) = tangles(input, selection, &page_track);
    let (paths, orbits) = orbits(input, selection);
    let header = Header {
        program: format!("{} {}", env!("CARGO_PKG_NAME"), env!("CARGO_PKG_VERSION")),
        field: &input.campaign.name,
        reference_yr: input.campaign.reference.yr(),
        origin: input.campaign.origin.map(|o| [o.ra_deg, o.dec_deg]),
        central: input.campaign.central.as_ref().map(|c| Central {
            x_mas: c.x_mas,
            y_mas: c.y_mas,
            mass_msun: c.mass_msun,
            distance_pc: c.distance_pc,
            gm_mas3_yr2: round_significant(c.gm_mas3_yr2, 6),
        }),
        quantum_mas,
        no_mag: NO_MAG,
        counts: counts(input),
        left_out: &selection.notes,
        flags: flags(input),
        epochs: epochs(input, selection),
        tracks: tracks(input, selection, &page_tangle),
        paths,
        orbits,
        tangles,
        notes: notes(input),
        extras: input.extras,
        columns: columns.specs.clone(),
    };
    (header, columns)
}

/// 0.001 mas, or the next power of ten at which the largest coordinate fits a column.
fn quantum(input: &ReportInput) -> f64 {
    let largest = input
        .epochs
        .iter()
        .flat_map(|e| e.x_mas.iter().chain(&e.y_mas))
        .fold(0.0_f64, |a, v| a.max(v.abs()));
    let mut quantum = QUANTUM_MAS;
    while largest / quantum > 1e9 {
        quantum *= 10.0;
    }
    quantum
}

fn detections(input: &ReportInput, selection: &Selection, quantum: f64, columns: &mut Columns) {
    let mut number = Vec::new();
    let mut col: [Vec<i32>; 6] = std::array::from_fn(|_| Vec::new());
    for (e, rows) in selection.rows.iter().enumerate() {
        let epoch = &input.epochs[e];
        for &row in rows {
            let cov = epoch.cov_mas2[row];
            let (x_err, y_err) = (cov.xx.max(0.0).sqrt(), cov.yy.max(0.0).sqrt());
            col[0].push(quantise(epoch.x_mas[row], quantum));
            col[1].push(quantise(epoch.y_mas[row], quantum));
            col[2].push(quantise(x_err, QUANTUM_MAS));
            col[3].push(quantise(y_err, QUANTUM_MAS));
            col[4].push(millimag(epoch.mag[row]));
            col[5].push(millimag(epoch.mag_err[row]));
            number.push(match input.lists.get(e).map(|l| &l.ids) {
                Some(crate::model::detection::Ids::Numbers(n)) => {
                    i32::try_from(n[row]).unwrap_or(-1)
                }
                _ => -1,
            });
        }
    }
    columns.push("det_id", &number, false);
    for (name, values, delta) in [
        ("det_x", &col[0], true),
        ("det_y", &col[1], false),
        ("det_x_err", &col[2], false),
        ("det_y_err", &col[3], false),
        ("det_mag", &col[4], false),
        ("det_mag_err", &col[5], false),
    ] {
        columns.push(name, values, delta);
    }
}

fn millimag(mag: f64) -> i32 {
    if mag.is_finite() && mag.abs() < 99.0 {
        quantise(mag, 1e-3)
    } else {
        NO_MAG
    }
}

fn members(input: &ReportInput, selection: &Selection, quantum: f64, columns: &mut Columns) {
    let ranges = member_ranges(input);
    let place = places(input, selection);
    let mut count = Vec::new();
    let mut col: [Vec<i32>; 7] = std::array::from_fn(|_| Vec::new());
    for (&track, &detailed) in selection.tracks.iter().zip(&selection.detailed) {
        let before = col[0].len();
        if detailed {
            for m in &input.solution.members[ranges[track].clone()] {
                // A membership of a detection that is not there cannot be drawn.
                let Some(det) = place.get(m.epoch).and_then(|p| *p.get(m.row)?) else {
                    continue;
                };
                col[0].push(m.epoch as i32);
                col[1].push(det as i32);
                col[2].push(quantise(m.probability, 1e-4));
                // Two digits more than are shown, so that rounding twice does not show.
                col[3].push(quantise(m.share, 1e-5));
                col[4].push(quantise(m.dx_mas, quantum));
                col[5].push(quantise(m.dy_mas, quantum));
                col[6].push(m.flags.0 as i32);
            }
        }
        count.push((col[0].len() - before) as i32);
    }
    columns.push("track_rows", &count, false);
    for (name, values, delta) in [
        ("mem_epoch", &col[0], true),
        ("mem_det", &col[1], false),
        ("mem_prob", &col[2], false),
        ("mem_share", &col[3], false),
        ("mem_dx", &col[4], false),
        ("mem_dy", &col[5], false),
        ("mem_flags", &col[6], false),
    ] {
        columns.push(name, values, delta);
    }
}

/// Findings that did not stop the run: what, where, in words.
fn notes<'a>(input: &ReportInput<'a>) -> Vec<[&'a str; 3]> {
    let fresh = input.solution.notes.iter();
    let read_back = input.extras.iter().filter(|t| t.name == "notes");
    fresh
        .map(|n| [n.what, n.place.as_str(), n.text.as_str()])
        .chain(read_back.flat_map(|t| &t.rows).filter_map(|row| {
            let [what, place, text] = &row[..] else {
                return None;
            };
            Some([what.as_str(), place.as_str(), text.as_str()])
        }))
        .collect()
}

/// For each epoch and row: its place among the rows of that epoch on the page.
fn places(input: &ReportInput, selection: &Selection) -> Vec<Vec<Option<u32>>> {
    input
        .epochs
        .iter()
        .zip(&selection.rows)
        .map(|(epoch, rows)| {
            let mut place = vec![None; epoch.len()];
            for (k, &row) in (0..).zip(rows) {
                place[row] = Some(k);
            }
            place
        })
        .collect()
}

fn counts(input: &ReportInput) -> Counts {
    let s = input.solution;
    let mut holders: Vec<Vec<u8>> = input.epochs.iter().map(|e| vec![0; e.len()]).collect();
    for m in &s.members {
        if let Some(n) = holders.get_mut(m.epoch).and_then(|h| h.get_mut(m.row)) {
            *n = n.saturating_add(1);
        }
    }
    Counts {
        epochs: input.campaign.epochs.len(),
        detections: input.epochs.iter().map(|e| e.len()).sum(),
        tracks: s.tracks.len(),
        memberships: s.members.len(),
        leftovers: s.leftovers.len(),
        tangles: s.tangles.len(),
        merged_detections: holders.iter().flatten().filter(|&&n| n > 1).count(),
        expected_wrong: round(s.members.iter().map(|m| 1.0 - m.probability).sum(), 1),
    }
}

fn flags(input: &ReportInput) -> Vec<FlagRow> {
    let s = input.solution;
    TABLE
        .iter()
        .map(|&(flag, word, meaning)| FlagRow {
            bit: flag.0,
            word,
            meaning,
            tracks: s.tracks.iter().filter(|t| t.flags.has(flag)).count(),
            members: s.members.iter().filter(|m| m.flags.has(flag)).count(),
        })
        .collect()
}

fn epochs<'a>(input: &ReportInput<'a>, selection: &Selection) -> Vec<EpochRow<'a>> {
    use crate::model::campaign::FrameFreedom as F;
    let blank = crate::model::result::EpochReport::default();
    (0..input.campaign.epochs.len())
        .map(|e| {
            let epoch = &input.campaign.epochs[e];
            let field = &input.epochs[e];
            let report = input.solution.epochs.get(e);
            let r = report.unwrap_or(&blank);
            let significant = |c: &[[f64; 6]; 2]| c.map(|row| row.map(|v| round_significant(v, 9)));
            EpochRow {
                name: &epoch.name,
                time_yr: epoch.time.yr(),
                instrument: &epoch.settings.name,
                band: epoch.settings.band.as_deref(),
                frame: match epoch.settings.frame {
                    F::Known => "known",
                    F::Shift => "shift",
                    F::Similarity => "similarity",
                    F::Affine => "affine",
                    F::Quadratic => "quadratic",
                },
                fwhm_mas: field.fwhm_mas,
                n_list: r.n_list,
                n_matched: r.n_matched,
                n_unmatched: r.n_unmatched,
                coef: significant(&r.coef),
                coef_err: significant(&r.coef_err),
                n_anchors: r.n_anchors,
                rms_mas: r.rms_mas.map(|v| round(v, 4)),
                error_factor: round(r.error_factor, 4),
                error_floor_mas: round(r.error_floor_mas, 4),
                limit_mag: r.limit_mag.map(|v| round(v, 3)),
                zero_point_mag: r.zero_point_mag.map(|v| round(v, 4)),
                zero_point_err_mag: r.zero_point_err_mag.map(|v| round(v, 4)),
                failed: report.and_then(|r| r.failed.as_deref()),
                flags: r.flags.0,
                outline_mas: field
                    .region
                    .outline_mas
                    .iter()
                    .map(|p| p.map(|v| round(v, 1)))
                    .collect(),
                holes_mas: &field.region.holes_mas,
                shown: selection.rows[e].len(),
                ids: texts(input, selection, e),
            }
        })
        .collect()
}

/// Identifiers as texts, unless all of them went into the column of numbers.
fn texts(input: &ReportInput, selection: &Selection, e: usize) -> Option<Vec<String>> {
    use crate::model::detection::Ids;
    let ids = input.lists.get(e).map(|l| &l.ids)?;
    if let Ids::Numbers(n) = ids
        && n.iter().all(|&v| i32::try_from(v).is_ok())
    {
        return None;
    }
    Some(selection.rows[e].iter().map(|&row| ids.text(row)).collect())
}

fn tracks<'a>(
    input: &ReportInput<'a>,
    selection: &Selection,
    page_tangle: &BTreeMap<usize, usize>,
) -> TrackColumns<'a> {
    let mut c = TrackColumns::default();
    for (&k, &detailed) in selection.tracks.iter().zip(&selection.detailed) {
        let t: &Track = &input.solution.tracks[k];
        c.name.push(&t.name);
        c.kind.push(match t.motion.kind {
            MotionKind::Linear => 0,
            MotionKind::Accelerated => 1,
            MotionKind::Keplerian => 2,
        });
        c.detailed.push(u8::from(detailed));
        c.n_members.push(t.n_members);
        c.first_yr.push(round(t.first_yr, 5));
        c.last_yr.push(round(t.last_yr, 5));
        c.mean_epoch_yr.push(round(t.mean_epoch_yr, 5));
        c.mean.push([
            round(t.x_mean_mas, 4),
            round(t.y_mean_mas, 4),
            round_significant(t.x_mean_err_mas, 4),
            round_significant(t.y_mean_err_mas, 4),
            round(t.vx_mean_mas_yr, 5),
            round(t.vy_mean_mas_yr, 5),
            round_significant(t.vx_mean_err_mas_yr, 4),
            round_significant(t.vy_mean_err_mas_yr, 4),
        ]);
        let p = &t.sky.p;
        c.sky.push([
            round(p[0], 4),
            round(p[1], 4),
            round(p[2], 5),
            round(p[3], 5),
            round(p[4], 6),
            round(p[5], 6),
        ]);
        let v = &t.sky.cov;
        let axis = |i: usize| {
            [
                v[i][i],
                v[i][i + 2],
                v[i][i + 4],
                v[i + 2][i + 2],
                v[i + 2][i + 4],
                v[i + 4][i + 4],
            ]
        };
        let mut cov = [0.0; 12];
        cov[..6].copy_from_slice(&axis(0));
        cov[6..].copy_from_slice(&axis(1));
        c.cov.push(cov.map(|v| round_significant(v, 6)));
        c.mag.push(t.mag.map(|v| round(v, 4)));
        c.mag_scatter.push(t.mag_scatter.map(|v| round(v, 4)));
        c.chi2.push(round(t.chi2, 5));
        c.dof.push(t.dof);
        c.ln_evidence.push(round(t.ln_evidence, 3));
        c.probability.push(round(t.probability, 7));
        let tangle = t.tangle.and_then(|g| page_tangle.get(&g));
        c.tangle.push(tangle.map_or(-1, |&g| g as i64));
        c.flags.push(t.flags.0);
    }
    c
}

type Orbits = (BTreeMap<usize, Path>, BTreeMap<usize, Vec<OrbitRow>>);

fn orbits(input: &ReportInput, selection: &Selection) -> Orbits {
    let (mut paths, mut rows) = (BTreeMap::new(), BTreeMap::new());
    let times = input.campaign.epochs.iter().map(|e| e.time.yr());
    let (t0, t1) = times.fold((f64::MAX, f64::MIN), |(a, b), t| (a.min(t), b.max(t)));
    for (page, &k) in selection.tracks.iter().enumerate() {
        let t = &input.solution.tracks[k];
        if let (MotionKind::Keplerian, Some(mass)) = (t.motion.kind, &input.campaign.central)
            && t1 > t0
        {
            let place = |time: f64| orbit_place(&t.motion, mass, time);
            // Plots reach a little beyond the first and last epoch.
            let beyond_yr = 0.5 + 0.05 * (t1 - t0);
            paths.insert(page, sample(t0 - beyond_yr, t1 + beyond_yr, &place));
        }
        if let Some(orbit) = &t.orbit {
            rows.insert(page, vec![orbit_row(1, None, None, orbit)]);
        }
    }
    let page_track: BTreeMap<usize, usize> = (0..)
        .zip(&selection.tracks)
        .map(|(page, &k)| (k, page))
        .collect();
    for o in &input.solution.orbits {
        if let Some(page) = page_track.get(&o.track)
            && o.rank > 1
        {
            let row = orbit_row(o.rank, Some(o.ln_evidence), Some(o.chi2), &o.orbit);
            rows.entry(*page).or_insert_with(Vec::new).push(row);
        }
    }
    (paths, rows)
}

/// Place of a Keplerian track at a time, with errors: x, y, x_err, y_err \[mas\].
pub(super) fn orbit_place(motion: &Motion, mass: &CentralMass, t_yr: f64) -> [f64; 4] {
    let p = &motion.p;
    let r0 = [p[0] - mass.x_mas, p[1] - mass.y_mas, p[2]];
    let v0 = [p[3] - mass.vx_mas_yr, p[4] - mass.vy_mas_yr, p[5]];
    let dt = t_yr - motion.t_ref_yr;
    let state = kepler::propagate_sky(mass.gm_mas3_yr2, r0, v0, dt);
    let mut variance = [0.0; 2];
    for (axis, v) in variance.iter_mut().enumerate() {
        for i in 0..6 {
            for j in 0..6 {
                *v += state.d_state[axis][i] * motion.cov[(i, j)] * state.d_state[axis][j];
            }
        }
    }
    [
        state.r[0] + mass.x_mas + mass.vx_mas_yr * dt,
        state.r[1] + mass.y_mas + mass.vy_mas_yr * dt,
        variance[0].max(0.0).sqrt(),
        variance[1].max(0.0).sqrt(),
    ]
}

fn orbit_row(
    rank: usize,
    ln_evidence: Option<f64>,
    chi2: Option<f64>,
    o: &OrbitColumns,
) -> OrbitRow {
    let elements = [
        ("semi-major axis", "mas", o.semi_major_mas),
        ("semi-major axis", "AU", o.semi_major_au),
        ("eccentricity", "", Some(o.eccentricity)),
        ("inclination", "deg", Some(o.inclination_deg)),
        ("node", "deg", Some(o.node_deg)),
        ("argument of pericentre", "deg", Some(o.arg_pericentre_deg)),
        ("time of pericentre", "yr", Some(o.t_pericentre_yr)),
        ("period", "yr", o.period_yr),
        ("pericentre distance", "AU", o.pericentre_au),
        ("apocentre distance", "AU", o.apocentre_au),
        ("speed at pericentre", "km/s", o.pericentre_speed_km_s),
        ("z at reference epoch", "mas", Some(o.z_mas)),
        ("vz at reference epoch", "km/s", o.vz_km_s),
    ];
    OrbitRow {
        rank,
        ln_evidence: ln_evidence.map(|v| round(v, 3)),
        chi2: chi2.map(|v| round(v, 3)),
        elements: elements
            .into_iter()
            .filter_map(|(name, unit, v)| v.map(|(value, error)| (name, unit, value, error)))
            .map(|(name, unit, v, e)| {
                (name, unit, round_significant(v, 8), round_significant(e, 4))
            })
            .collect(),
        sign_known: o.sign_known,
    }
}

/// Tangles with a track on the page, and where each stands there.
fn tangles<'a>(
    input: &ReportInput<'a>,
    selection: &Selection,
    page_track: &BTreeMap<usize, usize>,
) -> (Vec<TangleRow<'a>>, BTreeMap<usize, usize>) {
    let s = input.solution;
    let mut rivals: BTreeMap<usize, Vec<&'a crate::model::result::Rival>> = BTreeMap::new();
    for r in &s.rivals {
        rivals.entry(r.tangle).or_default().push(r);
    }
    let reader = ChangeReader::new(input, selection, page_track);
    let (mut rows, mut place) = (Vec::new(), BTreeMap::new());
    for (number, t) in s.tangles.iter().enumerate() {
        let tracks: Vec<usize> = t
            .tracks
            .iter()
            .filter_map(|k| page_track.get(k).copied())
            .collect();
        if tracks.is_empty() {
            continue;
        }
        place.insert(number, rows.len());
        rows.push(TangleRow {
            number,
            n_tracks: t.tracks.len(),
            tracks,
            n_detections: t.n_detections,
            n_epochs: t.n_epochs,
            certificate: t.certificate.word(),
            gap_nats: match t.certificate {
                Certificate::Bounded { gap_nats } => Some(round(gap_nats, 3)),
                _ => None,
            },
            work: t.work,
            flags: t.flags.0,
            rivals: rivals
                .remove(&number)
                .unwrap_or_default()
                .into_iter()
                .map(|r| RivalRow {
                    rank: r.rank,
                    ln_odds: round(r.ln_odds, 3),
                    change: &r.change,
                    drawn: r
                        .change
                        .split("; ")
                        .filter_map(|clause| reader.read(clause))
                        .collect(),
                })
                .collect(),
        });
    }
    (rows, place)
}

/// Turns the words of a rival into indices on the page.
struct ChangeReader<'a> {
    tracks: BTreeMap<&'a str, usize>,
    epochs: BTreeMap<&'a str, usize>,
    /// For each epoch: identifier to place on the page, of those that some rival names.
    places: Vec<BTreeMap<String, u32>>,
}

impl<'a> ChangeReader<'a> {
    fn new(
        input: &ReportInput<'a>,
        selection: &Selection,
        page_track: &BTreeMap<usize, usize>,
    ) -> Self {
        let epochs: BTreeMap<&str, usize> = (0..)
            .zip(&input.campaign.epochs)
            .map(|(k, e)| (e.name.as_str(), k))
            .collect();
        let mut named = vec![BTreeSet::new(); selection.rows.len()];
        for rival in &input.solution.rivals {
            for clause in rival.change.split("; ") {
                if let Some(d) = Change::read(clause).and_then(Change::into_detection)
                    && let Some(&e) = epochs.get(d.epoch_name.as_str())
                {
                    named[e].insert(d.id);
                }
            }
        }
        let mut places = vec![BTreeMap::new(); selection.rows.len()];
        for (e, wanted) in named.iter().enumerate().filter(|(_, w)| !w.is_empty()) {
            let Some(list) = input.lists.get(e) else {
                continue;
            };
            for (k, &row) in (0..).zip(&selection.rows[e]) {
                let id = list.ids.text(row);
                if wanted.contains(&id) {
                    places[e].insert(id, k);
                }
            }
        }
        Self {
            tracks: page_track
                .iter()
                .map(|(&k, &page)| (input.solution.tracks[k].name.as_str(), page))
                .collect(),
            epochs,
            places,
        }
    }

    fn read(&self, clause: &str) -> Option<[i64; 5]> {
        let track = |name: &str| self.tracks.get(name).map(|&k| k as i64);
        let detection = |d: &DetectionName| {
            let &e = self.epochs.get(d.epoch_name.as_str())?;
            let &k = self.places[e].get(&d.id)?;
            Some((i64::from(k), e as i64))
        };
        Some(match Change::read(clause)? {
            Change::Takes {
                track: name,
                detection: d,
                from,
            } => {
                let (k, e) = detection(&d)?;
                let loser = from.and_then(|f| track(&f)).unwrap_or(-1);
                // A star that exists only in the rival has no track here.
                [0, track(&name).unwrap_or(-1), k, e, loser]
            }
            Change::Shares {
                track: name,
                detection: d,
            } => {
                let (k, e) = detection(&d)?;
                [1, track(&name).unwrap_or(-1), k, e, -1]
            }
            Change::Drops {
                track: name,
                detection: d,
            } => {
                let (k, e) = detection(&d)?;
                [2, track(&name)?, k, e, -1]
            }
            Change::Vanishes { track: name } => [3, track(&name)?, -1, -1, -1],
        })
    }
}

/// Flags of a track or membership that make it worth a second look.
pub(super) fn confused(flags: Flags) -> bool {
    flags.has(Flags(
        Flags::AMBIGUOUS.0 | Flags::CROSSING.0 | Flags::UNPROVEN.0 | Flags::CAPPED.0,
    ))
}
