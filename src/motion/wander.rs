//! Errors that persist: the slowly wandering offset of a star's measured place.
//!
//! Light of stars too faint to be known shifts a crowded star by the same amount for years, until
//! they have moved on. White inflation of the errors does not describe that: many epochs seem to
//! average it away and velocities look better than they are. Here the offset is a stationary
//! process with covariance s^2 exp(-|dt| / tau) on each axis (Ornstein & Uhlenbeck 1930) beside
//! white errors scaled by a factor. Both are found per class of magnitude by the marginal
//! likelihood of the residuals of well-observed stars, the motion integrated out (restricted
//! maximum likelihood, Patterson & Thompson 1971; from memory) on a grid of a few values; tau is
//! set from the time in which an unseen neighbour crosses the profile, fwhm / (sqrt(2) x velocity
//! dispersion), since a campaign hardly tells tau from s. A campaign with too few such stars
//! keeps its white errors, and what persists for longer than the campaign cannot be seen at all.

use nalgebra::{DMatrix, DVector, Dyn};

use super::state::{Dynamics, P6};
use super::state_fit::{Fit, Obs, core_wing};

/// Fewest positions of a star that can tell.
const FEWEST_OBS: usize = 7;
/// Fewest stars of a class; how many more are asked depends on what each costs.
const FEWEST_STARS: usize = 12;
const MOST_STARS: usize = 300;
/// Work per class: sum of the cubes of the numbers of positions.
const WORK: usize = 5_000_000;
/// Classes of magnitude.
const CLASSES: usize = 3;
/// Sizes that are tried, in median believed errors of the class.
const SIZES: [f64; 9] = [0.0, 0.25, 0.4, 0.6, 0.9, 1.3, 1.9, 2.8, 4.0];
/// Time for which offsets persist, in crossings of the profile: a neighbour pulls one way until
/// it is at the centre and the other way until it has left.
const CROSSINGS: f64 = 2.0;
/// Factors on the white errors that are tried.
const WHITES: [f64; 6] = [0.4, 0.6, 0.8, 1.0, 1.25, 1.6];

/// One star's clean positions with its fit.
#[derive(Clone, Debug)]
pub struct Course {
    pub fit: Fit,
    pub obs: Vec<Obs>,
    pub mag: f64,
}

/// The law of one class of magnitude.
#[derive(Clone, Copy, Debug, PartialEq)]
struct Class {
    /// Faintest magnitude.
    to_mag: f64,
    white: f64,
    sigma_mas: f64,
}

/// The law of a campaign; the default leaves errors as they are.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Wander {
    tau_yr: f64,
    classes: Vec<Class>,
}

impl Wander {
    /// Law of wandering offsets from the courses of stars; `crossing_yr` is the time in which an
    /// unseen neighbour crosses the profile.
    #[must_use]
    pub fn estimate(dynamics: &Dynamics, courses: &[Course], crossing_yr: f64) -> Self {
        let mut told: Vec<&Course> = courses
            .iter()
            .filter(|c| c.obs.len() >= FEWEST_OBS && c.mag.is_finite())
            .collect();
        if told.len() < CLASSES * FEWEST_STARS {
            return Self::default();
        }
        told.sort_by(|a, b| {
            a.mag
                .total_cmp(&b.mag)
                .then(a.fit.p[0].total_cmp(&b.fit.p[0]))
        });
        let size = told.len().div_ceil(CLASSES);
        let classes: Vec<&[&Course]> = told.chunks(size).collect();
        let axes: Vec<Vec<Axis>> = classes
            .iter()
            .map(|class| {
                let n = class.iter().map(|c| c.obs.len()).max().unwrap_or(1);
                let most = (WORK / n.pow(3)).clamp(2 * FEWEST_STARS, MOST_STARS);
                let step = class.len().div_ceil(most);
                (class.iter().step_by(step))
                    .flat_map(|c| axes(dynamics, c))
                    .collect()
            })
            .collect();
        let tau_yr = CROSSINGS * crossing_yr;
        let classes = (classes.iter().zip(&axes))
            .map(|(class, axes)| {
                let (white, sigma_mas) = best_of_class(axes, tau_yr);
                Class {
                    to_mag: class.last().map_or(f64::INFINITY, |c| c.mag),
                    white,
                    sigma_mas,
                }
            })
            .collect();
        Self { tau_yr, classes }
    }

    fn class(&self, mag: f64) -> Option<&Class> {
        self.classes
            .iter()
            .find(|c| mag <= c.to_mag)
            .or(self.classes.last())
    }

    /// A fit with its parameters and covariance as persistent errors leave them: one step of
    /// generalised least squares from the robust fit to the same positions.
    #[must_use]
    pub fn restate(&self, dynamics: &Dynamics, fit: &Fit, obs: &[Obs], mag: f64) -> Fit {
        let Some(class) = self.class(mag) else {
            return *fit;
        };
        let n = obs.len();
        let mut r = DMatrix::<f64>::zeros(2 * n, 2 * n);
        let mut h = DMatrix::<f64>::zeros(2 * n, 6);
        let mut d = DVector::<f64>::zeros(2 * n);
        for (i, o) in obs.iter().enumerate() {
            let ((x, y), hi) = dynamics.position_with_partials(&fit.p, fit.t0_yr, o.t_yr);
            let (dx, dy) = (o.x_mas - x, o.y_mas - y);
            let w = class.white.powi(2) / core_wing(o.cov.chi2(dx, dy), 0.0).1;
            r[(2 * i, 2 * i)] = o.cov.xx * w;
            r[(2 * i + 1, 2 * i + 1)] = o.cov.yy * w;
            r[(2 * i, 2 * i + 1)] = o.cov.xy * w;
            r[(2 * i + 1, 2 * i)] = o.cov.xy * w;
            d[2 * i] = dx;
            d[2 * i + 1] = dy;
            for j in 0..6 {
                h[(2 * i, j)] = hi[(0, j)];
                h[(2 * i + 1, j)] = hi[(1, j)];
            }
            for (k, q) in obs.iter().enumerate() {
                let c = class.sigma_mas.powi(2) * correlation(o.t_yr - q.t_yr, self.tau_yr);
                r[(2 * i, 2 * k)] += c;
                r[(2 * i + 1, 2 * k + 1)] += c;
            }
        }
        let Some(ch) = r.cholesky() else { return *fit };
        let ri_h = ch.solve(&h);
        let prior = dynamics.prior(&fit.p);
        let normal = h.transpose() * &ri_h;
        let a = prior.curv + normal.fixed_view::<6, 6>(0, 0);
        let Some(a) = a.cholesky() else { return *fit };
        let g = ri_h.transpose() * d;
        let gradient = P6::from_fn(|j, _| g[j] + prior.grad[j]);
        let mut out = *fit;
        out.cov = a.inverse();
        let step = a.solve(&gradient);
        // A step beyond the fit's own error is not a linear one.
        if (step.transpose() * a.l() * a.l().transpose() * step)[(0, 0)] < 9.0 {
            out.p += step;
        }
        out
    }
}

/// How much of an offset is left after a time.
fn correlation(dt_yr: f64, tau_yr: f64) -> f64 {
    (-dt_yr.abs() / tau_yr).exp()
}

/// One axis of one course.
struct Axis {
    t_yr: Vec<f64>,
    residual: DVector<f64>,
    variance: Vec<f64>,
    partials: DMatrix<f64>,
    /// Curvature of the prior.
    prior: DMatrix<f64>,
}

fn axes(dynamics: &Dynamics, c: &Course) -> [Axis; 2] {
    let n = c.obs.len();
    let rows: Vec<_> = (c.obs.iter())
        .map(|o| {
            let (xy, h) = dynamics.position_with_partials(&c.fit.p, c.fit.t0_yr, o.t_yr);
            let (dx, dy) = (o.x_mas - xy.0, o.y_mas - xy.1);
            (dx, dy, h, core_wing(o.cov.chi2(dx, dy), 0.0).1)
        })
        .collect();
    let prior = dynamics.prior(&c.fit.p).curv;
    [0, 1].map(|axis| Axis {
        t_yr: c.obs.iter().map(|o| o.t_yr).collect(),
        residual: DVector::from_fn(n, |i, _| if axis == 0 { rows[i].0 } else { rows[i].1 }),
        variance: (c.obs.iter().zip(&rows))
            .map(|(o, r)| if axis == 0 { o.cov.xx } else { o.cov.yy } / r.3)
            .collect(),
        partials: DMatrix::from_fn(n, 6, |i, j| rows[i].2[(axis, j)]),
        // A whisper keeps directions that this axis does not see from being singular.
        prior: DMatrix::from_fn(6, 6, |i, j| prior[(i, j)] + if i == j { 1e-9 } else { 0.0 }),
    })
}

/// Most likely (white factor, size) of a class.
fn best_of_class(axes: &[Axis], tau_yr: f64) -> (f64, f64) {
    let mut errors: Vec<f64> = axes
        .iter()
        .flat_map(|a| a.variance.iter().map(|v| v.sqrt()))
        .collect();
    let unit = crate::maths::order::median(&mut errors).unwrap_or(1.0);
    let mut best = (f64::NEG_INFINITY, 1.0, 0.0);
    for white in WHITES {
        for size in SIZES {
            let sigma = size * unit;
            // A weak preference for errors as they are believed.
            let wide = -0.5 * ((white.ln() / 0.7).powi(2) + (size / 3.0).powi(2));
            let ln: f64 = axes
                .iter()
                .map(|a| ln_marginal(a, tau_yr, white, sigma))
                .sum();
            if ln + wide > best.0 {
                best = (ln + wide, white, sigma);
            }
        }
    }
    (best.1, best.2)
}

/// ln likelihood of an axis' residuals with the motion integrated out (up to a constant).
fn ln_marginal(a: &Axis, tau_yr: f64, white: f64, sigma_mas: f64) -> f64 {
    let n = a.t_yr.len();
    let r = DMatrix::from_fn(n, n, |i, k| {
        let c = sigma_mas * sigma_mas * correlation(a.t_yr[i] - a.t_yr[k], tau_yr);
        c + if i == k {
            white * white * a.variance[i]
        } else {
            0.0
        }
    });
    let Some(ch) = r.cholesky() else {
        return f64::NEG_INFINITY;
    };
    let ri_h = ch.solve(&a.partials);
    let ri_d = ch.solve(&a.residual);
    let normal = &a.prior + a.partials.transpose() * ri_h;
    let Some(na) = normal.cholesky() else {
        return f64::NEG_INFINITY;
    };
    let g = a.partials.transpose() * &ri_d;
    let ln_det = |l: &nalgebra::Cholesky<f64, Dyn>, m: usize| -> f64 {
        (0..m).map(|k| 2.0 * l.l_dirty()[(k, k)].ln()).sum()
    };
    -0.5 * (ln_det(&ch, n) + ln_det(&na, 6) + a.residual.dot(&ri_d) - g.dot(&na.solve(&g)))
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::maths::cov2::Cov2;
    use crate::motion::state::Wide;
    use crate::motion::state_fit;
    use rand::SeedableRng;
    use rand_chacha::ChaCha8Rng;
    use rand_distr::{Distribution, StandardNormal};

    const DYNAMICS: Dynamics = Dynamics::Free {
        speed_mas_yr: 6.0,
        accel_mas_yr2: 1e-4,
        wide: Wide {
            fraction: 0.05,
            speed_mas_yr: 12.0,
        },
    };

    /// Stars at rest with white errors of 1 mas and an offset of 2 mas that persists for 5 yr.
    fn field(offset_mas: f64) -> Vec<Course> {
        let mut rng = ChaCha8Rng::seed_from_u64(7);
        let mut normal = move || -> f64 { StandardNormal.sample(&mut rng) };
        (0..90)
            .filter_map(|k| {
                let keep = (-0.5_f64 / 5.0).exp();
                let mut offset = [offset_mas * normal(), offset_mas * normal()];
                let obs: Vec<Obs> = (0..40)
                    .map(|i| {
                        for o in &mut offset {
                            *o = keep * *o + (1.0 - keep * keep).sqrt() * offset_mas * normal();
                        }
                        Obs {
                            t_yr: 2000.0 + 0.5 * f64::from(i),
                            x_mas: offset[0] + normal(),
                            y_mas: offset[1] + normal(),
                            cov: Cov2::round(1.0),
                        }
                    })
                    .collect();
                let fit = state_fit::fit(&DYNAMICS, &obs, 2010.0, &P6::zeros(), 20)?;
                Some(Course {
                    fit,
                    obs,
                    mag: 14.0 + 0.02 * f64::from(k),
                })
            })
            .collect()
    }

    /// Share of places at mid-time within one stated error of the truth (zero).
    fn within_one_sigma(courses: &[Course], law: &Wander) -> f64 {
        let hits = courses.iter().flat_map(|c| {
            let f = law.restate(&DYNAMICS, &c.fit, &c.obs, c.mag);
            [0, 1].map(|k| f64::from(u8::from(f.p[k].abs() < f.cov[(k, k)].sqrt())))
        });
        hits.sum::<f64>() / (2 * courses.len()) as f64
    }

    #[test]
    fn offsets_that_persist_widen_the_stated_errors() {
        let courses = field(2.0);
        let law = Wander::estimate(&DYNAMICS, &courses, 2.5);
        for c in &law.classes {
            assert!((1.2..=3.2).contains(&c.sigma_mas), "{law:?}");
        }
        // A normal error is within one sigma in 68 % of cases; white errors promise far too much.
        let (white, wandering) = (
            within_one_sigma(&courses, &Wander::default()),
            within_one_sigma(&courses, &law),
        );
        assert!(white < 0.35, "{white}");
        assert!((0.52..0.80).contains(&wandering), "{wandering}");
    }

    #[test]
    fn white_errors_stay_white() {
        let courses = field(0.0);
        let law = Wander::estimate(&DYNAMICS, &courses, 2.5);
        let share = within_one_sigma(&courses, &law);
        assert!((0.58..0.80).contains(&share), "{share} {law:?}");
    }
}
