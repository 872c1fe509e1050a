//! A campaign of two lists and a result made up by hand, with every kind of cell.

use std::fs;
use std::path::Path;

use asterskein::frame::known;
use asterskein::io::campaign::read_campaign;
use asterskein::io::lists::read_lists;
use asterskein::io::result_tables::RunView;
use asterskein::model::campaign::Campaign;
use asterskein::model::detection::{FieldEpoch, RawList};
use asterskein::model::flag::Flags;
use asterskein::model::motion::{Motion, MotionKind};
use asterskein::model::result::{
    Certificate, EpochReport, Leftover, Membership, OrbitColumns, OrbitMinimum, Rival, SkyMotion,
    Solution, TangleReport, Track,
};

pub struct Sample {
    pub campaign: Campaign,
    pub lists: Vec<RawList>,
    pub epochs: Vec<FieldEpoch>,
    pub solution: Solution,
}

const CAMPAIGN: &str = r#"
[field]
name = "Lantern core"
reference_epoch = 2008.0

[central_mass]
mass_msun = 2.6e6
distance_pc = 7100.0
x_mas = 0.0
y_mas = 0.0

[stars]
speed_mas_yr = 6.0

[instrument.first]
fwhm_mas = 55.0
limit_mag = 16.5
keep = ["sharpness"]

[[epoch]]
name = "one"
time = 2000.5
file = "e0.csv"
instrument = "first"

[[epoch]]
name = "two"
time = 2001.5
file = "e1.csv"
instrument = "first"
mask = "mask.csv"
"#;

impl Sample {
    pub fn new(folder: &Path) -> Self {
        let write = |name: &str, text: &str| {
            fs::write(folder.join(name), text).expect("a writable folder");
        };
        write("campaign.toml", CAMPAIGN);
        write(
            "e0.csv",
            "id,x,y,x_err,y_err,xy_corr,mag,mag_err,sharpness\n\
             7,100.25,-3.5,0.5,0.7,0.25,14.0,0.02,sharp\n\
             9,-20.125,40.0,0.5,0.5,,15.5,0.05,\"a, b\"\n",
        );
        write(
            "e1.csv",
            "id,x,y,x_err,y_err,mag,mag_err,sharpness\n\
             1,101.0,-3.25,0.5,0.5,14.1,0.02,\n2,-19.5,39.0,0.5,0.5,,,\n\
             3,500.0,500.0,1,1,16.0,0.1,x\n",
        );
        write("mask.csv", "x,y,radius\n300,300,10\n");
        let (campaign, _) = read_campaign(&folder.join("campaign.toml")).expect("a campaign");
        let (lists, _) = read_lists(&campaign).expect("lists");
        let epochs = known::register(&campaign, &lists).expect("known frames");
        let solution = solution(&epochs);
        Self {
            campaign,
            lists,
            epochs,
            solution,
        }
    }

    pub fn view(&self) -> RunView<'_> {
        RunView {
            campaign: &self.campaign,
            lists: &self.lists,
            epochs: &self.epochs,
            solution: &self.solution,
        }
    }
}

/// A symmetric matrix with distinct entries.
fn matrix(scale: f64) -> [[f64; 6]; 6] {
    let mut m = [[0.0; 6]; 6];
    for (i, row) in m.iter_mut().enumerate() {
        for (j, v) in row.iter_mut().enumerate() {
            let (a, b) = (i.min(j) as f64, i.max(j) as f64);
            *v = scale
                * if i == j {
                    (a + 2.0) * (a + 2.0)
                } else {
                    0.01 * a - 0.003 * b
                };
        }
    }
    m
}

fn sky(kind: MotionKind) -> SkyMotion {
    let mut sky = SkyMotion {
        p: [100.5, -3.125, 0.75, 0.25, -0.015, 0.0005],
        cov: matrix(0.0625),
    };
    if kind == MotionKind::Linear {
        for i in 0..6 {
            for j in 0..6 {
                if i > 3 || j > 3 {
                    sky.cov[i][j] = 0.0;
                }
            }
        }
        sky.p[4] = 0.0;
        sky.p[5] = 0.0;
    }
    sky
}

fn motion(kind: MotionKind, sky: &SkyMotion) -> Motion {
    let mut motion = Motion {
        kind,
        t_ref_yr: 2008.0,
        p: sky.p.into(),
        cov: nalgebra::SMatrix::from_fn(|i, j| sky.cov[i][j]),
    };
    if kind == MotionKind::Keplerian {
        motion.p = [sky.p[0], sky.p[1], 33.5, sky.p[2], sky.p[3], -1.5].into();
        // The part on the sky is the same in both descriptions.
        let on_sky = [Some(0), Some(1), None, Some(2), Some(3), None];
        for i in 0..6 {
            for j in 0..6 {
                motion.cov[(i, j)] = match (on_sky[i], on_sky[j]) {
                    (Some(a), Some(b)) => sky.cov[a][b],
                    _ => matrix(0.25)[i][j],
                };
            }
        }
    }
    motion
}

fn orbit(bound: bool) -> OrbitColumns {
    OrbitColumns {
        z_mas: (33.5, 0.5 * 4.0),
        vz_km_s: bound.then_some((-50.5, 2.5)),
        semi_major_mas: bound.then_some((120.0, 1.5)),
        semi_major_au: bound.then_some((852.0, 10.5)),
        eccentricity: (if bound { 0.875 } else { 1.25 }, 0.0078125),
        inclination_deg: (45.5, 1.25),
        node_deg: (170.25, 2.5),
        arg_pericentre_deg: (66.0, 3.0),
        t_pericentre_yr: (2002.25, 0.03125),
        period_yr: bound.then_some((15.5, 0.25)),
        pericentre_au: Some((120.5, 1.0)),
        apocentre_au: bound.then_some((1600.0, 20.0)),
        pericentre_speed_km_s: Some((7000.0, 100.0)),
        sign_known: bound,
    }
}

fn track(name: &str, kind: MotionKind, tangle: Option<usize>) -> Track {
    let sky = sky(kind);
    Track {
        name: name.to_owned(),
        motion: motion(kind, &sky),
        n_members: 2,
        first_yr: 2000.5,
        last_yr: 2001.5,
        mean_epoch_yr: 2001.0,
        x_mean_mas: 100.625,
        y_mean_mas: -3.375,
        x_mean_err_mas: 0.25,
        y_mean_err_mas: 0.375,
        vx_mean_mas_yr: 0.75,
        vy_mean_mas_yr: 0.25,
        vx_mean_err_mas_yr: 0.5,
        vy_mean_err_mas_yr: 0.625,
        sky,
        mag: (kind != MotionKind::Linear).then_some(14.05),
        mag_scatter: (kind != MotionKind::Linear).then_some(0.05),
        chi2: 1.5,
        dof: 2,
        ln_evidence: -3.25,
        probability: 0.96875,
        tangle,
        orbit: (kind == MotionKind::Keplerian).then(|| orbit(true)),
        flags: if kind == MotionKind::Linear {
            Flags::default()
        } else {
            Flags(Flags::MERGED.0 | Flags::FEW_EPOCHS.0)
        },
    }
}

fn solution(epochs: &[FieldEpoch]) -> Solution {
    let member = |track, epoch, row, share| Membership {
        track,
        epoch,
        row,
        probability: 0.875,
        share,
        dx_mas: 0.125,
        dy_mas: -0.25,
        flags: if share < 1.0 {
            Flags::MERGED
        } else {
            Flags::default()
        },
    };
    let leftover = |epoch, row, nearest| Leftover {
        epoch,
        row,
        p_false: 0.75,
        nearest,
        flags: Flags::TWIN,
    };
    let report = |k: usize, failed: Option<&str>| EpochReport {
        n_list: epochs[k].len(),
        n_matched: 1,
        n_unmatched: epochs[k].len() - 1,
        coef: [
            [0.0, 1.0, 0.0, 1e-7, 0.0, 0.0],
            [0.5, 0.0, 1.0, 0.0, 0.0, -2e-9],
        ],
        coef_err: [[0.125, 1e-5, 0.0, 0.0, 0.0, 0.0]; 2],
        n_anchors: 12,
        rms_mas: failed.is_none().then_some(0.625),
        error_factor: 1.25,
        error_floor_mas: 0.5,
        limit_mag: failed.is_none().then_some(16.25),
        zero_point_mag: None,
        zero_point_err_mag: None,
        failed: failed.map(str::to_owned),
        flags: Flags::default(),
    };
    let best = track("L00001", MotionKind::Keplerian, Some(0));
    let minimum = |rank, bound| OrbitMinimum {
        track: 0,
        rank,
        ln_evidence: -4.5,
        chi2: 2.25,
        motion: best.motion,
        orbit: orbit(bound),
    };
    let tangle = |certificate, tracks: &[usize]| TangleReport {
        tracks: tracks.to_vec(),
        n_detections: 4,
        n_epochs: 2,
        certificate,
        work: 1234,
        flags: Flags::CAPPED,
    };
    Solution {
        orbits: vec![minimum(1, true), minimum(2, false)],
        tracks: vec![
            best,
            track("K-east-3", MotionKind::Accelerated, Some(0)),
            track("L00003", MotionKind::Linear, None),
        ],
        members: vec![
            // Rows count in the order of x: `one` is 9, 7; `two` is 2, 1, 3.
            member(0, 0, 1, 1.0),
            member(0, 1, 1, 0.625),
            member(1, 0, 0, 1.0),
            member(1, 1, 1, 0.375),
        ],
        leftovers: vec![leftover(1, 0, Some((1, 12.5))), leftover(1, 2, None)],
        epochs: vec![report(0, None), report(1, Some("too few stars in common"))],
        tangles: vec![
            tangle(Certificate::Bounded { gap_nats: 0.375 }, &[0, 1]),
            tangle(Certificate::All, &[2]),
        ],
        rivals: vec![Rival {
            tangle: 0,
            rank: 1,
            ln_odds: -1.5,
            change: "K-east-3 takes two:1 from L00001; L00001 drops one:7".to_owned(),
        }],
        notes: Vec::new(),
    }
}
