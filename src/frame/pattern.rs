//! Blind start: which turn, scale, mirror and shift lays one list over the predicted stars.
//!
//! Two makers of guesses. `by_shift` trusts the nominal scale and angle and votes for a shift
//! (histogram of differences of bright stars). `by_triangles` trusts neither: triangles of
//! neighbouring bright stars are compared by the ratios of their sides (Groth 1986, AJ 91, 1244;
//! Valdes et al. 1995, PASP 107, 1119) through a table over the two ratios; each agreeing pair of
//! triangles gives a similarity, which a map of occupied cells confirms or drops after a few
//! stars. What is accepted is decided elsewhere (`place`), by the log-odds of all bright stars.
//! Triangles of neighbours, not of all stars, so that a list that covers a small part of the
//! field still shares many. Fails when the two sets of bright stars share too few neighbours, or
//! when stars have moved by a good part of their spacing: no guess then survives the log-odds.

use crate::maths::order;
use crate::model::campaign::FrameFreedom;
use crate::near::{Hit, Tree};

use super::transform::{Chart, PolyMap};

/// Scale may be off by this much.
pub const SCALE_RANGE: f64 = 0.2;
/// Neighbours of a star that form triangles with it.
const NEIGHBOURS: usize = 8;
/// Ratios of sides agree when they differ by less.
const SHAPE_STEP: f64 = 0.02;
/// Triangles flatter than this say little about the turn.
const MIN_SIDE_RATIO: f64 = 0.15;
/// Guesses that are handed on.
const KEPT: usize = 24;
/// Stars after which a guess that is behind is dropped.
const EARLY: usize = 14;
/// Share of a list's bright stars expected to be among the predicted ones.
const COMMON: f64 = 0.5;

/// x = a + c u - f d v, y = b + d u + f c v with f = -1 for a mirrored list.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Similarity {
    pub shift_mas: [f64; 2],
    pub c: f64,
    pub d: f64,
    pub mirrored: bool,
}

impl Similarity {
    #[must_use]
    pub fn apply(&self, u_mas: f64, v_mas: f64) -> (f64, f64) {
        let v = if self.mirrored { -v_mas } else { v_mas };
        (
            self.shift_mas[0] + self.c * u_mas - self.d * v,
            self.shift_mas[1] + self.d * u_mas + self.c * v,
        )
    }

    #[must_use]
    pub fn scale(&self) -> f64 {
        self.c.hypot(self.d)
    }

    /// The same as a polynomial map on a chart.
    #[must_use]
    pub fn on(&self, chart: Chart) -> PolyMap {
        let (x, y) = self.apply(chart.centre_mas[0], chart.centre_mas[1]);
        let h = chart.half_mas;
        PolyMap::from_params(
            chart,
            FrameFreedom::Similarity,
            self.mirrored,
            &[x, y, self.c * h, self.d * h],
        )
    }
}

/// Places of stars, brightest first.
#[derive(Clone, Debug, Default)]
pub struct Stars {
    pub x_mas: Vec<f64>,
    pub y_mas: Vec<f64>,
}

impl Stars {
    #[must_use]
    pub fn len(&self) -> usize {
        self.x_mas.len()
    }
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.x_mas.is_empty()
    }
    /// The `n` brightest.
    #[must_use]
    pub fn first(&self, n: usize) -> Self {
        let n = n.min(self.len());
        Self {
            x_mas: self.x_mas[..n].to_vec(),
            y_mas: self.y_mas[..n].to_vec(),
        }
    }
}

/// Shifts at the nominal scale and angle, those that bring most stars together first.
#[must_use]
pub fn by_shift(list: &Stars, sky: &Stars, cell_mas: f64) -> Vec<Similarity> {
    let mut votes: Vec<(i64, i64)> = Vec::with_capacity(4 * list.len() * sky.len());
    for (u, v) in list.x_mas.iter().zip(&list.y_mas) {
        for (x, y) in sky.x_mas.iter().zip(&sky.y_mas) {
            // Cells overlap by one half on each axis: no peak is cut in four.
            let i = ((x - u) / cell_mas * 2.0).floor() as i64;
            let j = ((y - v) / cell_mas * 2.0).floor() as i64;
            votes.extend([(i, j), (i - 1, j), (i, j - 1), (i - 1, j - 1)]);
        }
    }
    votes.sort_unstable();
    let mut peaks: Vec<(usize, (i64, i64))> = votes
        .chunk_by(|a, b| a == b)
        .filter(|run| run.len() > 2)
        .map(|run| (run.len(), run[0]))
        .collect();
    peaks.sort_unstable_by(|a, b| b.0.cmp(&a.0).then(a.1.cmp(&b.1)));
    let mut out: Vec<(i64, i64)> = Vec::new();
    for (_, cell) in peaks {
        if out
            .iter()
            .all(|o| (o.0 - cell.0).abs() > 1 || (o.1 - cell.1).abs() > 1)
        {
            out.push(cell);
            if out.len() == KEPT / 4 {
                break;
            }
        }
    }
    out.iter()
        .map(|&(i, j)| Similarity {
            shift_mas: [
                (i as f64 + 1.0) * 0.5 * cell_mas,
                (j as f64 + 1.0) * 0.5 * cell_mas,
            ],
            c: 1.0,
            d: 0.0,
            mirrored: false,
        })
        .collect()
}

/// A triangle: corners in the order opposite the longest, middle and shortest side.
#[derive(Clone, Copy, Debug)]
struct Triangle {
    corner: [u32; 3],
    /// Middle and shortest side over the longest.
    shape: [f64; 2],
    longest_mas: f64,
    /// Sense in which the corners run round.
    left: bool,
}

fn triangles(stars: &Stars) -> Vec<Triangle> {
    let tree = Tree::build(&stars.x_mas, &stars.y_mas);
    let mut hits: Vec<Hit> = Vec::new();
    let mut sets: Vec<[u32; 3]> = Vec::new();
    for k in 0..stars.len() {
        tree.nearest_n(stars.x_mas[k], stars.y_mas[k], NEIGHBOURS + 1, &mut hits);
        let near: Vec<u32> = hits
            .iter()
            .map(|h| h.row)
            .filter(|&r| r != k as u32)
            .collect();
        for (i, &a) in near.iter().enumerate() {
            for &b in &near[i + 1..] {
                let mut set = [k as u32, a, b];
                set.sort_unstable();
                sets.push(set);
            }
        }
    }
    sets.sort_unstable();
    sets.dedup();
    sets.into_iter()
        .filter_map(|set| triangle(stars, set))
        .collect()
}

fn triangle(stars: &Stars, set: [u32; 3]) -> Option<Triangle> {
    let at = |k: u32| (stars.x_mas[k as usize], stars.y_mas[k as usize]);
    let side = |a: u32, b: u32| {
        let (p, q) = (at(a), at(b));
        (p.0 - q.0).hypot(p.1 - q.1)
    };
    let mut opposite = [
        (side(set[1], set[2]), set[0]),
        (side(set[0], set[2]), set[1]),
        (side(set[0], set[1]), set[2]),
    ];
    opposite.sort_unstable_by(|a, b| order::by(b.0, a.0).then(a.1.cmp(&b.1)));
    let [(long, a), (mid, b), (short, c)] = opposite;
    if short < MIN_SIDE_RATIO * long || long <= 0.0 {
        return None;
    }
    let (pa, pb, pc) = (at(a), at(b), at(c));
    let cross = (pb.0 - pa.0) * (pc.1 - pa.1) - (pb.1 - pa.1) * (pc.0 - pa.0);
    Some(Triangle {
        corner: [a, b, c],
        shape: [mid / long, short / long],
        longest_mas: long,
        left: cross > 0.0,
    })
}

/// Similarities of any turn, either handedness and scale within [`SCALE_RANGE`], those that lay
/// most bright stars on bright stars first. `reach_mas`: how far a star may be from its place.
#[must_use]
pub fn by_triangles(list: &Stars, sky: &Stars, reach_mas: f64) -> Vec<Similarity> {
    let occupied = Occupied::new(sky, reach_mas);
    let of_list = triangles(list);
    let mut of_sky = triangles(sky);
    let bin = |z: f64| (z / SHAPE_STEP) as i64;
    of_sky.sort_by_key(|t| (bin(t.shape[0]), bin(t.shape[1])));
    let keys: Vec<(i64, i64)> = of_sky
        .iter()
        .map(|t| (bin(t.shape[0]), bin(t.shape[1])))
        .collect();
    let mut found: Vec<(f64, Similarity)> = Vec::new();
    for l in &of_list {
        let (i, j) = (bin(l.shape[0]), bin(l.shape[1]));
        for row in i - 1..=i + 1 {
            let from = keys.partition_point(|&k| k < (row, j - 1));
            let to = keys.partition_point(|&k| k < (row, j + 2));
            for s in &of_sky[from..to] {
                let ratio = s.longest_mas / l.longest_mas;
                let alike = (s.shape[0] - l.shape[0]).abs() < SHAPE_STEP
                    && (s.shape[1] - l.shape[1]).abs() < SHAPE_STEP;
                if !alike || (ratio - 1.0).abs() > SCALE_RANGE + 0.05 {
                    continue;
                }
                let guess = from_corners(list, l, sky, s);
                if (guess.scale() - 1.0).abs() > SCALE_RANGE + 0.02 {
                    continue;
                }
                if let Some(score) = occupied.score(list, &guess) {
                    found.push((score, guess));
                }
            }
        }
    }
    found.sort_by(|a, b| {
        order::by(b.0, a.0)
            .then(order::by(a.1.c, b.1.c))
            .then(order::by(a.1.d, b.1.d))
    });
    let mut kept: Vec<Similarity> = Vec::new();
    for (_, guess) in found {
        if kept.iter().all(|k| differ(k, &guess, list, reach_mas)) {
            kept.push(guess);
            if kept.len() == KEPT {
                break;
            }
        }
    }
    kept
}

/// Least-squares similarity of three corner pairs.
fn from_corners(list: &Stars, l: &Triangle, sky: &Stars, s: &Triangle) -> Similarity {
    let mirrored = l.left != s.left;
    let f = if mirrored { -1.0 } else { 1.0 };
    let (mut mean_u, mut mean_v, mut mean_x, mut mean_y) = (0.0, 0.0, 0.0, 0.0);
    for k in 0..3 {
        let (a, b) = (l.corner[k] as usize, s.corner[k] as usize);
        mean_u += list.x_mas[a] / 3.0;
        mean_v += f * list.y_mas[a] / 3.0;
        mean_x += sky.x_mas[b] / 3.0;
        mean_y += sky.y_mas[b] / 3.0;
    }
    let (mut dot, mut cross, mut norm) = (0.0, 0.0, 0.0);
    for k in 0..3 {
        let (a, b) = (l.corner[k] as usize, s.corner[k] as usize);
        let (u, v) = (list.x_mas[a] - mean_u, f * list.y_mas[a] - mean_v);
        let (x, y) = (sky.x_mas[b] - mean_x, sky.y_mas[b] - mean_y);
        dot += u * x + v * y;
        cross += u * y - v * x;
        norm += u * u + v * v;
    }
    let (c, d) = (dot / norm, cross / norm);
    Similarity {
        shift_mas: [
            mean_x - c * mean_u + d * mean_v,
            mean_y - d * mean_u - c * mean_v,
        ],
        c,
        d,
        mirrored,
    }
}

/// Whether two guesses put the list's first stars in different places.
fn differ(a: &Similarity, b: &Similarity, list: &Stars, reach_mas: f64) -> bool {
    a.mirrored != b.mirrored
        || (0..list.len().min(8)).any(|k| {
            let p = a.apply(list.x_mas[k], list.y_mas[k]);
            let q = b.apply(list.x_mas[k], list.y_mas[k]);
            (p.0 - q.0).hypot(p.1 - q.1) > reach_mas
        })
}

/// A picture of where predicted stars are, for a quick look.
struct Occupied {
    corner_mas: [f64; 2],
    cell_mas: f64,
    size: [usize; 2],
    cells: Vec<bool>,
    share: f64,
}

/// Most cells of the picture; larger fields get larger cells.
const MAX_CELLS: f64 = 4e6;

impl Occupied {
    fn new(sky: &Stars, reach_mas: f64) -> Self {
        let chart = Chart::of(&sky.x_mas, &sky.y_mas);
        let side = 2.0 * (chart.half_mas + reach_mas);
        let cell = (0.5 * reach_mas).max(side / MAX_CELLS.sqrt());
        let n = (side / cell).ceil().max(1.0) as usize;
        let corner = chart.centre_mas.map(|c| c - 0.5 * side);
        let mut cells = vec![false; n * n];
        let r = (reach_mas / cell).round() as i64;
        for (x, y) in sky.x_mas.iter().zip(&sky.y_mas) {
            let (i, j) = (
                ((x - corner[0]) / cell) as i64,
                ((y - corner[1]) / cell) as i64,
            );
            for a in -r..=r {
                for b in -r..=r {
                    let (p, q) = (i + a, j + b);
                    if a * a + b * b <= r * r && p >= 0 && q >= 0 && p < n as i64 && q < n as i64 {
                        cells[p as usize * n + q as usize] = true;
                    }
                }
            }
        }
        let filled = cells.iter().filter(|&&c| c).count();
        Self {
            corner_mas: corner,
            cell_mas: cell,
            size: [n, n],
            share: (filled as f64 / cells.len() as f64).clamp(1e-4, 0.9),
            cells,
        }
    }

    /// ln odds of the hits against chance; `None` when behind after the first stars or at the end.
    fn score(&self, list: &Stars, guess: &Similarity) -> Option<f64> {
        let hit = (COMMON / self.share).ln();
        let miss = ((1.0 - COMMON) / (1.0 - self.share)).ln();
        let (mut score, mut seen) = (0.0, 0);
        for (u, v) in list.x_mas.iter().zip(&list.y_mas) {
            let (x, y) = guess.apply(*u, *v);
            let i = (x - self.corner_mas[0]) / self.cell_mas;
            let j = (y - self.corner_mas[1]) / self.cell_mas;
            if i < 0.0 || j < 0.0 || i >= self.size[0] as f64 || j >= self.size[1] as f64 {
                continue;
            }
            seen += 1;
            score += if self.cells[i as usize * self.size[1] + j as usize] {
                hit
            } else {
                miss
            };
            if seen == EARLY && score <= 0.0 {
                return None;
            }
        }
        (score > 0.0).then_some(score)
    }
}
