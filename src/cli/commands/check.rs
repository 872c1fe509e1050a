//! `check`: are the lists what their owner thinks they are? Writes nothing.

use std::path::PathBuf;

use asterskein::engine::Observer;
use asterskein::io::check::{self, EpochSummary};
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
    let check = check::check(&args.campaign);
    progress.finish();

    let found = &check.epochs;
    if !printer.json && !printer.quiet && !found.is_empty() {
        printer.data(&table(found).to_string());
    }
    printer.notes(&check.notes);
    let Some(campaign) = &check.campaign else {
        return Err(check.faults.into());
    };
    let n: usize = found.iter().map(|e| e.n_rows).sum();
    let first = found
        .iter()
        .map(|e| e.time_yr)
        .fold(f64::INFINITY, f64::min);
    let last = found
        .iter()
        .map(|e| e.time_yr)
        .fold(f64::NEG_INFINITY, f64::max);
    let epochs = campaign.epochs.len();
    let mut s = Summary::default();
    s.line(
        "campaign",
        "campaign",
        campaign.name.clone(),
        campaign.name.clone(),
    );
    s.line(
        "epochs",
        "epochs",
        if found.len() == epochs {
            epochs.to_string()
        } else {
            format!("{} of {epochs} could be read", found.len())
        },
        epochs,
    );
    s.line("detections", "detections", n.to_string(), n);
    if last >= first {
        s.line(
            "span_yr",
            "span",
            format!("{first:.2} to {last:.2} ({:.1} yr)", last - first),
            last - first,
        );
    }
    s.line(
        "oddities",
        "oddities",
        check.notes.len().to_string(),
        check.notes.len(),
    );
    s.line(
        "faults",
        "faults",
        check.faults.count().to_string(),
        check.faults.count(),
    );
    s.line(
        "lists",
        "",
        "",
        found.iter().map(as_json).collect::<Vec<_>>(),
    );
    printer.summary(&s);
    if check.faults.is_empty() {
        Ok(Exit::Done)
    } else {
        Err(check.faults.into())
    }
}

fn as_json(e: &EpochSummary) -> serde_json::Value {
    json!({
        "epoch": e.epoch,
        "name": e.name,
        "time_yr": e.time_yr,
        "instrument": e.instrument,
        "detections": e.n_rows,
        "without_magnitude": e.n_without_mag,
        "gap_yr": e.gap_yr,
        "error_floor_mas": e.err_floor_mas,
        "error_median_mas": e.err_median_mas,
        "mag": e.mag,
        "width_mas": e.width_mas,
        "stars_per_resolution_element": e.crowding,
    })
}

fn table(found: &[EpochSummary]) -> Lines {
    let mut lines = Lines::new(&[
        ("epoch", Align::Left),
        ("time_yr", Align::Right),
        ("gap_yr", Align::Right),
        ("instrument", Align::Left),
        ("detections", Align::Right),
        ("brightest", Align::Right),
        ("median", Align::Right),
        ("faintest", Align::Right),
        ("floor_mas", Align::Right),
        ("error_mas", Align::Right),
        ("crowding", Align::Right),
    ]);
    let number =
        |v: Option<f64>, decimals: usize| v.map_or_else(String::new, |v| format!("{v:.decimals$}"));
    for e in found {
        lines.push(vec![
            e.name.clone(),
            format!("{:.4}", e.time_yr),
            number(e.gap_yr, 2),
            e.instrument.clone(),
            e.n_rows.to_string(),
            number(e.mag.map(|m| m[0]), 2),
            number(e.mag.map(|m| m[1]), 2),
            number(e.mag.map(|m| m[2]), 2),
            number(e.err_floor_mas, 3),
            number(e.err_median_mas, 3),
            number(e.crowding, 4),
        ]);
    }
    lines
}
