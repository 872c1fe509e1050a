//! An upper bound on the gain of any explanation of a [`Program`].
//!
//! A price nu >= 0 on every (track, epoch) cell relaxes the rule that ties sources to tracks.
//! What is left has one sum per track and one maximum per detection:
//!
//!   L(nu) = sum_families max(0, base_k + sum_e nu_ke)
//!         + sum_d max(0, max_s (gain_s - sum of the prices of its cells)),
//!
//! an upper bound for every nu (Lagrangian relaxation; Fisher 1981, Management Science 27, 1).
//! Its least value is that of the linear relaxation. Descent: first on a smoothed L
//! (log-sum-exp, temperature lowered geometrically) with Adam steps (Kingma & Ba 2015), then
//! subgradient steps of Polyak's length (1969, USSR Comput. Math. 9, 14) toward a value already
//! reached. Only the best bound is kept, so more steps never make it worse.
//!
//! Cost: one pass over all sources per step. Fails to be tight where the linear relaxation is
//! not integral; branching ([`super::exact`]) closes that.

use super::program::Program;

/// Temperatures of the smoothed stage \[nats\].
const HOT: f64 = 4.0;
const COLD: f64 = 0.1;

/// What is decided about a track.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Fate {
    Free,
    In,
    Out,
}

/// Prices of all cells with the bound they prove.
#[derive(Clone, Debug, PartialEq)]
pub struct Prices {
    pub of_cell: Vec<f64>,
    pub bound: f64,
}

/// A program with some tracks decided, and memory for the descent.
#[derive(Debug)]
pub struct Dual<'a> {
    program: &'a Program,
    fate: Vec<Fate>,
    /// Sources all of whose tracks may exist.
    open: Vec<bool>,
    gradient: Vec<f64>,
    value: Vec<f64>,
    /// Passes over the program.
    pub steps: u64,
}

impl<'a> Dual<'a> {
    #[must_use]
    pub fn new(program: &'a Program) -> Self {
        let fate = (0..program.n_tracks())
            .map(|k| {
                if program.is_forced(k) {
                    Fate::In
                } else {
                    Fate::Free
                }
            })
            .collect();
        let mut dual = Self {
            program,
            fate,
            open: vec![true; program.n_sources()],
            gradient: vec![0.0; program.n_cells()],
            value: Vec::new(),
            steps: 0,
        };
        for family in program.families() {
            if let Some(&k) = family.iter().find(|&&k| program.is_forced(k as usize)) {
                dual.decide(k as usize, Fate::In);
            }
        }
        dual
    }

    #[must_use]
    pub fn fate(&self, track: usize) -> Fate {
        self.fate[track]
    }

    /// Decides a track (or frees it again). A track that is in sends the alternatives of its
    /// family out.
    pub fn decide(&mut self, track: usize, fate: Fate) {
        self.set(track, fate);
        if fate == Fate::In {
            let program = self.program;
            for &other in program.family_of(track) {
                if other as usize != track {
                    self.set(other as usize, Fate::Out);
                }
            }
        }
    }

    /// Takes over a whole set of decisions.
    pub fn restore(&mut self, fates: &[Fate]) {
        self.fate.copy_from_slice(fates);
        for s in 0..self.open.len() {
            self.open[s] = self.program.tracks(s).all(|k| fates[k] != Fate::Out);
        }
    }

    #[must_use]
    pub fn fates(&self) -> &[Fate] {
        &self.fate
    }

    fn set(&mut self, track: usize, fate: Fate) {
        self.fate[track] = fate;
        for &s in self.program.sources_of_track(track) {
            let s = s as usize;
            self.open[s] = self.program.tracks(s).all(|k| self.fate[k] != Fate::Out);
        }
    }

    /// Prices to start from: the best source of each cell shared out among its tracks.
    #[must_use]
    pub fn first_guess(&self) -> Prices {
        let mut of_cell = vec![0.0f64; self.program.n_cells()];
        for s in (0..self.open.len()).filter(|&s| self.open[s]) {
            let cells = self.program.cells(s);
            for &c in cells {
                let share = 0.5 * self.program.gain(s) / cells.len() as f64;
                of_cell[c as usize] = of_cell[c as usize].max(share);
            }
        }
        let bound = self.bound(&of_cell);
        Prices { of_cell, bound }
    }

    /// What a track is worth at these prices: it belongs in when positive.
    #[must_use]
    pub fn worth(&self, price: &[f64], track: usize) -> f64 {
        self.program.base(track)
            + self
                .program
                .cells_of_track(track)
                .map(|c| price[c])
                .sum::<f64>()
    }

    /// The bound these prices prove.
    #[must_use]
    pub fn bound(&self, price: &[f64]) -> f64 {
        let p = self.program;
        let mut sum = 0.0;
        for family in p.families() {
            sum += self
                .best_of_family(price, family)
                .map_or(0.0, |(_, worth)| worth);
        }
        for d in 0..p.n_detections() {
            sum += self
                .best_source(price, d, |_| true)
                .map_or(0.0, |(_, reduced)| reduced);
        }
        sum
    }

    fn best_of_family(&self, price: &[f64], family: &[u32]) -> Option<(usize, f64)> {
        let mut best = None;
        let mut most = 0.0;
        for &k in family {
            let k = k as usize;
            match self.fate[k] {
                Fate::Out => {}
                Fate::In => return Some((k, self.worth(price, k))),
                Fate::Free => {
                    let worth = self.worth(price, k);
                    if worth > most {
                        most = worth;
                        best = Some((k, worth));
                    }
                }
            }
        }
        best
    }

    /// Source of largest positive reduced gain among the open ones that `allowed` admits.
    fn best_source(
        &self,
        price: &[f64],
        d: usize,
        allowed: impl Fn(usize) -> bool,
    ) -> Option<(usize, f64)> {
        let mut best = None;
        let mut most = 0.0;
        for s in self.program.sources(d).filter(|&s| self.open[s]) {
            let reduced = self.reduced(price, s);
            if reduced > most && allowed(s) {
                most = reduced;
                best = Some((s, reduced));
            }
        }
        best
    }

    fn reduced(&self, price: &[f64], source: usize) -> f64 {
        let cells = self.program.cells(source);
        self.program.gain(source) - cells.iter().map(|&c| price[c as usize]).sum::<f64>()
    }

    /// Bounds on the gain if a free track were out, and if it were in.
    #[must_use]
    pub fn if_decided(&self, prices: &Prices, track: usize) -> (f64, f64) {
        let price = &prices.of_cell;
        let family = self.program.family_of(track);
        let chosen = self.best_of_family(price, family).map_or(0.0, |b| b.1);
        let without = family
            .iter()
            .filter(|&&k| k as usize != track && self.fate[k as usize] != Fate::Out)
            .map(|&k| self.worth(price, k as usize))
            .fold(0.0, f64::max);
        let mut out = prices.bound - chosen + without;
        let mut last = usize::MAX;
        for &s in self.program.sources_of_track(track) {
            let d = self.program.detection_of(s as usize);
            if d != last {
                last = d;
                let spares = |s: usize| self.program.tracks(s).all(|k| k != track);
                let best = self.best_source(price, d, |_| true).map_or(0.0, |b| b.1);
                out -= best - self.best_source(price, d, spares).map_or(0.0, |b| b.1);
            }
        }
        (out, prices.bound - chosen + self.worth(price, track))
    }

    /// Smoothed descent of so many steps; returns the better of the start and the end.
    #[must_use]
    pub fn smooth(&mut self, start: Prices, steps: usize) -> Prices {
        let n = start.of_cell.len();
        let mut price = start.of_cell.clone();
        let (mut mean, mut square) = (vec![0.0; n], vec![0.0; n]);
        for step in 0..steps {
            let t = step as f64 / steps as f64;
            let temperature = HOT * (COLD / HOT).powf(t);
            self.smoothed_gradient(&price, temperature);
            self.steps += 1;
            let rate = 0.15 * temperature + 0.01;
            let (b1, b2) = (0.9f64, 0.99f64);
            let (c1, c2) = (
                1.0 - b1.powi(step as i32 + 1),
                1.0 - b2.powi(step as i32 + 1),
            );
            for c in 0..n {
                let g = self.gradient[c];
                mean[c] = b1 * mean[c] + (1.0 - b1) * g;
                square[c] = b2 * square[c] + (1.0 - b2) * g * g;
                let move_ = rate * (mean[c] / c1) / ((square[c] / c2).sqrt() + 1e-3);
                price[c] = (price[c] - move_).max(0.0);
            }
        }
        let bound = self.bound(&price);
        if bound < start.bound {
            Prices {
                of_cell: price,
                bound,
            }
        } else {
            start
        }
    }

    /// Gradient of the smoothed bound.
    fn smoothed_gradient(&mut self, price: &[f64], temperature: f64) {
        let p = self.program;
        self.gradient.fill(0.0);
        let mut value = std::mem::take(&mut self.value);
        for family in p.families() {
            value.clear();
            let forced = family.iter().any(|&k| self.fate[k as usize] == Fate::In);
            value.extend(family.iter().map(|&k| match self.fate[k as usize] {
                Fate::Out => f64::NEG_INFINITY,
                Fate::In => f64::INFINITY,
                Fate::Free => self.worth(price, k as usize),
            }));
            if forced {
                value
                    .iter_mut()
                    .for_each(|v| *v = f64::from(u8::from(*v == f64::INFINITY)));
            } else {
                weights(&mut value, temperature);
            }
            for (&k, &w) in family.iter().zip(&value) {
                for c in p.cells_of_track(k as usize) {
                    self.gradient[c] += w;
                }
            }
        }
        for d in 0..p.n_detections() {
            value.clear();
            value.extend(p.sources(d).map(|s| {
                if self.open[s] {
                    self.reduced(price, s)
                } else {
                    f64::NEG_INFINITY
                }
            }));
            weights(&mut value, temperature);
            for (s, &w) in p.sources(d).zip(&value) {
                for &c in p.cells(s) {
                    self.gradient[c as usize] -= w;
                }
            }
        }
        self.value = value;
    }

    /// Subgradient descent of Polyak's step toward `target`, a gain that is known to be
    /// reachable. Ends early when the bound comes within `tolerance` of it.
    #[must_use]
    pub fn polish(&mut self, start: Prices, target: f64, tolerance: f64, steps: usize) -> Prices {
        let mut best = start;
        let mut price = best.of_cell.clone();
        let (mut share, mut since) = (1.0, 0);
        for _ in 0..steps {
            let bound = self.subgradient(&price);
            self.steps += 1;
            if bound < best.bound - 1e-12 {
                if bound < best.bound - 1e-3 * (best.bound - target) {
                    since = 0;
                }
                best.bound = bound;
                best.of_cell.copy_from_slice(&price);
            } else {
                since += 1;
            }
            if best.bound <= target + tolerance {
                break;
            }
            if since >= 20 {
                since = 0;
                share *= 0.5;
                if share < 1e-4 {
                    break;
                }
                price.copy_from_slice(&best.of_cell);
                let _ = self.subgradient(&price);
            }
            let mut norm2 = 0.0;
            for (g, &nu) in self.gradient.iter_mut().zip(&price) {
                if nu <= 0.0 && *g > 0.0 {
                    *g = 0.0;
                }
                norm2 += *g * *g;
            }
            if norm2 == 0.0 {
                break;
            }
            let here = bound.max(target);
            let length = share * (here - target).max(1e-9) / norm2;
            for (nu, g) in price.iter_mut().zip(&self.gradient) {
                *nu = (*nu - length * g).max(0.0);
            }
        }
        best
    }

    /// The bound and, into `self.gradient`, one of its subgradients.
    fn subgradient(&mut self, price: &[f64]) -> f64 {
        let p = self.program;
        self.gradient.fill(0.0);
        let mut sum = 0.0;
        for family in p.families() {
            if let Some((k, worth)) = self.best_of_family(price, family) {
                sum += worth;
                for c in p.cells_of_track(k) {
                    self.gradient[c] += 1.0;
                }
            }
        }
        for d in 0..p.n_detections() {
            if let Some((s, reduced)) = self.best_source(price, d, |_| true) {
                sum += reduced;
                for &c in p.cells(s) {
                    self.gradient[c as usize] -= 1.0;
                }
            }
        }
        sum
    }
}

/// Values become the weights exp(v / T) / (1 + sum exp(v / T)): the 1 is "none of them".
fn weights(values: &mut [f64], temperature: f64) {
    let top = values.iter().copied().fold(0.0, f64::max);
    let mut sum = (-top / temperature).exp();
    for v in values.iter_mut() {
        *v = ((*v - top) / temperature).exp();
        sum += *v;
    }
    for v in values.iter_mut() {
        *v /= sum;
    }
}
