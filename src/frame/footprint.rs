//! Where an epoch could have shown a star: the stated outline, or one drawn round the list.
//!
//! The convex hull of n points lies inside the true outline; Ripley & Rasson (1977, Journal of
//! Applied Probability 14, 483) enlarge it by the share of points that are its corners. We push
//! the hull outward by that amount, and by at least half a resolution element, so that a star
//! at the edge that moves a little is still inside. With too few points to say, there is no
//! outline and every place counts as inside.

use crate::maths::hull::{area, convex_hull};
use crate::model::region::Region;

/// Directions in which the hull is pushed outward.
const DIRECTIONS: usize = 16;
/// Fewer points that are not corners of the hull than this say nothing about an outline.
const FEWEST_INSIDE: usize = 3;

/// Region from an outline already in mas, or from the list; `holes_mas` are masked circles.
#[must_use]
pub fn region(
    outline_mas: Option<Vec<[f64; 2]>>,
    x_mas: &[f64],
    y_mas: &[f64],
    fwhm_mas: f64,
    targeted: bool,
    holes_mas: Vec<[f64; 3]>,
) -> Region {
    let outline_mas = outline_mas.unwrap_or_else(|| {
        if targeted {
            // A list of chosen stars does not trace its field.
            Vec::new()
        } else {
            grown_hull(x_mas, y_mas, fwhm_mas).unwrap_or_default()
        }
    });
    Region {
        outline_mas,
        holes_mas,
    }
}

/// Convex hull of the list, grown; `None` when the list is too small or lies on a line.
#[must_use]
pub fn grown_hull(x_mas: &[f64], y_mas: &[f64], fwhm_mas: f64) -> Option<Vec<[f64; 2]>> {
    let points: Vec<[f64; 2]> = x_mas.iter().zip(y_mas).map(|(&x, &y)| [x, y]).collect();
    let n = points.len();
    let hull = convex_hull(points);
    let area = area(&hull);
    let extent = hull
        .iter()
        .flat_map(|a| hull.iter().map(move |b| (a[0] - b[0]).hypot(a[1] - b[1])))
        .fold(0.0, f64::max);
    // A hull much thinner than long is a line of stars, not a field.
    if n < hull.len() + FEWEST_INSIDE || area < 1e-6 * extent * extent {
        return None;
    }
    let corners = hull.len() as f64 / n as f64;
    let radius = (area / std::f64::consts::PI).sqrt();
    let grow = (radius * ((1.0 / (1.0 - corners)).sqrt() - 1.0)).max(0.5 * fwhm_mas);
    Some(pushed_out(&hull, grow))
}

/// Hull of the points of a regular polygon about each corner that contains the circle `grow`.
fn pushed_out(hull: &[[f64; 2]], grow: f64) -> Vec<[f64; 2]> {
    let step = 2.0 * std::f64::consts::PI / DIRECTIONS as f64;
    let reach = grow / (0.5 * step).cos();
    let around = hull
        .iter()
        .flat_map(|&[x, y]| {
            (0..DIRECTIONS).map(move |k| {
                let (s, c) = (k as f64 * step).sin_cos();
                [x + reach * c, y + reach * s]
            })
        })
        .collect();
    convex_hull(around)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn grid(side: usize, step: f64) -> (Vec<f64>, Vec<f64>) {
        (0..side * side)
            .map(|k| ((k % side) as f64 * step, (k / side) as f64 * step))
            .unzip()
    }

    #[test]
    fn grown_hull_holds_every_star_with_half_an_fwhm_to_spare() {
        let (x, y) = grid(10, 10.0);
        let region = region(None, &x, &y, 8.0, false, Vec::new());
        for (&x, &y) in x.iter().zip(&y) {
            assert!(region.contains(x, y) && region.edge_distance_mas(x, y) >= 4.0 - 1e-9);
        }
        let area = region.area_mas2().unwrap();
        assert!(area > 8100.0 && area < 1.25 * 8100.0, "{area}");
    }

    #[test]
    fn few_stars_a_line_of_stars_and_chosen_stars_draw_no_outline() {
        let (x, y) = grid(2, 10.0);
        assert!(grown_hull(&x, &y, 5.0).is_none());
        let line: Vec<f64> = (0..50).map(f64::from).collect();
        assert!(grown_hull(&line, &line, 5.0).is_none());
        let (x, y) = grid(10, 10.0);
        let r = region(None, &x, &y, 5.0, true, Vec::new());
        assert!(r.contains(1e9, 1e9));
    }
}
