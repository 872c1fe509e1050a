//! Position errors from stars too faint for the truth table.
//!
//! Their light displaces a star by an amount of variance
//! 2 pi sigma^4 int q^2 (d rho / dq) dq per axis (q: flux ratio, sigma: width of the image), and
//! keeps doing so until they have moved by about the resolution: fwhm / (sqrt 2 sigma_v) years.
//! That is why these errors are correlated from epoch to epoch.

use rand::Rng;

use super::settings::MockSettings;
use super::stars::{Sky, normal};
use crate::maths::units::FWHM_PER_SIGMA;
use crate::near::Tree;

/// Radius within which the density around a star is counted, in units of the largest fwhm.
const COUNT_RADIUS_FWHM: f64 = 6.0;
/// Largest such error, in fwhm.
const LARGEST_FWHM: f64 = 0.12;

/// The state of all stars' offsets, wandering with unit variance (Ornstein-Uhlenbeck).
#[derive(Clone, Debug)]
pub struct Crowding {
    /// Stars per mas^2 brighter than the faintest in the truth, around each star.
    density: Vec<f64>,
    faint_mag: f64,
    slope: f64,
    size: f64,
    speed_mas_yr: f64,
    state: Vec<[f64; 2]>,
    time_yr: Option<f64>,
}

impl Crowding {
    pub fn new(settings: &MockSettings, sky: &Sky, rng: &mut impl Rng) -> Self {
        let widest = (settings.instrument.iter())
            .map(|i| i.fwhm_mas)
            .fold(0.0, f64::max);
        let radius = COUNT_RADIUS_FWHM * widest;
        let places = sky.positions_mas(sky.t_ref_yr);
        let (x, y): (Vec<f64>, Vec<f64>) = places.iter().map(|p| (p[0], p[1])).unzip();
        let tree = Tree::build(&x, &y);
        let mut hits = Vec::new();
        let density = places
            .iter()
            .map(|p| {
                tree.within(p[0], p[1], radius, &mut hits);
                hits.len() as f64 / (std::f64::consts::PI * radius * radius)
            })
            .collect();
        Self {
            density,
            faint_mag: settings.stars.faint_mag,
            slope: settings.stars.slope_dex_mag,
            size: settings.noise.crowding,
            speed_mas_yr: sky.speed_mas_yr().max(0.5),
            state: (0..places.len())
                .map(|_| [normal(rng), normal(rng)])
                .collect(),
            time_yr: None,
        }
    }

    /// Moves on to a later time.
    pub fn advance(&mut self, time_yr: f64, fwhm_mas: f64, rng: &mut impl Rng) {
        let memory_yr = fwhm_mas / (std::f64::consts::SQRT_2 * self.speed_mas_yr);
        let keep = self
            .time_yr
            .map_or(1.0, |t| (-(time_yr - t) / memory_yr).exp());
        let fresh = (1.0 - keep * keep).sqrt();
        for s in &mut self.state {
            *s = s.map(|v| keep * v + fresh * normal(rng));
        }
        self.time_yr = Some(time_yr);
    }

    /// Unit-variance offset of a star now.
    #[must_use]
    pub fn offset(&self, star: u32) -> [f64; 2] {
        self.state[star as usize]
    }

    /// Size of the error per axis for a source of this magnitude led by this star.
    #[must_use]
    pub fn error_mas(&self, star: u32, mag: f64, fwhm_mas: f64) -> f64 {
        // Counts 10^(slope m) go on below the truth's limit: int q^2 d rho in closed form.
        let sigma = fwhm_mas / FWHM_PER_SIGMA;
        let q2 = self.density[star as usize] * self.slope / (0.8 - self.slope)
            * 10f64.powf(-0.8 * (self.faint_mag - mag));
        let variance = 2.0 * std::f64::consts::PI * sigma.powi(4) * q2;
        self.size * variance.sqrt().min(LARGEST_FWHM * fwhm_mas)
    }
}
