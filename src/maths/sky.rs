//! Gnomonic (tangent-plane) projection between the sphere and the field.
//!
//! Standard coordinates as in Green, Spherical Astronomy (1985), section 13.2: x toward east, y
//! toward north, measured on the plane that touches the sphere at the field's origin. A point 90
//! degrees or more from the origin has no image.

use super::units::MAS_PER_RAD;

/// Tangent plane at an origin.
#[derive(Clone, Copy, Debug)]
pub struct TangentPlane {
    ra0_rad: f64,
    sin_dec0: f64,
    cos_dec0: f64,
}

impl TangentPlane {
    /// Plane that touches the sphere at a right ascension and declination.
    #[must_use]
    pub fn new(ra_deg: f64, dec_deg: f64) -> Self {
        let (sin_dec0, cos_dec0) = dec_deg.to_radians().sin_cos();
        Self {
            ra0_rad: ra_deg.to_radians(),
            sin_dec0,
            cos_dec0,
        }
    }

    /// Position \[mas\] of a direction; `None` when it is 90 degrees or more away.
    #[must_use]
    pub fn project(&self, ra_deg: f64, dec_deg: f64) -> Option<[f64; 2]> {
        self.project_with_jacobian(ra_deg, dec_deg).map(|(p, _)| p)
    }

    /// Position \[mas\], and the partial derivatives `[dx/de, dx/dn, dy/de, dy/dn]` with respect
    /// to small great-circle steps toward east and north (same unit on both sides).
    #[must_use]
    pub fn project_with_jacobian(&self, ra_deg: f64, dec_deg: f64) -> Option<([f64; 2], [f64; 4])> {
        let (sa, ca) = (ra_deg.to_radians() - self.ra0_rad).sin_cos();
        let (sd, cd) = dec_deg.to_radians().sin_cos();
        let (s0, c0) = (self.sin_dec0, self.cos_dec0);
        let den = s0 * sd + c0 * cd * ca;
        if den <= 1e-9 {
            return None;
        }
        let (num_x, num_y) = (cd * sa, c0 * sd - s0 * cd * ca);
        let (x, y) = (num_x / den, num_y / den);
        // Derivatives of numerators and denominator along east (cos dec divided out) and north.
        let (den_e, den_n) = (-c0 * sa, s0 * cd - c0 * sd * ca);
        let jacobian = [
            (ca - x * den_e) / den,
            (-sd * sa - x * den_n) / den,
            (s0 * sa - y * den_e) / den,
            (c0 * cd + s0 * sd * ca - y * den_n) / den,
        ];
        Some(([x * MAS_PER_RAD, y * MAS_PER_RAD], jacobian))
    }

    /// Direction (right ascension in 0..360, declination) \[deg\] of a position \[mas\].
    #[must_use]
    pub fn unproject(&self, x_mas: f64, y_mas: f64) -> [f64; 2] {
        let (x, y) = (x_mas / MAS_PER_RAD, y_mas / MAS_PER_RAD);
        let across = self.cos_dec0 - y * self.sin_dec0;
        let ra = self.ra0_rad + x.atan2(across);
        let dec = (self.sin_dec0 + y * self.cos_dec0).atan2(x.hypot(across));
        [ra.to_degrees().rem_euclid(360.0), dec.to_degrees()]
    }
}

/// Matrix `[a, b, c, d]` that takes list coordinates (u, v) to x = a u + b v toward east and
/// y = c u + d v toward north: +v lies at position angle `angle_deg` (north through east), +u at
/// 90 degrees more, or less when `east_left`.
#[must_use]
pub fn plane_axes(scale_mas: f64, angle_deg: f64, east_left: bool) -> [f64; 4] {
    let (s, c) = angle_deg.to_radians().sin_cos();
    let u = if east_left { -scale_mas } else { scale_mas };
    [u * c, scale_mas * s, -u * s, scale_mas * c]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn plane_axes_point_where_the_format_says() {
        // +v at 90 degrees is east; +u at 180 degrees is south.
        let m = plane_axes(2.0, 90.0, false);
        let at = |u: f64, v: f64| [m[0] * u + m[1] * v, m[2] * u + m[3] * v];
        let close = |a: [f64; 2], b: [f64; 2]| (a[0] - b[0]).hypot(a[1] - b[1]) < 1e-12;
        assert!(close(at(0.0, 1.0), [2.0, 0.0]) && close(at(1.0, 0.0), [0.0, -2.0]));
        // An ordinary direct image: north up, east left.
        let m = plane_axes(1.0, 0.0, true);
        assert_eq!([m[0], m[3]], [-1.0, 1.0]);
    }

    /// ERFA test suite `t_erfa_c.c` (BSD-type licence; derived from IAU SOFA), `t_tpxes`.
    #[test]
    fn projection_agrees_with_erfa() {
        let plane = TangentPlane::new(2.3_f64.to_degrees(), 1.5_f64.to_degrees());
        let [x, y] = plane
            .project(1.3_f64.to_degrees(), 1.55_f64.to_degrees())
            .unwrap();
        assert!((x / MAS_PER_RAD + 0.017_532_009_832_369_806).abs() < 1e-15);
        assert!((y / MAS_PER_RAD - 0.059_629_400_057_787_13).abs() < 1e-15);
    }

    /// ERFA test suite, `t_tpsts`.
    #[test]
    fn inverse_agrees_with_erfa() {
        let plane = TangentPlane::new(2.3_f64.to_degrees(), 1.5_f64.to_degrees());
        let [ra, dec] = plane.unproject(-0.03 * MAS_PER_RAD, 0.07 * MAS_PER_RAD);
        assert!((ra.to_radians() - 0.759_612_716_735_963).abs() < 1e-14);
        assert!((dec.to_radians() - 1.540_864_645_109_263).abs() < 1e-13);
    }

    #[test]
    fn jacobian_equals_finite_differences() {
        let plane = TangentPlane::new(197.15, -41.02);
        let (ra, dec) = (196.4, -40.3);
        let (_, j) = plane.project_with_jacobian(ra, dec).unwrap();
        let h = 1e-4;
        let step = |dra: f64, ddec: f64| plane.project(ra + dra, dec + ddec).unwrap();
        let he = h / f64::cos(f64::to_radians(dec));
        let (e1, e0) = (step(he, 0.0), step(-he, 0.0));
        let (n1, n0) = (step(0.0, h), step(0.0, -h));
        let scale = 2.0 * h * super::super::units::MAS_PER_DEG;
        let by_steps = [
            (e1[0] - e0[0]) / scale,
            (n1[0] - n0[0]) / scale,
            (e1[1] - e0[1]) / scale,
            (n1[1] - n0[1]) / scale,
        ];
        for k in 0..4 {
            assert!((j[k] - by_steps[k]).abs() < 1e-8, "{k}: {j:?} {by_steps:?}");
        }
    }

    #[test]
    fn far_side_has_no_image() {
        assert!(TangentPlane::new(10.0, 0.0).project(101.0, 0.0).is_none());
    }
}
