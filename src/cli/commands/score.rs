//! `score`: a result against the truth of its made-up campaign.

use std::path::{Path, PathBuf};

use anyhow::Context;
use asterskein::audit::score::{Score, score_folders};
use asterskein::io::campaign::read_campaign;
use asterskein::model::campaign::FrameFreedom;

use super::super::exit::Exit;
use super::super::printer::Printer;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// Campaign with a folder `truth` beside its campaign file (the file or its directory).
    pub campaign: PathBuf,
    /// Result directory: `members` and `tracks` as ECSV or plain CSV.
    pub result: PathBuf,
    /// Also write which track was matched with which star, as CSV.
    #[arg(long, value_name = "FILE")]
    pub pairs: Option<PathBuf>,
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let file = if args.campaign.is_dir() {
        args.campaign.join("campaign.toml")
    } else {
        args.campaign.clone()
    };
    let (campaign, _) = read_campaign(&file)?;
    let loose = |frame| frame != FrameFreedom::Known;
    let any_loose = campaign.instruments.iter().any(|i| loose(i.frame));
    let truth = file.parent().unwrap_or(Path::new(".")).join("truth");
    let score = score_folders(&truth, &args.result, any_loose)?;
    if let Some(path) = &args.pairs {
        write_pairs(path, &score).with_context(|| format!("cannot write {}", path.display()))?;
    }
    if printer.json {
        printer.data(&serde_json::to_string_pretty(&score)?);
    } else {
        printer.data(&score.to_string());
    }
    Ok(Exit::Done)
}

fn write_pairs(path: &Path, score: &Score) -> anyhow::Result<()> {
    let mut out = csv::Writer::from_path(path)?;
    out.write_record(["track", "star"])?;
    for (track, star) in &score.pairs {
        out.write_record([track, star])?;
    }
    out.flush()?;
    Ok(())
}
