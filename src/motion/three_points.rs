//! All orbits about a known mass through three positions on the sky.
//!
//! Problem: a star so fast that no straight piece of its path exists. Three positions at three
//! times are six numbers, as many as an orbit about a known mass has, but several orbits can pass
//! through them.
//!
//! Method (our own arrangement of the classical three-position problem): assume the plane of the
//! orbit. It turns the sky positions into points in space; three distances determine the conic
//! with its focus at the mass, r = p - e.r, linearly; the known mass then gives the times between
//! the points (modulo the period). What is left is a map from the plane's two slopes to two time
//! errors. Its roots are bracketed on a grid of planes (triangles on whose corners the errors
//! surround zero) and refined by Newton's method. Planes that mirror each other in the sky plane
//! give the same times, so half the planes suffice; every root found has a mirror image.
//!
//! Orbits nearly edge-on (above 87 deg) and roots closer together than the grid can be missed.
//! Cost: about 1200 conics, no iteration in each.

use super::kepler;
use super::orbit_fit::State;

/// One position relative to the mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct SkyPoint {
    pub t_yr: f64,
    pub x_mas: f64,
    pub y_mas: f64,
}

/// Rings of inclination and, on each, directions of the tilt over half a turn.
const RINGS: usize = 24;
const DIRECTIONS: usize = 24;
/// Largest inclination looked at.
const STEEPEST_DEG: f64 = 87.0;
const NEWTON_STEPS: usize = 25;
/// Time errors relative to the gaps at which a root counts as found.
const CLOSE: f64 = 1e-9;

/// A plane: tilt vector (tan i times its direction), z = tilt . (x, y); and the sense of motion.
#[derive(Clone, Copy)]
struct Plane {
    tilt: [f64; 2],
    /// +1 when the position angle shrinks with time (h_z > 0), -1 when it grows.
    sense: f64,
}

/// The conic through the three points in one plane.
#[derive(Clone, Copy)]
struct Trial {
    /// Times from the first to the second and from the second to the third point, without whole
    /// turns.
    passage_yr: [f64; 2],
    /// `None` when the orbit is not bound.
    period_yr: Option<f64>,
    /// State at the second point.
    state: State,
}

impl Trial {
    /// Passage times minus the observed gaps, in units of the gaps, for given whole turns;
    /// `None` for turns of an unbound orbit.
    fn misses(&self, gaps: [f64; 2], turns: [u32; 2]) -> Option<[f64; 2]> {
        let period = match self.period_yr {
            Some(p) => p,
            None if turns == [0, 0] => 0.0,
            None => return None,
        };
        Some([0, 1].map(|g| {
            let time = self.passage_yr[g] + f64::from(turns[g]) * period;
            (time - gaps[g]) / gaps[g]
        }))
    }
}

/// States at the time of the middle point of all orbits through three points in order of time
/// that make at most `most_turns` whole revolutions in a gap. `z >= 0` in each;
/// the mirror image (-z, -vz) fits as well. Appended to `out`; the caller refines them
/// with the errors of the points.
pub fn orbits_through(gm: f64, points: &[SkyPoint; 3], most_turns: u32, out: &mut Vec<State>) {
    let first_new = out.len();
    let gaps = [
        points[1].t_yr - points[0].t_yr,
        points[2].t_yr - points[1].t_yr,
    ];
    let plane = |ring: f64, direction: f64, sense: f64| {
        let tan = (STEEPEST_DEG * ring / RINGS as f64).to_radians().tan();
        let (s, c) = (std::f64::consts::PI * direction / DIRECTIONS as f64).sin_cos();
        Plane {
            tilt: [tan * c, tan * s],
            sense,
        }
    };
    for sense in [1.0, -1.0] {
        let mut inner: [Option<Trial>; DIRECTIONS + 1] = [None; DIRECTIONS + 1];
        for ring in 0..=RINGS {
            let outer: [Option<Trial>; DIRECTIONS + 1] =
                std::array::from_fn(|k| trial(gm, points, plane(ring as f64, k as f64, sense)));
            for k in 0..DIRECTIONS {
                let corners = [inner[k], inner[k + 1], outer[k], outer[k + 1]];
                for code in 0..(most_turns + 1).pow(2) {
                    let turns = [code % (most_turns + 1), code / (most_turns + 1)];
                    if surrounds_zero(&corners, gaps, turns) {
                        let start = plane(ring as f64 - 0.5, k as f64 + 0.5, sense);
                        if let Some(root) = refine(gm, points, gaps, start, turns) {
                            push_distinct(root, first_new, out);
                        }
                    }
                }
            }
            inner = outer;
        }
    }
}

/// Could both errors vanish in or next to a cell? True when each changes sign over the corners,
/// widened by half their range.
fn surrounds_zero(corners: &[Option<Trial>; 4], gaps: [f64; 2], turns: [u32; 2]) -> bool {
    let (mut low, mut high, mut count) = ([f64::INFINITY; 2], [f64::NEG_INFINITY; 2], 0);
    for misses in corners
        .iter()
        .flatten()
        .filter_map(|c| c.misses(gaps, turns))
    {
        count += 1;
        for g in 0..2 {
            low[g] = low[g].min(misses[g]);
            high[g] = high[g].max(misses[g]);
        }
    }
    count >= 2
        && (0..2).all(|g| {
            let slack = 0.5 * (high[g] - low[g]);
            low[g] <= slack && high[g] >= -slack
        })
}

/// The conic through the points in a plane; `None` when there is none (the three points in a
/// line, or a focus that does not fit).
fn trial(gm: f64, points: &[SkyPoint; 3], plane: Plane) -> Option<Trial> {
    let [a, b] = plane.tilt;
    let size = (1.0 + a * a + b * b).sqrt();
    let normal = [-a / size, -b / size, 1.0 / size];
    let at = points.map(|p| [p.x_mas, p.y_mas, a * p.x_mas + b * p.y_mas]);
    let r = at.map(|p| dot(p, p).sqrt());
    // r = p - e . r at three points; the areas of the triangles with the focus give p and e.
    let area = |i: usize, j: usize| dot(cross(at[i], at[j]), normal);
    let (s12, s23, s31) = (area(0, 1), area(1, 2), area(2, 0));
    let det = s12 + s23 + s31;
    let parameter = (r[2] * s12 + r[0] * s23 + r[1] * s31) / det;
    if !(parameter > 0.0 && parameter.is_finite()) {
        return None;
    }
    // e = sum of (r_j - r_k) at_i over cyclic (i, j, k), turned by a quarter, over the area.
    let mut sum = [0.0; 3];
    for (i, j, k) in [(0, 1, 2), (1, 2, 0), (2, 0, 1)] {
        for (s, c) in sum.iter_mut().zip(at[i]) {
            *s += (r[j] - r[k]) * c;
        }
    }
    let e = cross(sum, normal).map(|c| c / det);
    let factor = plane.sense * (gm / parameter).sqrt();
    let velocity =
        |i: usize| cross(normal, [0, 1, 2].map(|c| e[c] + at[i][c] / r[i])).map(|c| c * factor);
    let v = [velocity(0), velocity(1), velocity(2)];
    let since = [0, 1, 2].map(|i| -kepler::time_to_pericentre(gm, at[i], v[i]));
    let beta = gm * (1.0 - dot(e, e)) / parameter;
    let period_yr = (beta > 0.0).then(|| std::f64::consts::TAU * gm * beta.powf(-1.5));
    let passage_yr = [since[1] - since[0], since[2] - since[1]]
        .map(|t| period_yr.map_or(t, |p| t.rem_euclid(p)));
    passage_yr.iter().all(|t| t.is_finite()).then(|| Trial {
        passage_yr,
        period_yr,
        state: State::from([at[1][0], at[1][1], at[1][2], v[1][0], v[1][1], v[1][2]]),
    })
}

/// Newton's method in the plane's tilt, with differences for slopes and halved steps.
fn refine(
    gm: f64,
    points: &[SkyPoint; 3],
    gaps: [f64; 2],
    start: Plane,
    turns: [u32; 2],
) -> Option<State> {
    let at = |tilt: [f64; 2]| {
        let found = trial(
            gm,
            points,
            Plane {
                tilt,
                sense: start.sense,
            },
        )?;
        let misses = found.misses(gaps, turns)?;
        Some((misses, found.state))
    };
    let mut tilt = start.tilt;
    let (mut miss, mut state) = at(tilt)?;
    for _ in 0..NEWTON_STEPS {
        let size = miss[0].hypot(miss[1]);
        if size < CLOSE {
            return Some(state);
        }
        let h = 1e-6 * (1.0 + tilt[0].hypot(tilt[1]));
        let (a, _) = at([tilt[0] + h, tilt[1]])?;
        let (b, _) = at([tilt[0], tilt[1] + h])?;
        let [[xa, ya], [xb, yb]] = [a, b].map(|m| [(m[0] - miss[0]) / h, (m[1] - miss[1]) / h]);
        let det = xa * yb - xb * ya;
        let step = [
            (miss[0] * yb - miss[1] * xb) / det,
            (miss[1] * xa - miss[0] * ya) / det,
        ];
        let mut share = 1.0;
        loop {
            let next = [tilt[0] - share * step[0], tilt[1] - share * step[1]];
            match at(next) {
                Some((m, s)) if m[0].hypot(m[1]) < size => {
                    (tilt, miss, state) = (next, m, s);
                    break;
                }
                _ if share < 1e-3 => return (size < 1e-6).then_some(state),
                _ => share *= 0.5,
            }
        }
    }
    None
}

/// Adds a root unless it, or its mirror image, was found before.
fn push_distinct(root: State, first: usize, out: &mut Vec<State>) {
    let root = if root[2] < 0.0 {
        State::from([root[0], root[1], -root[2], root[3], root[4], -root[5]])
    } else {
        root
    };
    let speed = (root[3].powi(2) + root[4].powi(2) + root[5].powi(2)).sqrt();
    let length = (root[0].powi(2) + root[1].powi(2) + root[2].powi(2)).sqrt();
    let is_known = out[first..].iter().any(|o| {
        (o[2] - root[2]).abs() < 1e-5 * length
            && (3..6).all(|k| (o[k] - root[k]).abs() < 1e-5 * speed)
    });
    if !is_known {
        out.push(root);
    }
}

fn dot(a: [f64; 3], b: [f64; 3]) -> f64 {
    a[0] * b[0] + a[1] * b[1] + a[2] * b[2]
}

fn cross(a: [f64; 3], b: [f64; 3]) -> [f64; 3] {
    [
        a[1] * b[2] - a[2] * b[1],
        a[2] * b[0] - a[0] * b[2],
        a[0] * b[1] - a[1] * b[0],
    ]
}
