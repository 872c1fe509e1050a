//! Predicted paths of tracks that follow an orbit, as points close enough to draw.
//!
//! Linear and accelerated motions are evaluated by the page itself; an orbit is sampled here.
//! Steps are halved until the middle of each lies within a tolerance of the chord, so that a
//! fast pericentre gets its points and the slow rest does not.

use serde::Serialize;

/// Largest distance between path and chord \[mas\].
const TOLERANCE_MAS: f64 = 0.25;
/// Starting steps; an orbit turning more often than this over the campaign is not expected.
const FIRST_STEPS: usize = 24;
/// Halvings of one starting step.
const MAX_DEPTH: usize = 9;

/// Points of a predicted path.
#[derive(Clone, Debug, Default, Serialize)]
pub(super) struct Path {
    pub t_yr: Vec<f64>,
    pub x_mas: Vec<f64>,
    pub y_mas: Vec<f64>,
    pub x_err_mas: Vec<f64>,
    pub y_err_mas: Vec<f64>,
}

impl Path {
    fn push(&mut self, t: f64, p: [f64; 4]) {
        self.t_yr.push(round(t, 4));
        self.x_mas.push(round(p[0], 3));
        self.y_mas.push(round(p[1], 3));
        self.x_err_mas.push(round(p[2], 3));
        self.y_err_mas.push(round(p[3], 3));
    }
}

/// Samples `place` (time \[yr\] to x, y, x_err, y_err \[mas\]) from `t0` to `t1`.
pub(super) fn sample(t0: f64, t1: f64, place: &dyn Fn(f64) -> [f64; 4]) -> Path {
    let mut path = Path::default();
    let (mut t, mut p) = (t0, place(t0));
    path.push(t, p);
    for k in 1..=FIRST_STEPS {
        let next_t = t0 + (t1 - t0) * k as f64 / FIRST_STEPS as f64;
        let next = place(next_t);
        refine(&mut path, (t, p), (next_t, next), place, MAX_DEPTH);
        path.push(next_t, next);
        (t, p) = (next_t, next);
    }
    path
}

fn refine(
    path: &mut Path,
    a: (f64, [f64; 4]),
    b: (f64, [f64; 4]),
    place: &dyn Fn(f64) -> [f64; 4],
    depth: usize,
) {
    if depth == 0 {
        return;
    }
    let t = 0.5 * (a.0 + b.0);
    let p = place(t);
    // Uniform in time too: the page interpolates between points by time.
    let off = (p[0] - 0.5 * (a.1[0] + b.1[0])).hypot(p[1] - 0.5 * (a.1[1] + b.1[1]));
    if off <= TOLERANCE_MAS {
        return;
    }
    refine(path, a, (t, p), place, depth - 1);
    path.push(t, p);
    refine(path, (t, p), b, place, depth - 1);
}

/// Rounds to so many decimals.
pub(super) fn round(value: f64, decimals: i32) -> f64 {
    let scale = 10_f64.powi(decimals);
    let r = (value * scale).round() / scale;
    if r.is_finite() { r } else { value }
}

/// Rounds to so many significant digits.
pub(super) fn round_significant(value: f64, digits: i32) -> f64 {
    if value == 0.0 || !value.is_finite() {
        return value;
    }
    let decimals = digits - 1 - value.abs().log10().floor() as i32;
    if decimals > 300 {
        return 0.0;
    }
    round(value, decimals)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A circle turning four times: the drawn polygon stays close to it everywhere.
    #[test]
    fn chord_error_is_bounded() {
        let (radius, period) = (120.0, 4.8);
        let place = |t: f64| {
            let phase = std::f64::consts::TAU * t / period;
            [radius * phase.cos(), radius * phase.sin(), 1.0, 1.0]
        };
        let path = sample(0.0, 20.0, &place);
        assert!(path.t_yr.windows(2).all(|w| w[0] < w[1]));
        for k in 1..path.t_yr.len() {
            let middle = place(0.5 * (path.t_yr[k - 1] + path.t_yr[k]));
            let chord = [
                0.5 * (path.x_mas[k - 1] + path.x_mas[k]),
                0.5 * (path.y_mas[k - 1] + path.y_mas[k]),
            ];
            let off = (middle[0] - chord[0]).hypot(middle[1] - chord[1]);
            assert!(off < TOLERANCE_MAS + 0.01, "{off} mas at {}", path.t_yr[k]);
        }
        assert!(path.t_yr.len() < 1000);
    }

    #[test]
    fn rounding() {
        assert_eq!(round_significant(123_456.0, 3), 123_000.0);
        assert_eq!(round_significant(-0.001_234_56, 3), -0.001_23);
        assert_eq!(round_significant(0.0, 3), 0.0);
    }
}
