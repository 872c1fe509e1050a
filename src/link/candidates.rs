//! The candidate graph: every pair of detections of different epochs that may be one star.
//!
//! From each detection the later epochs within the window are searched with their trees, inside
//! the reach of [`Gates`]; pairs above the threshold are kept, the best few towards each epoch
//! from either side. Whatever a cap removed is counted. One epoch is one call of [`links_from`],
//! a pure function, so epochs can be done in any order or in parallel; [`CandidateGraph::join`]
//! puts them together in epoch order.
//!
//! Cost: one radius query per detection and later epoch. Nothing is allocated per detection.

use crate::link::gate::{Gates, Mag};
use crate::maths::cov2::Cov2;
use crate::maths::order;
use crate::model::detection::FieldEpoch;
use crate::near::{Hit, Tree};

/// Width of a bin of the magnitude histogram.
const MAG_BIN: f64 = 0.5;

/// Neighbours that a circle of the local density should hold on average.
const CROWD: f64 = 12.0;

/// Chance neighbours, per magnitude, among which a fast star is still looked for.
const QUIET: f64 = 1.5;

/// How crowded one list is, by place and by magnitude.
#[derive(Clone, Debug)]
pub struct Crowd {
    /// Local density at each detection \[mas^-2\].
    density_mas2: Vec<f32>,
    /// ln of the share of detections per mag, by bins of [`MAG_BIN`] from `mag_start`.
    ln_per_mag: Vec<f64>,
    mag_start: f64,
}

impl Crowd {
    /// Counts neighbours of each detection in a circle that holds about a dozen on average, and
    /// the magnitudes of the list.
    #[must_use]
    pub fn of(epoch: &FieldEpoch, tree: &Tree) -> Self {
        let radius = circle_mas(epoch);
        let area = std::f64::consts::PI * radius * radius;
        let mut hits = Vec::new();
        let density_mas2 = (0..epoch.len())
            .map(|k| {
                tree.within(epoch.x_mas[k], epoch.y_mas[k], radius, &mut hits);
                (hits.len().max(1) as f64 / area) as f32
            })
            .collect();
        let (mag_start, ln_per_mag) = histogram(&epoch.mag);
        Self {
            density_mas2,
            ln_per_mag,
            mag_start,
        }
    }

    /// Radius within which a chance neighbour of like magnitude is to be expected.
    fn quiet_mas(&self, row: usize, mag: f64) -> f64 {
        let per_mas2 = f64::from(self.density_mas2[row]) * self.ln_mag(mag).exp();
        (QUIET / (std::f64::consts::PI * per_mas2)).sqrt()
    }

    fn ln_mag(&self, mag: f64) -> f64 {
        if !mag.is_finite() || self.ln_per_mag.is_empty() {
            return 0.0;
        }
        let bin = ((mag - self.mag_start) / MAG_BIN).max(0.0) as usize;
        self.ln_per_mag[bin.min(self.ln_per_mag.len() - 1)]
    }
}

/// Radius of a circle that holds [`CROWD`] detections at the mean density of the bounding box.
fn circle_mas(epoch: &FieldEpoch) -> f64 {
    let span = |v: &[f64]| {
        let finite = v.iter().copied().filter(|v| v.is_finite());
        let (lo, hi) = finite.fold((f64::INFINITY, f64::NEG_INFINITY), |(lo, hi), v| {
            (lo.min(v), hi.max(v))
        });
        (hi - lo).max(epoch.fwhm_mas)
    };
    let area = span(&epoch.x_mas) * span(&epoch.y_mas);
    (area * CROWD / (std::f64::consts::PI * epoch.len().max(1) as f64)).sqrt()
}

/// ln of the share per mag in bins, each bin with half a detection added.
fn histogram(mags: &[f64]) -> (f64, Vec<f64>) {
    let finite = || mags.iter().copied().filter(|m| m.is_finite());
    let lo = finite().fold(f64::INFINITY, f64::min);
    let hi = finite().fold(f64::NEG_INFINITY, f64::max);
    if lo > hi {
        return (0.0, Vec::new());
    }
    let n_bins = ((hi - lo) / MAG_BIN) as usize + 1;
    let mut counts = vec![0.5; n_bins.min(200)];
    for m in finite() {
        let bin = (((m - lo) / MAG_BIN) as usize).min(counts.len() - 1);
        counts[bin] += 1.0;
    }
    let total: f64 = counts.iter().sum::<f64>() * MAG_BIN;
    (lo, counts.iter().map(|c| (c / total).ln()).collect())
}

/// One possible pair, seen from the earlier detection.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Link {
    /// Row in the later epoch.
    pub row: u32,
    /// Later epoch.
    pub epoch: u32,
    /// ln odds of one star against two unrelated detections.
    pub ln_odds: f32,
    /// One of the two is too bright to be the star alone.
    pub blend: bool,
}

/// Links that leave one epoch, grouped by row, sorted by (epoch, row) within a row.
#[derive(Clone, Debug, Default)]
pub struct EpochLinks {
    /// Links of row k are `first[k]..first[k + 1]`.
    pub first: Vec<u32>,
    pub links: Vec<Link>,
    /// How many links a cap removed, on the earlier side and on the later side.
    pub capped_from: u64,
    pub capped_to: u64,
    /// Rows of this epoch that lost links to the cap.
    pub capped_rows: Vec<u32>,
    /// (epoch, row) of later detections that lost links to the cap.
    pub capped_later: Vec<(u32, u32)>,
}

/// One epoch as the search sees it.
#[derive(Clone, Copy, Debug)]
pub struct Listed<'a> {
    pub list: &'a FieldEpoch,
    pub tree: &'a Tree,
    pub crowd: &'a Crowd,
}

/// All links from one epoch to later ones. `order[k]` is the index of the k-th epoch in time and
/// `place` the position of the epoch at hand in that order.
#[must_use]
pub fn links_from(place: usize, order: &[usize], epochs: &[Listed], gates: &Gates) -> EpochLinks {
    let own = &epochs[order[place]];
    let here = own.list;
    let mut out = EpochLinks::default();
    let mut found: Vec<(u32, Link)> = Vec::new();
    let mut scratch = Scratch::default();
    let later = order[place + 1..]
        .iter()
        .take(gates.next_epochs)
        .take_while(|&&e| epochs[e].list.time.yr() - here.time.yr() <= gates.window_yr);
    for &there in later {
        let start = found.len();
        for row in 0..here.len() {
            let target = (there, &epochs[there]);
            let over = links_of_row(own, row, target, gates, &mut scratch, &mut found);
            if over > 0 {
                out.capped_from += over;
                out.capped_rows.push(row as u32);
            }
        }
        let cut = cap_later_side(&mut found, start, epochs[there].list.len(), gates.cap);
        out.capped_to += cut.iter().map(|c| u64::from(c.1)).sum::<u64>();
        out.capped_later
            .extend(cut.iter().map(|&(row, _)| (there as u32, row)));
    }
    found.sort_unstable_by_key(|(row, link)| (*row, link.epoch, link.row));
    out.first = vec![0; here.len() + 1];
    for (row, _) in &found {
        out.first[*row as usize + 1] += 1;
    }
    for k in 0..here.len() {
        out.first[k + 1] += out.first[k];
    }
    out.links = found.into_iter().map(|(_, link)| link).collect();
    out
}

#[derive(Default)]
struct Scratch {
    hits: Vec<Hit>,
    links: Vec<Link>,
}

/// Appends the links of one detection to one later epoch; returns how many the cap removed.
fn links_of_row(
    own: &Listed,
    row: usize,
    (epoch, target): (usize, &Listed),
    gates: &Gates,
    scratch: &mut Scratch,
    found: &mut Vec<(u32, Link)>,
) -> u64 {
    let (here, there) = (own.list, target.list);
    let (x, y) = (here.x_mas[row], here.y_mas[row]);
    let dt_yr = there.time.yr() - here.time.yr();
    let prior = gates.motion_at(x, y);
    let floor = Cov2::round(2.0 * gates.floor_mas * gates.floor_mas);
    // The later error is not known before the query: take the same for both, then test.
    let err = (2.0 * here.cov_mas2[row].max_var() + floor.xx).sqrt();
    let quiet_mas = own.crowd.quiet_mas(row, here.mag[row]);
    let radius = prior.search_mas(dt_yr, quiet_mas) + gates.sigmas * err;
    target.tree.within(x, y, radius, &mut scratch.hits);
    scratch.links.clear();
    for hit in &scratch.hits {
        let k = hit.row as usize;
        let Some(fit) = gates.magnitudes(
            mag_of(here, row),
            mag_of(there, k),
            target.crowd.ln_mag(there.mag[k]),
        ) else {
            continue;
        };
        let errors = here.cov_mas2[row] + there.cov_mas2[k] + floor;
        let offset = [hit.x_mas - x, hit.y_mas - y];
        let ln_crowd = f64::from(target.crowd.density_mas2[k]).ln();
        let ln_odds = gates.ln_offset(prior, errors, dt_yr, offset) - ln_crowd + fit.ln_factor;
        if ln_odds >= gates.min_ln_odds {
            scratch.links.push(Link {
                row: hit.row,
                epoch: epoch as u32,
                ln_odds: ln_odds as f32,
                blend: fit.blend,
            });
        }
    }
    let over = scratch.links.len().saturating_sub(gates.cap);
    if over > 0 {
        scratch.links.sort_unstable_by(best_first);
        scratch.links.truncate(gates.cap);
    }
    found.extend(scratch.links.iter().map(|&link| (row as u32, link)));
    over as u64
}

fn mag_of(epoch: &FieldEpoch, row: usize) -> Mag {
    Mag {
        mag: epoch.mag[row],
        err: epoch.mag_err[row],
    }
}

fn best_first(a: &Link, b: &Link) -> std::cmp::Ordering {
    order::by(f64::from(b.ln_odds), f64::from(a.ln_odds)).then(a.row.cmp(&b.row))
}

/// Keeps the best `cap` links into each later detection among `found[start..]`; returns the rows
/// that lost links, each with how many.
fn cap_later_side(
    found: &mut Vec<(u32, Link)>,
    start: usize,
    n_later: usize,
    cap: usize,
) -> Vec<(u32, u32)> {
    let mut into = vec![0usize; n_later];
    for (_, link) in &found[start..] {
        into[link.row as usize] += 1;
    }
    let over: Vec<(u32, u32)> = (0..)
        .zip(&into)
        .filter(|&(_, &n)| n > cap)
        .map(|(row, &n)| (row, (n - cap) as u32))
        .collect();
    if over.is_empty() {
        return over;
    }
    let tail = &mut found[start..];
    tail.sort_unstable_by(|(ra, a), (rb, b)| {
        a.row
            .cmp(&b.row)
            .then(order::by(f64::from(b.ln_odds), f64::from(a.ln_odds)))
            .then(ra.cmp(rb))
    });
    let mut kept = start;
    let (mut current, mut n) = (u32::MAX, 0);
    for k in start..found.len() {
        let row = found[k].1.row;
        if row != current {
            (current, n) = (row, 0);
        }
        if n < cap {
            found[kept] = found[k];
            kept += 1;
            n += 1;
        }
    }
    found.truncate(kept);
    over
}

/// All links, detections numbered through: epoch by epoch in the order of the campaign.
#[derive(Clone, Debug, Default)]
pub struct CandidateGraph {
    /// Number of the first detection of each epoch; one entry more than epochs.
    pub offset: Vec<u32>,
    /// Links of detection d are `first[d]..first[d + 1]`.
    pub first: Vec<u32>,
    /// Later detection of each link.
    pub to: Vec<u32>,
    pub ln_odds: Vec<f32>,
    pub blend: Vec<bool>,
    /// Links removed by the cap on either side.
    pub capped: u64,
    /// Detections that lost links to the cap.
    pub cut: Vec<bool>,
    /// Links into detection d are numbers `first_in[d]..first_in[d + 1]` of `from`.
    first_in: Vec<u32>,
    /// (earlier detection, its link), by later detection.
    from: Vec<(u32, u32)>,
}

impl CandidateGraph {
    /// Joins the links of all epochs; `parts[e]` belongs to epoch e of the campaign.
    #[must_use]
    pub fn join(parts: &[EpochLinks]) -> Self {
        let n_links = parts.iter().map(|p| p.links.len()).sum();
        let mut g = Self {
            offset: vec![0],
            first: vec![0],
            to: Vec::with_capacity(n_links),
            ln_odds: Vec::with_capacity(n_links),
            blend: Vec::with_capacity(n_links),
            ..Self::default()
        };
        let mut n = 0;
        for part in parts {
            n += part.first.len().saturating_sub(1) as u32;
            g.offset.push(n);
        }
        g.cut = vec![false; n as usize];
        for (e, part) in parts.iter().enumerate() {
            for row in part.first.windows(2) {
                for link in &part.links[row[0] as usize..row[1] as usize] {
                    g.to.push(g.offset[link.epoch as usize] + link.row);
                    g.ln_odds.push(link.ln_odds);
                    g.blend.push(link.blend);
                }
                g.first.push(g.to.len() as u32);
            }
            g.capped += part.capped_from + part.capped_to;
            let own = part.capped_rows.iter().map(|&row| (e as u32, row));
            for (epoch, row) in own.chain(part.capped_later.iter().copied()) {
                g.cut[(g.offset[epoch as usize] + row) as usize] = true;
            }
        }
        g.turn_round(n as usize);
        g
    }

    /// The same links by their later detection (a counting sort).
    fn turn_round(&mut self, n_detections: usize) {
        let mut next = vec![0u32; n_detections + 1];
        for &d in &self.to {
            next[d as usize + 1] += 1;
        }
        for d in 0..n_detections {
            next[d + 1] += next[d];
        }
        self.first_in.clone_from(&next);
        self.from = vec![(0, 0); self.to.len()];
        for d in 0..n_detections {
            for link in self.first[d]..self.first[d + 1] {
                let slot = &mut next[self.to[link as usize] as usize];
                self.from[*slot as usize] = (d as u32, link);
                *slot += 1;
            }
        }
    }

    /// Links of a detection: (later detection, ln odds, blend).
    pub fn later(&self, detection: usize) -> impl Iterator<Item = (usize, f64, bool)> + '_ {
        (self.first[detection] as usize..self.first[detection + 1] as usize).map(|k| {
            (
                self.to[k] as usize,
                f64::from(self.ln_odds[k]),
                self.blend[k],
            )
        })
    }

    /// Links into a detection: (earlier detection, ln odds, blend).
    pub fn earlier(&self, detection: usize) -> impl Iterator<Item = (usize, f64, bool)> + '_ {
        (self.first_in[detection] as usize..self.first_in[detection + 1] as usize).map(|k| {
            let (from, link) = self.from[k];
            let link = link as usize;
            (
                from as usize,
                f64::from(self.ln_odds[link]),
                self.blend[link],
            )
        })
    }

    /// Number of a detection.
    #[must_use]
    pub fn number(&self, epoch: usize, row: usize) -> usize {
        self.offset[epoch] as usize + row
    }

    /// Epoch and row of a detection number.
    #[must_use]
    pub fn place(&self, detection: usize) -> (usize, usize) {
        let epoch = self.offset.partition_point(|&o| o as usize <= detection) - 1;
        (epoch, detection - self.offset[epoch] as usize)
    }
}
