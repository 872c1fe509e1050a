//! `orbits`: every kept minimum of every orbit fit; and the columns that Keplerian tracks share
//! with it: the rest of the state vector, and the elements.

use super::super::table::Precision::{Decimals, Full, Single};
use super::super::table::Table;
use super::RunView;
use super::tracks::covariance_unit;
use crate::model::motion::Motion;
use crate::model::result::{OrbitColumns, OrbitMinimum};

/// Names of the state (x, y, z, vx, vy, vz) in column names.
pub const STATE: [&str; 6] = ["x", "y", "z", "vx", "vy", "vz"];

/// Every pair of the state, for its covariances.
pub const COVARIANCE_PAIRS: [(usize, usize); 15] = [
    (0, 1),
    (0, 2),
    (0, 3),
    (0, 4),
    (0, 5),
    (1, 2),
    (1, 3),
    (1, 4),
    (1, 5),
    (2, 3),
    (2, 4),
    (2, 5),
    (3, 4),
    (3, 5),
    (4, 5),
];

pub(super) fn table(view: RunView<'_>) -> Table<'_> {
    let o: &[OrbitMinimum] = &view.solution.orbits;
    let tracks = &view.solution.tracks;
    let mut table = Table::new("orbits", "Every kept minimum of every orbit fit", o.len())
        .text("track", "name of the track", |k, out| {
            out.push_str(&tracks[o[k].track].name)
        })
        .ucd("meta.id")
        .int("rank", "1 = the best", |k| Some(o[k].rank as i64))
        .ucd("meta.code")
        .float(
            "ln_evidence",
            "",
            "ln of the marginal likelihood of this minimum [nat]",
            Decimals(4),
            |k| o[k].ln_evidence,
        )
        .ucd("stat.likelihood")
        .float(
            "chi2",
            "",
            "chi-square of the positions",
            Decimals(4),
            |k| o[k].chi2,
        )
        .ucd("stat.fit.chi2");
    for (i, name) in ["x", "y", "vx", "vy"].into_iter().enumerate() {
        let unit = ["mas", "mas / yr"][i / 2];
        let at = [0, 1, 3, 4][i];
        let suffix = ["mas", "mas_yr"][i / 2];
        table = table
            .float(
                &format!("{name}_{suffix}"),
                unit,
                &format!("{name} at the reference epoch"),
                Decimals(8),
                move |k| o[k].motion.p[at],
            )
            .float(
                &format!("{name}_err_{suffix}"),
                unit,
                &format!("standard error of {name}"),
                Full,
                move |k| o[k].motion.cov[(at, at)].sqrt(),
            );
    }
    for (i, j) in COVARIANCE_PAIRS
        .into_iter()
        .filter(|&(i, j)| i % 3 != 2 && j % 3 != 2)
    {
        table = table.float(
            &format!("cov_{}_{}", STATE[i], STATE[j]),
            covariance_unit(i / 3 + j / 3),
            &format!(
                "covariance of {} and {} at the reference epoch",
                STATE[i], STATE[j]
            ),
            Full,
            move |k| o[k].motion.cov[(i, j)],
        );
    }
    table = state_columns(table, o.len(), |k| Some(&o[k].motion));
    element_columns(table, |k| Some(&o[k].orbit))
}

/// Line of sight of the state and its covariances; empty where there is no orbit.
pub(super) fn state_columns<'a>(
    table: Table<'a>,
    n: usize,
    motion: impl Fn(usize) -> Option<&'a Motion> + Sync + 'a,
) -> Table<'a> {
    // Each column needs the motions; the references are small beside the columns themselves.
    let motions: std::sync::Arc<[Option<&'a Motion>]> = (0..n).map(motion).collect();
    let parameter = |i: usize| {
        let m = motions.clone();
        move |k: usize| m[k].map_or(f64::NAN, |m| m.p[i])
    };
    let covariance = |i: usize, j: usize| {
        let m = motions.clone();
        move |k: usize| m[k].map_or(f64::NAN, |m| m.cov[(i, j)])
    };
    let error = |i: usize| {
        let m = motions.clone();
        move |k: usize| m[k].map_or(f64::NAN, |m| m.cov[(i, i)].sqrt())
    };
    let mut table = table
        .float(
            "z_mas",
            "mas",
            "line of sight, away from the observer, at the reference epoch",
            Decimals(8),
            parameter(2),
        )
        .ucd("pos.cartesian.z")
        .float(
            "z_err_mas",
            "mas",
            "standard error of z_mas",
            Full,
            error(2),
        )
        .ucd("stat.error;pos.cartesian.z")
        .float(
            "vz_mas_yr",
            "mas / yr",
            "motion along the line of sight, receding, as an angle at the distance of the mass",
            Decimals(8),
            parameter(5),
        )
        .ucd("phys.veloc")
        .float(
            "vz_err_mas_yr",
            "mas / yr",
            "standard error of vz_mas_yr",
            Full,
            error(5),
        )
        .ucd("stat.error;phys.veloc");
    // Pairs without z and vz stand among the columns of the motion on the sky.
    for (i, j) in COVARIANCE_PAIRS
        .into_iter()
        .filter(|&(i, j)| [i, j].iter().any(|k| k % 3 == 2))
    {
        table = table
            .float(
                &format!("cov_{}_{}", STATE[i], STATE[j]),
                covariance_unit(i / 3 + j / 3),
                &format!(
                    "covariance of {} and {} at the reference epoch",
                    STATE[i], STATE[j]
                ),
                Full,
                covariance(i, j),
            )
            .ucd("stat.covariance");
    }
    table
}

/// One element: name, unit, description, descriptor, value and error.
type Element = (
    &'static str,
    &'static str,
    &'static str,
    &'static str,
    fn(&OrbitColumns) -> Option<(f64, f64)>,
);

/// The elements of an orbit as columns. Angles follow the README.
pub const ELEMENTS: [Element; 12] = [
    (
        "vz_km_s",
        "km / s",
        "radial velocity relative to the mass, receding, at the reference epoch",
        "spect.dopplerVeloc",
        |o| o.vz_km_s,
    ),
    (
        "semi_major_mas",
        "mas",
        "semi-major axis; empty when unbound",
        "phys.size.smajAxis",
        |o| o.semi_major_mas,
    ),
    (
        "semi_major_au",
        "AU",
        "semi-major axis; empty when unbound",
        "phys.size.smajAxis",
        |o| o.semi_major_au,
    ),
    (
        "eccentricity",
        "",
        "eccentricity",
        "src.orbital.eccentricity",
        |o| Some(o.eccentricity),
    ),
    (
        "inclination_deg",
        "deg",
        "inclination, below 90 when the position angle grows with time",
        "src.orbital.inclination",
        |o| Some(o.inclination_deg),
    ),
    (
        "node_deg",
        "deg",
        "position angle, north through east, of the point where the star crosses the sky plane receding",
        "src.orbital.node",
        |o| Some(o.node_deg),
    ),
    (
        "arg_pericentre_deg",
        "deg",
        "angle from the node to the pericentre along the motion",
        "src.orbital.periastron",
        |o| Some(o.arg_pericentre_deg),
    ),
    (
        "t_pericentre_yr",
        "yr",
        "pericentre passage nearest the reference epoch (Julian year)",
        "time.epoch;src.orbital.periastron",
        |o| Some(o.t_pericentre_yr),
    ),
    (
        "period_yr",
        "yr",
        "period; empty when unbound",
        "time.period",
        |o| o.period_yr,
    ),
    (
        "pericentre_au",
        "AU",
        "least distance from the mass",
        "pos.distance;src.orbital.periastron",
        |o| o.pericentre_au,
    ),
    (
        "apocentre_au",
        "AU",
        "greatest distance from the mass; empty when unbound",
        "pos.distance",
        |o| o.apocentre_au,
    ),
    (
        "pericentre_speed_km_s",
        "km / s",
        "speed at pericentre",
        "phys.veloc;src.orbital.periastron",
        |o| o.pericentre_speed_km_s,
    ),
];

/// The error column of an element: `_err` goes before the unit.
#[must_use]
pub fn error_name(name: &str) -> String {
    for unit in ["_km_s", "_mas", "_au", "_deg", "_yr"] {
        if let Some(stem) = name.strip_suffix(unit) {
            return format!("{stem}_err{unit}");
        }
    }
    format!("{name}_err")
}

pub(super) fn element_columns<'a>(
    mut table: Table<'a>,
    orbit: impl Fn(usize) -> Option<&'a OrbitColumns> + Sync + Copy + 'a,
) -> Table<'a> {
    for (name, unit, text, ucd, get) in ELEMENTS {
        table = table
            .float(name, unit, text, Full, move |k| {
                orbit(k).and_then(get).map_or(f64::NAN, |v| v.0)
            })
            .ucd(ucd)
            .float(
                &error_name(name),
                unit,
                &format!("standard error of {name}"),
                Single,
                move |k| orbit(k).and_then(get).map_or(f64::NAN, |v| v.1),
            )
            .ucd(&format!(
                "stat.error;{}",
                ucd.split(';').next_back().unwrap_or(ucd)
            ));
    }
    table.bool(
        "sign_known",
        "a radial velocity fixed which node is the receding one; otherwise node_deg is given in [0, 180)",
        move |k| orbit(k).map(|o| o.sign_known),
    )
}
