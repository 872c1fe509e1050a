//! What the campaign file says: field, mass, stars, instruments, epochs.

use std::path::PathBuf;

use super::time::JulianYear;
use crate::maths::units;

/// A whole campaign, all defaults filled in and every value checked.
#[derive(Clone, Debug)]
pub struct Campaign {
    /// Path of the campaign file; relative paths start from its folder.
    pub path: PathBuf,
    pub name: String,
    /// Time at which track parameters are expressed.
    pub reference: JulianYear,
    pub origin: Option<SkyOrigin>,
    pub central: Option<CentralMass>,
    pub stars: StarMotions,
    pub instruments: Vec<Instrument>,
    /// In the order of the campaign file.
    pub epochs: Vec<Epoch>,
    pub lists: Option<OneTable>,
    pub known_stars: Option<KnownStars>,
    pub velocities: Option<Velocities>,
}

/// Tangent point of the common frame (ICRS).
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SkyOrigin {
    pub ra_deg: f64,
    pub dec_deg: f64,
}

/// The massive dark object.
#[derive(Clone, Debug)]
pub struct CentralMass {
    /// `None` when only GM / D^3 was given.
    pub mass_msun: Option<f64>,
    pub distance_pc: Option<f64>,
    /// GM / D^3 in angular units.
    pub gm_mas3_yr2: f64,
    pub gm_err_mas3_yr2: Option<f64>,
    pub x_mas: f64,
    pub y_mas: f64,
    pub x_err_mas: f64,
    pub y_err_mas: f64,
    pub vx_mas_yr: f64,
    pub vy_mas_yr: f64,
    /// Systemic radial velocity.
    pub rv_km_s: Option<f64>,
    pub rv_err_km_s: Option<f64>,
    pub source: Option<CentralSource>,
    pub light_time: bool,
    pub relativity: bool,
    pub extended: Option<ExtendedMass>,
}

impl CentralMass {
    /// A point mass at a place, at rest, without optional terms.
    #[must_use]
    pub fn point(mass_msun: f64, distance_pc: f64, x_mas: f64, y_mas: f64) -> Self {
        Self {
            mass_msun: Some(mass_msun),
            distance_pc: Some(distance_pc),
            gm_mas3_yr2: units::gm_mas3_yr2(mass_msun, distance_pc),
            gm_err_mas3_yr2: None,
            x_mas,
            y_mas,
            x_err_mas: 0.0,
            y_err_mas: 0.0,
            vx_mas_yr: 0.0,
            vy_mas_yr: 0.0,
            rv_km_s: None,
            rv_err_km_s: None,
            source: None,
            light_time: false,
            relativity: false,
            extended: None,
        }
    }
}

/// Light of the mass itself: a fixed contributor to blends, never a track.
#[derive(Clone, Copy, Debug)]
pub struct CentralSource {
    pub mag: f64,
    pub mag_scatter: f64,
}

/// Extended mass M(r) = mass (r / inside)^(3 - slope).
#[derive(Clone, Copy, Debug)]
pub struct ExtendedMass {
    pub mass_msun: f64,
    pub inside_pc: f64,
    pub slope: f64,
}

/// Prior knowledge of how stars move.
#[derive(Clone, Copy, Debug)]
pub struct StarMotions {
    /// One-dimensional dispersion per axis far from the mass.
    pub speed_mas_yr: f64,
    pub foreground: Option<Foreground>,
}

#[derive(Clone, Copy, Debug)]
pub struct Foreground {
    pub fraction: f64,
    pub speed_mas_yr: f64,
}

/// Properties of an instrument, or of one epoch once its overrides are applied.
#[derive(Clone, Debug)]
pub struct Instrument {
    pub name: String,
    pub fwhm_mas: f64,
    /// 50 % completeness as stated; a starting value only.
    pub limit_mag: Option<f64>,
    pub bright_limit_mag: Option<f64>,
    pub band: Option<String>,
    pub unit: Unit,
    pub error_unit: Unit,
    /// mas per pixel, for pixel lists.
    pub scale_mas: Option<f64>,
    /// Nominal position angle of +y, north through east.
    pub angle_deg: f64,
    pub handedness: Handedness,
    pub frame: FrameFreedom,
    pub distortion: Distortion,
    pub selection: Selection,
    /// `None` = not stated: learnt from the lists.
    pub blend: Option<BlendLaw>,
    /// List column for each of our names, where it differs from the default.
    pub columns: Vec<(String, ColumnRef)>,
    pub default_err_mas: Option<f64>,
    pub default_mag_err: Option<f64>,
    pub keep: Vec<String>,
}

impl Instrument {
    /// An instrument with every optional key at its default.
    #[must_use]
    pub fn new(name: &str, fwhm_mas: f64) -> Self {
        Self {
            name: name.to_owned(),
            fwhm_mas,
            limit_mag: None,
            bright_limit_mag: None,
            band: None,
            unit: Unit::Mas,
            error_unit: Unit::Mas,
            scale_mas: None,
            angle_deg: 0.0,
            handedness: Handedness::EastRight,
            frame: FrameFreedom::Known,
            distortion: Distortion::PerEpoch,
            selection: Selection::Blind,
            blend: None,
            columns: Vec::new(),
            default_err_mas: None,
            default_mag_err: None,
            keep: Vec::new(),
        }
    }
}

/// A column named in a header, or counted from 1 in a headerless table.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum ColumnRef {
    Name(String),
    Number(usize),
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Unit {
    Mas,
    Arcsec,
    Deg,
    Pixel,
}

/// Where +x lies: at `angle_deg` + 90 (east right) or - 90 (east left).
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Handedness {
    EastRight,
    EastLeft,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub enum FrameFreedom {
    Known,
    Shift,
    Similarity,
    Affine,
    Quadratic,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Distortion {
    PerEpoch,
    /// One distortion for all epochs of the instrument.
    Shared,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Selection {
    /// Everything above the depth is listed.
    Blind,
    /// Chosen stars only: absence means nothing, and no star is born here.
    Targeted,
}

/// Where the position of a blend lies.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum BlendLaw {
    Psf,
    Centroid,
}

/// One list.
#[derive(Clone, Debug)]
pub struct Epoch {
    pub name: String,
    pub time: JulianYear,
    /// The list, or the key of its rows in the one table for all epochs.
    pub source: ListSource,
    /// Index into `Campaign::instruments`.
    pub instrument: usize,
    /// The instrument with this epoch's overrides applied.
    pub settings: Instrument,
    /// Outline of the field in list units; `None`: the hull of the list, grown a little.
    pub footprint: Option<Vec<[f64; 2]>>,
    pub mask: Option<PathBuf>,
}

#[derive(Clone, Debug, PartialEq)]
pub enum ListSource {
    /// Path as resolved against the campaign's folder.
    File(PathBuf),
    Key(String),
}

/// One table that holds all epochs.
#[derive(Clone, Debug)]
pub struct OneTable {
    pub file: PathBuf,
    pub epoch_column: String,
}

#[derive(Clone, Debug)]
pub struct KnownStars {
    pub file: PathBuf,
    pub for_names: bool,
    pub for_priors: bool,
    pub for_frame: bool,
}

#[derive(Clone, Debug)]
pub struct Velocities {
    pub file: PathBuf,
    pub tolerance_mas: f64,
}
