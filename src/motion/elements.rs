//! Orbit elements from a state and back, for every conic.
//!
//! Axes: x east, y north, z away from the observer. Position angle: north through east. Node:
//! position angle of the point where the star crosses the sky plane receding (vz > 0).
//! Inclination below 90 deg when the position angle grows with time. This is the convention of
//! visual-binary catalogues (common practice; Thiele-Innes constants in, e.g., Heintz 1978,
//! Double Stars, from memory).
//!
//! Degenerate cases: a face-on orbit has node 0 and the argument of pericentre is the position
//! angle of pericentre; a circular orbit has its "pericentre" at the node.

use super::kepler;
use std::f64::consts::TAU;

/// Elements of one orbit. Lengths in the unit of the state, here mas.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Elements {
    /// GM of the mass \[mas^3/yr^2\].
    pub gm_mas3_yr2: f64,
    pub pericentre_mas: f64,
    pub eccentricity: f64,
    /// 0 to 180 deg.
    pub inclination_deg: f64,
    /// 0 to 360 deg.
    pub node_deg: f64,
    /// 0 to 360 deg.
    pub arg_pericentre_deg: f64,
    /// Pericentre passage nearest the time of the state.
    pub t_pericentre_yr: f64,
    /// Semi-major axis; `None` for an orbit that is not bound.
    pub semi_major_mas: Option<f64>,
}

/// Elements as catalogues of visual binaries print them; the period stands in for the mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct BinaryElements {
    pub period_yr: f64,
    pub semi_major_mas: f64,
    pub eccentricity: f64,
    pub inclination_deg: f64,
    pub node_deg: f64,
    pub arg_pericentre_deg: f64,
    pub t_pericentre_yr: f64,
}

impl Elements {
    /// Elements of the state (r, v) relative to the mass at time `t_yr`; `r` in mas, `v` in mas/yr.
    #[must_use]
    pub fn from_state(gm: f64, r: [f64; 3], v: [f64; 3], t_yr: f64) -> Self {
        let distance = norm(r);
        let h = cross(r, v);
        let h2 = dot(h, h);
        let beta = 2.0 * gm / distance - dot(v, v);
        // Eccentricity vector: (v x h) / gm - r / |r|.
        let vh = cross(v, h);
        let e_vec = [0, 1, 2].map(|i| vh[i] / gm - r[i] / distance);
        let eccentricity = norm(e_vec);
        let pericentre = h2 / (gm * (1.0 + eccentricity));

        let h_abs = h2.sqrt();
        let in_plane = h[0].hypot(h[1]);
        let inclination = in_plane.atan2(-h[2]);
        let is_face_on = in_plane <= 1e-12 * h_abs;
        // The node: z x h, the point of the sky plane where the star recedes.
        let node_dir = if is_face_on {
            [0.0, 1.0, 0.0]
        } else {
            [-h[1] / in_plane, h[0] / in_plane, 0.0]
        };
        let across = if h_abs > 0.0 {
            cross(h, node_dir).map(|c| c / h_abs)
        } else {
            [0.0; 3]
        };
        let is_circle = eccentricity < 1e-11;
        let arg = if is_circle {
            0.0
        } else {
            dot(e_vec, across).atan2(dot(e_vec, node_dir))
        };
        let to_pericentre = if is_circle {
            // Time since the node, at constant speed.
            let phase = dot(r, across).atan2(dot(r, node_dir));
            -phase * distance * distance / h_abs
        } else {
            kepler::time_to_pericentre(gm, r, v)
        };
        Self {
            gm_mas3_yr2: gm,
            pericentre_mas: pericentre,
            eccentricity,
            inclination_deg: inclination.to_degrees(),
            node_deg: wrapped_deg(node_dir[0].atan2(node_dir[1]).to_degrees(), 360.0),
            arg_pericentre_deg: wrapped_deg(arg.to_degrees(), 360.0),
            t_pericentre_yr: t_yr + to_pericentre,
            semi_major_mas: (beta > 0.0).then(|| gm / beta),
        }
    }

    /// State at time `t_yr`.
    #[must_use]
    pub fn state_at(&self, t_yr: f64) -> ([f64; 3], [f64; 3]) {
        let (sn, cn) = self.node_deg.to_radians().sin_cos();
        let (sw, cw) = self.arg_pericentre_deg.to_radians().sin_cos();
        let (si, ci) = self.inclination_deg.to_radians().sin_cos();
        // Directions of pericentre and of the motion there, (east, north, away).
        let p = [sn * cw + cn * sw * ci, cn * cw - sn * sw * ci, sw * si];
        let q = [-sn * sw + cn * cw * ci, -cn * sw - sn * cw * ci, cw * si];
        let speed = self.pericentre_speed_mas_yr();
        kepler::propagate(
            self.gm_mas3_yr2,
            p.map(|c| c * self.pericentre_mas),
            q.map(|c| c * speed),
            t_yr - self.t_pericentre_yr,
        )
    }

    /// Orbital period; `None` for an orbit that is not bound.
    #[must_use]
    pub fn period_yr(&self) -> Option<f64> {
        self.semi_major_mas
            .map(|a| TAU * (a * a * a / self.gm_mas3_yr2).sqrt())
    }

    /// Largest distance; `None` for an orbit that is not bound.
    #[must_use]
    pub fn apocentre_mas(&self) -> Option<f64> {
        self.semi_major_mas.map(|a| 2.0 * a - self.pericentre_mas)
    }

    /// Speed at pericentre.
    #[must_use]
    pub fn pericentre_speed_mas_yr(&self) -> f64 {
        (self.gm_mas3_yr2 * (1.0 + self.eccentricity) / self.pericentre_mas).sqrt()
    }

    /// The same orbit as seen without radial velocities: of the two orbits that are mirror
    /// images in the sky plane, the one with its node in [0, 180) deg.
    #[must_use]
    pub fn with_node_folded(mut self) -> Self {
        if self.node_deg >= 180.0 {
            self.node_deg -= 180.0;
            self.arg_pericentre_deg = wrapped_deg(self.arg_pericentre_deg + 180.0, 360.0);
        }
        self
    }
}

impl From<BinaryElements> for Elements {
    fn from(b: BinaryElements) -> Self {
        let n = TAU / b.period_yr;
        Self {
            gm_mas3_yr2: n * n * b.semi_major_mas.powi(3),
            pericentre_mas: b.semi_major_mas * (1.0 - b.eccentricity),
            eccentricity: b.eccentricity,
            inclination_deg: b.inclination_deg,
            node_deg: b.node_deg,
            arg_pericentre_deg: b.arg_pericentre_deg,
            t_pericentre_yr: b.t_pericentre_yr,
            semi_major_mas: Some(b.semi_major_mas),
        }
    }
}

/// Position angle \[deg, 0 to 360\] (north through east) and separation of an offset (east, north).
#[must_use]
pub fn position_angle_separation(east: f64, north: f64) -> (f64, f64) {
    (
        wrapped_deg(east.atan2(north).to_degrees(), 360.0),
        east.hypot(north),
    )
}

/// `value` moved into [0, `turn`).
#[must_use]
pub fn wrapped_deg(value: f64, turn: f64) -> f64 {
    let w = value.rem_euclid(turn);
    if w >= turn { 0.0 } else { w }
}

fn dot(a: [f64; 3], b: [f64; 3]) -> f64 {
    a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
}

fn norm(a: [f64; 3]) -> f64 {
    dot(a, a).sqrt()
}

fn cross(a: [f64; 3], b: [f64; 3]) -> [f64; 3] {
    [
        a[1] * b[2] - a[2] * b[1],
        a[2] * b[0] - a[0] * b[2],
        a[0] * b[1] - a[1] * b[0],
    ]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn node_is_where_the_star_recedes() {
        // At its node, on the sky plane north-east of the mass, moving away and to the east.
        let e = Elements::from_state(40.0, [1.0, 1.0, 0.0], [2.0, -1.0, 3.0], 2000.0);
        assert!((e.node_deg - 45.0).abs() < 1e-9);
        // The position angle grows (motion from north-east toward east).
        assert!(e.inclination_deg < 90.0);
    }

    #[test]
    fn mirror_image_has_the_same_folded_elements() {
        let a = Elements::from_state(40.0, [1.0, 2.0, 0.7], [2.0, -1.0, -1.5], 2000.0);
        let b = Elements::from_state(40.0, [1.0, 2.0, -0.7], [2.0, -1.0, 1.5], 2000.0);
        let (a, b) = (a.with_node_folded(), b.with_node_folded());
        assert!((a.node_deg - b.node_deg).abs() < 1e-9);
        assert!((a.arg_pericentre_deg - b.arg_pericentre_deg).abs() < 1e-9);
    }

    #[test]
    fn face_on_and_circular_orbits_come_back() {
        for (r, v) in [
            ([2.0, 0.0, 0.0], [0.0, -20f64.sqrt(), 0.0]),
            ([2.0, 0.0, 0.0], [0.3, 4.0, 0.0]),
            ([0.0, 0.0, 2.0], [20f64.sqrt(), 0.0, 0.0]),
        ] {
            let e = Elements::from_state(40.0, r, v, 2000.0);
            let (p, u) = e.state_at(2000.0);
            for i in 0..3 {
                assert!(
                    (p[i] - r[i]).abs() < 1e-9 && (u[i] - v[i]).abs() < 1e-9,
                    "{e:?}"
                );
            }
        }
    }
}
