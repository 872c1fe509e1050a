//! `handoff`: observations and starts of chosen tracks for an orbit fitter.

use std::path::PathBuf;

use asterskein::io::read_run;
use asterskein::io::result_tables::RunView;
use asterskein::io::run_dir::{Existing, RunDir};
use asterskein::output::handoff::{self, Choice, HandoffError};
use serde_json::json;

use super::super::exit::{Exit, UsageError};
use super::super::printer::Printer;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// Result directory written by `link`.
    pub run: PathBuf,
    /// Directory to write; it must not exist or be empty.
    #[arg(long, short, value_name = "DIR")]
    pub out: PathBuf,
    /// Tracks to hand over, separated by commas; `all` = every track [default: those with an
    /// orbit].
    #[arg(long, value_delimiter = ',', value_name = "NAMES")]
    pub tracks: Vec<String>,
    /// Replace an earlier hand-over.
    #[arg(long)]
    pub replace: bool,
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let existing = Existing::asked(args.replace, handoff::MARKER);
    // Settled before the result is read: a full directory is found at once.
    let dir = RunDir::begin(&args.out, existing)?;
    let run = read_run::read_run(&args.run)?;
    let choice = match args.tracks.as_slice() {
        [] => Choice::Keplerian,
        [all] if all == "all" => Choice::All,
        names => Choice::Named(names.to_vec()),
    };
    let chosen = match handoff::choose(&run.solution, &choice) {
        Err(e @ HandoffError::NoTrack { .. }) => return Err(UsageError(e.to_string()).into()),
        other => other?,
    };
    let view = RunView {
        campaign: &run.campaign,
        lists: &run.lists,
        epochs: &run.epochs,
        solution: &run.solution,
    };
    let done = handoff::write(&dir, view, &chosen)?;
    dir.finish()?;
    if printer.json {
        let summary = json!({
            "tracks": done.tracks,
            "observations": done.observations,
            "merged": done.merged,
            "velocities": done.velocities,
            "out": args.out,
        });
        printer.data(&summary.to_string());
    } else {
        printer.talk(&format!(
            "{} tracks, {} observations ({} merged, {} with a radial velocity) in {}; its README.md says what is what",
            done.tracks,
            done.observations,
            done.merged,
            done.velocities,
            args.out.display()
        ));
    }
    Ok(Exit::Done)
}
