//! Are the lists what their owner thinks they are? All faults at once, a summary of each list,
//! and oddities that are no faults. Positions are taken as the campaign states them; nothing
//! here solves for a frame.

mod flip;
mod oddities;

use std::path::Path;

use super::campaign::read_campaign_from;
use super::fault::Faults;
use super::files::{Disk, Files};
use super::lists::read_each;
use crate::maths::order::{median, quantile};
use crate::maths::sky::{TangentPlane, plane_axes};
use crate::maths::units::MAS_PER_DEG;
use crate::model::campaign::{Campaign, Epoch, Handedness, Selection, SkyOrigin, Unit};
use crate::model::detection::RawList;
use crate::model::note::Note;

/// What a check found.
#[derive(Debug, Default)]
pub struct Check {
    /// `None` when the campaign file itself has faults.
    pub campaign: Option<Campaign>,
    pub faults: Faults,
    pub notes: Vec<Note>,
    /// One for each list that could be read, in campaign order.
    pub epochs: Vec<EpochSummary>,
}

/// One list in numbers.
#[derive(Clone, Debug, PartialEq)]
pub struct EpochSummary {
    /// Index into `Campaign::epochs`.
    pub epoch: usize,
    pub name: String,
    pub time_yr: f64,
    pub instrument: String,
    pub targeted: bool,
    pub n_rows: usize,
    /// Time since the epoch before it \[yr\]; `None` for the first.
    pub gap_yr: Option<f64>,
    /// Smallest 2 % and median of the position errors, per axis; `None` without errors.
    pub err_floor_mas: Option<f64>,
    pub err_median_mas: Option<f64>,
    /// Brightest, median and faintest magnitude; `None` without magnitudes.
    pub mag: Option<[f64; 3]>,
    /// Rows without a magnitude.
    pub n_without_mag: usize,
    /// Width of the list on both axes, 1 % to 99 %.
    pub width_mas: [f64; 2],
    /// Stars in each resolution element (a disc one FWHM across) in the middle of the list;
    /// `None` when the list is too small, or its detections are chosen.
    pub crowding: Option<f64>,
}

/// Checks a campaign and all its lists; writes nothing.
#[must_use]
pub fn check(path: &Path) -> Check {
    check_from(&Disk, path)
}

/// [`check`] from any source of files.
#[must_use]
pub fn check_from(files: &dyn Files, path: &Path) -> Check {
    let (campaign, mut notes) = match read_campaign_from(files, path) {
        Ok(read) => read,
        Err(faults) => {
            return Check {
                faults,
                ..Check::default()
            };
        }
    };
    let (results, more) = match read_each(files, &campaign) {
        Ok(read) => read,
        Err(faults) => {
            return Check {
                campaign: Some(campaign),
                faults,
                notes,
                epochs: Vec::new(),
            };
        }
    };
    notes.extend(more);
    let mut faults = Faults::default();
    let mut lists: Vec<Placed> = Vec::new();
    for (k, result) in results.into_iter().enumerate() {
        match result {
            Ok(list) => lists.push(Placed::new(&campaign, k, list)),
            Err(f) => faults.append(f),
        }
    }
    faults.sort();
    let epochs = lists
        .iter()
        .map(|placed| summary(&campaign, placed))
        .collect();
    notes.extend(oddities::find(&campaign, &lists));
    notes.extend(flip::find(&campaign, &lists));
    Check {
        campaign: Some(campaign),
        faults,
        notes,
        epochs,
    }
}

/// A list with its positions in mas as the campaign states them.
struct Placed {
    epoch: usize,
    list: RawList,
    x_mas: Vec<f64>,
    y_mas: Vec<f64>,
    /// mas in a unit of the stated errors.
    error_mas: f64,
}

impl Placed {
    fn new(campaign: &Campaign, epoch: usize, list: RawList) -> Self {
        let e = &campaign.epochs[epoch];
        let (x_mas, y_mas) = positions(e, campaign.origin, &list);
        Self {
            epoch,
            x_mas,
            y_mas,
            error_mas: unit_mas(e, e.settings.error_unit),
            list,
        }
    }
}

fn unit_mas(epoch: &Epoch, unit: Unit) -> f64 {
    match unit {
        Unit::Mas => 1.0,
        Unit::Arcsec => 1000.0,
        Unit::Deg => MAS_PER_DEG,
        Unit::Pixel => epoch.settings.scale_mas.unwrap_or(1.0),
    }
}

fn positions(epoch: &Epoch, origin: Option<SkyOrigin>, list: &RawList) -> (Vec<f64>, Vec<f64>) {
    let s = &epoch.settings;
    if let (Unit::Deg, Some(o)) = (s.unit, origin) {
        let plane = TangentPlane::new(o.ra_deg, o.dec_deg);
        // A direction without an image is far away: that is all a summary needs to know.
        return (0..list.len())
            .map(|k| {
                let p = plane.project(list.x[k], list.y[k]);
                p.map_or((f64::MAX, f64::MAX), |[x, y]| (x, y))
            })
            .unzip();
    }
    let east_left = s.handedness == Handedness::EastLeft;
    let m = plane_axes(unit_mas(epoch, s.unit), s.angle_deg, east_left);
    (0..list.len())
        .map(|k| {
            let (u, v) = (list.x[k], list.y[k]);
            (m[0] * u + m[1] * v, m[2] * u + m[3] * v)
        })
        .unzip()
}

fn summary(campaign: &Campaign, placed: &Placed) -> EpochSummary {
    let epoch = &campaign.epochs[placed.epoch];
    let list = &placed.list;
    let mut errors: Vec<f64> = list
        .err
        .iter()
        .flatten()
        .map(|c| (0.5 * (c.xx + c.yy)).sqrt() * placed.error_mas)
        .collect();
    let mut mags: Vec<f64> = list.mag.iter().copied().filter(|m| !m.is_nan()).collect();
    let n_without_mag = list.len() - mags.len();
    let mag = median(&mut mags).map(|middle| {
        let lo = mags.iter().copied().fold(f64::INFINITY, f64::min);
        let hi = mags.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        [lo, middle, hi]
    });
    let targeted = epoch.settings.selection == Selection::Targeted;
    EpochSummary {
        epoch: placed.epoch,
        name: epoch.name.clone(),
        time_yr: epoch.time.yr(),
        instrument: epoch.settings.name.clone(),
        targeted,
        n_rows: list.len(),
        gap_yr: gap_before(campaign, epoch.time.yr()),
        err_floor_mas: quantile(&mut errors, 0.02),
        err_median_mas: median(&mut errors),
        mag,
        n_without_mag,
        width_mas: [width(&placed.x_mas), width(&placed.y_mas)],
        crowding: if targeted {
            None
        } else {
            crowding(placed, epoch.settings.fwhm_mas)
        },
    }
}

/// Time since the latest epoch before this one.
fn gap_before(campaign: &Campaign, t_yr: f64) -> Option<f64> {
    campaign
        .epochs
        .iter()
        .map(|e| t_yr - e.time.yr())
        .filter(|gap| *gap > 0.0)
        .min_by(f64::total_cmp)
}

fn width(values: &[f64]) -> f64 {
    let mut v = values.to_vec();
    let hi = quantile(&mut v, 0.99).unwrap_or(0.0);
    hi - quantile(&mut v, 0.01).unwrap_or(0.0)
}

/// Density in the box between the quartiles of both axes, where edges and strays do not count.
fn crowding(placed: &Placed, fwhm_mas: f64) -> Option<f64> {
    const FEWEST: usize = 10;
    let (x, y) = (&placed.x_mas, &placed.y_mas);
    let quartiles = |values: &[f64]| {
        let mut v = values.to_vec();
        Some((quantile(&mut v, 0.25)?, quantile(&mut v, 0.75)?))
    };
    let ((x0, x1), (y0, y1)) = (quartiles(x)?, quartiles(y)?);
    let n = x
        .iter()
        .zip(y)
        .filter(|&(x, y)| (x0..=x1).contains(x) && (y0..=y1).contains(y))
        .count();
    let area = (x1 - x0) * (y1 - y0);
    let element = std::f64::consts::FRAC_PI_4 * fwhm_mas * fwhm_mas;
    (x.len() >= FEWEST && area > 0.0).then(|| n as f64 * element / area)
}
