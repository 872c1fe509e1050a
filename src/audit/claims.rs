//! A claim as positions on the lists: which detection is meant at each epoch.

use crate::model::campaign::Campaign;
use crate::model::claim::{ClaimBody, ClaimOrbit, ClaimPoint};
use crate::model::result::Solution;
use crate::motion::elements::{BinaryElements, Elements};
use crate::near::Hit;
use crate::resolve::scene::Scene;

/// A detection belongs to a claimed position within so many fwhm, and so many of its errors.
const REACH_FWHM: f64 = 0.3;
const REACH_SIGMA: f64 = 3.0;

/// One claimed position.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Place {
    /// `None`: its own date, at which no list was taken.
    pub epoch: Option<usize>,
    pub t_yr: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    /// The detection meant; `None`: nothing is listed there.
    pub row: Option<u32>,
}

/// A claim ready to be judged.
#[derive(Clone, Debug, PartialEq)]
pub struct Case {
    pub name: String,
    /// In order of time.
    pub places: Vec<Place>,
    /// Magnitude claimed, if any.
    pub mag: Option<f64>,
    /// The track of the result that the claim names.
    pub track: Option<usize>,
}

impl Case {
    /// Claimed places with a detection: (epoch, row).
    pub fn detections(&self) -> impl Iterator<Item = (usize, u32)> + '_ {
        self.places.iter().filter_map(|p| Some((p.epoch?, p.row?)))
    }
}

/// Where a claim says its object is.
#[must_use]
pub fn case(
    name: &str,
    body: &ClaimBody,
    campaign: &Campaign,
    solution: &Solution,
    scene: &Scene,
) -> Case {
    let mut case = Case {
        name: name.to_owned(),
        places: Vec::new(),
        mag: None,
        track: None,
    };
    match body {
        ClaimBody::Points(points) => {
            case.places = points.iter().map(|p| place(p, scene)).collect();
            let mags: Vec<f64> = points.iter().filter_map(|p| p.mag).collect();
            if !mags.is_empty() {
                case.mag = Some(mags.iter().sum::<f64>() / mags.len() as f64);
            }
        }
        ClaimBody::Track(track) => {
            case.track = Some(*track);
            case.mag = solution.tracks[*track].mag;
            for m in solution.members.iter().filter(|m| m.track == *track) {
                let s = &scene.sights[m.epoch];
                case.places.push(Place {
                    epoch: Some(m.epoch),
                    t_yr: s.t_yr,
                    x_mas: s.data.x_mas[m.row],
                    y_mas: s.data.y_mas[m.row],
                    row: Some(m.row as u32),
                });
            }
        }
        ClaimBody::Orbit(orbit) => {
            case.mag = orbit.mag;
            case.places = along(orbit, campaign, scene);
        }
    }
    case.places.sort_by(|a, b| a.t_yr.total_cmp(&b.t_yr));
    case
}

fn place(p: &ClaimPoint, scene: &Scene) -> Place {
    let sigma = p.err_mas.map_or(0.0, |[x, y]| x.max(y));
    let row = p
        .row
        .map(|r| r as u32)
        .or_else(|| nearest(scene, p.epoch?, p.at_mas?, sigma));
    let listed = p.epoch.zip(row).map(|(e, d)| {
        let data = scene.sights[e].data;
        [data.x_mas[d as usize], data.y_mas[d as usize]]
    });
    let [x_mas, y_mas] = p.at_mas.or(listed).unwrap_or([f64::NAN; 2]);
    Place {
        epoch: p.epoch,
        t_yr: p.t_yr,
        x_mas,
        y_mas,
        row,
    }
}

fn nearest(scene: &Scene, e: usize, at: [f64; 2], sigma_mas: f64) -> Option<u32> {
    let s = &scene.sights[e];
    let mut hits: Vec<Hit> = Vec::new();
    let reach = REACH_FWHM * s.sensor.fwhm_mas + REACH_SIGMA * sigma_mas;
    s.tree.within(at[0], at[1], reach, &mut hits);
    hits.first().map(|h| h.row)
}

/// The places of a claimed orbit at every epoch whose list could show it. The claim's own period
/// carries its own mass.
fn along(orbit: &ClaimOrbit, campaign: &Campaign, scene: &Scene) -> Vec<Place> {
    let mut elements = Elements::from(BinaryElements {
        period_yr: orbit.period_yr.unwrap_or(1.0),
        semi_major_mas: orbit.semi_major_mas,
        eccentricity: orbit.eccentricity,
        inclination_deg: orbit.inclination_deg,
        node_deg: orbit.node_deg,
        arg_pericentre_deg: orbit.arg_pericentre_deg,
        t_pericentre_yr: orbit.t_pericentre_yr,
    });
    if let (None, Some(c)) = (orbit.period_yr, &campaign.central) {
        elements.gm_mas3_yr2 = c.gm_mas3_yr2;
    }
    let mut places = Vec::new();
    for (e, s) in scene.sights.iter().enumerate() {
        let (r, _) = elements.state_at(s.t_yr);
        let (cx, cy) = scene.dynamics.centre_at(s.t_yr);
        let at = [cx + r[0], cy + r[1]];
        if !s.data.region.contains(at[0], at[1]) || s.sensor.targeted {
            continue;
        }
        places.push(Place {
            epoch: Some(e),
            t_yr: s.t_yr,
            x_mas: at[0],
            y_mas: at[1],
            row: nearest(scene, e, at, 0.0),
        });
    }
    places
}
