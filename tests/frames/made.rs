//! Made-up skies and lists for the tests of frames.

use asterskein::maths::cov2::Cov2;
use asterskein::model::campaign::{
    Campaign, Epoch, FrameFreedom, Instrument, ListSource, StarMotions, Unit,
};
use asterskein::model::detection::{Ids, RawList};
use asterskein::model::time::JulianYear;
use rand::{Rng, RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;

pub fn rng(seed: u64) -> ChaCha8Rng {
    ChaCha8Rng::seed_from_u64(seed)
}

/// A normal deviate (Box & Muller).
pub fn normal(rng: &mut impl Rng) -> f64 {
    let (a, b): (f64, f64) = (rng.random::<f64>().max(1e-300), rng.random());
    (-2.0 * a.ln()).sqrt() * (std::f64::consts::TAU * b).cos()
}

/// A star that moves straight.
#[derive(Clone, Copy, Debug)]
pub struct Star {
    pub x: f64,
    pub y: f64,
    pub vx: f64,
    pub vy: f64,
    pub mag: f64,
}

impl Star {
    pub fn at(&self, dt: f64) -> (f64, f64) {
        (self.x + self.vx * dt, self.y + self.vy * dt)
    }
}

/// Stars spread evenly over a square, numbers rising with magnitude.
pub fn sky(rng: &mut impl Rng, n: usize, half_mas: f64, speed: f64) -> Vec<Star> {
    (0..n)
        .map(|_| Star {
            x: half_mas * (2.0 * rng.random::<f64>() - 1.0),
            y: half_mas * (2.0 * rng.random::<f64>() - 1.0),
            vx: speed * normal(rng),
            vy: speed * normal(rng),
            mag: 17.0 + (rng.random::<f64>().max(1e-4)).log10() / 0.25,
        })
        .collect()
}

/// List = (A (x, y) + quadratic) + corner, x and y in mas about the pointing.
#[derive(Clone, Copy, Debug)]
pub struct Camera {
    pub pointing: [f64; 2],
    pub scale_mas: f64,
    pub turn_deg: f64,
    pub mirrored: bool,
    pub half_mas: f64,
    /// Bend of the detector \[mas per arcsec^2\], u then v.
    pub bend: [[f64; 3]; 2],
}

impl Camera {
    pub fn plain(scale_mas: f64, half_mas: f64) -> Self {
        Self {
            pointing: [0.0; 2],
            scale_mas,
            turn_deg: 0.0,
            mirrored: false,
            half_mas,
            bend: [[0.0; 3]; 2],
        }
    }

    /// List position of a place \[mas\], if on the detector.
    pub fn see(&self, x: f64, y: f64) -> Option<(f64, f64)> {
        let (dx, dy) = (x - self.pointing[0], y - self.pointing[1]);
        let (s, c) = self.turn_deg.to_radians().sin_cos();
        let (mut u, v) = (c * dx - s * dy, s * dx + c * dy);
        if u.abs() > self.half_mas || v.abs() > self.half_mas {
            return None;
        }
        if self.mirrored {
            u = -u;
        }
        let q = [u * u / 1e6, u * v / 1e6, v * v / 1e6];
        let bend = |k: usize| (0..3).map(|j| self.bend[k][j] * q[j]).sum::<f64>();
        Some((
            (u + bend(0)) / self.scale_mas + 128.0,
            (v + bend(1)) / self.scale_mas + 128.0,
        ))
    }
}

/// One list of the stars brighter than a limit, with an error that grows toward it.
pub fn expose(
    rng: &mut impl Rng,
    stars: &[Star],
    dt: f64,
    camera: &Camera,
    limit: f64,
    floor_mas: f64,
) -> RawList {
    let mut list = RawList::default();
    let mut ids = Vec::new();
    for (k, star) in stars.iter().enumerate() {
        let mag = star.mag + 0.03 * normal(rng);
        let (x, y) = star.at(dt);
        let Some((u, v)) = camera.see(x, y) else {
            continue;
        };
        if mag > limit || rng.random::<f64>() < 0.05 {
            continue;
        }
        let err = floor_mas * (1.0 + 4.0 * 10f64.powf(0.4 * (mag - limit)));
        let e = err / camera.scale_mas;
        list.x.push(u + e * normal(rng));
        list.y.push(v + e * normal(rng));
        list.err.push(Some(Cov2::round(e * e)));
        list.mag.push(mag);
        list.mag_err.push(0.03);
        list.file_row.push(list.x.len() as u32);
        ids.push(k as u64);
    }
    list.ids = Ids::Numbers(ids);
    list
}

/// A campaign of pixel lists of one instrument, epoch by epoch.
pub fn campaign(times: &[f64], frames: &[FrameFreedom], scale_mas: f64, speed: f64) -> Campaign {
    let mut instrument = Instrument::new("camera", 55.0);
    instrument.unit = Unit::Pixel;
    instrument.error_unit = Unit::Pixel;
    instrument.scale_mas = Some(scale_mas);
    let epochs = times
        .iter()
        .zip(frames)
        .enumerate()
        .map(|(k, (t, frame))| {
            let mut settings = instrument.clone();
            settings.frame = *frame;
            if *frame == FrameFreedom::Known {
                settings.unit = Unit::Mas;
                settings.error_unit = Unit::Mas;
                settings.scale_mas = None;
            }
            Epoch {
                name: format!("e{k:03}"),
                time: JulianYear(*t),
                source: ListSource::File(format!("e{k:03}.csv").into()),
                instrument: 0,
                settings,
                footprint: None,
                mask: None,
            }
        })
        .collect();
    Campaign {
        path: "campaign.toml".into(),
        name: "made".to_owned(),
        reference: JulianYear(times[0]),
        origin: None,
        central: None,
        stars: StarMotions {
            speed_mas_yr: speed,
            foreground: None,
        },
        instruments: vec![instrument],
        epochs,
        lists: None,
        known_stars: None,
        velocities: None,
    }
}
