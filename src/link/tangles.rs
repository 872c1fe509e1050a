//! Connected confused groups of tracks: those that share a detection, could have taken the same
//! one, or came so close that one may have hidden the other.
//!
//! Union-find over tracks; cost nearly linear in the number of claims and close pairs.

use petgraph::unionfind::UnionFind;

use crate::near::Tree;

/// A track holds a detection or could hold it (it lies in the track's gate).
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord)]
pub struct Claim {
    pub detection: u32,
    pub track: u32,
}

/// Pairs of tracks (lower number first) whose predicted places at one epoch are at most
/// `radius_mas` apart, usually two resolution elements; places that are not finite are ignored.
#[must_use]
pub fn close_pairs(x_mas: &[f64], y_mas: &[f64], radius_mas: f64) -> Vec<(u32, u32)> {
    Tree::build(x_mas, y_mas)
        .close_pairs(radius_mas)
        .into_iter()
        .map(|p| (p.left, p.right))
        .collect()
}

/// Groups of tracks joined by common claims or by closeness, each sorted, groups sorted by their
/// first track. Tracks without any rival form groups of one.
#[must_use]
pub fn tangles(n_tracks: usize, claims: &[Claim], close: &[(u32, u32)]) -> Vec<Vec<u32>> {
    let mut sets = UnionFind::<u32>::new(n_tracks);
    let mut sorted = claims.to_vec();
    sorted.sort_unstable();
    for pair in sorted.windows(2) {
        if pair[0].detection == pair[1].detection {
            sets.union(pair[0].track, pair[1].track);
        }
    }
    for &(a, b) in close {
        sets.union(a, b);
    }
    let mut groups: Vec<Vec<u32>> = Vec::new();
    let mut group_of = vec![usize::MAX; n_tracks];
    for track in 0..n_tracks as u32 {
        let root = sets.find_mut(track) as usize;
        if group_of[root] == usize::MAX {
            group_of[root] = groups.len();
            groups.push(Vec::new());
        }
        groups[group_of[root]].push(track);
    }
    groups
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn shared_claims_and_closeness_join() {
        let claim = |detection, track| Claim { detection, track };
        let claims = [
            claim(7, 4),
            claim(1, 0),
            claim(7, 1),
            claim(2, 2),
            claim(1, 3),
        ];
        let groups = tangles(6, &claims, &[(2, 5)]);
        assert_eq!(groups, [vec![0, 3], vec![1, 4], vec![2, 5]]);
    }

    #[test]
    fn tracks_within_the_radius_are_close() {
        let x = [0.0, 10.0, f64::NAN, 100.0];
        assert_eq!(close_pairs(&x, &[0.0; 4], 12.0), [(0, 1)]);
    }
}
