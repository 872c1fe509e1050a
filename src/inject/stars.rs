//! The true stars of a made-up field and where they are at any time.
//!
//! About a mass: space density r^-cusp, so N(< a) ~ a^(3 - cusp), isotropic orbits with
//! f(e) = 2e (thermal; Jeans 1919, MNRAS 79, 408), followed exactly. Without a mass: evenly
//! spread, straight lines, Gaussian velocities.

use rand::{Rng, RngExt};
use rand_distr::{Distribution, StandardNormal};

use super::settings::{MockSettings, StarSettings};
use crate::maths::units::gm_mas3_yr2;
use crate::motion::kepler::propagate;

/// Largest eccentricity drawn.
const MAX_ECCENTRICITY: f64 = 0.995;
/// A star that stays this close to its tangent line all the time is called straight.
const STRAIGHT_MAS: f64 = 0.1;

/// Elements of an orbit; node from north through east, angles in radians.
#[derive(Clone, Copy, Debug)]
pub struct DrawnOrbit {
    pub semi_major_mas: f64,
    pub eccentricity: f64,
    pub inclination_rad: f64,
    pub node_rad: f64,
    pub arg_pericentre_rad: f64,
    pub t_pericentre_yr: f64,
    pub period_yr: f64,
}

/// Variability m + amplitude sin(2 pi t / period + phase), t in Julian years.
#[derive(Clone, Copy, Debug, Default)]
pub struct Wave {
    pub amplitude_mag: f64,
    pub period_yr: f64,
    pub phase_rad: f64,
}

/// One true star; position and velocity relative to the mass (or the origin) at the reference
/// epoch.
#[derive(Clone, Copy, Debug)]
pub struct TrueStar {
    pub mag: f64,
    pub r_mas: [f64; 3],
    pub v_mas_yr: [f64; 3],
    pub orbit: Option<DrawnOrbit>,
    /// Curved by more than the eye of any list could see.
    pub curved: bool,
    pub wave: Option<Wave>,
}

/// All stars of a field.
#[derive(Clone, Debug)]
pub struct Sky {
    pub t_ref_yr: f64,
    /// 0 without a mass.
    pub gm_mas3_yr2: f64,
    pub stars: Vec<TrueStar>,
}

impl Sky {
    /// Draws the stars of a recipe.
    pub fn draw(settings: &MockSettings, times_yr: &[f64], rng: &mut impl Rng) -> Self {
        let s = &settings.stars;
        let gm = settings
            .mass()
            .map_or(0.0, |m| gm_mas3_yr2(m.mass_msun, m.distance_pc));
        let mut sky = Self {
            t_ref_yr: settings.reference_epoch,
            gm_mas3_yr2: gm,
            stars: Vec::with_capacity(s.count + s.inner),
        };
        for k in 0..s.count + s.inner {
            let foreign = k < s.count && rng.random::<f64>() < s.foreground_fraction;
            let (r_mas, v_mas_yr, orbit) = if gm > 0.0 && !foreign {
                let inner = k >= s.count;
                sky.bound_inside(s, inner, rng)
            } else {
                let speed = if foreign {
                    s.foreground_speed_mas_yr
                } else {
                    s.speed_mas_yr
                };
                let (r, v) = straight(s.radius_mas, speed, gm > 0.0, rng);
                (r, v, None)
            };
            let star = TrueStar {
                mag: magnitude(s, rng),
                r_mas,
                v_mas_yr,
                orbit,
                curved: false,
                wave: wave(s, rng),
            };
            sky.stars.push(star);
        }
        for k in 0..sky.stars.len() {
            sky.stars[k].curved = sky.leaves_tangent(k, times_yr);
        }
        sky
    }

    /// An orbit whose star lies inside the field at the reference epoch.
    pub(super) fn bound_inside(
        &self,
        s: &StarSettings,
        inner: bool,
        rng: &mut impl Rng,
    ) -> ([f64; 3], [f64; 3], Option<DrawnOrbit>) {
        let largest = if inner {
            s.inner_semi_major_mas.max(1.01 * s.min_semi_major_mas)
        } else {
            s.max_semi_major_mas
        };
        loop {
            let orbit = draw_orbit(s, largest, self.gm_mas3_yr2, self.t_ref_yr, rng);
            let (r, v) = at_pericentre(&orbit, self.gm_mas3_yr2);
            let (r, v) = propagate(
                self.gm_mas3_yr2,
                r,
                v,
                self.t_ref_yr - orbit.t_pericentre_yr,
            );
            if r[0].hypot(r[1]) < s.radius_mas {
                return (r, v, Some(orbit));
            }
        }
    }

    /// True place of a star.
    #[must_use]
    pub fn position_mas(&self, star: usize, t_yr: f64) -> [f64; 2] {
        let (s, dt) = (&self.stars[star], t_yr - self.t_ref_yr);
        if s.orbit.is_some() {
            let (r, _) = propagate(self.gm_mas3_yr2, s.r_mas, s.v_mas_yr, dt);
            [r[0], r[1]]
        } else {
            [0, 1].map(|a| s.r_mas[a] + s.v_mas_yr[a] * dt)
        }
    }

    /// Places of all stars.
    #[must_use]
    pub fn positions_mas(&self, t_yr: f64) -> Vec<[f64; 2]> {
        (0..self.stars.len())
            .map(|k| self.position_mas(k, t_yr))
            .collect()
    }

    /// True magnitudes of all stars.
    #[must_use]
    pub fn mags(&self, t_yr: f64) -> Vec<f64> {
        self.stars
            .iter()
            .map(|s| {
                s.mag
                    + s.wave.map_or(0.0, |w| {
                        let turn = std::f64::consts::TAU * t_yr / w.period_yr + w.phase_rad;
                        w.amplitude_mag * turn.sin()
                    })
            })
            .collect()
    }

    /// Acceleration on the sky at the reference epoch.
    #[must_use]
    pub fn acceleration_mas_yr2(&self, star: usize) -> [f64; 2] {
        let s = &self.stars[star];
        if !s.curved {
            return [0.0; 2];
        }
        let r = s.r_mas.iter().map(|v| v * v).sum::<f64>().sqrt();
        [0, 1].map(|a| -self.gm_mas3_yr2 * s.r_mas[a] / r.powi(3))
    }

    /// One-dimensional velocity dispersion on the sky, robustly (1.4826 times the median
    /// absolute velocity per axis).
    #[must_use]
    pub fn speed_mas_yr(&self) -> f64 {
        let mut v: Vec<f64> = self
            .stars
            .iter()
            .flat_map(|s| [s.v_mas_yr[0].abs(), s.v_mas_yr[1].abs()])
            .collect();
        1.4826 * crate::maths::order::median(&mut v).unwrap_or(0.0)
    }

    fn leaves_tangent(&self, star: usize, times_yr: &[f64]) -> bool {
        let s = &self.stars[star];
        s.orbit.is_some()
            && times_yr.iter().any(|&t| {
                let p = self.position_mas(star, t);
                let line = [0, 1].map(|a| s.r_mas[a] + s.v_mas_yr[a] * (t - self.t_ref_yr));
                (p[0] - line[0]).hypot(p[1] - line[1]) > STRAIGHT_MAS
            })
    }

    /// Largest distance of a star from its own best straight line.
    #[must_use]
    pub fn departure_mas(&self, star: usize, times_yr: &[f64]) -> f64 {
        if self.stars[star].orbit.is_none() {
            return 0.0;
        }
        let n = times_yr.len() as f64;
        let mean_t = times_yr.iter().sum::<f64>() / n;
        let path: Vec<[f64; 2]> = (times_yr.iter())
            .map(|&t| self.position_mas(star, t))
            .collect();
        let spread: f64 = times_yr.iter().map(|t| (t - mean_t).powi(2)).sum();
        let line = [0, 1].map(|a| {
            let mean = path.iter().map(|p| p[a]).sum::<f64>() / n;
            let rise: f64 = (path.iter().zip(times_yr))
                .map(|(p, t)| (p[a] - mean) * (t - mean_t))
                .sum();
            (mean, if spread > 0.0 { rise / spread } else { 0.0 })
        });
        (path.iter().zip(times_yr))
            .map(|(p, t)| {
                let left = [0, 1].map(|a| p[a] - line[a].0 - line[a].1 * (t - mean_t));
                left[0].hypot(left[1])
            })
            .fold(0.0, f64::max)
    }
}

fn draw_orbit(
    s: &StarSettings,
    largest_mas: f64,
    gm: f64,
    t_ref_yr: f64,
    rng: &mut impl Rng,
) -> DrawnOrbit {
    let power = 3.0 - s.cusp;
    let (low, high) = (s.min_semi_major_mas.powf(power), largest_mas.powf(power));
    let semi_major_mas = (low + rng.random::<f64>() * (high - low)).powf(1.0 / power);
    let turn = |rng: &mut _| std::f64::consts::TAU * RngExt::random::<f64>(rng);
    let period_yr = std::f64::consts::TAU * (semi_major_mas.powi(3) / gm).sqrt();
    DrawnOrbit {
        semi_major_mas,
        eccentricity: rng.random::<f64>().sqrt().min(MAX_ECCENTRICITY),
        inclination_rad: (2.0 * rng.random::<f64>() - 1.0).acos(),
        node_rad: turn(rng),
        arg_pericentre_rad: turn(rng),
        t_pericentre_yr: t_ref_yr - rng.random::<f64>() * period_yr,
        period_yr,
    }
}

/// State at pericentre. With x east, y north and z away from us, the node is the place where
/// the star recedes (convention of visual binaries).
fn at_pericentre(o: &DrawnOrbit, gm: f64) -> ([f64; 3], [f64; 3]) {
    let (sn, cn) = o.node_rad.sin_cos();
    let (sp, cp) = o.arg_pericentre_rad.sin_cos();
    let (si, ci) = o.inclination_rad.sin_cos();
    let toward = [cp * sn + sp * cn * ci, cp * cn - sp * sn * ci, sp * si];
    let across = [-sp * sn + cp * cn * ci, -sp * cn - cp * sn * ci, cp * si];
    let e = o.eccentricity;
    let distance = o.semi_major_mas * (1.0 - e);
    let speed = (gm / o.semi_major_mas * (1.0 + e) / (1.0 - e)).sqrt();
    (toward.map(|v| v * distance), across.map(|v| v * speed))
}

pub(super) fn straight(
    radius_mas: f64,
    speed_mas_yr: f64,
    round: bool,
    rng: &mut impl Rng,
) -> ([f64; 3], [f64; 3]) {
    let r = loop {
        let p = [0, 1].map(|_| radius_mas * (2.0 * rng.random::<f64>() - 1.0));
        if !round || p[0].hypot(p[1]) < radius_mas {
            break p;
        }
    };
    let mut v = || speed_mas_yr * normal(rng);
    ([r[0], r[1], 0.0], [v(), v(), 0.0])
}

/// Number per magnitude proportional to 10^(slope mag) between the limits.
fn magnitude(s: &StarSettings, rng: &mut impl Rng) -> f64 {
    let span = 10f64.powf(s.slope_dex_mag * (s.faint_mag - s.bright_mag));
    s.bright_mag + (1.0 + rng.random::<f64>() * (span - 1.0)).log10() / s.slope_dex_mag
}

fn wave(s: &StarSettings, rng: &mut impl Rng) -> Option<Wave> {
    let varies = rng.random::<f64>() < s.variable_fraction;
    let drawn = Wave {
        amplitude_mag: s.variable_mag * (0.4 + 1.2 * rng.random::<f64>()),
        period_yr: 10f64.powf(-0.7 + 2.0 * rng.random::<f64>()),
        phase_rad: std::f64::consts::TAU * rng.random::<f64>(),
    };
    varies.then_some(drawn)
}

/// A standard normal number.
pub(super) fn normal(rng: &mut impl Rng) -> f64 {
    StandardNormal.sample(rng)
}
