//! Start orbits from a short arc about a known mass.
//!
//! Problem: a short arc gives position, velocity and perhaps acceleration on the sky. With the
//! mass known, the acceleration gives the depth up to its sign, and one number is left: the
//! speed along the line of sight. The jerk gives it, or it is scanned.
//!
//! Depth: |a_xy| = mu R / r^3, so r = (mu R / |a_xy|)^(1/3) and |z| = sqrt(r^2 - R^2).
//! Speed along z, from the projected jerk j (derived by differentiating a = -mu r / r^3 and
//! projecting on R): z vz = r^2 / (3 R^2) [(j.R) r^3 / mu + v.R] - v.R.
//!
//! All starts have z >= 0: the mirror image (-z, -vz) looks the same on the sky.

use super::kepler;
use super::orbit_fit::State;

/// Motion on the sky at one time, relative to the mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Arc {
    pub x_mas: f64,
    pub y_mas: f64,
    pub vx_mas_yr: f64,
    pub vy_mas_yr: f64,
    /// Acceleration toward the mass (positive inward) and its standard deviation; an error
    /// larger than mu / R^2 means that nothing is known.
    pub inward_mas_yr2: f64,
    pub inward_err_mas_yr2: f64,
}

impl Arc {
    /// From an acceleration vector: the part toward the mass, with the error along it.
    #[must_use]
    pub fn new(position: [f64; 2], velocity: [f64; 2], accel: [f64; 2], accel_err: f64) -> Self {
        let projected = position[0].hypot(position[1]);
        let dot = position[0] * accel[0] + position[1] * accel[1];
        Self {
            x_mas: position[0],
            y_mas: position[1],
            vx_mas_yr: velocity[0],
            vy_mas_yr: velocity[1],
            inward_mas_yr2: -dot / projected,
            inward_err_mas_yr2: accel_err,
        }
    }

    fn projected(&self) -> f64 {
        self.x_mas.hypot(self.y_mas)
    }

    fn state(&self, z: f64, vz: f64) -> State {
        State::from([
            self.x_mas,
            self.y_mas,
            z,
            self.vx_mas_yr,
            self.vy_mas_yr,
            vz,
        ])
    }

    /// Depths allowed by the acceleration at -1, 0 and +1 standard deviations.
    #[must_use]
    pub fn depths_mas(&self, gm: f64) -> [f64; 3] {
        let r = self.projected();
        let (a, s) = (self.inward_mas_yr2, self.inward_err_mas_yr2);
        // Beyond ten projected distances the acceleration is a thousandth of its largest value.
        [a + s, a, a - s].map(|a| depth_mas(gm, r, a).unwrap_or(10.0 * r).min(10.0 * r))
    }
}

/// Speeds along the line of sight tried for each depth.
pub const SPEEDS: usize = 16;

/// |z| at which the inward acceleration on the sky is `inward` at projected distance
/// `projected`; 0 when it exceeds the largest possible, `None` when it points outward.
#[must_use]
pub fn depth_mas(gm: f64, projected: f64, inward: f64) -> Option<f64> {
    if inward <= 0.0 {
        return None;
    }
    let r2 = (gm * projected / inward).powf(2.0 / 3.0);
    Some((r2 - projected * projected).max(0.0).sqrt())
}

/// z vz from the jerk on the sky; divide by z for the speed.
#[must_use]
pub fn depth_times_speed(gm: f64, r3d: f64, xy: [f64; 2], v: [f64; 2], jerk: [f64; 2]) -> f64 {
    let rr = xy[0] * xy[0] + xy[1] * xy[1];
    let vr = v[0] * xy[0] + v[1] * xy[1];
    let jr = jerk[0] * xy[0] + jerk[1] * xy[1];
    r3d * r3d / (3.0 * rr) * (jr * r3d.powi(3) / gm + vr) - vr
}

/// Starts by scanning depth and line-of-sight speed: [`SPEEDS`] speeds over the bound range for
/// each of the three depths, or over half the sky speed either way when the motion on the sky
/// is unbound by itself. Appended to `out`.
pub fn scan(gm: f64, arc: &Arc, out: &mut Vec<State>) {
    let sky2 = arc.vx_mas_yr.powi(2) + arc.vy_mas_yr.powi(2);
    let mut last = f64::NAN;
    for z in arc.depths_mas(gm) {
        if (z - last).abs() < 1e-3 * (z + arc.projected()) {
            continue;
        }
        last = z;
        let room = 2.0 * gm / z.hypot(arc.projected()) - sky2;
        let reach = if room > 0.0 {
            room.sqrt()
        } else {
            0.5 * sky2.sqrt()
        };
        for k in 0..SPEEDS {
            let share = (2.0 * k as f64 + 1.0) / SPEEDS as f64 - 1.0;
            out.push(arc.state(z, share * reach));
        }
    }
}

/// The start that depth and jerk give directly; `None` when the depth is too close to zero to
/// tell the speed, or the result is not bound.
#[must_use]
pub fn from_jerk(gm: f64, arc: &Arc, jerk: [f64; 2]) -> Option<State> {
    let projected = arc.projected();
    let z = depth_mas(gm, projected, arc.inward_mas_yr2)?;
    if z < 0.05 * projected {
        return None;
    }
    let r3d = z.hypot(projected);
    let (xy, v) = ([arc.x_mas, arc.y_mas], [arc.vx_mas_yr, arc.vy_mas_yr]);
    let vz = depth_times_speed(gm, r3d, xy, v, jerk) / z;
    let speed2 = v[0] * v[0] + v[1] * v[1] + vz * vz;
    (speed2 < 2.0 * gm / r3d).then(|| arc.state(z, vz))
}

/// The same orbit's state at another time.
#[must_use]
pub fn moved(gm: f64, state: &State, dt_yr: f64) -> State {
    let (r, v) = super::orbit_fit::split(state);
    let (p, u) = kepler::propagate(gm, r, v, dt_yr);
    State::from([p[0], p[1], p[2], u[0], u[1], u[2]])
}

#[cfg(test)]
mod tests {
    use super::*;

    const GM: f64 = 2.868e5;

    #[test]
    fn jerk_formula_finds_the_speed() {
        // Derivatives of the two-body acceleration, by definition.
        let (r, v) = ([80.0, -45.0, 60.0], [20.0, 30.0, -25.0]);
        let d = (80f64.powi(2) + 45f64.powi(2) + 60f64.powi(2)).sqrt();
        let rv = 80.0 * 20.0 - 45.0 * 30.0 - 60.0 * 25.0;
        let accel = [0, 1].map(|i| -GM * r[i] / d.powi(3));
        let jerk = [0, 1].map(|i| -GM * (v[i] / d.powi(3) - 3.0 * rv * r[i] / d.powi(5)));
        let arc = Arc::new([r[0], r[1]], [v[0], v[1]], accel, 0.0);
        let start = from_jerk(GM, &arc, jerk).unwrap();
        assert!(
            (start[2] - r[2]).abs() < 1e-9 && (start[5] - v[2]).abs() < 1e-9,
            "{start}"
        );
    }

    #[test]
    fn acceleration_beyond_the_largest_means_the_sky_plane() {
        assert_eq!(depth_mas(GM, 100.0, GM / 1e4 * 1.1), Some(0.0));
        assert_eq!(depth_mas(GM, 100.0, -1.0), None);
    }

    #[test]
    fn scan_covers_the_bound_range_without_repeats() {
        let arc = Arc::new([100.0, 0.0], [10.0, 20.0], [-20.0, 0.0], 2.0);
        let mut starts = Vec::new();
        scan(GM, &arc, &mut starts);
        assert_eq!(starts.len(), 3 * SPEEDS);
        for s in &starts {
            let r = (s[0] * s[0] + s[2] * s[2]).sqrt();
            assert!(s[3] * s[3] + s[4] * s[4] + s[5] * s[5] < 2.0 * GM / r && s[2] >= 0.0);
        }
    }
}
