//! Who is near whom: a k-d tree over the places of one epoch. The only module that knows the
//! tree crate.
//!
//! Radii and distances are in mas, never squared. Hits come in a total order (distance, x, y,
//! row), which does not depend on the order in which points were given unless two of them are
//! the same point. Points that are not finite are left out and never found. Any number of
//! identical points is safe.
//!
//! A query costs O(log n + hits); a build O(n log n) time and about 24 bytes per point.

use kiddo::batch::Executor;
use kiddo::{ImmutableKdTree, SquaredEuclidean};
use std::num::NonZero;

use crate::maths::order;

/// Places beyond this are treated as not finite: their squared distances would overflow.
const LARGEST_MAS: f64 = 1e150;

/// A point found.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Hit {
    pub dist_mas: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    /// Index of the point in the slices the tree was built from.
    pub row: u32,
}

/// Two points within a radius of each other.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Pair {
    pub left: u32,
    pub right: u32,
    pub dist_mas: f64,
}

/// Points of one epoch, ready for queries.
#[derive(Debug)]
pub struct Tree {
    points: ImmutableKdTree<f64, 2>,
}

impl Tree {
    /// Builds from columns of equal length; the shorter one decides.
    #[must_use]
    pub fn build(x_mas: &[f64], y_mas: &[f64]) -> Self {
        let usable = |v: f64| v.abs() <= LARGEST_MAS;
        let rows: Vec<u32> = x_mas
            .iter()
            .zip(y_mas)
            .enumerate()
            .filter(|&(_, (&x, &y))| usable(x) && usable(y))
            .map(|(row, _)| row as u32)
            .collect();
        // -0.0 + 0.0 = 0.0: one zero only, so that equal places are equal bit by bit.
        let points = ImmutableKdTree::builder()
            .with_serial_construction()
            .build_from_source(
                &rows,
                |&row, axis| (if axis == 0 { x_mas } else { y_mas })[row as usize] + 0.0,
                |_, &row| row,
            )
            .expect("finite points whose number fits in 32 bits");
        Self { points }
    }

    /// Number of points that can be found.
    #[must_use]
    pub fn len(&self) -> usize {
        self.points.size()
    }

    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// All points at most `radius_mas` away; `hits` is cleared first. Nothing for a radius that
    /// is negative or not a number, or a place that is not finite.
    pub fn within(&self, x_mas: f64, y_mas: f64, radius_mas: f64, hits: &mut Vec<Hit>) {
        hits.clear();
        if radius_mas >= 0.0 {
            self.collect(x_mas, y_mas, radius_mas * radius_mas, hits);
        }
    }

    /// The `n` nearest points, fewer if there are not so many; `hits` is cleared first.
    pub fn nearest_n(&self, x_mas: f64, y_mas: f64, n: usize, hits: &mut Vec<Hit>) {
        hits.clear();
        let (Some(n), false, true) = (
            NonZero::new(n.min(self.len())),
            self.is_empty(),
            x_mas.is_finite() && y_mas.is_finite(),
        ) else {
            return;
        };
        let far2 = self
            .points
            .query(&[x_mas, y_mas])
            .nearest_n::<SquaredEuclidean<f64>>(n)
            .execute()
            .last()
            .map_or(0.0, |hit| hit.distance);
        // Everything as far as the last one, so that ties at the edge are cut by our order.
        self.collect(x_mas, y_mas, far2, hits);
        hits.truncate(n.get());
    }

    fn collect(&self, x_mas: f64, y_mas: f64, radius2_mas2: f64, hits: &mut Vec<Hit>) {
        if self.is_empty() || !x_mas.is_finite() || !y_mas.is_finite() {
            return;
        }
        self.points
            .query(&[x_mas, y_mas])
            .within::<SquaredEuclidean<f64>>(radius2_mas2)
            .unsorted()
            .with_points()
            .visit(|found| {
                hits.push(Hit {
                    dist_mas: found.distance.sqrt(),
                    x_mas: found.point[0],
                    y_mas: found.point[1],
                    row: found.item,
                });
            });
        hits.sort_unstable_by(|a, b| {
            order::by(a.dist_mas, b.dist_mas)
                .then(order::by(a.x_mas, b.x_mas))
                .then(order::by(a.y_mas, b.y_mas))
                .then(a.row.cmp(&b.row))
        });
    }

    /// All pairs (a point of this tree, a point of the other) at most `radius_mas` apart,
    /// sorted by the two rows. Both trees may hold the same points.
    #[must_use]
    pub fn pairs_within(&self, other: &Self, radius_mas: f64) -> Vec<Pair> {
        if self.is_empty() || other.is_empty() || radius_mas.is_nan() || radius_mas < 0.0 {
            return Vec::new();
        }
        if std::ptr::eq(self, other) {
            return self.pairs_with_itself(radius_mas);
        }
        let mut pairs: Vec<Pair> = self
            .points
            .query_tree(&other.points)
            .within::<SquaredEuclidean<f64>>(radius_mas * radius_mas)
            .with_executor(&Executor::serial())
            .execute()
            .into_iter()
            .map(|found| Pair {
                left: found.left_item,
                right: found.right_item,
                dist_mas: found.distance.sqrt(),
            })
            .collect();
        pairs.sort_unstable_by_key(|p| (p.left, p.right));
        pairs
    }

    /// All pairs of two different points of this tree, each once (left < right), sorted.
    #[must_use]
    pub fn close_pairs(&self, radius_mas: f64) -> Vec<Pair> {
        let mut pairs = self.pairs_with_itself(radius_mas);
        pairs.retain(|p| p.left < p.right);
        pairs
    }

    fn pairs_with_itself(&self, radius_mas: f64) -> Vec<Pair> {
        let mut pairs = Vec::new();
        let mut hits = Vec::new();
        for (row, point) in self.points.iter() {
            self.within(point[0], point[1], radius_mas, &mut hits);
            pairs.extend(hits.iter().map(|hit| Pair {
                left: row,
                right: hit.row,
                dist_mas: hit.dist_mas,
            }));
        }
        pairs.sort_unstable_by_key(|p| (p.left, p.right));
        pairs
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn identical_points_are_all_found_in_row_order() {
        let (x, y) = (vec![3.0; 200], vec![-1.0; 200]);
        let tree = Tree::build(&x, &y);
        let mut hits = Vec::new();
        tree.within(3.0, -1.0, 0.0, &mut hits);
        assert!(hits.len() == 200 && hits.iter().enumerate().all(|(k, h)| h.row == k as u32));
        tree.nearest_n(0.0, 3.0, 3, &mut hits);
        assert_eq!(hits.iter().map(|h| h.row).collect::<Vec<_>>(), [0, 1, 2]);
        assert_eq!(hits[0].dist_mas, 5.0);
        assert_eq!(tree.close_pairs(1.0).len(), 200 * 199 / 2);
    }

    #[test]
    fn points_that_are_not_finite_are_never_found() {
        let tree = Tree::build(
            &[0.0, f64::NAN, f64::INFINITY, 1.0, f64::MAX],
            &[0.0, 0.0, 0.0, 0.0, 0.0],
        );
        let mut hits = Vec::new();
        tree.within(0.0, 0.0, 10.0, &mut hits);
        assert_eq!(hits.iter().map(|h| h.row).collect::<Vec<_>>(), [0, 3]);
        tree.within(f64::NAN, 0.0, 10.0, &mut hits);
        assert!(hits.is_empty());
        tree.nearest_n(0.0, f64::NAN, 1, &mut hits);
        assert!(hits.is_empty());
    }

    #[test]
    fn an_empty_tree_answers() {
        let tree = Tree::build(&[], &[]);
        let mut hits = Vec::new();
        tree.within(0.0, 0.0, 10.0, &mut hits);
        tree.nearest_n(0.0, 0.0, 2, &mut hits);
        assert!(hits.is_empty() && tree.close_pairs(5.0).is_empty());
    }

    #[test]
    fn pairs_of_a_tree_with_itself_include_each_point() {
        let tree = Tree::build(&[0.0, 1.0], &[0.0, 0.0]);
        assert_eq!(tree.pairs_within(&tree, 0.5).len(), 2);
        assert_eq!(tree.pairs_within(&tree, 1.0).len(), 4);
    }
}
