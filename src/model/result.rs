//! The result of linking: tracks, memberships, leftovers, epochs, tangles, rivals.

use super::flag::Flags;
use super::motion::Motion;
use super::note::Note;

/// Everything a run produces; all vectors are in the order in which tables are written.
#[derive(Clone, Debug, Default)]
pub struct Solution {
    /// Sorted by name order (brightest first in a fresh run).
    pub tracks: Vec<Track>,
    /// Sorted by track, then epoch.
    pub members: Vec<Membership>,
    /// Detections in no track, sorted by epoch and row.
    pub leftovers: Vec<Leftover>,
    /// One per epoch, in campaign order.
    pub epochs: Vec<EpochReport>,
    pub tangles: Vec<TangleReport>,
    pub rivals: Vec<Rival>,
    pub orbits: Vec<OrbitMinimum>,
    pub notes: Vec<Note>,
}

/// One star as linked.
#[derive(Clone, Debug)]
pub struct Track {
    pub name: String,
    /// Motion at the campaign's reference epoch.
    pub motion: Motion,
    pub n_members: usize,
    pub first_yr: f64,
    pub last_yr: f64,
    pub mean_epoch_yr: f64,
    /// Position and velocity at the mean epoch, with errors.
    pub x_mean_mas: f64,
    pub y_mean_mas: f64,
    pub x_mean_err_mas: f64,
    pub y_mean_err_mas: f64,
    pub vx_mean_mas_yr: f64,
    pub vy_mean_mas_yr: f64,
    pub vx_mean_err_mas_yr: f64,
    pub vy_mean_err_mas_yr: f64,
    /// Position, velocity and acceleration at the reference epoch, each (x, y), with errors.
    pub sky: SkyMotion,
    pub mag: Option<f64>,
    pub mag_scatter: Option<f64>,
    pub chi2: f64,
    pub dof: usize,
    pub ln_evidence: f64,
    /// Probability that this track is one real star.
    pub probability: f64,
    /// Index of its tangle in `Solution::tangles`; `None` for a star without rivals.
    pub tangle: Option<usize>,
    pub orbit: Option<OrbitColumns>,
    pub flags: Flags,
}

/// Motion on the sky at the reference epoch, whatever the model:
/// (x, y, vx, vy, ax, ay) and its covariance.
#[derive(Clone, Copy, Debug, Default)]
pub struct SkyMotion {
    pub p: [f64; 6],
    pub cov: [[f64; 6]; 6],
}

/// Orbit elements of a Keplerian track with errors (value, error).
#[derive(Clone, Copy, Debug)]
pub struct OrbitColumns {
    pub z_mas: (f64, f64),
    pub vz_km_s: Option<(f64, f64)>,
    /// Empty for an unbound orbit.
    pub semi_major_mas: Option<(f64, f64)>,
    pub semi_major_au: Option<(f64, f64)>,
    pub eccentricity: (f64, f64),
    pub inclination_deg: (f64, f64),
    pub node_deg: (f64, f64),
    pub arg_pericentre_deg: (f64, f64),
    pub t_pericentre_yr: (f64, f64),
    pub period_yr: Option<(f64, f64)>,
    pub pericentre_au: Option<(f64, f64)>,
    pub apocentre_au: Option<(f64, f64)>,
    pub pericentre_speed_km_s: Option<(f64, f64)>,
    /// True when a radial velocity fixed the sign of the line of sight.
    pub sign_known: bool,
}

/// One track holds one detection (a merged detection has several).
#[derive(Clone, Debug)]
pub struct Membership {
    /// Index into `Solution::tracks`.
    pub track: usize,
    pub epoch: usize,
    /// Row in the epoch's canonical order.
    pub row: usize,
    pub probability: f64,
    /// Flux share, 1 when alone.
    pub share: f64,
    /// Measured minus predicted position (of the blend, for a merged detection).
    pub dx_mas: f64,
    pub dy_mas: f64,
    pub flags: Flags,
}

/// A detection that belongs to no track.
#[derive(Clone, Debug)]
pub struct Leftover {
    pub epoch: usize,
    pub row: usize,
    /// Probability of being false.
    pub p_false: f64,
    /// Nearest track (index) and its distance.
    pub nearest: Option<(usize, f64)>,
    pub flags: Flags,
}

/// What was found for one epoch.
#[derive(Clone, Debug, Default)]
pub struct EpochReport {
    pub n_list: usize,
    pub n_matched: usize,
    pub n_unmatched: usize,
    /// x = c0 + c1 u + c2 v + c3 u^2 + c4 u v + c5 v^2 (list units to mas), then y.
    pub coef: [[f64; 6]; 2],
    pub coef_err: [[f64; 6]; 2],
    pub n_anchors: usize,
    pub rms_mas: Option<f64>,
    /// Factor by which stated errors had to be multiplied.
    pub error_factor: f64,
    /// Common error floor added in quadrature.
    pub error_floor_mas: f64,
    /// 50 % completeness as found from the list.
    pub limit_mag: Option<f64>,
    pub zero_point_mag: Option<f64>,
    pub zero_point_err_mag: Option<f64>,
    /// `None` when placed; otherwise why not.
    pub failed: Option<String>,
    pub flags: Flags,
}

/// What is proven about a tangle.
#[derive(Clone, Copy, Debug, PartialEq)]
pub enum Certificate {
    /// Best over the pool of hypotheses.
    Pool,
    /// No one further track improves the result.
    PricedOut,
    /// Exhaustive.
    All,
    /// Within so many nats of the best.
    Bounded { gap_nats: f64 },
    /// Nothing is proven.
    None,
}

impl Certificate {
    /// The word used in tables.
    #[must_use]
    pub fn word(self) -> &'static str {
        match self {
            Self::Pool => "pool",
            Self::PricedOut => "priced_out",
            Self::All => "all",
            Self::Bounded { .. } => "bounded",
            Self::None => "none",
        }
    }
}

/// One connected confused group.
#[derive(Clone, Debug)]
pub struct TangleReport {
    /// Indices into `Solution::tracks`.
    pub tracks: Vec<usize>,
    pub n_detections: usize,
    pub n_epochs: usize,
    pub certificate: Certificate,
    /// Work done, in counts of the solver's steps.
    pub work: u64,
    pub flags: Flags,
}

/// Another explanation of a tangle.
#[derive(Clone, Debug)]
pub struct Rival {
    pub tangle: usize,
    pub rank: usize,
    /// ln odds against the best explanation (negative: less likely).
    pub ln_odds: f64,
    /// What changes, in words: clauses of [`super::change::Change`] joined by `; `.
    pub change: String,
}

/// One kept minimum of an orbit fit.
#[derive(Clone, Debug)]
pub struct OrbitMinimum {
    pub track: usize,
    pub rank: usize,
    pub ln_evidence: f64,
    pub chi2: f64,
    pub motion: Motion,
    pub orbit: OrbitColumns,
}
