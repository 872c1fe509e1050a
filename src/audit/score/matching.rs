//! The one-to-one matching of tracks and stars that shares most detections.
//!
//! Exact: an edge whose weight is at least the sum of the runners-up of its two nodes belongs to
//! some best matching (give it up and at most those two edges can be gained), so such edges are
//! fixed first, again and again; what remains is a small sparse assignment problem.
//! Among equals the lower track, then the lower star is taken.

use crate::maths::assign::{Edges, FREE, Solver};

/// Number of detections that a track and a star share.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Overlap {
    pub track: u32,
    pub star: u32,
    pub n: u32,
}

/// Partner of every track and of every star, [`FREE`] where there is none. `overlaps` must be
/// sorted by track, then star.
#[must_use]
pub fn best_matching(
    overlaps: &[Overlap],
    n_tracks: usize,
    n_stars: usize,
) -> (Vec<u32>, Vec<u32>) {
    let mut star_of = vec![FREE; n_tracks];
    let mut track_of = vec![FREE; n_stars];
    let mut open: Vec<Overlap> = overlaps.iter().copied().filter(|o| o.n > 0).collect();
    while !open.is_empty() {
        let before = open.len();
        for o in sure(&open, n_tracks, n_stars) {
            star_of[o.track as usize] = o.star;
            track_of[o.star as usize] = o.track;
        }
        open.retain(|o| star_of[o.track as usize] == FREE && track_of[o.star as usize] == FREE);
        if open.len() == before {
            solve_rest(&open, &mut star_of, &mut track_of);
            break;
        }
    }
    (star_of, track_of)
}

/// Largest and second largest weight of every node.
fn top_two(n: usize, edges: impl Iterator<Item = (u32, u32)>) -> Vec<[u32; 2]> {
    let mut top = vec![[0; 2]; n];
    for (node, weight) in edges {
        let [first, second] = &mut top[node as usize];
        if weight > *first {
            (*first, *second) = (weight, *first);
        } else {
            *second = weight.max(*second);
        }
    }
    top
}

/// Edges that belong to some best matching, no two of them at one node.
fn sure(open: &[Overlap], n_tracks: usize, n_stars: usize) -> Vec<Overlap> {
    let of_track = top_two(n_tracks, open.iter().map(|o| (o.track, o.n)));
    let of_star = top_two(n_stars, open.iter().map(|o| (o.star, o.n)));
    let is_sure = |o: &&Overlap| {
        let [top_t, next_t] = of_track[o.track as usize];
        let [top_s, next_s] = of_star[o.star as usize];
        o.n == top_t && o.n == top_s && o.n >= next_t + next_s
    };
    let mut star_used = vec![false; n_stars];
    let mut last_track = FREE;
    let mut out = Vec::new();
    for o in open.iter().filter(is_sure) {
        if o.track == last_track {
            continue; // of several sure edges of a track only the first is looked at
        }
        last_track = o.track;
        if !std::mem::replace(&mut star_used[o.star as usize], true) {
            out.push(*o);
        }
    }
    out
}

/// The assignment problem that is left, with staying unmatched at no cost.
fn solve_rest(open: &[Overlap], star_of: &mut [u32], track_of: &mut [u32]) {
    let mut tracks: Vec<u32> = Vec::new();
    let mut first = Vec::new();
    for (k, o) in open.iter().enumerate() {
        if tracks.last() != Some(&o.track) {
            tracks.push(o.track);
            first.push(k as u32);
        }
    }
    first.push(open.len() as u32);
    let mut stars: Vec<u32> = open.iter().map(|o| o.star).collect();
    stars.sort_unstable();
    stars.dedup();
    let to: Vec<u32> = open
        .iter()
        .map(|o| stars.binary_search(&o.star).expect("is among them") as u32)
        .collect();
    let weight: Vec<f64> = open.iter().map(|o| f64::from(o.n)).collect();
    let mut solver = Solver::default();
    solver.max_weight(Edges {
        n_right: stars.len(),
        first: &first,
        to: &to,
        cost: &weight,
    });
    for (&track, &right) in tracks.iter().zip(solver.right_of_left()) {
        if right != FREE {
            let star = stars[right as usize];
            star_of[track as usize] = star;
            track_of[star as usize] = track;
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Best weight by trying every choice for the first track, then the next.
    fn by_enumeration(weight: &[Vec<u32>], track: usize, used: &mut Vec<bool>) -> u32 {
        let Some(row) = weight.get(track) else {
            return 0;
        };
        let mut best = by_enumeration(weight, track + 1, used);
        for (star, &w) in row.iter().enumerate() {
            if w > 0 && !used[star] {
                used[star] = true;
                best = best.max(w + by_enumeration(weight, track + 1, used));
                used[star] = false;
            }
        }
        best
    }

    #[test]
    fn weight_equals_enumeration() {
        let mut state = 1u64;
        let mut draw = |n: u64| {
            state = state
                .wrapping_mul(6_364_136_223_846_793_005)
                .wrapping_add(1);
            (state >> 33) % n
        };
        for case in 0..300 {
            let (n, m) = (1 + draw(6) as usize, 1 + draw(6) as usize);
            let weight: Vec<Vec<u32>> = (0..n)
                .map(|_| (0..m).map(|_| (draw(5) as u32).saturating_sub(1)).collect())
                .collect();
            let mut overlaps = Vec::new();
            for (t, row) in weight.iter().enumerate() {
                for (s, &w) in row.iter().enumerate() {
                    if w > 0 {
                        overlaps.push(Overlap {
                            track: t as u32,
                            star: s as u32,
                            n: w,
                        });
                    }
                }
            }
            let (star_of, track_of) = best_matching(&overlaps, n, m);
            let mut total = 0;
            for (t, &s) in star_of.iter().enumerate().filter(|(_, s)| **s != FREE) {
                assert_eq!(track_of[s as usize], t as u32);
                total += weight[t][s as usize];
            }
            let best = by_enumeration(&weight, 0, &mut vec![false; m]);
            assert_eq!(total, best, "case {case}: {weight:?}");
        }
    }
}
