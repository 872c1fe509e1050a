//! `check`: are the lists what their owner thinks they are? Writes nothing.

use std::path::PathBuf;

use asterskein::engine::Observer;
use asterskein::io::check::{Check, EpochSummary, check};
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

/// Gaps between epochs shorter than this are not worth a line \[yr\].
const LONG_GAP_YR: f64 = 1.5;

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let progress = Progress::new(printer);
    progress.stage("reading", None);
    let found = check(&args.campaign);
    progress.finish();

    if !printer.json && !printer.quiet && !found.epochs.is_empty() {
        printer.data(&table(&found.epochs).to_string());
    }
    printer.notes(&found.notes);
    for fault in found.faults.kept() {
        printer.error(&anyhow::Error::new(fault.clone()));
    }
    let hidden = found.faults.count() - found.faults.kept().len();
    if hidden > 0 {
        printer.error(&anyhow::anyhow!("{hidden} more faults like these"));
    }
    printer.summary(&summary(&found));
    Ok(if found.faults.is_empty() {
        Exit::Done
    } else {
        Exit::Failed
    })
}

fn summary(found: &Check) -> Summary {
    let mut s = Summary::default();
    if let Some(campaign) = &found.campaign {
        let name = &campaign.name;
        s.line("campaign", "campaign", name.clone(), name.clone());
        let (n, good) = (campaign.epochs.len(), found.epochs.len());
        let text = if n == good {
            n.to_string()
        } else {
            format!("{n}, {good} of them readable")
        };
        s.line("epochs", "epochs", text, n);
        let rows: usize = found.epochs.iter().map(|e| e.n_rows).sum();
        s.line("detections", "detections", rows.to_string(), rows);
        let times = || campaign.epochs.iter().map(|e| e.time.yr());
        let (first, last) = (
            times().fold(f64::INFINITY, f64::min),
            times().fold(f64::NEG_INFINITY, f64::max),
        );
        s.line(
            "span_yr",
            "span",
            format!("{first:.2} to {last:.2} ({:.1} yr)", last - first),
            last - first,
        );
        let gaps: Vec<(f64, f64)> = found
            .epochs
            .iter()
            .filter_map(|e| Some((e.time_yr, e.gap_yr?)))
            .collect();
        if let Some(&(end, gap)) = gaps.iter().max_by(|a, b| a.1.total_cmp(&b.1)) {
            let n_long = gaps.iter().filter(|g| g.1 > LONG_GAP_YR).count();
            s.line(
                "longest_gap_yr",
                "longest gap",
                format!("{gap:.2} yr before {end:.2} ({n_long} longer than {LONG_GAP_YR} yr)"),
                gap,
            );
        }
    }
    let n = found.notes.len();
    s.line("notes", "notes", n.to_string(), n);
    let n = found.faults.count();
    s.line("faults", "faults", n.to_string(), n);
    let lists: Vec<_> = found.epochs.iter().map(as_json).collect();
    s.line("lists", "", "", lists);
    s
}

fn as_json(e: &EpochSummary) -> serde_json::Value {
    json!({
        "epoch": e.epoch,
        "name": e.name,
        "time_yr": e.time_yr,
        "instrument": e.instrument,
        "targeted": e.targeted,
        "detections": e.n_rows,
        "gap_yr": e.gap_yr,
        "error_floor_mas": e.err_floor_mas,
        "error_median_mas": e.err_median_mas,
        "brightest_mag": e.mag.map(|m| m[0]),
        "median_mag": e.mag.map(|m| m[1]),
        "faintest_mag": e.mag.map(|m| m[2]),
        "without_mag": e.n_without_mag,
        "width_mas": e.width_mas,
        "stars_per_element": e.crowding,
    })
}

fn table(epochs: &[EpochSummary]) -> Lines {
    let mut lines = Lines::new(&[
        ("epoch", Align::Left),
        ("time_yr", Align::Right),
        ("gap_yr", Align::Right),
        ("instrument", Align::Left),
        ("rows", Align::Right),
        ("mag", Align::Right),
        ("median", Align::Right),
        ("error_mas", Align::Right),
        ("floor", Align::Right),
        ("width_mas", Align::Right),
        ("stars/element", Align::Right),
    ]);
    let number =
        |v: Option<f64>, decimals: usize| v.map_or_else(String::new, |v| format!("{v:.decimals$}"));
    for e in epochs {
        let instrument = if e.targeted {
            format!("{} (targeted)", e.instrument)
        } else {
            e.instrument.clone()
        };
        lines.push(vec![
            e.name.clone(),
            format!("{:.4}", e.time_yr),
            number(e.gap_yr, 2),
            instrument,
            e.n_rows.to_string(),
            e.mag
                .map_or_else(String::new, |m| format!("{:.1}..{:.1}", m[0], m[2])),
            number(e.mag.map(|m| m[1]), 2),
            number(e.err_median_mas, 3),
            number(e.err_floor_mas, 3),
            format!("{:.0}x{:.0}", e.width_mas[0], e.width_mas[1]),
            number(e.crowding, 4),
        ]);
    }
    lines
}
