//! Tables and lists back into a [`Solution`] and the epochs in the common frame.

use std::collections::BTreeMap;

use nalgebra::{SMatrix, SVector};

use super::super::result_tables::{
    COVARIANCE_PAIRS, ELEMENTS, SKY, STATE, TERMS, error_name, suffix,
};
use super::super::run_info::SavedRegion;
use super::super::table::Table;
use super::Misfit;
use crate::maths::cov2::Cov2;
use crate::model::campaign::Campaign;
use crate::model::detection::{FieldEpoch, Ids, RawList};
use crate::model::flag::Flags;
use crate::model::motion::{Motion, MotionKind};
use crate::model::region::Region;
use crate::model::result::{
    Certificate, EpochReport, Leftover, Membership, OrbitColumns, OrbitMinimum, Rival, SkyMotion,
    Solution, TangleReport, Track,
};

/// The tables of a result.
#[derive(Debug)]
pub struct Tables<'a> {
    pub tracks: Table<'a>,
    pub members: Table<'a>,
    pub leftovers: Table<'a>,
    pub epochs: Table<'a>,
    pub tangles: Table<'a>,
    pub rivals: Table<'a>,
    /// Only in a field with a central mass.
    pub orbits: Option<Table<'a>>,
}

/// Puts a result together again.
///
/// # Errors
/// A column is missing, or a table speaks of a track, epoch or detection that is not there.
pub fn rebuild(
    campaign: &Campaign,
    lists: &[RawList],
    regions: &[SavedRegion],
    tables: &Tables<'_>,
) -> Result<(Vec<FieldEpoch>, Solution), Misfit> {
    let names = tables.tracks.rows_by("track")?;
    let t_ref_yr = campaign.reference.yr();
    let orbits = match &tables.orbits {
        Some(table) => read_orbits(table, &names, t_ref_yr)?,
        None => Vec::new(),
    };
    let index: Vec<IdIndex<'_>> = lists.iter().map(|l| IdIndex::of(&l.ids)).collect();
    let members = Detections::read(&tables.members, &index)?;
    let leftovers = Detections::read(&tables.leftovers, &index)?;
    let reports = read_epochs(&tables.epochs)?;
    let epochs = field_epochs(campaign, lists, regions, &reports, [&members, &leftovers])?;
    let solution = Solution {
        tracks: read_tracks(&tables.tracks, t_ref_yr, tables.orbits.is_some())?,
        members: read_members(&tables.members, &members, &names)?,
        leftovers: read_leftovers(&tables.leftovers, &leftovers, &names)?,
        epochs: reports,
        tangles: read_tangles(&tables.tangles, &names)?,
        rivals: read_rivals(&tables.rivals)?,
        orbits,
        notes: Vec::new(),
    };
    Ok((epochs, solution))
}

fn misfit(table: &str, reason: String) -> Misfit {
    Misfit {
        table: table.to_owned(),
        reason,
    }
}

fn known(v: f64) -> Option<f64> {
    (!v.is_nan()).then_some(v)
}

fn zero_if_none(v: f64) -> f64 {
    if v.is_nan() { 0.0 } else { v }
}

fn count(v: Option<i64>) -> usize {
    v.and_then(|v| usize::try_from(v).ok()).unwrap_or(0)
}

fn find(names: &BTreeMap<String, usize>, name: &str, table: &str) -> Result<usize, Misfit> {
    names.get(name).copied().ok_or_else(|| {
        misfit(
            table,
            format!("track `{name}` is not in the table of tracks"),
        )
    })
}

/// Columns of one table, fetched by name once.
struct Numbers<'a> {
    table: &'a Table<'a>,
    columns: BTreeMap<String, Vec<f64>>,
}

impl<'a> Numbers<'a> {
    fn new(table: &'a Table<'a>) -> Self {
        Self {
            table,
            columns: BTreeMap::new(),
        }
    }
    fn load(&mut self, name: &str) -> Result<(), Misfit> {
        if !self.columns.contains_key(name) {
            let values = self.table.floats(name)?;
            self.columns.insert(name.to_owned(), values);
        }
        Ok(())
    }
    fn at(&self, name: &str, row: usize) -> f64 {
        self.columns.get(name).map_or(f64::NAN, |c| c[row])
    }
}

fn read_tracks(table: &Table<'_>, t_ref_yr: f64, with_orbits: bool) -> Result<Vec<Track>, Misfit> {
    let names = table.texts("track")?;
    let models = table.texts("model")?;
    let flags = table.texts("flags")?;
    let [n_members, dof, tangle] = [
        table.ints("n_members")?,
        table.ints("dof")?,
        table.ints("tangle")?,
    ];
    let mut n = Numbers::new(table);
    for name in [
        "first_yr",
        "last_yr",
        "mean_epoch_yr",
        "x_mean_mas",
        "y_mean_mas",
        "x_mean_err_mas",
        "y_mean_err_mas",
        "vx_mean_mas_yr",
        "vy_mean_mas_yr",
        "vx_mean_err_mas_yr",
        "vy_mean_err_mas_yr",
        "mag",
        "mag_scatter",
        "chi2",
        "ln_evidence",
        "probability",
    ] {
        n.load(name)?;
    }
    load_sky(&mut n)?;
    if with_orbits {
        load_state(&mut n)?;
        load_elements(&mut n)?;
    }
    let signs = signs(table, with_orbits)?;
    (0..table.n_rows())
        .map(|k| {
            let kind = match models[k].as_str() {
                "linear" => MotionKind::Linear,
                "accelerated" => MotionKind::Accelerated,
                "keplerian" => MotionKind::Keplerian,
                other => return Err(misfit("tracks", format!("unknown model `{other}`"))),
            };
            let sky = sky_at(&n, k);
            let motion = if kind == MotionKind::Keplerian {
                state_at(&n, k, t_ref_yr)
            } else {
                Motion {
                    kind,
                    t_ref_yr,
                    p: SVector::from(sky.p),
                    cov: SMatrix::from_fn(|i, j| sky.cov[i][j]),
                }
            };
            Ok(Track {
                name: names[k].clone(),
                motion,
                n_members: count(n_members[k]),
                first_yr: n.at("first_yr", k),
                last_yr: n.at("last_yr", k),
                mean_epoch_yr: n.at("mean_epoch_yr", k),
                x_mean_mas: n.at("x_mean_mas", k),
                y_mean_mas: n.at("y_mean_mas", k),
                x_mean_err_mas: n.at("x_mean_err_mas", k),
                y_mean_err_mas: n.at("y_mean_err_mas", k),
                vx_mean_mas_yr: n.at("vx_mean_mas_yr", k),
                vy_mean_mas_yr: n.at("vy_mean_mas_yr", k),
                vx_mean_err_mas_yr: n.at("vx_mean_err_mas_yr", k),
                vy_mean_err_mas_yr: n.at("vy_mean_err_mas_yr", k),
                sky,
                mag: known(n.at("mag", k)),
                mag_scatter: known(n.at("mag_scatter", k)),
                chi2: n.at("chi2", k),
                dof: count(dof[k]),
                ln_evidence: n.at("ln_evidence", k),
                probability: n.at("probability", k),
                tangle: tangle[k].and_then(|t| usize::try_from(t).ok()),
                orbit: elements_at(&n, k, signs[k]),
                flags: Flags::from_words(&flags[k]),
            })
        })
        .collect()
}

fn sky_name(i: usize) -> String {
    format!("{}_{}", SKY[i].0, suffix(SKY[i].1))
}
fn sky_err_name(i: usize) -> String {
    format!("{}_err_{}", SKY[i].0, suffix(SKY[i].1))
}
fn sky_cov_name(i: usize, j: usize) -> String {
    format!("cov_{}_{}", SKY[i].0, SKY[j].0)
}

fn load_sky(n: &mut Numbers<'_>) -> Result<(), Misfit> {
    for i in 0..6 {
        n.load(&sky_name(i))?;
        n.load(&sky_err_name(i))?;
        for j in i + 1..6 {
            n.load(&sky_cov_name(i, j))?;
        }
    }
    Ok(())
}

fn sky_at(n: &Numbers<'_>, row: usize) -> SkyMotion {
    let mut sky = SkyMotion::default();
    for i in 0..6 {
        sky.p[i] = zero_if_none(n.at(&sky_name(i), row));
        sky.cov[i][i] = zero_if_none(n.at(&sky_err_name(i), row)).powi(2);
        for j in i + 1..6 {
            let c = zero_if_none(n.at(&sky_cov_name(i, j), row));
            sky.cov[i][j] = c;
            sky.cov[j][i] = c;
        }
    }
    sky
}

/// Columns of a state vector in the order (x, y, z, vx, vy, vz): (value, error).
const STATE_COLUMNS: [(&str, &str); 6] = [
    ("x_mas", "x_err_mas"),
    ("y_mas", "y_err_mas"),
    ("z_mas", "z_err_mas"),
    ("vx_mas_yr", "vx_err_mas_yr"),
    ("vy_mas_yr", "vy_err_mas_yr"),
    ("vz_mas_yr", "vz_err_mas_yr"),
];

fn state_cov_name((i, j): (usize, usize)) -> String {
    format!("cov_{}_{}", STATE[i], STATE[j])
}

fn load_state(n: &mut Numbers<'_>) -> Result<(), Misfit> {
    for (value, error) in STATE_COLUMNS {
        n.load(value)?;
        n.load(error)?;
    }
    for pair in COVARIANCE_PAIRS {
        n.load(&state_cov_name(pair))?;
    }
    Ok(())
}

fn state_at(n: &Numbers<'_>, row: usize, t_ref_yr: f64) -> Motion {
    let mut p = SVector::<f64, 6>::zeros();
    let mut cov = SMatrix::<f64, 6, 6>::zeros();
    for (i, (value, error)) in STATE_COLUMNS.into_iter().enumerate() {
        p[i] = n.at(value, row);
        cov[(i, i)] = n.at(error, row).powi(2);
    }
    for (i, j) in COVARIANCE_PAIRS {
        let c = n.at(&state_cov_name((i, j)), row);
        cov[(i, j)] = c;
        cov[(j, i)] = c;
    }
    Motion {
        kind: MotionKind::Keplerian,
        t_ref_yr,
        p,
        cov,
    }
}

fn load_elements(n: &mut Numbers<'_>) -> Result<(), Misfit> {
    for (name, ..) in ELEMENTS {
        n.load(name)?;
        n.load(&error_name(name))?;
    }
    Ok(())
}

fn signs(table: &Table<'_>, with_orbits: bool) -> Result<Vec<Option<bool>>, Misfit> {
    if with_orbits {
        Ok(table.bools("sign_known")?)
    } else {
        Ok(vec![None; table.n_rows()])
    }
}

fn elements_at(n: &Numbers<'_>, row: usize, sign_known: Option<bool>) -> Option<OrbitColumns> {
    let get = |name: &str| (n.at(name, row), n.at(&error_name(name), row));
    let maybe = |name: &str| Some(get(name)).filter(|v| !v.0.is_nan());
    Some(OrbitColumns {
        sign_known: sign_known?,
        z_mas: (n.at("z_mas", row), n.at("z_err_mas", row)),
        vz_km_s: maybe("vz_km_s"),
        semi_major_mas: maybe("semi_major_mas"),
        semi_major_au: maybe("semi_major_au"),
        eccentricity: get("eccentricity"),
        inclination_deg: get("inclination_deg"),
        node_deg: get("node_deg"),
        arg_pericentre_deg: get("arg_pericentre_deg"),
        t_pericentre_yr: get("t_pericentre_yr"),
        period_yr: maybe("period_yr"),
        pericentre_au: maybe("pericentre_au"),
        apocentre_au: maybe("apocentre_au"),
        pericentre_speed_km_s: maybe("pericentre_speed_km_s"),
    })
}

fn read_orbits(
    table: &Table<'_>,
    names: &BTreeMap<String, usize>,
    t_ref_yr: f64,
) -> Result<Vec<OrbitMinimum>, Misfit> {
    let tracks = table.texts("track")?;
    let ranks = table.ints("rank")?;
    let signs = signs(table, true)?;
    let mut n = Numbers::new(table);
    n.load("ln_evidence")?;
    n.load("chi2")?;
    load_state(&mut n)?;
    load_elements(&mut n)?;
    (0..table.n_rows())
        .map(|k| {
            Ok(OrbitMinimum {
                track: find(names, &tracks[k], "orbits")?,
                rank: count(ranks[k]),
                ln_evidence: n.at("ln_evidence", k),
                chi2: n.at("chi2", k),
                motion: state_at(&n, k, t_ref_yr),
                orbit: elements_at(&n, k, signs[k])
                    .ok_or_else(|| misfit("orbits", format!("row {} has no orbit", k + 1)))?,
            })
        })
        .collect()
}

/// Row of each identifier of a list.
struct IdIndex<'a> {
    ids: &'a Ids,
    sorted: Vec<u32>,
}

impl<'a> IdIndex<'a> {
    fn of(ids: &'a Ids) -> Self {
        let mut sorted: Vec<u32> = (0..ids.len() as u32).collect();
        match ids {
            Ids::Numbers(n) => sorted.sort_unstable_by_key(|&k| n[k as usize]),
            Ids::Text(t) => sorted.sort_unstable_by_key(|&k| &t[k as usize]),
        }
        Self { ids, sorted }
    }

    fn row(&self, id: &str) -> Option<usize> {
        let at = match self.ids {
            Ids::Numbers(n) => {
                let id: u64 = id.parse().ok()?;
                self.sorted.binary_search_by_key(&id, |&k| n[k as usize])
            }
            Ids::Text(t) => self
                .sorted
                .binary_search_by_key(&id, |&k| t[k as usize].as_str()),
        };
        at.ok().map(|k| self.sorted[k] as usize)
    }
}

/// The detections of a table: where each is, and its place in the common frame.
struct Detections {
    at: Vec<(usize, usize)>,
    x_mas: Vec<f64>,
    y_mas: Vec<f64>,
    cov_mas2: Vec<Cov2>,
    /// Magnitudes in the table's own system.
    mag: Vec<f64>,
    mag_err: Vec<f64>,
}

impl Detections {
    fn read(table: &Table<'_>, index: &[IdIndex<'_>]) -> Result<Self, Misfit> {
        let epochs = table.ints("epoch")?;
        let ids = table.texts("id")?;
        let at = epochs
            .iter()
            .zip(&ids)
            .map(|(epoch, id)| {
                let e = epoch.and_then(|e| usize::try_from(e).ok());
                e.and_then(|e| Some((e, index.get(e)?.row(id)?)))
                    .ok_or_else(|| {
                        let epoch = epoch.map_or_else(String::new, |e| e.to_string());
                        misfit(
                            &table.name,
                            format!("epoch {epoch} has no detection `{id}`"),
                        )
                    })
            })
            .collect::<Result<_, _>>()?;
        let [sx, sy, corr] = [
            table.floats("x_err_mas")?,
            table.floats("y_err_mas")?,
            table.floats("xy_corr")?,
        ];
        let cov_mas2 = (0..sx.len())
            .map(|k| Cov2::from_sigmas(sx[k], sy[k], corr[k]))
            .collect();
        Ok(Self {
            at,
            x_mas: table.floats("x_mas")?,
            y_mas: table.floats("y_mas")?,
            cov_mas2,
            mag: table.floats("mag")?,
            mag_err: table.floats("mag_err")?,
        })
    }
}

fn field_epochs(
    campaign: &Campaign,
    lists: &[RawList],
    regions: &[SavedRegion],
    reports: &[EpochReport],
    from: [&Detections; 2],
) -> Result<Vec<FieldEpoch>, Misfit> {
    let mut epochs: Vec<FieldEpoch> = campaign
        .epochs
        .iter()
        .zip(lists)
        .enumerate()
        .map(|(e, (epoch, list))| FieldEpoch {
            time: epoch.time,
            instrument: epoch.instrument,
            fwhm_mas: epoch.settings.fwhm_mas,
            x_mas: vec![f64::NAN; list.len()],
            y_mas: vec![f64::NAN; list.len()],
            cov_mas2: vec![Cov2::round(0.0); list.len()],
            mag: list.mag.clone(),
            mag_err: list.mag_err.clone(),
            rv_km_s: list.rv_km_s.clone(),
            rv_err_km_s: list.rv_err_km_s.clone(),
            quality: list.quality.clone(),
            region: regions.get(e).map_or_else(Region::default, |r| Region {
                outline_mas: r.outline_mas.clone(),
                holes_mas: r.holes_mas.clone(),
            }),
        })
        .collect();
    for d in from {
        for (k, &(e, r)) in d.at.iter().enumerate() {
            let into = &mut epochs[e];
            into.x_mas[r] = d.x_mas[k];
            into.y_mas[r] = d.y_mas[k];
            into.cov_mas2[r] = d.cov_mas2[k];
            into.mag[r] = d.mag[k];
            into.mag_err[r] = d.mag_err[k];
        }
    }
    for (k, epoch) in campaign.epochs.iter().enumerate() {
        let e = &mut epochs[k];
        let lost = e.x_mas.iter().filter(|x| x.is_nan()).count();
        if reports.get(k).is_some_and(|r| r.failed.is_some()) && lost == e.len() {
            // Not placed: it has no rows in the common frame.
            for column in [&mut e.x_mas, &mut e.y_mas, &mut e.mag, &mut e.mag_err] {
                column.clear();
            }
            for column in [&mut e.rv_km_s, &mut e.rv_err_km_s, &mut e.quality] {
                column.clear();
            }
            e.cov_mas2.clear();
        } else if lost > 0 {
            return Err(misfit(
                "members",
                format!(
                    "{lost} detections of epoch {} are neither here nor in the leftovers",
                    epoch.name
                ),
            ));
        }
    }
    Ok(epochs)
}

fn read_members(
    table: &Table<'_>,
    detections: &Detections,
    names: &BTreeMap<String, usize>,
) -> Result<Vec<Membership>, Misfit> {
    let tracks = table.texts("track")?;
    let flags = table.texts("flags")?;
    let [probability, share, dx, dy] = [
        table.floats("probability")?,
        table.floats("share")?,
        table.floats("dx_mas")?,
        table.floats("dy_mas")?,
    ];
    (0..table.n_rows())
        .map(|k| {
            Ok(Membership {
                track: find(names, &tracks[k], "members")?,
                epoch: detections.at[k].0,
                row: detections.at[k].1,
                probability: probability[k],
                share: share[k],
                dx_mas: dx[k],
                dy_mas: dy[k],
                flags: Flags::from_words(&flags[k]),
            })
        })
        .collect()
}

fn read_leftovers(
    table: &Table<'_>,
    detections: &Detections,
    names: &BTreeMap<String, usize>,
) -> Result<Vec<Leftover>, Misfit> {
    let nearest = table.texts("nearest_track")?;
    let distance = table.floats("nearest_mas")?;
    let p_false = table.floats("p_false")?;
    let flags = table.texts("flags")?;
    (0..table.n_rows())
        .map(|k| {
            Ok(Leftover {
                epoch: detections.at[k].0,
                row: detections.at[k].1,
                p_false: p_false[k],
                nearest: if nearest[k].is_empty() {
                    None
                } else {
                    Some((find(names, &nearest[k], "leftovers")?, distance[k]))
                },
                flags: Flags::from_words(&flags[k]),
            })
        })
        .collect()
}

fn read_epochs(table: &Table<'_>) -> Result<Vec<EpochReport>, Misfit> {
    let [n_list, n_matched, n_unmatched, n_anchors] = [
        table.ints("n_list")?,
        table.ints("n_matched")?,
        table.ints("n_unmatched")?,
        table.ints("n_anchors")?,
    ];
    let failed = table.texts("failed")?;
    let flags = table.texts("flags")?;
    let mut n = Numbers::new(table);
    for name in [
        "rms_mas",
        "error_factor",
        "error_floor_mas",
        "limit_mag",
        "zero_point_mag",
        "zero_point_err_mag",
    ] {
        n.load(name)?;
    }
    for axis in ["x", "y"] {
        for term in TERMS {
            n.load(&format!("{axis}_{term}"))?;
            n.load(&format!("{axis}_{term}_err"))?;
        }
    }
    let terms = |k: usize, end: &str| {
        ["x", "y"]
            .map(|axis| TERMS.map(|term| zero_if_none(n.at(&format!("{axis}_{term}{end}"), k))))
    };
    Ok((0..table.n_rows())
        .map(|k| EpochReport {
            n_list: count(n_list[k]),
            n_matched: count(n_matched[k]),
            n_unmatched: count(n_unmatched[k]),
            coef: terms(k, ""),
            coef_err: terms(k, "_err"),
            n_anchors: count(n_anchors[k]),
            rms_mas: known(n.at("rms_mas", k)),
            error_factor: n.at("error_factor", k),
            error_floor_mas: n.at("error_floor_mas", k),
            limit_mag: known(n.at("limit_mag", k)),
            zero_point_mag: known(n.at("zero_point_mag", k)),
            zero_point_err_mag: known(n.at("zero_point_err_mag", k)),
            failed: Some(failed[k].clone()).filter(|f| !f.is_empty()),
            flags: Flags::from_words(&flags[k]),
        })
        .collect())
}

fn read_tangles(
    table: &Table<'_>,
    names: &BTreeMap<String, usize>,
) -> Result<Vec<TangleReport>, Misfit> {
    let tracks = table.texts("tracks")?;
    let certificates = table.texts("certificate")?;
    let gaps = table.floats("gap_nats")?;
    let [n_detections, n_epochs, work] = [
        table.ints("n_detections")?,
        table.ints("n_epochs")?,
        table.ints("work")?,
    ];
    let flags = table.texts("flags")?;
    (0..table.n_rows())
        .map(|k| {
            Ok(TangleReport {
                tracks: tracks[k]
                    .split(';')
                    .filter(|t| !t.is_empty())
                    .map(|t| find(names, t, "tangles"))
                    .collect::<Result<_, _>>()?,
                n_detections: count(n_detections[k]),
                n_epochs: count(n_epochs[k]),
                certificate: match certificates[k].as_str() {
                    "pool" => Certificate::Pool,
                    "priced_out" => Certificate::PricedOut,
                    "all" => Certificate::All,
                    "bounded" => Certificate::Bounded { gap_nats: gaps[k] },
                    "none" => Certificate::None,
                    other => {
                        return Err(misfit("tangles", format!("unknown certificate `{other}`")));
                    }
                },
                work: work[k].and_then(|w| u64::try_from(w).ok()).unwrap_or(0),
                flags: Flags::from_words(&flags[k]),
            })
        })
        .collect()
}

fn read_rivals(table: &Table<'_>) -> Result<Vec<Rival>, Misfit> {
    let [tangle, rank] = [table.ints("tangle")?, table.ints("rank")?];
    let ln_odds = table.floats("ln_odds")?;
    let change = table.texts("change")?;
    Ok((0..table.n_rows())
        .map(|k| Rival {
            tangle: count(tangle[k]),
            rank: count(rank[k]),
            ln_odds: ln_odds[k],
            change: change[k].clone(),
        })
        .collect())
}
