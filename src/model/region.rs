//! Where an epoch can show a star: an outline less the masked circles.

/// Outline (polygon, mas, either sense) and masked circles in the common frame.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Region {
    /// Fewer than three corners: no outline is known and every place counts as inside.
    pub outline_mas: Vec<[f64; 2]>,
    /// (x, y, radius) of places where nothing can be seen.
    pub holes_mas: Vec<[f64; 3]>,
}

impl Region {
    /// Can a star at this place be seen at all?
    #[must_use]
    pub fn contains(&self, x_mas: f64, y_mas: f64) -> bool {
        if self.outline_mas.len() >= 3 && !inside(&self.outline_mas, x_mas, y_mas) {
            return false;
        }
        !self
            .holes_mas
            .iter()
            .any(|&[cx, cy, r]| (x_mas - cx).powi(2) + (y_mas - cy).powi(2) < r * r)
    }

    /// Area of the outline \[mas^2\], holes not subtracted; `None` without an outline.
    #[must_use]
    pub fn area_mas2(&self) -> Option<f64> {
        let p = &self.outline_mas;
        if p.len() < 3 {
            return None;
        }
        let twice: f64 = (0..p.len())
            .map(|k| {
                let (a, b) = (p[k], p[(k + 1) % p.len()]);
                a[0] * b[1] - b[0] * a[1]
            })
            .sum();
        Some(0.5 * twice.abs())
    }

    /// Distance \[mas\] to the nearest edge of the outline (unsigned); infinite without one.
    #[must_use]
    pub fn edge_distance_mas(&self, x_mas: f64, y_mas: f64) -> f64 {
        let p = &self.outline_mas;
        if p.len() < 3 {
            return f64::INFINITY;
        }
        (0..p.len())
            .map(|k| {
                let (a, b) = (p[k], p[(k + 1) % p.len()]);
                let (ux, uy) = (b[0] - a[0], b[1] - a[1]);
                let len2 = ux * ux + uy * uy;
                let s = if len2 > 0.0 {
                    (((x_mas - a[0]) * ux + (y_mas - a[1]) * uy) / len2).clamp(0.0, 1.0)
                } else {
                    0.0
                };
                (x_mas - a[0] - s * ux).hypot(y_mas - a[1] - s * uy)
            })
            .fold(f64::INFINITY, f64::min)
    }
}

/// Even-odd rule.
fn inside(p: &[[f64; 2]], x: f64, y: f64) -> bool {
    let mut is_in = false;
    let mut prev = p[p.len() - 1];
    for &cur in p {
        if (cur[1] > y) != (prev[1] > y)
            && x < (prev[0] - cur[0]) * (y - cur[1]) / (prev[1] - cur[1]) + cur[0]
        {
            is_in = !is_in;
        }
        prev = cur;
    }
    is_in
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn square_with_a_hole() {
        let r = Region {
            outline_mas: vec![[0.0, 0.0], [10.0, 0.0], [10.0, 10.0], [0.0, 10.0]],
            holes_mas: vec![[5.0, 5.0, 1.0]],
        };
        assert!(r.contains(1.0, 1.0) && !r.contains(5.5, 5.0) && !r.contains(11.0, 5.0));
        assert_eq!(r.area_mas2(), Some(100.0));
        assert!((r.edge_distance_mas(3.0, 5.0) - 3.0).abs() < 1e-12);
    }
}
