//! Convex hull and area of points in a plane.

/// Corners of the convex hull, counter-clockwise (Andrew 1979, monotone chain).
#[must_use]
pub fn convex_hull(mut points: Vec<[f64; 2]>) -> Vec<[f64; 2]> {
    points.sort_by(|a, b| a[0].total_cmp(&b[0]).then(a[1].total_cmp(&b[1])));
    points.dedup();
    if points.len() < 3 {
        return points;
    }
    let mut chain: Vec<[f64; 2]> = Vec::new();
    for pass in 0..2 {
        let base = chain.len();
        for &p in &points {
            while chain.len() >= base + 2
                && turn(chain[chain.len() - 2], chain[chain.len() - 1], p) <= 0.0
            {
                chain.pop();
            }
            chain.push(p);
        }
        // The last point of a pass is the first of the next.
        chain.pop();
        if pass == 0 {
            points.reverse();
        }
    }
    chain
}

/// Twice the signed area of the triangle; positive for a left turn.
fn turn(a: [f64; 2], b: [f64; 2], c: [f64; 2]) -> f64 {
    (b[0] - a[0]) * (c[1] - a[1]) - (b[1] - a[1]) * (c[0] - a[0])
}

/// Area inside a polygon, whatever its sense; 0 for fewer than three corners.
#[must_use]
pub fn area(corners: &[[f64; 2]]) -> f64 {
    let twice: f64 = (0..corners.len())
        .map(|k| {
            let (a, b) = (corners[k], corners[(k + 1) % corners.len()]);
            a[0] * b[1] - b[0] * a[1]
        })
        .sum();
    0.5 * twice.abs()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn hull_of_a_grid_is_its_square() {
        let points = (0..25)
            .map(|k| [f64::from(k % 5) * 10.0, f64::from(k / 5) * 10.0])
            .collect();
        let hull = convex_hull(points);
        assert_eq!(
            hull,
            vec![[0.0, 0.0], [40.0, 0.0], [40.0, 40.0], [0.0, 40.0]]
        );
        assert_eq!(area(&hull), 1600.0);
    }

    #[test]
    fn points_on_a_line_have_no_area() {
        let hull = convex_hull(vec![[0.0, 0.0], [1.0, 1.0], [3.0, 3.0], [2.0, 2.0]]);
        assert_eq!(hull, vec![[0.0, 0.0], [3.0, 3.0]]);
        assert_eq!(area(&hull), 0.0);
    }
}
