//! Two-body propagation that never fails, with analytic derivatives.
//!
//! Method: universal variables. With `s` defined by dt = r ds, `beta = 2 gm / r - v^2` and the
//! functions G_n(beta, s) = s^n c_n(beta s^2) (c_n: Stumpff), Kepler's equation reads
//! `t(s) = r0 s + eta G_2 + zeta G_3` for every kind of conic, with `eta = r.v` and
//! `zeta = gm - beta r0`. `t` grows with `s` (its slope is the distance), so one bracket holds
//! the root; a fourth-order step that leaves the bracket is replaced by bisection, which is why
//! the search cannot fail. Close to the root the G_n are moved by their addition theorem instead
//! of being evaluated anew. Neither the semi-major axis nor the eccentricity is ever formed, so
//! nothing happens at the parabola. Whole revolutions are taken off first.
//!
//! Derivatives follow from dG_n/dbeta = (n G_{n+2} - s G_{n+1}) / 2.
//!
//! Sources: Danby 1988, Fundamentals of Celestial Mechanics, ch. 6 (universal variables,
//! fourth-order step; from memory); Shepperd 1985, Cel. Mech. 35, 129 (transition matrix; from
//! memory); Wisdom & Hernandez 2015, arXiv:1508.02699 (G functions).
//!
//! Limits: a path through the mass itself is followed through a bounce; close to a parabola the
//! phase after many revolutions is as uncertain as the rounding of the input makes it. A start
//! at zero distance, or with a number that is not finite, gives a result that is not finite.

/// State after a step, relative to the mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Propagated {
    pub r: [f64; 3],
    pub v: [f64; 3],
}

/// State after a step, with the derivatives of the position on the sky.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SkyPartials {
    pub r: [f64; 3],
    pub v: [f64; 3],
    /// d(x, y) / d(x0, y0, z0, vx0, vy0, vz0).
    pub d_state: [[f64; 6]; 2],
    /// d(x, y) / d(gm).
    pub d_gm: [f64; 2],
}

/// State after a step, with the full state-transition matrix.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Transition {
    pub r: [f64; 3],
    pub v: [f64; 3],
    /// d(x, y, z, vx, vy, vz) / d(x0, y0, z0, vx0, vy0, vz0).
    pub d_state: [[f64; 6]; 6],
    /// d(x, y, z, vx, vy, vz) / d(gm).
    pub d_gm: [f64; 6],
}

/// Position and velocity after `dt`; `gm`, lengths and times in any one consistent set of units
/// (mas^3/yr^2, mas, yr).
#[must_use]
pub fn propagate(gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> ([f64; 3], [f64; 3]) {
    let conic = Conic::new(gm, r0, v0);
    let root = conic.solve(dt);
    let p = conic.state(&root, r0, v0);
    (p.r, p.v)
}

/// State after `dt` and the derivatives of (x, y) by the start state and by `gm`: all that a fit
/// to positions needs.
#[must_use]
pub fn propagate_sky(gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> SkyPartials {
    let conic = Conic::new(gm, r0, v0);
    let root = conic.solve(dt);
    let p = conic.state(&root, r0, v0);
    let var = Variations::new(&conic, &root);
    let (f, g) = conic.f_g(&root);
    let (df, dg) = var.of_f_g(&conic, &root);
    let mut d_state = [[0.0; 6]; 2];
    for (i, row) in d_state.iter_mut().enumerate() {
        gradient_row(row, i, (f, g), &df, &dg, r0, v0);
    }
    let d_gm = [df.gm * r0[0] + dg.gm * v0[0], df.gm * r0[1] + dg.gm * v0[1]];
    SkyPartials {
        r: p.r,
        v: p.v,
        d_state,
        d_gm,
    }
}

/// State after `dt` with the full 6x6 state-transition matrix and the derivatives by `gm`.
#[must_use]
pub fn propagate_with_stm(gm: f64, r0: [f64; 3], v0: [f64; 3], dt: f64) -> Transition {
    let conic = Conic::new(gm, r0, v0);
    let root = conic.solve(dt);
    let p = conic.state(&root, r0, v0);
    let var = Variations::new(&conic, &root);
    let (f, g) = conic.f_g(&root);
    let (f_dot, g_dot) = conic.f_g_dot(&root);
    let (df, dg) = var.of_f_g(&conic, &root);
    let (df_dot, dg_dot) = var.of_f_g_dot(&conic, &root);
    let mut d_state = [[0.0; 6]; 6];
    let mut d_gm = [0.0; 6];
    for i in 0..3 {
        gradient_row(&mut d_state[i], i, (f, g), &df, &dg, r0, v0);
        gradient_row(
            &mut d_state[i + 3],
            i,
            (f_dot, g_dot),
            &df_dot,
            &dg_dot,
            r0,
            v0,
        );
        d_gm[i] = df.gm * r0[i] + dg.gm * v0[i];
        d_gm[i + 3] = df_dot.gm * r0[i] + dg_dot.gm * v0[i];
    }
    Transition {
        r: p.r,
        v: p.v,
        d_state,
        d_gm,
    }
}

/// Time from a state to the nearest pericentre passage (negative: it lies in the past), for any
/// conic. A circular orbit counts as being at pericentre.
#[must_use]
pub fn time_to_pericentre(gm: f64, r0: [f64; 3], v0: [f64; 3]) -> f64 {
    let c = Conic::new(gm, r0, v0);
    // r.v vanishes there: eta G_0 + zeta G_1 = 0.
    let w = c.beta * (c.eta / c.zeta) * (c.eta / c.zeta);
    let s = if c.zeta > 0.0 && w.abs() < 1e-3 {
        -(c.eta / c.zeta) * (1.0 - w * (1.0 / 3.0 - w * (1.0 / 5.0 - w * (1.0 / 7.0 - w / 9.0))))
    } else if c.beta > 0.0 {
        -(c.eta * c.root_beta).atan2(c.zeta) / c.root_beta
    } else {
        -(c.eta * c.root_beta / c.zeta).atanh() / c.root_beta
    };
    let g = c.g_at(s);
    c.r0 * s + c.eta * g.g2 + c.zeta * g.g3
}

/// Eccentric anomaly \[rad\] of an ellipse, `0 <= e < 1`: solves E - e sin E = M for any M.
#[must_use]
pub fn eccentric_anomaly(e: f64, mean_anomaly: f64) -> f64 {
    let root = Conic::at_pericentre(e, 1.0).solve(mean_anomaly);
    root.g.s + root.revolutions * std::f64::consts::TAU
}

/// Hyperbolic anomaly, `e > 1`: solves e sinh H - H = M.
#[must_use]
pub fn hyperbolic_anomaly(e: f64, mean_anomaly: f64) -> f64 {
    Conic::at_pericentre(e, -1.0).solve(mean_anomaly).g.s
}

/// Scalars of the start state that fix the orbit's shape and phase.
struct Conic {
    gm: f64,
    /// Distance at the start.
    r0: f64,
    /// r . v at the start.
    eta: f64,
    /// 2 gm / r - v^2: positive for a bound orbit.
    beta: f64,
    /// gm - beta r0.
    zeta: f64,
    /// Square root of |beta|.
    root_beta: f64,
}

/// G functions at one value of the universal anomaly.
#[derive(Clone, Copy)]
struct GFunctions {
    s: f64,
    g0: f64,
    g1: f64,
    g2: f64,
    g3: f64,
}

/// The root of Kepler's equation.
struct Root {
    g: GFunctions,
    /// Distance there.
    r: f64,
    /// Whole revolutions taken off the time, and the period (0 when none were).
    revolutions: f64,
    period: f64,
}

/// Fourth-order steps and bisections allowed; even pure bisection ends earlier.
const MAX_STEPS: usize = 200;
/// Below this |beta s^2| the G functions come from their series.
const SERIES_LIMIT: f64 = 1.0;
/// Below this |beta ds^2| the addition theorem with a short series moves the G functions.
const SHIFT_LIMIT: f64 = 1e-2;
/// Largest argument of the hyperbolic functions.
const MAX_HYPERBOLIC: f64 = 600.0;

impl Conic {
    #[inline]
    fn new(gm: f64, r: [f64; 3], v: [f64; 3]) -> Self {
        let r0 = dot(r, r).sqrt();
        let beta = 2.0 * gm / r0 - dot(v, v);
        Self {
            gm,
            r0,
            eta: dot(r, v),
            beta,
            zeta: gm - beta * r0,
            root_beta: beta.abs().sqrt(),
        }
    }

    /// At pericentre, with unit gm and unit semi-major axis (`beta` = 1 or -1): s is the
    /// eccentric or hyperbolic anomaly there.
    fn at_pericentre(e: f64, beta: f64) -> Self {
        Self {
            gm: 1.0,
            r0: beta * (1.0 - e),
            eta: 0.0,
            beta,
            zeta: e,
            root_beta: 1.0,
        }
    }

    /// Solves t(s) = dt.
    #[inline]
    fn solve(&self, dt_full: f64) -> Root {
        let (mut dt, mut revolutions, mut period) = (dt_full, 0.0, 0.0);
        let mut far = f64::INFINITY;
        if self.beta > 0.0 {
            let turn = std::f64::consts::TAU / self.root_beta;
            far = turn * (1.0 + 1e-9);
            let p = turn * self.gm / self.beta;
            if dt.abs() > 0.5 * p {
                revolutions = (dt / p).round();
                period = p;
                dt -= revolutions * p;
            }
        } else if self.beta < 0.0 {
            far = MAX_HYPERBOLIC / self.root_beta;
        }
        let (mut low, mut high) = if dt < 0.0 { (-far, 0.0) } else { (0.0, far) };
        let guess = self.guess(dt);
        let mut g = self.g_at(if guess > low && guess < high {
            guess
        } else if far.is_finite() {
            0.5 * (low + high)
        } else {
            dt / self.r0
        });
        let mut r = self.distance(&g);
        for _ in 0..MAX_STEPS {
            let (t1, t2, t3) = (self.r0 * g.s, self.eta * g.g2, self.zeta * g.g3);
            let miss = (t1 + t2 + t3) - dt;
            if miss > 0.0 {
                high = g.s;
            } else {
                low = g.s;
            }
            let slope1 = self.eta * g.g0 + self.zeta * g.g1;
            let slope2 = self.zeta * g.g0 - self.beta * self.eta * g.g1;
            let newton = -miss / r;
            let noise = 2.0 * f64::EPSILON * (t1.abs() + t2.abs() + t3.abs() + dt.abs());
            if miss.abs() <= noise || newton.abs() <= 2.0 * f64::EPSILON * g.s.abs() {
                if newton.abs() < 1e-6 * g.s.abs() {
                    g = self.shifted(&g, newton);
                    r = self.distance(&g);
                }
                break;
            }
            let ds = if (newton * slope1).abs() < 0.5 * r {
                fourth_order_step(miss, newton, r, slope1, slope2)
            } else {
                laguerre_step(miss, r, slope1)
            };
            let s = g.s + ds;
            if s > low && s < high {
                let close = ds.abs() < 0.25 * s.abs();
                g = if close && (self.beta * ds * ds).abs() < SHIFT_LIMIT {
                    self.shifted(&g, ds)
                } else {
                    self.g_at(s)
                };
            } else {
                let next = if low.is_infinite() {
                    2.0 * high - f64::MIN_POSITIVE
                } else if high.is_infinite() {
                    2.0 * low + f64::MIN_POSITIVE
                } else {
                    0.5 * (low + high)
                };
                if next <= low || next >= high {
                    break;
                }
                g = self.g_at(next);
            }
            r = self.distance(&g);
        }
        Root {
            g,
            r,
            revolutions,
            period,
        }
    }

    /// First value of s. Near the start: one Laguerre step of degree 5 from s = 0, where all G
    /// are known. Farther out: an ellipse's eccentric anomaly to second order in e, or the
    /// leading exponential of a hyperbola.
    #[inline]
    fn guess(&self, dt: f64) -> f64 {
        let near = laguerre_step(-dt, self.r0, self.eta);
        let z = self.beta * near * near;
        if z > 0.7 {
            let k = self.root_beta;
            let (e_cos, e_sin) = (self.zeta / self.gm, self.eta * k / self.gm);
            let y = k * self.beta / self.gm * dt - e_sin;
            let (sine, cosine) = y.sin_cos();
            let p = e_cos * sine + e_sin * cosine;
            let q = e_cos * cosine - e_sin * sine;
            let e2 = e_cos * e_cos + e_sin * e_sin;
            (y + p / (1.0 - 2.0 * q + e2).sqrt()) / k
        } else if z < -4.0 {
            let k = self.root_beta;
            let sign = dt.signum();
            let a = self.zeta + sign * self.eta * k;
            let t = (dt.abs() * k - sign * self.eta / self.beta * k) * k * k;
            let x = (2.0 * t / a).ln();
            let x = (2.0 * (t + self.gm * x) / a).ln();
            if x > 1.0 { sign * x / k } else { near }
        } else {
            near
        }
    }

    #[inline]
    fn distance(&self, g: &GFunctions) -> f64 {
        self.r0 + self.eta * g.g1 + self.zeta * g.g2
    }

    #[inline]
    fn g_at(&self, s: f64) -> GFunctions {
        let z = self.beta * s * s;
        if z.abs() < SERIES_LIMIT {
            let (c4, c5) = stumpff_4_5(z);
            let (c2, c3) = (0.5 - z * c4, 1.0 / 6.0 - z * c5);
            return GFunctions {
                s,
                g0: 1.0 - z * c2,
                g1: s * (1.0 - z * c3),
                g2: s * s * c2,
                g3: s * s * s * c3,
            };
        }
        // Half angles keep G_2 free of cancellation.
        let half = 0.5 * self.root_beta * s;
        let (sine, cosine) = if z > 0.0 {
            half.sin_cos()
        } else {
            (half.sinh(), half.cosh())
        };
        let g1 = 2.0 * sine * cosine / self.root_beta;
        let g2 = 2.0 * sine * sine / self.beta.abs();
        GFunctions {
            s,
            g0: 1.0 - self.beta * g2,
            g1,
            g2,
            g3: (s - g1) / self.beta,
        }
    }

    /// G functions at `s + ds` by their addition theorem.
    #[inline]
    fn shifted(&self, g: &GFunctions, ds: f64) -> GFunctions {
        let z = self.beta * ds * ds;
        let d3 = ds
            * ds
            * ds
            * (1.0 / 6.0 - z * (1.0 / 120.0 - z * (1.0 / 5040.0 - z * (1.0 / 362_880.0))));
        let d2 = ds * ds * (0.5 - z * (1.0 / 24.0 - z * (1.0 / 720.0 - z * (1.0 / 40_320.0))));
        let d1 = ds - self.beta * d3;
        let d0 = 1.0 - self.beta * d2;
        GFunctions {
            s: g.s + ds,
            g0: g.g0 * d0 - self.beta * g.g1 * d1,
            g1: g.g1 * d0 + g.g0 * d1,
            g2: g.g2 + g.g1 * d1 + g.g0 * d2,
            g3: g.g3 + g.g2 * d1 + g.g1 * d2 + d3,
        }
    }

    /// Lagrange's f and g.
    #[inline]
    fn f_g(&self, root: &Root) -> (f64, f64) {
        let g = &root.g;
        (
            1.0 - self.gm * g.g2 / self.r0,
            self.r0 * g.g1 + self.eta * g.g2,
        )
    }

    /// Time derivatives of f and g.
    #[inline]
    fn f_g_dot(&self, root: &Root) -> (f64, f64) {
        let g = &root.g;
        (
            -self.gm * g.g1 / (self.r0 * root.r),
            1.0 - self.gm * g.g2 / root.r,
        )
    }

    #[inline]
    fn state(&self, root: &Root, r0: [f64; 3], v0: [f64; 3]) -> Propagated {
        let (f, g) = self.f_g(root);
        let (f_dot, g_dot) = self.f_g_dot(root);
        Propagated {
            r: [0, 1, 2].map(|i| f * r0[i] + g * v0[i]),
            v: [0, 1, 2].map(|i| f_dot * r0[i] + g_dot * v0[i]),
        }
    }
}

/// Danby's step: Newton, then Halley, then with the third derivative.
#[inline]
fn fourth_order_step(miss: f64, newton: f64, slope: f64, slope1: f64, slope2: f64) -> f64 {
    let halley = -miss / (slope + 0.5 * newton * slope1);
    -miss / (slope + 0.5 * halley * slope1 + halley * halley * slope2 / 6.0)
}

/// Laguerre's step of degree 5, after Conway 1986 (Cel. Mech. 39, 199; from memory): sure-footed
/// far from the root.
#[inline]
fn laguerre_step(miss: f64, slope: f64, slope1: f64) -> f64 {
    let root = (16.0 * slope * slope - 20.0 * miss * slope1).abs().sqrt();
    -5.0 * miss / (slope + root)
}

/// Stumpff functions c_4 and c_5 by their series, good to rounding for |z| <= 1.
#[inline]
fn stumpff_4_5(z: f64) -> (f64, f64) {
    const C4: [f64; 8] = inverse_factorials(4);
    const C5: [f64; 8] = inverse_factorials(5);
    let (mut c4, mut c5) = (C4[7], C5[7]);
    for k in (0..7).rev() {
        c4 = C4[k] - z * c4;
        c5 = C5[k] - z * c5;
    }
    (c4, c5)
}

/// 1 / n!, 1 / (n + 2)!, 1 / (n + 4)!, ...
const fn inverse_factorials(n: u32) -> [f64; 8] {
    let mut out = [0.0; 8];
    let (mut value, mut at, mut k) = (1.0, 0, 0);
    while k < 8 {
        while at < n + 2 * k {
            at += 1;
            value /= at as f64;
        }
        out[k as usize] = value;
        k += 1;
    }
    out
}

/// How a scalar changes with the start: through r0 (length), eta, beta and gm, folded into
/// coefficients of the start vectors.
#[derive(Clone, Copy)]
struct Gradient {
    /// d/d(position) = `r_r` r0 + `r_v` v0.
    r_r: f64,
    r_v: f64,
    /// d/d(velocity) = `r_v` r0 + `v_v` v0 (eta alone mixes the two, symmetrically).
    v_v: f64,
    /// d/d(gm).
    gm: f64,
}

/// Quantities shared by all derivatives.
struct Variations {
    /// dG_1/dbeta, dG_2/dbeta at fixed s.
    g1_beta: f64,
    g2_beta: f64,
    /// ds = `s_r0` dr0 + `s_eta` deta + `s_beta` dbeta + `s_gm` dgm at fixed time.
    s_r0: f64,
    s_eta: f64,
    s_beta: f64,
    s_gm: f64,
}

impl Variations {
    #[inline]
    fn new(c: &Conic, root: &Root) -> Self {
        let g = &root.g;
        let s = g.s;
        let z = c.beta * s * s;
        let (g4, g5) = if z.abs() < SERIES_LIMIT {
            let (c4, c5) = stumpff_4_5(z);
            let s4 = (s * s) * (s * s);
            (s4 * c4, s4 * s * c5)
        } else {
            let inverse = 1.0 / c.beta;
            (
                (0.5 * s * s - g.g2) * inverse,
                (s * s * s / 6.0 - g.g3) * inverse,
            )
        };
        let g1_beta = 0.5 * (g.g3 - s * g.g2);
        let g2_beta = g4 - 0.5 * s * g.g3;
        let g3_beta = 0.5 * (3.0 * g5 - s * g4);
        let mut t_beta = c.r0 * g1_beta + c.eta * g2_beta + c.gm * g3_beta;
        let mut t_gm = g.g3;
        if root.revolutions != 0.0 {
            // The time taken off, n P, depends on beta and gm as well: P ~ gm beta^-3/2.
            let off = root.revolutions * root.period;
            t_beta -= 1.5 * off / c.beta;
            t_gm += off / c.gm;
        }
        let inverse = -1.0 / root.r;
        Self {
            g1_beta,
            g2_beta,
            s_r0: g.g1 * inverse,
            s_eta: g.g2 * inverse,
            s_beta: t_beta * inverse,
            s_gm: t_gm * inverse,
        }
    }

    /// Adds the way a scalar depends on the start through s, and expresses dr0, deta, dbeta by
    /// the start vectors.
    #[inline]
    fn fold(
        &self,
        c: &Conic,
        by_s: f64,
        by_r0: f64,
        by_eta: f64,
        by_beta: f64,
        by_gm: f64,
    ) -> Gradient {
        let d_r0 = by_r0 + by_s * self.s_r0;
        let d_eta = by_eta + by_s * self.s_eta;
        let d_beta = by_beta + by_s * self.s_beta;
        let d_gm = by_gm + by_s * self.s_gm;
        let inverse = 1.0 / c.r0;
        // dr0 = r.dr / r0; deta = v.dr + r.dv; dbeta = -2 gm r.dr / r0^3 - 2 v.dv + 2 dgm / r0.
        Gradient {
            r_r: (d_r0 - 2.0 * c.gm * d_beta * inverse * inverse) * inverse,
            r_v: d_eta,
            v_v: -2.0 * d_beta,
            gm: d_gm + 2.0 * d_beta * inverse,
        }
    }

    #[inline]
    fn of_f_g(&self, c: &Conic, root: &Root) -> (Gradient, Gradient) {
        let g = &root.g;
        let m = c.gm / c.r0;
        let df = self.fold(
            c,
            -m * g.g1,
            m * g.g2 / c.r0,
            0.0,
            -m * self.g2_beta,
            -g.g2 / c.r0,
        );
        let dg = self.fold(
            c,
            c.r0 * g.g0 + c.eta * g.g1,
            g.g1,
            g.g2,
            c.r0 * self.g1_beta + c.eta * self.g2_beta,
            0.0,
        );
        (df, dg)
    }

    #[inline]
    fn of_f_g_dot(&self, c: &Conic, root: &Root) -> (Gradient, Gradient) {
        let g = &root.g;
        let r = root.r;
        let g0_beta = -0.5 * g.s * g.g1;
        // r = r0 G_0 + eta G_1 + gm G_2.
        let r_s = c.eta * g.g0 + c.zeta * g.g1;
        let r_beta = c.r0 * g0_beta + c.eta * self.g1_beta + c.gm * self.g2_beta;
        // f_dot = -gm G_1 / (r0 r), g_dot = 1 - gm G_2 / r.
        let a = c.gm / (c.r0 * r);
        let (b, h) = (a * g.g1 / r, c.gm * g.g2 / (r * r));
        let df_dot = self.fold(
            c,
            -a * g.g0 + b * r_s,
            a * g.g1 / c.r0 + b * g.g0,
            b * g.g1,
            -a * self.g1_beta + b * r_beta,
            -g.g1 / (c.r0 * r) + b * g.g2,
        );
        let k = c.gm / r;
        let dg_dot = self.fold(
            c,
            -k * g.g1 + h * r_s,
            h * g.g0,
            h * g.g1,
            -k * self.g2_beta + h * r_beta,
            -g.g2 / r + h * g.g2,
        );
        (df_dot, dg_dot)
    }
}

/// Derivatives of component `i` of `f r0 + g v0` by the six start values.
#[inline]
fn gradient_row(
    row: &mut [f64; 6],
    i: usize,
    (f, g): (f64, f64),
    df: &Gradient,
    dg: &Gradient,
    r0: [f64; 3],
    v0: [f64; 3],
) {
    let (x, u) = (r0[i], v0[i]);
    let (rr, rv, vv) = (
        x * df.r_r + u * dg.r_r,
        x * df.r_v + u * dg.r_v,
        x * df.v_v + u * dg.v_v,
    );
    for j in 0..3 {
        row[j] = rr * r0[j] + rv * v0[j];
        row[j + 3] = rv * r0[j] + vv * v0[j];
    }
    row[i] += f;
    row[i + 3] += g;
}

#[inline]
fn dot(a: [f64; 3], b: [f64; 3]) -> f64 {
    a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn circle_returns_after_many_turns() {
        // A circular orbit: position after n periods is the start (definition of the period).
        let (gm, r) = (39.0_f64, 2.0_f64);
        let v = (gm / r).sqrt();
        let period = std::f64::consts::TAU * (r * r * r / gm).sqrt();
        let (p, u) = propagate(gm, [r, 0.0, 0.0], [0.0, v, 0.0], 7.25 * period);
        assert!(p[0].abs() < 1e-12 && (p[1] - r).abs() < 1e-12);
        assert!((u[0] + v).abs() < 1e-12 && u[1].abs() < 1e-12);
    }

    #[test]
    fn parabola_follows_barker() {
        // Barker's equation: t = sqrt(2 q^3 / gm) (D + D^3 / 3), D = tan(true anomaly / 2).
        let (gm, q) = (39.0_f64, 1.5_f64);
        let d = 1.7_f64;
        let t = (2.0 * q * q * q / gm).sqrt() * (d + d * d * d / 3.0);
        let (p, _) = propagate(gm, [q, 0.0, 0.0], [0.0, (2.0 * gm / q).sqrt(), 0.0], t);
        assert!((p[0] - q * (1.0 - d * d)).abs() < 1e-11 && (p[1] - 2.0 * q * d).abs() < 1e-11);
    }

    #[test]
    fn without_a_mass_the_path_is_straight() {
        let (p, u) = propagate(0.0, [1.0, 2.0, 3.0], [0.1, -0.2, 0.3], 10.0);
        assert!((p[0] - 2.0).abs() < 1e-12 && p[1].abs() < 1e-12 && (p[2] - 6.0).abs() < 1e-12);
        assert!((u[1] + 0.2).abs() < 1e-12);
    }
}
