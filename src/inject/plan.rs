//! When exposures are taken, with which instrument, and how each list lies on the sky.

use rand::{Rng, RngExt};

use super::settings::{MockInstrument, MockSettings, MockUnit};
use super::stars::normal;

/// One exposure to be made.
#[derive(Clone, Debug)]
pub struct Planned {
    pub time_yr: f64,
    /// Index into the recipe's instruments.
    pub instrument: usize,
    pub lie: Lie,
}

/// How a list lies on the sky: list = c0 + c1 x + c2 y, then the same for the second axis;
/// x, y in mas.
#[derive(Clone, Copy, Debug)]
pub struct Lie {
    pub coef: [[f64; 3]; 2],
    /// Length of one list unit; turns errors into list units.
    pub unit_mas: f64,
}

impl Lie {
    #[must_use]
    pub fn to_list(&self, p: [f64; 2]) -> [f64; 2] {
        self.coef.map(|c| c[0] + c[1] * p[0] + c[2] * p[1])
    }
}

/// A recipe that has no instrument for some time of an exposure.
#[derive(Debug, thiserror::Error)]
#[error("no instrument covers an exposure in {year:.2}; `from_yr` and `to_yr` leave a gap")]
pub struct NoInstrument {
    pub year: f64,
}

/// The exposures of a campaign in time order.
///
/// # Errors
/// When the instruments leave a time uncovered.
pub fn plan(settings: &MockSettings, rng: &mut impl Rng) -> Result<Vec<Planned>, NoInstrument> {
    let times = times(settings, rng);
    let mut out = Vec::with_capacity(times.len());
    for time_yr in times {
        let able: Vec<usize> = (0..settings.instrument.len())
            .filter(|&k| {
                let i = &settings.instrument[k];
                (i.from_yr..i.to_yr).contains(&time_yr)
            })
            .collect();
        if able.is_empty() {
            return Err(NoInstrument { year: time_yr });
        }
        let instrument = able[rng.random_range(0..able.len())];
        out.push(Planned {
            time_yr,
            instrument,
            lie: lie(&settings.instrument[instrument], rng),
        });
    }
    Ok(out)
}

/// Seasons get epochs in turn, so that coverage is as even as whole numbers allow; inside a
/// season times are random.
fn times(settings: &MockSettings, rng: &mut impl Rng) -> Vec<f64> {
    let t = &settings.times;
    let seasons: Vec<(f64, f64)> = (t.first_yr.floor() as i32..=t.last_yr.floor() as i32)
        .map(|y| {
            let y = f64::from(y);
            (
                (y + t.season_start).max(t.first_yr),
                (y + t.season_end).min(t.last_yr),
            )
        })
        .filter(|(from, to)| from < to)
        .collect();
    // A span without any season in it is used as it is.
    let seasons = if seasons.is_empty() {
        vec![(t.first_yr, t.last_yr)]
    } else {
        seasons
    };
    let mut times: Vec<f64> = (0..t.epochs)
        .map(|k| {
            let season = if t.epochs >= seasons.len() {
                k * seasons.len() / t.epochs
            } else {
                // Few epochs: spread them from the first season to the last.
                (k * (seasons.len() - 1) + (t.epochs - 1) / 2) / (t.epochs - 1).max(1)
            };
            let (from, to) = seasons[season];
            let yr = from + rng.random::<f64>() * (to - from);
            (yr * 1e4).round() / 1e4
        })
        .collect();
    times.sort_by(f64::total_cmp);
    // Two exposures in one night would have one name.
    for k in 1..times.len() {
        if times[k] <= times[k - 1] {
            times[k] = times[k - 1] + 1e-4;
        }
    }
    times
}

/// Position angle `angle_deg` of +y, +x at `angle_deg` + 90, scatter on top.
fn lie(i: &MockInstrument, rng: &mut impl Rng) -> Lie {
    let unit_mas = match i.unit {
        MockUnit::Mas => 1.0,
        MockUnit::Arcsec => 1000.0,
        MockUnit::Pixel => i.scale_mas,
    };
    let draw: [f64; 7] = std::array::from_fn(|_| normal(rng));
    let (sin, cos) = (i.angle_deg + i.turn_deg * draw[0]).to_radians().sin_cos();
    let scale = unit_mas * (1.0 + i.stretch * draw[1]);
    // Sky to list: the turn undone, then a slight shear.
    let turn = [[cos / scale, -sin / scale], [sin / scale, cos / scale]];
    let shear = [
        [1.0 + 0.3 * i.stretch * draw[2], 0.3 * i.stretch * draw[3]],
        [0.0, 1.0 + 0.3 * i.stretch * draw[4]],
    ];
    let linear: [[f64; 2]; 2] = std::array::from_fn(|r| {
        std::array::from_fn(|c| shear[r][0] * turn[0][c] + shear[r][1] * turn[1][c])
    });
    let pointing = [i.pointing_mas * draw[5], i.pointing_mas * draw[6]];
    let coef = linear.map(|row| {
        let shift = -(row[0] * pointing[0] + row[1] * pointing[1]);
        [shift, row[0], row[1]]
    });
    Lie { coef, unit_mas }
}
