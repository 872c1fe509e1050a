//! From registered epochs to a scene: trees, starting laws, local densities.

use rayon::prelude::*;

use crate::model::campaign::{BlendLaw, Campaign, Selection};
use crate::model::detection::FieldEpoch;
use crate::motion::state::{Dynamics, Wide};
use crate::near::{Hit, Tree};
use crate::resolve::scene::{Scene, Sight};
use crate::sensor::Sensor;
use crate::sensor::depth::Depth;
use crate::sensor::errors::ErrorLaw;
use crate::sensor::falses::FalseLaw;
use crate::sensor::pairs::PairLaw;

/// Width of the acceleration prior in fields without a mass, as a share of the speed prior
/// per decade of years: slow curvature is allowed, not expected.
const FREE_ACCEL_SHARE: f64 = 0.01;

/// Law of motion of a campaign.
#[must_use]
pub fn dynamics(campaign: &Campaign) -> Dynamics {
    match &campaign.central {
        Some(c) => Dynamics::Central {
            gm_mas3_yr2: c.gm_mas3_yr2,
            x_mas: c.x_mas,
            y_mas: c.y_mas,
            vx_mas_yr: c.vx_mas_yr,
            vy_mas_yr: c.vy_mas_yr,
            t_yr: campaign.reference.yr(),
        },
        None => Dynamics::Free {
            speed_mas_yr: campaign.stars.speed_mas_yr,
            accel_mas_yr2: FREE_ACCEL_SHARE * campaign.stars.speed_mas_yr,
            wide: campaign.stars.foreground.map_or(
                Wide {
                    fraction: 0.05,
                    speed_mas_yr: 2.0 * campaign.stars.speed_mas_yr,
                },
                |f| Wide {
                    fraction: f.fraction.clamp(0.001, 0.999),
                    speed_mas_yr: f.speed_mas_yr,
                },
            ),
        },
    }
}

/// The scene with starting laws.
#[must_use]
pub fn scene<'a>(campaign: &Campaign, epochs: &'a [FieldEpoch]) -> Scene<'a> {
    let area = field_area(epochs);
    let sights: Vec<Sight> = epochs
        .par_iter()
        .enumerate()
        .map(|(e, data)| {
            let settings = &campaign.epochs[e].settings;
            let sensor = Sensor {
                fwhm_mas: data.fwhm_mas,
                depth: Depth::from_list(&data.mag),
                errors: ErrorLaw::wide(data.fwhm_mas),
                pairs: PairLaw::start(),
                falses: FalseLaw::start(),
                blend: settings.blend.unwrap_or(BlendLaw::Psf),
                blend_stated: settings.blend.is_some(),
                zero_point_mag: 0.0,
                targeted: settings.selection == Selection::Targeted,
            };
            let mut s = Sight {
                t_yr: data.time.yr(),
                tree: Tree::build(&data.x_mas, &data.y_mas),
                data,
                sensor,
                mag: Vec::new(),
                mag_var: Vec::new(),
                ln_false: Vec::new(),
                ln_single: Vec::new(),
                ln_star: Vec::new(),
            };
            s.ln_star = densities(&s, area);
            apply_laws(&mut s);
            s
        })
        .collect();
    let mut by_time: Vec<usize> = (0..sights.len()).collect();
    by_time.sort_by(|&a, &b| sights[a].t_yr.total_cmp(&sights[b].t_yr).then(a.cmp(&b)));
    Scene {
        dynamics: dynamics(campaign),
        sights,
        by_time,
    }
}

/// Recompute what depends on the laws: magnitudes, their errors, false densities.
pub fn apply_laws(s: &mut Sight) {
    let sn = &s.sensor;
    s.mag = s.data.mag.iter().map(|m| m + sn.zero_point_mag).collect();
    s.mag_var = s
        .data
        .mag_err
        .iter()
        .map(|&e| sn.errors.magnitude_var(e))
        .collect();
    let ln_share = sn.falses.share.ln();
    s.ln_false = if s.ln_single.is_empty() {
        s.ln_star.iter().map(|l| l + ln_share).collect()
    } else {
        s.ln_star
            .iter()
            .zip(&s.ln_single)
            .map(|(l, single)| l + single)
            .collect()
    };
}

/// Area of the box that holds every detection of every epoch \[mas^2\]: a list of one star says
/// nothing of the area it was drawn from, the campaign does.
fn field_area(epochs: &[FieldEpoch]) -> f64 {
    let (mut lo, mut hi) = ([f64::INFINITY; 2], [f64::NEG_INFINITY; 2]);
    let mut side = 1.0_f64;
    for e in epochs {
        side = side.max(e.fwhm_mas);
        for (x, y) in e.x_mas.iter().zip(&e.y_mas) {
            lo = [lo[0].min(*x), lo[1].min(*y)];
            hi = [hi[0].max(*x), hi[1].max(*y)];
        }
    }
    (hi[0] - lo[0]).max(side) * (hi[1] - lo[1]).max(side)
}

/// ln of the local density of detections per mas^2 and mag at each detection: the distance of
/// the k-th neighbour, and the spread of the list's magnitudes around its own.
fn densities(s: &Sight, area: f64) -> Vec<f64> {
    let n = s.data.len();
    if n == 0 {
        return Vec::new();
    }
    let mean = n as f64 / area.max(1.0);
    let k = 12.min(n - 1);
    let mut order: Vec<u32> = (0..n as u32)
        .filter(|&d| s.data.mag[d as usize].is_finite())
        .collect();
    order.sort_by(|&a, &b| {
        s.data.mag[a as usize]
            .total_cmp(&s.data.mag[b as usize])
            .then(a.cmp(&b))
    });
    let mut ln_mag = vec![0.0; n];
    let m = order.len();
    let half = (m / 20).max(4).min(m.saturating_sub(1));
    for (i, &d) in order.iter().enumerate() {
        if m < 4 {
            // Too few to know: a spread of three magnitudes (common practice, no source).
            ln_mag[d as usize] = -(3.0_f64.ln());
            continue;
        }
        let (lo, hi) = (i.saturating_sub(half), (i + half).min(m - 1));
        let span = s.data.mag[order[hi] as usize] - s.data.mag[order[lo] as usize];
        ln_mag[d as usize] = ((hi - lo) as f64 / m as f64 / span.max(0.02)).ln();
    }
    let mut hits: Vec<Hit> = Vec::new();
    (0..n)
        .map(|d| {
            let local = if k >= 3 {
                s.tree
                    .nearest_n(s.data.x_mas[d], s.data.y_mas[d], k + 1, &mut hits);
                let far = hits.last().map_or(1.0, |h| h.dist_mas).max(1e-3);
                // Shrunk towards the mean of the list by three pseudo-neighbours.
                (k as f64 + 3.0) / (std::f64::consts::PI * far * far + 3.0 / mean)
            } else {
                mean
            };
            local.ln() + ln_mag[d]
        })
        .collect()
}
