//! `mock`: a made-up campaign whose truth is known.

use std::path::PathBuf;

use anyhow::Context;
use asterskein::inject::settings::MockSettings;
use asterskein::inject::{MockCounts, make_campaign, write_campaign};
use asterskein::io::run_dir::Existing;

use super::super::exit::{Exit, UsageError};
use super::super::printer::{Printer, Summary};

#[derive(Debug, clap::Args)]
#[command(after_help = "\
The recipe is TOML; every key has a default, for example:

  name = \"Lantern core\"
  [stars]
  count = 300
  radius_mas = 900.0
  [times]
  epochs = 30
  [[instrument]]
  name = \"camera\"
  fwhm_mas = 52.0
  limit_mag = 16.8

An unknown key is answered with the list of known ones.")]
pub struct Args {
    /// Directory to be made: campaign.toml, lists/, truth/.
    #[arg(long, value_name = "DIR")]
    pub out: PathBuf,
    /// What to make when the recipe does not say.
    #[arg(long, value_enum, default_value_t = Field::Core)]
    pub field: Field,
    /// A recipe that changes the defaults.
    #[arg(long, value_name = "FILE", conflicts_with = "field")]
    pub recipe: Option<PathBuf>,
    /// Seed of the random numbers; the same seed gives the same campaign.
    #[arg(long, value_name = "N", default_value_t = 1)]
    pub seed: u64,
    /// Number of stars.
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u32).range(1..))]
    pub stars: Option<u32>,
    /// Number of epochs.
    #[arg(long, value_name = "N", value_parser = clap::value_parser!(u32).range(1..))]
    pub epochs: Option<u32>,
    /// Replace an earlier campaign in the directory.
    #[arg(long)]
    pub replace: bool,
}

#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum Field {
    /// Stars on orbits about a central mass, crowded.
    Core,
    /// A field without a mass, less crowded.
    Plain,
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let existing = Existing::asked(args.replace, "campaign.toml");
    let settings = settings(args)?;
    let campaign = make_campaign(settings, args.seed)?;
    write_campaign(&campaign, &args.out, existing)?;
    printer.summary(&summary(&campaign.counts()));
    Ok(Exit::Done)
}

fn settings(args: &Args) -> anyhow::Result<MockSettings> {
    let mut settings = match (&args.recipe, args.field) {
        (Some(path), _) => {
            let text = std::fs::read_to_string(path)
                .with_context(|| format!("cannot read {}", path.display()))?;
            MockSettings::from_toml(&text).with_context(|| format!("recipe {}", path.display()))?
        }
        (None, Field::Core) => MockSettings::default(),
        (None, Field::Plain) => MockSettings::plain(),
    };
    if let Some(n) = args.stars {
        settings.stars.count = n as usize;
    }
    if let Some(n) = args.epochs {
        settings.times.epochs = n as usize;
    }
    settings.check().map_err(|e| UsageError(e.to_string()))?;
    Ok(settings)
}

fn summary(c: &MockCounts) -> Summary {
    let mut s = Summary::default();
    let mut line = |key: &'static str, label: &'static str, n: usize| {
        s.line(key, label, n.to_string(), n);
    };
    line("stars", "stars", c.stars);
    line(
        "stars_seen_five_times",
        "  seen five times or more",
        c.stars_seen_five_times,
    );
    line("curved_stars", "  on curved paths", c.curved_stars);
    line("strong_stars", "  strongly curved", c.strong_stars);
    line(
        "full_orbits",
        "  around the mass once or more",
        c.full_orbits,
    );
    line("epochs", "epochs", c.epochs);
    line("detections", "detections", c.detections);
    line("merged_detections", "  merged", c.merged_detections);
    line("false_detections", "  false", c.false_detections);
    s
}
