//! `check`: are the lists what their owner thinks they are? Writes nothing.

use std::path::PathBuf;

use asterskein::engine::Observer;
use asterskein::io::campaign::read_campaign;
use asterskein::io::lists::read_lists;
use asterskein::maths::order::median;
use asterskein::model::campaign::{Campaign, Unit};
use asterskein::model::detection::RawList;
use serde_json::json;

use super::super::exit::Exit;
use super::super::lines::{Align, Lines};
use super::super::printer::{Printer, Summary};
use super::super::progress::Progress;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// The campaign file.
    pub campaign: PathBuf,
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let progress = Progress::new(printer);
    progress.stage("reading", None);
    let (campaign, mut notes) = read_campaign(&args.campaign)?;
    let (lists, more) = read_lists(&campaign)?;
    notes.extend(more);
    progress.finish();

    let found: Vec<Found> = (0..lists.len())
        .map(|e| Found::of(&campaign, e, &lists[e]))
        .collect();
    if !printer.json && !printer.quiet {
        printer.data(&table(&campaign, &found).to_string());
    }
    printer.notes(&notes);
    let n: usize = lists.iter().map(RawList::len).sum();
    let times: Vec<f64> = campaign.epochs.iter().map(|e| e.time.yr()).collect();
    let first = times.iter().copied().fold(f64::INFINITY, f64::min);
    let last = times.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let mut s = Summary::default();
    s.line(
        "campaign",
        "campaign",
        campaign.name.clone(),
        campaign.name.clone(),
    );
    s.line("epochs", "epochs", lists.len().to_string(), lists.len());
    s.line("detections", "detections", n.to_string(), n);
    s.line(
        "span_yr",
        "span",
        format!("{first:.2} to {last:.2} ({:.1} yr)", last - first),
        last - first,
    );
    s.line("notes", "notes", notes.len().to_string(), notes.len());
    s.line(
        "lists",
        "",
        "",
        found.iter().map(Found::json).collect::<Vec<_>>(),
    );
    printer.summary(&s);
    Ok(Exit::Done)
}

/// Figures of one list.
struct Found {
    epoch: usize,
    n: usize,
    /// 5 % and 95 % of the magnitudes.
    mag: Option<(f64, f64)>,
    /// Median of the larger stated error \[mas\].
    err_mas: Option<f64>,
    /// Detections per resolution element of the list's extent.
    crowding: Option<f64>,
}

impl Found {
    fn of(campaign: &Campaign, epoch: usize, list: &RawList) -> Self {
        let settings = &campaign.epochs[epoch].settings;
        let mut mags: Vec<f64> = list.mag.iter().copied().filter(|m| m.is_finite()).collect();
        mags.sort_by(f64::total_cmp);
        let at = |q: f64| mags[((mags.len() - 1) as f64 * q).round() as usize];
        let mas = |unit: Unit| match unit {
            Unit::Mas => Some(1.0),
            Unit::Arcsec => Some(1e3),
            Unit::Deg => Some(3.6e6),
            Unit::Pixel => settings.scale_mas,
        };
        let mut errors: Vec<f64> = list
            .err
            .iter()
            .flatten()
            .map(|c| c.max_var().sqrt())
            .collect();
        let err = median(&mut errors);
        Self {
            epoch,
            n: list.len(),
            mag: (!mags.is_empty()).then(|| (at(0.05), at(0.95))),
            err_mas: err.and_then(|e| Some(e * mas(settings.error_unit)?)),
            crowding: mas(settings.unit)
                .and_then(|scale| crowding(list, scale, settings.unit, settings.fwhm_mas)),
        }
    }

    fn json(&self) -> serde_json::Value {
        json!({
            "epoch": self.epoch,
            "detections": self.n,
            "mag_5_percent": self.mag.map(|m| m.0),
            "mag_95_percent": self.mag.map(|m| m.1),
            "median_error_mas": self.err_mas,
            "stars_per_resolution_element": self.crowding,
        })
    }
}

/// Detections per resolution element (a circle of one fwhm across) in the middle half of the
/// list along both axes, where the edges do not count.
fn crowding(list: &RawList, scale_mas: f64, unit: Unit, fwhm_mas: f64) -> Option<f64> {
    let quartiles = |v: &[f64]| {
        let mut v = v.to_vec();
        v.sort_by(f64::total_cmp);
        Some((*v.get(v.len() / 4)?, *v.get(v.len() * 3 / 4)?))
    };
    let (x, y) = (quartiles(&list.x)?, quartiles(&list.y)?);
    let inside = |k: usize| (x.0..=x.1).contains(&list.x[k]) && (y.0..=y.1).contains(&list.y[k]);
    let n = (0..list.len()).filter(|&k| inside(k)).count();
    let cos_dec = if unit == Unit::Deg {
        (0.5 * (y.0 + y.1)).to_radians().cos()
    } else {
        1.0
    };
    let area_mas2 = (x.1 - x.0) * cos_dec * (y.1 - y.0) * scale_mas * scale_mas;
    let element_mas2 = std::f64::consts::FRAC_PI_4 * fwhm_mas * fwhm_mas;
    (area_mas2 > 0.0).then(|| n as f64 * element_mas2 / area_mas2)
}

fn table(campaign: &Campaign, found: &[Found]) -> Lines {
    let mut lines = Lines::new(&[
        ("epoch", Align::Left),
        ("time_yr", Align::Right),
        ("instrument", Align::Left),
        ("detections", Align::Right),
        ("mag 5 %", Align::Right),
        ("mag 95 %", Align::Right),
        ("error_mas", Align::Right),
        ("per element", Align::Right),
    ]);
    let number =
        |v: Option<f64>, decimals: usize| v.map_or_else(String::new, |v| format!("{v:.decimals$}"));
    for f in found {
        let epoch = &campaign.epochs[f.epoch];
        lines.push(vec![
            epoch.name.clone(),
            format!("{:.4}", epoch.time.yr()),
            campaign.instruments[epoch.instrument].name.clone(),
            f.n.to_string(),
            number(f.mag.map(|m| m.0), 2),
            number(f.mag.map(|m| m.1), 2),
            number(f.err_mas, 3),
            number(f.crowding, 4),
        ]);
    }
    lines
}
