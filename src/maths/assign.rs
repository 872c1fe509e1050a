//! Sparse minimum-cost assignment with the choice to leave a node out at a cost.
//!
//! Problem: left nodes (e.g. tracks) and right nodes (e.g. detections) with edge costs; every
//! left node takes one right node or pays its own price for staying unmatched, every right node
//! serves at most one left node, the sum is least.
//!
//! Method: shortest augmenting paths with node prices (Jonker & Volgenant 1987, Computing 38,
//! 325), here with a heap, because only gated pairs carry an edge. "Unmatched" is a private
//! right node of each left node. The prices prove the result: their sum equals the cost.
//!
//! Cost O(n (m + n log n)) at worst for n left nodes and m edges; with local edges each search
//! stays local. No allocation once the [`Solver`] has grown to the size of the problem.
//!
//! Ties are broken by node numbers alone, so equal input gives an equal matching. Edges whose
//! cost is not finite do not exist. Fails only when a left node that must be matched cannot be.

use std::cmp::Ordering;
use std::collections::BinaryHeap;

/// No partner.
pub const FREE: u32 = u32::MAX;

/// A bipartite graph, edges grouped by left node.
#[derive(Clone, Copy, Debug)]
pub struct Edges<'a> {
    pub n_right: usize,
    /// Edges of left node k are `first[k]..first[k + 1]`; length is the number of left nodes + 1.
    pub first: &'a [u32],
    /// Right node of each edge.
    pub to: &'a [u32],
    /// Cost of each edge.
    pub cost: &'a [f64],
}

impl Edges<'_> {
    #[must_use]
    pub fn n_left(&self) -> usize {
        self.first.len().saturating_sub(1)
    }

    fn of(&self, left: usize) -> std::ops::Range<usize> {
        self.first[left] as usize..self.first[left + 1] as usize
    }
}

/// No complete matching exists: this left node must be matched and cannot be.
#[derive(Clone, Copy, Debug, PartialEq, Eq, thiserror::Error)]
#[error("node {left} must be matched and has no free partner within reach")]
pub struct Unmatchable {
    pub left: usize,
}

#[derive(Clone, Copy, Debug)]
struct Reached {
    dist: f64,
    right: u32,
}

impl PartialEq for Reached {
    fn eq(&self, other: &Self) -> bool {
        self.cmp(other) == Ordering::Equal
    }
}
impl Eq for Reached {}
impl PartialOrd for Reached {
    fn partial_cmp(&self, other: &Self) -> Option<Ordering> {
        Some(self.cmp(other))
    }
}
impl Ord for Reached {
    /// Reversed: the heap then yields the nearest node, of equals the one with the lower number.
    fn cmp(&self, other: &Self) -> Ordering {
        other
            .dist
            .total_cmp(&self.dist)
            .then(other.right.cmp(&self.right))
    }
}

/// Where a shortest path ends.
#[derive(Clone, Copy)]
enum End {
    /// At an unused right node.
    Right(u32),
    /// At a left node that pays for staying unmatched.
    Out(u32),
}

/// Solves assignments and holds the last result; reuse it to save allocations.
#[derive(Clone, Debug, Default)]
pub struct Solver {
    mate_of_left: Vec<u32>,
    mate_of_right: Vec<u32>,
    price_left: Vec<f64>,
    price_right: Vec<f64>,
    dist: Vec<f64>,
    /// Left node from which a right node was reached.
    via: Vec<u32>,
    done: Vec<bool>,
    touched: Vec<u32>,
    settled: Vec<u32>,
    heap: BinaryHeap<Reached>,
}

impl Solver {
    /// The least-cost assignment; `miss[k]` is the cost of leaving left node k unmatched
    /// (infinite: it must be matched; empty slice: every left node must be). Returns the cost.
    ///
    /// # Errors
    /// When a left node that must be matched cannot be; the result is then undefined.
    pub fn solve(&mut self, edges: Edges, miss: &[f64]) -> Result<f64, Unmatchable> {
        let miss_of = |left: usize| miss.get(left).copied().unwrap_or(f64::INFINITY);
        self.reset(edges, miss_of)?;
        for left in 0..edges.n_left() {
            let settled_now =
                self.mate_of_left[left] != FREE || self.price_left[left] >= miss_of(left);
            if !settled_now {
                self.augment(edges, miss_of, left)?;
            }
        }
        Ok(self.cost(edges, miss_of))
    }

    /// Start: every left node at the price of its cheapest way out, matched to it where free.
    fn reset(&mut self, edges: Edges, miss_of: impl Fn(usize) -> f64) -> Result<(), Unmatchable> {
        let (n_left, n_right) = (edges.n_left(), edges.n_right);
        refill(&mut self.mate_of_left, n_left, FREE);
        refill(&mut self.mate_of_right, n_right, FREE);
        refill(&mut self.price_left, n_left, 0.0);
        refill(&mut self.price_right, n_right, 0.0);
        refill(&mut self.dist, n_right, f64::INFINITY);
        refill(&mut self.via, n_right, FREE);
        refill(&mut self.done, n_right, false);
        self.touched.clear();
        for left in 0..n_left {
            let mut best = (f64::INFINITY, FREE);
            for e in edges.of(left) {
                let (cost, right) = (edges.cost[e], edges.to[e]);
                if cost.is_finite() && (cost < best.0 || (cost == best.0 && right < best.1)) {
                    best = (cost, right);
                }
            }
            let miss = miss_of(left);
            if best.1 == FREE && !miss.is_finite() {
                return Err(Unmatchable { left });
            }
            self.price_left[left] = best.0.min(miss);
            if best.0 < miss && self.mate_of_right[best.1 as usize] == FREE {
                self.mate_of_left[left] = best.1;
                self.mate_of_right[best.1 as usize] = left as u32;
            }
        }
        Ok(())
    }

    /// One shortest augmenting path from a left node without a place.
    fn augment(
        &mut self,
        edges: Edges,
        miss_of: impl Fn(usize) -> f64,
        start: usize,
    ) -> Result<(), Unmatchable> {
        self.heap.clear();
        self.settled.clear();
        let mut end: Option<(f64, End)> = None;
        let mut left = start;
        let mut here = 0.0;
        loop {
            let out = here + (miss_of(left) - self.price_left[left]).max(0.0);
            if out.is_finite() && end.is_none_or(|(d, _)| out < d) {
                end = Some((out, End::Out(left as u32)));
            }
            let limit = end.map_or(f64::INFINITY, |(d, _)| d);
            for e in edges.of(left) {
                let (cost, right) = (edges.cost[e], edges.to[e]);
                let r = right as usize;
                if !cost.is_finite() || self.done[r] {
                    continue;
                }
                let slack = (cost - self.price_left[left] - self.price_right[r]).max(0.0);
                let dist = here + slack;
                if dist < self.dist[r] && dist < limit {
                    if self.dist[r] == f64::INFINITY {
                        self.touched.push(right);
                    }
                    self.dist[r] = dist;
                    self.via[r] = left as u32;
                    self.heap.push(Reached { dist, right });
                }
            }
            let Some(next) = self.next_reached() else {
                break;
            };
            if end.is_some_and(|(d, _)| d <= next.dist) {
                break;
            }
            let r = next.right as usize;
            if self.mate_of_right[r] == FREE {
                end = Some((next.dist, End::Right(next.right)));
                break;
            }
            self.done[r] = true;
            self.settled.push(next.right);
            left = self.mate_of_right[r] as usize;
            here = next.dist;
        }
        if let Some((length, place)) = end {
            self.raise_prices(start, length);
            self.flip(start, place);
        }
        for &right in &self.touched {
            self.dist[right as usize] = f64::INFINITY;
            self.done[right as usize] = false;
        }
        self.touched.clear();
        match end {
            Some(_) => Ok(()),
            None => Err(Unmatchable { left: start }),
        }
    }

    fn next_reached(&mut self) -> Option<Reached> {
        while let Some(top) = self.heap.pop() {
            let r = top.right as usize;
            if !self.done[r] && top.dist <= self.dist[r] {
                return Some(top);
            }
        }
        None
    }

    fn raise_prices(&mut self, start: usize, length: f64) {
        self.price_left[start] += length;
        for &right in &self.settled {
            let r = right as usize;
            let gain = length - self.dist[r];
            self.price_right[r] -= gain;
            self.price_left[self.mate_of_right[r] as usize] += gain;
        }
    }

    fn flip(&mut self, start: usize, place: End) {
        let mut right = match place {
            End::Right(right) => right,
            End::Out(left) => {
                let freed = self.mate_of_left[left as usize];
                self.mate_of_left[left as usize] = FREE;
                if left as usize == start {
                    return;
                }
                freed
            }
        };
        loop {
            let left = self.via[right as usize] as usize;
            let freed = self.mate_of_left[left];
            self.mate_of_left[left] = right;
            self.mate_of_right[right as usize] = left as u32;
            if left == start {
                return;
            }
            right = freed;
        }
    }

    fn cost(&self, edges: Edges, miss_of: impl Fn(usize) -> f64) -> f64 {
        (0..edges.n_left())
            .map(|left| match self.mate_of_left[left] {
                FREE => miss_of(left),
                mate => edges
                    .of(left)
                    .filter(|&e| edges.to[e] == mate && edges.cost[e].is_finite())
                    .map(|e| edges.cost[e])
                    .fold(f64::INFINITY, f64::min),
            })
            .sum()
    }

    /// Right partner of every left node, [`FREE`] when it has none.
    #[must_use]
    pub fn right_of_left(&self) -> &[u32] {
        &self.mate_of_left
    }

    /// Left partner of every right node, [`FREE`] when it has none.
    #[must_use]
    pub fn left_of_right(&self) -> &[u32] {
        &self.mate_of_right
    }

    /// Price of every left node: at most its miss cost, and price(left) + price(right) is at
    /// most the edge's cost, with equality on what was chosen.
    #[must_use]
    pub fn left_prices(&self) -> &[f64] {
        &self.price_left
    }

    /// Price of every right node: never positive, zero where unmatched.
    #[must_use]
    pub fn right_prices(&self) -> &[f64] {
        &self.price_right
    }

    /// The matching of largest total weight; edges of negative weight are never used. `edges`
    /// holds weights in place of costs. Returns the weight.
    pub fn max_weight(&mut self, edges: Edges) -> f64 {
        let costs: Vec<f64> = edges.cost.iter().map(|w| -w).collect();
        let miss = vec![0.0; edges.n_left()];
        let negated = Edges {
            cost: &costs,
            ..edges
        };
        // With a finite miss cost everywhere a solution always exists.
        self.solve(negated, &miss).map_or(0.0, |cost| -cost)
    }
}

fn refill<T: Clone>(v: &mut Vec<T>, n: usize, value: T) {
    v.clear();
    v.resize(n, value);
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_cheaper_of_match_and_miss() {
        let edges = Edges {
            n_right: 1,
            first: &[0, 1, 2],
            to: &[0, 0],
            cost: &[1.0, 3.0],
        };
        let mut s = Solver::default();
        assert_eq!(s.solve(edges, &[2.0, 9.0]), Ok(5.0));
        assert_eq!(s.right_of_left(), &[FREE, 0]);
        assert_eq!(s.solve(edges, &[8.0, 9.0]), Ok(10.0));
        assert_eq!(s.right_of_left(), &[0, FREE]);
        assert_eq!(s.solve(edges, &[]), Err(Unmatchable { left: 1 }));
    }

    #[test]
    fn weights_below_zero_stay_unused() {
        let edges = Edges {
            n_right: 2,
            first: &[0, 2, 3],
            to: &[0, 1, 0],
            cost: &[5.0, 4.0, -1.0],
        };
        let mut s = Solver::default();
        assert_eq!(s.max_weight(edges), 5.0);
        assert_eq!(s.right_of_left(), &[0, FREE]);
    }

    #[test]
    fn empty_graphs_cost_nothing() {
        let edges = Edges {
            n_right: 0,
            first: &[0],
            to: &[],
            cost: &[],
        };
        assert_eq!(Solver::default().solve(edges, &[]), Ok(0.0));
    }
}
