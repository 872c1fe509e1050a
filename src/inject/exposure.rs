//! One exposure of the made-up sky: what is listed, where, how bright, and with which errors.

use rand::{Rng, RngExt};

use super::blending::{Approach, Source, approaches, disturbances, flux_of, mag_of, sources};
use super::crowding::Crowding;
use super::falses::{self, Companion};
use super::settings::{MockInstrument, MockSettings};
use super::stars::normal;
use crate::maths::units::FWHM_PER_SIGMA;
use crate::near::Tree;

/// Contributors below this share of the light are not written down.
const LEAST_SHARE: f64 = 0.001;
/// A false detection this close to a real one would be part of it.
const FALSE_GAP_FWHM: f64 = 0.8;
/// Flux, in units of the limit's, at which the star's own photon noise equals the sky's.
const KNEE_FLUX: f64 = 6.0;
/// Fractional noise of the brightest stars.
const FLUX_FLOOR: f64 = 0.006;
/// Centring error over fwhm / (2.35 signal-to-noise): 1 is the ideal case.
const CENTRING_LOSS: f64 = 1.15;

/// One row of a list, in the common frame.
#[derive(Clone, Debug)]
pub struct Detected {
    pub at_mas: [f64; 2],
    pub err_mas: [f64; 2],
    pub mag: f64,
    pub mag_err: f64,
    /// True contributors with their flux shares; none for a false detection.
    pub parts: Vec<(u32, f64)>,
}

/// What an exposure gives.
#[derive(Clone, Debug)]
pub struct Exposure {
    pub detected: Vec<Detected>,
    /// Close pairs of true stars at this time.
    pub approaches: Vec<Approach>,
}

/// The true sky at one time.
#[derive(Clone, Copy, Debug)]
pub struct Instant<'a> {
    pub places_mas: &'a [[f64; 2]],
    pub mags: &'a [f64],
    pub time_yr: f64,
}

/// Takes one exposure. `half_width_mas` bounds the square of sky that the list covers.
pub fn expose(
    settings: &MockSettings,
    instrument: &MockInstrument,
    now: Instant<'_>,
    crowding: &Crowding,
    companions: &[Companion],
    half_width_mas: f64,
    rng: &mut impl Rng,
) -> Exposure {
    let pairs = approaches(now.places_mas, now.mags, instrument);
    let all = sources(
        now.places_mas,
        now.mags,
        &pairs,
        instrument,
        &settings.blends,
        rng,
    );
    let disturbed = disturbances(&all, instrument, &settings.blends);
    let inside = |p: [f64; 2]| p[0].abs() < half_width_mas && p[1].abs() < half_width_mas;
    let photometry = Photometry::new(settings, instrument);
    let zero_point = settings.noise.zero_point_mag * normal(rng);
    let epoch_factor = (settings.noise.stated_epoch * normal(rng)).exp();

    let mut detected = Vec::new();
    let mut seen: Vec<usize> = Vec::new();
    for (k, source) in all.iter().enumerate() {
        // Draws do not depend on what is seen, so that one star more changes little else.
        let draw: [f64; 9] = std::array::from_fn(|_| normal(rng));
        let chance: [f64; 2] = std::array::from_fn(|_| rng.random());
        let relative = source.flux / photometry.limit_flux;
        let measured = relative + photometry.noise(relative) * draw[0];
        let threshold = 1.0 + settings.noise.threshold_scatter * draw[1];
        let listed = measured > threshold && chance[0] < disturbed[k].stands_out;
        if !listed || !inside(source.at_mas) {
            continue;
        }
        let blur = 1.0 + disturbed[k].blur;
        let wing = if chance[1] < settings.noise.wing_fraction {
            settings.noise.wing_factor
        } else {
            1.0
        };
        let photon = photometry.position_error_mas(relative) * blur;
        let crowded = crowding.error_mas(source.lead, mag_of(source.flux), instrument.fwhm_mas);
        let walk = crowding.offset(source.lead);
        let at_mas = [0, 1].map(|a| {
            source.at_mas[a]
                + disturbed[k].pull_mas[a]
                + photon * wing * draw[2 + a]
                + crowded * walk[a]
        });
        let mag = mag_of(measured * photometry.limit_flux)
            + zero_point
            + settings.noise.flat_field_mag * draw[4];
        let known = photometry.position_error_mas(measured) * blur;
        let known = known.hypot(settings.noise.stated_crowding * crowded);
        let off = (settings.noise.stated_detection * draw[5]).exp() * epoch_factor;
        let mag_err = (1.0857 * photometry.noise(measured) / measured * blur)
            .hypot(settings.noise.flat_field_mag);
        seen.push(k);
        detected.push(Detected {
            at_mas,
            err_mas: [6, 7].map(|d| known * off * (0.04 * draw[d]).exp()),
            mag,
            mag_err: mag_err * (0.1 * draw[8]).exp(),
            parts: source
                .parts
                .iter()
                .copied()
                .filter(|p| p.1 > LEAST_SHARE)
                .collect(),
        });
    }
    let real: Vec<&Source> = seen.iter().map(|&k| &all[k]).collect();
    let spurious = falses::draw(
        settings,
        instrument,
        now,
        companions,
        detected.len(),
        half_width_mas,
        rng,
    );
    let free = far_from(&real, FALSE_GAP_FWHM * instrument.fwhm_mas);
    for (at_mas, mag) in spurious {
        let draw: [f64; 3] = std::array::from_fn(|_| normal(rng));
        if !inside(at_mas) || !free(at_mas) {
            continue;
        }
        let relative = flux_of(mag) / photometry.limit_flux;
        let known = photometry.position_error_mas(relative) * epoch_factor;
        detected.push(Detected {
            at_mas,
            err_mas: [0, 1].map(|a| {
                known * (settings.noise.stated_detection * draw[2] + 0.04 * draw[a]).exp()
            }),
            mag,
            mag_err: 1.0857 * photometry.noise(relative) / relative,
            parts: Vec::new(),
        });
    }
    Exposure {
        detected,
        approaches: pairs,
    }
}

fn far_from<'a>(real: &[&'a Source], gap_mas: f64) -> impl Fn([f64; 2]) -> bool + use<'a> {
    let (x, y): (Vec<f64>, Vec<f64>) = real.iter().map(|s| (s.at_mas[0], s.at_mas[1])).unzip();
    let tree = Tree::build(&x, &y);
    move |p| {
        let mut hits = Vec::new();
        tree.within(p[0], p[1], gap_mas, &mut hits);
        hits.is_empty()
    }
}

/// Noise of fluxes in units of the limit's flux.
struct Photometry {
    limit_flux: f64,
    threshold: f64,
    fwhm_mas: f64,
    floor_mas: f64,
}

impl Photometry {
    fn new(settings: &MockSettings, i: &MockInstrument) -> Self {
        Self {
            limit_flux: flux_of(i.limit_mag),
            threshold: settings.noise.threshold,
            fwhm_mas: i.fwhm_mas,
            floor_mas: i.floor_mas,
        }
    }

    /// Sky, own photons, and a fraction that no exposure time removes.
    fn noise(&self, flux: f64) -> f64 {
        let sky = 1.0 / self.threshold;
        let photons = sky * (1.0 + flux.max(0.0) / KNEE_FLUX).sqrt();
        photons.hypot(FLUX_FLOOR * flux)
    }

    fn position_error_mas(&self, flux: f64) -> f64 {
        let sigma = self.fwhm_mas / FWHM_PER_SIGMA;
        self.floor_mas
            .hypot(CENTRING_LOSS * sigma * self.noise(flux) / flux)
    }
}
