//! Predicted stars of one epoch by place: a grid that takes and gives up stars at any time.

use super::star::Pred;

#[derive(Clone, Debug, Default)]
pub struct Grid {
    x0: f64,
    y0: f64,
    cell: f64,
    nx: usize,
    ny: usize,
    bins: Vec<Vec<u32>>,
}

impl Grid {
    /// A grid over the active predictions; `reach` is the usual query radius.
    #[must_use]
    pub fn build(preds: &[Pred], reach: f64) -> Self {
        let (mut x0, mut x1, mut y0, mut y1) = (
            f64::INFINITY,
            f64::NEG_INFINITY,
            f64::INFINITY,
            f64::NEG_INFINITY,
        );
        let mut n = 0usize;
        for p in preds.iter().filter(|p| p.active) {
            x0 = x0.min(p.x);
            x1 = x1.max(p.x);
            y0 = y0.min(p.y);
            y1 = y1.max(p.y);
            n += 1;
        }
        let mut g = Self::frame([x0, x1, y0, y1], n, reach);
        for (k, p) in preds.iter().enumerate() {
            if p.active {
                g.insert(k as u32, p.x, p.y);
            }
        }
        g
    }

    /// An empty grid over the places of a list.
    #[must_use]
    pub fn over(x: &[f64], y: &[f64], reach: f64) -> Self {
        let least = |v: &[f64]| v.iter().copied().fold(f64::INFINITY, f64::min);
        let most = |v: &[f64]| v.iter().copied().fold(f64::NEG_INFINITY, f64::max);
        Self::frame([least(x), most(x), least(y), most(y)], x.len(), reach)
    }

    /// An empty grid for about `n` stars within (x0, x1, y0, y1).
    fn frame([mut x0, mut x1, mut y0, mut y1]: [f64; 4], n: usize, reach: f64) -> Self {
        if n == 0 {
            (x0, x1, y0, y1) = (0.0, 0.0, 0.0, 0.0);
        }
        let area = ((x1 - x0) * (y1 - y0)).max(reach * reach);
        let cell = reach.max((area / (n.max(16) as f64)).sqrt());
        let nx = ((x1 - x0) / cell) as usize + 1;
        let ny = ((y1 - y0) / cell) as usize + 1;
        Self {
            x0,
            y0,
            cell,
            nx,
            ny,
            bins: vec![Vec::new(); nx * ny],
        }
    }

    fn column(&self, x: f64) -> usize {
        (((x - self.x0) / self.cell).floor().max(0.0) as usize).min(self.nx - 1)
    }
    fn row(&self, y: f64) -> usize {
        (((y - self.y0) / self.cell).floor().max(0.0) as usize).min(self.ny - 1)
    }
    fn bin(&self, x: f64, y: f64) -> usize {
        self.row(y) * self.nx + self.column(x)
    }

    pub fn insert(&mut self, k: u32, x: f64, y: f64) {
        if self.bins.is_empty() {
            (self.nx, self.ny, self.cell, self.x0, self.y0) = (1, 1, 1.0, x, y);
            self.bins = vec![Vec::new()];
        }
        let b = self.bin(x, y);
        self.bins[b].push(k);
    }

    pub fn remove(&mut self, k: u32, x: f64, y: f64) {
        if self.bins.is_empty() {
            return;
        }
        let b = self.bin(x, y);
        self.bins[b].retain(|&q| q != k);
    }

    /// Stars within `r` of a place, in ascending order of index.
    pub fn within(&self, preds: &[Pred], x: f64, y: f64, r: f64, out: &mut Vec<u32>) {
        out.clear();
        if self.bins.is_empty() {
            return;
        }
        for iy in self.row(y - r)..=self.row(y + r) {
            for ix in self.column(x - r)..=self.column(x + r) {
                for &k in &self.bins[iy * self.nx + ix] {
                    let p = &preds[k as usize];
                    if p.active && (p.x - x).powi(2) + (p.y - y).powi(2) <= r * r {
                        out.push(k);
                    }
                }
            }
        }
        out.sort_unstable();
    }
}
