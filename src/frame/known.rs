//! Lists whose frame is known: units, nominal scale, angle and handedness, or the tangent plane.

use crate::maths::cov2::Cov2;
use crate::maths::sky::{TangentPlane, plane_axes};
use crate::maths::units::MAS_PER_DEG;
use crate::model::campaign::{
    Campaign, Epoch, FrameFreedom, Handedness, Instrument, Selection, Unit,
};
use crate::model::detection::{FieldEpoch, RawList};

use super::footprint;

/// Why an epoch cannot be placed by its stated frame.
#[derive(Clone, Debug, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum FrameError {
    #[error("epoch `{epoch}`: its frame must be solved for, it is not known")]
    NotKnown { epoch: String },
    #[error("epoch `{epoch}`: a list in degrees needs `origin` in [field]")]
    NoOrigin { epoch: String },
    #[error("epoch `{epoch}`: a list in pixels needs `scale_mas`")]
    NoScale { epoch: String },
    #[error(
        "epoch `{epoch}`, detection `{id}`: right ascension {ra_deg}, declination {dec_deg} is 90 degrees or more from the field's origin"
    )]
    FarFromOrigin {
        epoch: String,
        id: String,
        ra_deg: f64,
        dec_deg: f64,
    },
    #[error("epoch `{epoch}`, detection `{id}`: no error of the position and no `default_err_mas`")]
    NoError { epoch: String, id: String },
}

/// Puts every list into the common frame as its instrument states it.
///
/// # Errors
/// The first epoch whose frame is not `known`, or that cannot be placed.
pub fn register(campaign: &Campaign, lists: &[RawList]) -> Result<Vec<FieldEpoch>, FrameError> {
    campaign
        .epochs
        .iter()
        .zip(lists)
        .map(|(epoch, list)| {
            if epoch.settings.frame != FrameFreedom::Known {
                return Err(FrameError::NotKnown {
                    epoch: epoch.name.clone(),
                });
            }
            place(campaign, epoch, list)
        })
        .collect()
}

/// Puts one list into the common frame by its nominal frame, whatever freedom it has.
///
/// # Errors
/// When the nominal frame is not complete, or a position has no image in it.
pub fn place(campaign: &Campaign, epoch: &Epoch, list: &RawList) -> Result<FieldEpoch, FrameError> {
    let map = NominalMap::new(campaign, epoch)?;
    let n = list.len();
    let (mut x_mas, mut y_mas) = (Vec::with_capacity(n), Vec::with_capacity(n));
    let mut cov_mas2 = Vec::with_capacity(n);
    for row in 0..n {
        let (p, jacobian) =
            map.apply(list.x[row], list.y[row])
                .ok_or_else(|| FrameError::FarFromOrigin {
                    epoch: epoch.name.clone(),
                    id: list.ids.text(row),
                    ra_deg: list.x[row],
                    dec_deg: list.y[row],
                })?;
        x_mas.push(p[0]);
        y_mas.push(p[1]);
        cov_mas2.push(match (list.err[row], epoch.settings.default_err_mas) {
            (Some(c), _) => map.covariance(c, jacobian),
            (None, Some(e)) => Cov2::round(e * e),
            (None, None) => {
                return Err(FrameError::NoError {
                    epoch: epoch.name.clone(),
                    id: list.ids.text(row),
                });
            }
        });
    }
    let fwhm_mas = epoch.settings.fwhm_mas;
    let targeted = epoch.settings.selection == Selection::Targeted;
    let outline = stated_outline(&map, epoch, list, &x_mas, &y_mas);
    let holes = list.mask.iter().filter_map(|&c| map.circle(c)).collect();
    let region = footprint::region(outline, &x_mas, &y_mas, fwhm_mas, targeted, holes);
    Ok(FieldEpoch {
        time: epoch.time,
        instrument: epoch.instrument,
        fwhm_mas,
        x_mas,
        y_mas,
        cov_mas2,
        mag: list.mag.clone(),
        mag_err: magnitude_errors(list, &epoch.settings),
        rv_km_s: list.rv_km_s.clone(),
        rv_err_km_s: list.rv_err_km_s.clone(),
        quality: list.quality.clone(),
        region,
    })
}

/// Errors of the magnitudes with the campaign's default where the list has none.
#[must_use]
pub fn magnitude_errors(list: &RawList, settings: &Instrument) -> Vec<f64> {
    let default = settings.default_mag_err.unwrap_or(f64::NAN);
    list.mag
        .iter()
        .zip(&list.mag_err)
        .map(|(m, &e)| {
            if e.is_nan() && !m.is_nan() {
                default
            } else {
                e
            }
        })
        .collect()
}

/// The map from list coordinates to the common frame as the instrument states it.
#[derive(Clone, Copy, Debug)]
pub struct NominalMap {
    law: Law,
    /// Factor from `error_unit` to the unit in which the Jacobian takes small lengths.
    error_factor: f64,
}

#[derive(Clone, Copy, Debug)]
enum Law {
    /// Scale, turn and perhaps flip: `[a, b, c, d]` with x = a u + b v, y = c u + d v \[mas\].
    Linear([f64; 4]),
    Sky(TangentPlane),
}

impl NominalMap {
    /// Map of an epoch.
    ///
    /// # Errors
    /// Degrees without an origin, pixels without a scale.
    pub fn new(campaign: &Campaign, epoch: &Epoch) -> Result<Self, FrameError> {
        let s = &epoch.settings;
        let name = || epoch.name.clone();
        let scale = |unit: Unit| match unit {
            Unit::Mas => Ok(1.0),
            Unit::Arcsec => Ok(1000.0),
            Unit::Deg => Ok(MAS_PER_DEG),
            Unit::Pixel => s
                .scale_mas
                .ok_or_else(|| FrameError::NoScale { epoch: name() }),
        };
        let error_mas = scale(s.error_unit)?;
        if s.unit == Unit::Deg {
            let o = campaign
                .origin
                .ok_or_else(|| FrameError::NoOrigin { epoch: name() })?;
            return Ok(Self {
                law: Law::Sky(TangentPlane::new(o.ra_deg, o.dec_deg)),
                error_factor: error_mas,
            });
        }
        let mas = scale(s.unit)?;
        Ok(Self {
            law: Law::Linear(plane_axes(
                mas,
                s.angle_deg,
                s.handedness == Handedness::EastLeft,
            )),
            error_factor: error_mas / mas,
        })
    }

    /// Position \[mas\] and Jacobian of a list position; `None` on the far side of the sky.
    ///
    /// The Jacobian takes list units, except for a list in degrees: there it takes great-circle
    /// mas toward east and north.
    #[must_use]
    pub fn apply(&self, u: f64, v: f64) -> Option<([f64; 2], [f64; 4])> {
        match self.law {
            Law::Linear(m) => Some(([m[0] * u + m[1] * v, m[2] * u + m[3] * v], m)),
            Law::Sky(plane) => plane.project_with_jacobian(u, v),
        }
    }

    /// Covariance \[mas^2\] of one stated in `error_unit` along the list's axes.
    #[must_use]
    pub fn covariance(&self, stated: Cov2, jacobian: [f64; 4]) -> Cov2 {
        stated
            .scaled(self.error_factor * self.error_factor)
            .mapped(jacobian)
    }

    /// A masked circle \[list units\] in mas.
    #[must_use]
    pub fn circle(&self, [u, v, r]: [f64; 3]) -> Option<[f64; 3]> {
        let (p, j) = self.apply(u, v)?;
        let stretch = (j[0] * j[3] - j[1] * j[2]).abs().sqrt();
        let unit = match self.law {
            Law::Linear(_) => 1.0,
            Law::Sky(_) => MAS_PER_DEG,
        };
        Some([p[0], p[1], r * unit * stretch])
    }

    /// Coefficients x = c0 + c1 u + c2 v + ..., for a map that is linear.
    #[must_use]
    pub fn linear(&self) -> Option<[f64; 4]> {
        match self.law {
            Law::Linear(m) => Some(m),
            Law::Sky(_) => None,
        }
    }
}

/// The campaign's footprint in mas.
///
/// Corners are in list units; when read so they leave out most of the list (or, being mas, would
/// make a field a thousand times too large) and read as mas they hold it, they are taken as mas.
fn stated_outline(
    map: &NominalMap,
    epoch: &Epoch,
    list: &RawList,
    x_mas: &[f64],
    y_mas: &[f64],
) -> Option<Vec<[f64; 2]>> {
    const FAR_TOO_LARGE: f64 = 1e3;
    let corners = epoch.footprint.as_ref()?;
    let as_list: Option<Vec<[f64; 2]>> = corners
        .iter()
        .map(|&[u, v]| map.apply(u, v).map(|(p, _)| p))
        .collect();
    if epoch.settings.unit == Unit::Mas {
        return as_list;
    }
    let inside = |outline: &[[f64; 2]]| {
        let region = crate::model::region::Region {
            outline_mas: outline.to_vec(),
            holes_mas: Vec::new(),
        };
        let n = (0..list.len())
            .filter(|&k| region.contains(x_mas[k], y_mas[k]))
            .count();
        (
            n as f64 / list.len().max(1) as f64,
            region.area_mas2().unwrap_or(0.0),
        )
    };
    let (share_mas, area_mas) = inside(corners);
    let Some(as_list) = as_list else {
        return Some(corners.clone());
    };
    let (share_list, area_list) = inside(&as_list);
    let mas_fits = share_mas > 0.95;
    if mas_fits && (share_list < 0.5 || area_list > FAR_TOO_LARGE * area_mas) {
        Some(corners.clone())
    } else {
        Some(as_list)
    }
}
