//! Which stars are made up: magnitudes over the whole range of the lists and a little below,
//! orbits of a cusp about the mass (every second one on a tight orbit), or straight lines.

use rand::{Rng, RngExt};

use super::Linked;
use crate::inject::settings::StarSettings;
use crate::inject::stars::{Sky, normal, straight};
use crate::maths::order;
use crate::model::region::Region;
use crate::motion::elements::Elements;
use crate::motion::kepler::propagate;

/// Made-up stars reach this far below the faintest depth of the lists.
const BELOW_LIMIT_MAG: f64 = 0.7;
/// A pair passes within this many fwhm.
const PASS_FWHM: f64 = 0.6;
/// A star outside the outlines is drawn again so many times.
const VIEW_ATTEMPTS: usize = 200;

/// A made-up star: state relative to the mass (or origin) at the reference epoch.
#[derive(Clone, Copy, Debug)]
pub struct MadeStar {
    pub mag: f64,
    pub r_mas: [f64; 3],
    pub v_mas_yr: [f64; 3],
    pub bound: bool,
    pub pair: Option<u32>,
}

/// The field that made-up stars are drawn for.
#[derive(Clone, Debug)]
pub struct Population {
    gm_mas3_yr2: f64,
    /// Place and drift of the mass, at the reference epoch.
    centre_mas: [f64; 2],
    drift_mas_yr: [f64; 2],
    t_ref_yr: f64,
    pub first_yr: f64,
    pub last_yr: f64,
    radius_mas: f64,
    speed_mas_yr: f64,
    fwhm_mas: f64,
    bright_mag: f64,
    faint_mag: f64,
    /// Times and outlines of the epochs.
    views: Vec<(f64, Region)>,
}

impl Population {
    #[must_use]
    pub fn of(run: Linked<'_>) -> Self {
        let c = run.campaign;
        let central = c.central.as_ref();
        let centre = central.map_or([0.0; 2], |m| [m.x_mas, m.y_mas]);
        let mut radii: Vec<f64> = Vec::new();
        let mut mags: Vec<f64> = Vec::new();
        for e in run.epochs {
            let places = e.x_mas.iter().zip(&e.y_mas);
            radii.extend(places.map(|(x, y)| (x - centre[0]).hypot(y - centre[1])));
            mags.extend(e.mag.iter().filter(|m| m.is_finite()));
        }
        let times = || run.epochs.iter().map(|e| e.time.yr());
        let widest = run.epochs.iter().map(|e| e.fwhm_mas).fold(0.0, f64::max);
        Self {
            gm_mas3_yr2: central.map_or(0.0, |m| m.gm_mas3_yr2),
            centre_mas: centre,
            drift_mas_yr: central.map_or([0.0; 2], |m| [m.vx_mas_yr, m.vy_mas_yr]),
            t_ref_yr: c.reference.yr(),
            first_yr: times().fold(f64::INFINITY, f64::min),
            last_yr: times().fold(f64::NEG_INFINITY, f64::max),
            views: (run.epochs.iter())
                .map(|e| (e.time.yr(), e.region.clone()))
                .collect(),
            radius_mas: order::quantile(&mut radii, 0.98)
                .unwrap_or(widest)
                .max(widest),
            speed_mas_yr: c.stars.speed_mas_yr,
            fwhm_mas: widest,
            bright_mag: order::quantile(&mut mags, 0.02).unwrap_or(14.0),
            faint_mag: order::quantile(&mut mags, 0.98).unwrap_or(14.0) + BELOW_LIMIT_MAG,
        }
    }

    #[must_use]
    pub fn span_yr(&self) -> f64 {
        self.last_yr - self.first_yr
    }

    /// Draws `n` stars; two of every `pair_every` pass close by each other.
    pub fn draw(
        &self,
        n: usize,
        pair_every: usize,
        first_number: u32,
        rng: &mut impl Rng,
    ) -> Vec<MadeStar> {
        let mut out: Vec<MadeStar> = Vec::with_capacity(n);
        while out.len() < n {
            let k = out.len();
            let mut star = self.single_in_view(k % 2 == 1, rng);
            if k.is_multiple_of(pair_every) && k + 1 < n {
                star.pair = Some(first_number + k as u32);
                let other = self.passing(&star, rng);
                out.push(star);
                out.push(other);
            } else {
                out.push(star);
            }
        }
        out
    }

    /// A star that half of the epochs could have seen.
    fn single_in_view(&self, tight: bool, rng: &mut impl Rng) -> MadeStar {
        let mut star = self.single(tight, rng);
        for _ in 0..VIEW_ATTEMPTS {
            let inside = self.views.iter().filter(|(t_yr, region)| {
                let p = self.place(&star, *t_yr);
                region.contains(p[0], p[1])
            });
            if 2 * inside.count() >= self.views.len() {
                break;
            }
            star = self.single(tight, rng);
        }
        star
    }

    fn single(&self, tight: bool, rng: &mut impl Rng) -> MadeStar {
        let mag = self.bright_mag + (self.faint_mag - self.bright_mag) * rng.random::<f64>();
        let (r_mas, v_mas_yr, bound) = if self.gm_mas3_yr2 > 0.0 {
            let recipe = StarSettings {
                radius_mas: self.radius_mas,
                min_semi_major_mas: self.fwhm_mas.min(0.1 * self.radius_mas),
                max_semi_major_mas: 6.0 * self.radius_mas,
                inner_semi_major_mas: 0.25 * self.radius_mas,
                ..StarSettings::default()
            };
            let sky = Sky {
                t_ref_yr: self.t_ref_yr,
                gm_mas3_yr2: self.gm_mas3_yr2,
                stars: Vec::new(),
            };
            let (r, v, _) = sky.bound_inside(&recipe, tight, rng);
            (r, v, true)
        } else {
            let (r, v) = straight(self.radius_mas, self.speed_mas_yr, true, rng);
            (r, v, false)
        };
        MadeStar {
            mag,
            r_mas,
            v_mas_yr,
            bound,
            pair: None,
        }
    }

    /// A star of similar brightness that passes close by another at some time of the campaign,
    /// moving its own way.
    fn passing(&self, star: &MadeStar, rng: &mut impl Rng) -> MadeStar {
        let t = self.first_yr + self.span_yr() * rng.random::<f64>();
        let dt = t - self.t_ref_yr;
        let (r, v) = self.state(star, dt);
        let offset = [0, 1].map(|_| PASS_FWHM * self.fwhm_mas * (rng.random::<f64>() - 0.5));
        let at = [r[0] + offset[0], r[1] + offset[1], r[2]];
        // Turned by up to a right angle either way: the same speed, so bound if the other is.
        let turn = std::f64::consts::FRAC_PI_2 * (2.0 * rng.random::<f64>() - 1.0);
        let (sin, cos) = turn.sin_cos();
        let own = [
            cos * v[0] - sin * v[1],
            sin * v[0] + cos * v[1],
            if star.bound { -v[2] } else { 0.0 },
        ];
        let mut other = MadeStar {
            mag: (star.mag + 0.7 * normal(rng)).clamp(self.bright_mag, self.faint_mag),
            r_mas: at,
            v_mas_yr: own,
            ..*star
        };
        (other.r_mas, other.v_mas_yr) = self.state(&other, -dt);
        other
    }

    fn state(&self, star: &MadeStar, dt_yr: f64) -> ([f64; 3], [f64; 3]) {
        if star.bound {
            propagate(self.gm_mas3_yr2, star.r_mas, star.v_mas_yr, dt_yr)
        } else {
            let moved = [0, 1, 2].map(|a| star.r_mas[a] + star.v_mas_yr[a] * dt_yr);
            (moved, star.v_mas_yr)
        }
    }

    /// Place in the common frame.
    #[must_use]
    pub fn place(&self, star: &MadeStar, t_yr: f64) -> [f64; 2] {
        let dt = t_yr - self.t_ref_yr;
        let (r, _) = self.state(star, dt);
        [0, 1].map(|a| self.centre_mas[a] + self.drift_mas_yr[a] * dt + r[a])
    }

    /// Pericentre and period, where there is an orbit.
    #[must_use]
    pub fn orbit(&self, star: &MadeStar) -> (Option<f64>, Option<f64>) {
        if !star.bound {
            return (None, None);
        }
        let e = Elements::from_state(self.gm_mas3_yr2, star.r_mas, star.v_mas_yr, self.t_ref_yr);
        (Some(e.pericentre_mas), e.period_yr())
    }
}
