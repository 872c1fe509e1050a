//! `link`: from raw lists to the tables of a result.

use std::path::PathBuf;

use anyhow::Context;
use asterskein::engine::{self, Observer, Settings};
use asterskein::io::campaign::read_campaign;
use asterskein::io::format::Format;
use asterskein::io::known::read_known_stars;
use asterskein::io::lists::read_lists;
use asterskein::io::result_tables::RunView;
use asterskein::io::rulings::read_rulings;
use asterskein::io::run_dir::{Existing, RunDir};
use asterskein::io::run_info::{self, Input, StageTime, Timing};
use asterskein::io::write_run::{self, RunRecord, inputs_of};
use asterskein::model::campaign::Campaign;
use asterskein::model::change;
use asterskein::model::detection::{FieldEpoch, RawList};
use asterskein::model::flag::Flags;
use asterskein::model::known::KnownStar;
use asterskein::model::note::Note;
use asterskein::model::result::{Certificate, Solution};
use asterskein::model::ruling::Ruling;
use asterskein::output::known_names::{given_name_notes, known_names};
use asterskein::output::naming::{self, OldNames, Renamed, Renaming, What};
use asterskein::output::report::{self, Budget, ReportInput, Scope};
use serde_json::json;

use super::super::exit::Exit;
use super::super::printer::{Printer, Summary};
use super::super::progress::Progress;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// The campaign file.
    pub campaign: PathBuf,
    /// Directory for the result; it appears whole or not at all.
    #[arg(long, short, value_name = "DIR")]
    pub out: PathBuf,
    /// Replace an earlier result in that directory.
    #[arg(long)]
    pub replace: bool,
    /// Decisions of a human, as hard constraints.
    #[arg(long, value_name = "FILE")]
    pub rulings: Option<PathBuf>,
    /// Earlier result whose names the tracks keep; what changed goes into `renamed.ecsv`.
    #[arg(long, value_name = "RUN")]
    pub names_from: Option<PathBuf>,
    /// Write the tables in this format too (ECSV is always written; commands on a result read it).
    #[arg(long, value_name = "FORMAT", value_enum, default_value_t = TableFormat::Ecsv)]
    pub format: TableFormat,
    /// Fit GM of the central mass along with the orbits.
    #[arg(long)]
    pub refine_mass: bool,
    /// Go on without epochs that cannot be placed in the common frame.
    #[arg(long)]
    pub allow_unplaced: bool,
    /// Side of the tiles in which a wide field is worked through (default: chosen).
    #[arg(long, value_name = "MAS")]
    pub tile_mas: Option<f64>,
    /// Seed of every random draw.
    #[arg(long, value_name = "N", default_value_t = 1)]
    pub seed: u64,
}

/// Formats of tables, as typed.
#[derive(Clone, Copy, Debug, PartialEq, Eq, clap::ValueEnum)]
pub enum TableFormat {
    Ecsv,
    Votable,
    Fits,
    #[cfg(feature = "parquet")]
    Parquet,
}

impl From<TableFormat> for Format {
    fn from(f: TableFormat) -> Self {
        match f {
            TableFormat::Ecsv => Self::Ecsv,
            TableFormat::Votable => Self::Votable,
            TableFormat::Fits => Self::Fits,
            #[cfg(feature = "parquet")]
            TableFormat::Parquet => Self::Parquet,
        }
    }
}

pub fn run(args: &Args, printer: &Printer, threads: usize) -> anyhow::Result<Exit> {
    let existing = Existing::asked(args.replace, run_info::FILE);
    // What can be refused is refused before the long work.
    let dir = RunDir::begin(&args.out, existing)?;
    let old = args
        .names_from
        .as_deref()
        .map(naming::read_old)
        .transpose()?;
    let progress = Progress::new(printer);

    progress.stage("reading", None);
    let (campaign, mut notes) = read_campaign(&args.campaign)?;
    let (lists, more) = read_lists(&campaign)?;
    notes.extend(more);
    let known = match campaign.known_stars.as_ref().filter(|k| k.for_names) {
        Some(list) => read_known_stars(list)?,
        None => Vec::new(),
    };
    let rulings = match &args.rulings {
        Some(path) => read_rulings(path, &campaign, &lists)?,
        None => Vec::new(),
    };
    let settings = Settings {
        threads,
        seed: args.seed,
        refine_mass: args.refine_mass,
        allow_unplaced: args.allow_unplaced,
        tile_mas: args.tile_mas,
        rulings,
    };
    let linked = engine::link_lists(&campaign, &lists, &settings, &progress)?;
    let (epochs, mut solution) = (linked.epochs, linked.solution);
    change::rows_to_ids(&mut solution.rivals, &campaign, &lists);

    progress.stage("writing", None);
    let inputs = inputs_of(&campaign, &further_inputs(args))?;
    let parts = (&campaign, lists.as_slice(), epochs.as_slice());
    let names = Names {
        rulings: &settings.rulings,
        known: &known,
        old: old.as_ref(),
    };
    let named = name(parts, &mut solution, &inputs, &names);
    let view = RunView {
        campaign: &campaign,
        lists: &lists,
        epochs: &epochs,
        solution: &solution,
    };
    let formats = [Format::from(args.format)];
    write_run::write_tables(&dir, view, &formats)?;
    if old.is_some() {
        write_run::write_table(&dir, &naming::table(&named.rows), &formats)?;
    }
    let page = report::html(
        &ReportInput {
            campaign: &campaign,
            epochs: &epochs,
            lists: &lists,
            solution: &solution,
            extras: &[],
        },
        &Scope::Whole,
        Budget::default(),
    )?;
    dir.write("report.html", |out| out.write_all(page.as_bytes()))?;

    notes.extend(given_name_notes(view));
    let (stages, observed) = progress.finish();
    for note in solution.notes.iter().chain(&observed) {
        if !notes.contains(note) {
            notes.push(note.clone());
        }
    }
    let record = RunRecord {
        inputs,
        settings: serde_json::to_value(&settings).context("settings as JSON")?,
        notes: notes.clone(),
        last_number: named.last_number,
        timing: Timing {
            threads: rayon::current_num_threads(),
            stages: stages.clone(),
        },
    };
    write_run::write_info(&dir, view, record)?;
    dir.finish()?;

    printer.notes(&notes);
    let changes = old.is_some().then_some(named.rows.as_slice());
    printer.summary(&summary(view, &stages, &notes, changes, args));
    Ok(Exit::Done)
}

/// Files of the command line that shape the result.
fn further_inputs(args: &Args) -> Vec<(&'static str, PathBuf)> {
    let rulings = args.rulings.iter().map(|p| ("rulings", p.clone()));
    let names = args
        .names_from
        .iter()
        .map(|p| ("names_from", p.join(run_info::FILE)));
    rulings.chain(names).collect()
}

/// Where names come from, the strongest first.
struct Names<'a> {
    rulings: &'a [Ruling],
    known: &'a [KnownStar],
    old: Option<&'a OldNames>,
}

/// Gives the tracks their names: those of rulings, of known stars, of an earlier result, and
/// to the rest numbers, the brightest first.
fn name(
    (campaign, lists, epochs): (&Campaign, &[RawList], &[FieldEpoch]),
    solution: &mut Solution,
    inputs: &[Input],
    names: &Names<'_>,
) -> Renaming {
    let mut fixed = naming::ruled_names(solution, names.rulings);
    let none = OldNames::default();
    let view = RunView {
        campaign,
        lists,
        epochs,
        solution,
    };
    for (n, name) in known_names(view, names.known).into_iter().enumerate() {
        if fixed[n].is_none() && !fixed.contains(&name) {
            fixed[n] = name;
        }
    }
    let renaming = naming::rename(view, inputs, names.old.unwrap_or(&none), &fixed);
    naming::apply(solution, &renaming.names);
    renaming
}

/// About ten lines: what was found and how sure it is.
fn summary(
    view: RunView<'_>,
    stages: &[StageTime],
    notes: &[Note],
    changes: Option<&[Renamed]>,
    args: &Args,
) -> Summary {
    let s = view.solution;
    let n_detections: usize = view.epochs.iter().map(|e| e.len()).sum();
    let share = |n: usize, of: usize| {
        if of == 0 {
            String::new()
        } else {
            format!("  ({:.1} %)", 100.0 * n as f64 / of as f64)
        }
    };
    let tracks_with = |f: Flags| s.tracks.iter().filter(|t| t.flags.has(f)).count();
    let merged = s
        .members
        .iter()
        .filter(|m| m.flags.has(Flags::MERGED))
        .count();
    let ambiguous = tracks_with(Flags::AMBIGUOUS);
    let placed = s.epochs.iter().filter(|e| e.failed.is_none()).count();
    let seconds: f64 = stages.iter().map(|t| t.seconds).sum();

    let mut out = Summary::default();
    out.line(
        "campaign",
        "campaign",
        view.campaign.name.clone(),
        view.campaign.name.clone(),
    );
    out.line(
        "epochs",
        "epochs",
        if placed == view.epochs.len() {
            placed.to_string()
        } else {
            format!("{placed} of {} placed", view.epochs.len())
        },
        view.epochs.len(),
    );
    out.line("epochs_placed", "", "", placed);
    out.line(
        "detections",
        "detections",
        n_detections.to_string(),
        n_detections,
    );
    out.line(
        "tracks",
        "tracks",
        s.tracks.len().to_string(),
        s.tracks.len(),
    );
    out.line(
        "memberships",
        "memberships",
        s.members.len().to_string(),
        s.members.len(),
    );
    out.line(
        "merged",
        "  merged",
        format!("{merged}{}", share(merged, s.members.len())),
        merged,
    );
    out.line(
        "ambiguous_tracks",
        "ambiguous tracks",
        format!("{ambiguous}{}", share(ambiguous, s.tracks.len())),
        ambiguous,
    );
    out.line(
        "leftovers",
        "leftovers",
        format!(
            "{}{}",
            s.leftovers.len(),
            share(s.leftovers.len(), n_detections)
        ),
        s.leftovers.len(),
    );
    let proven = certificates(s);
    out.line(
        "tangles",
        "tangles",
        if s.tangles.is_empty() {
            "0".to_owned()
        } else {
            let parts: Vec<String> = proven
                .iter()
                .filter(|(_, n)| *n > 0)
                .map(|(word, n)| format!("{n} {word}"))
                .collect();
            format!("{}  ({})", s.tangles.len(), parts.join(", "))
        },
        s.tangles.len(),
    );
    out.line(
        "certificates",
        "",
        "",
        proven
            .iter()
            .map(|(w, n)| ((*w).to_owned(), json!(n)))
            .collect::<serde_json::Map<_, _>>(),
    );
    if let Some(rows) = changes {
        let count = |w: What| rows.iter().filter(|r| r.what == w).count();
        let kinds = [What::Kept, What::New, What::Split, What::Joined, What::Lost];
        let parts: Vec<String> = kinds
            .iter()
            .map(|&w| format!("{} {}", count(w), w.word()))
            .collect();
        let value: serde_json::Map<_, _> = kinds
            .iter()
            .map(|&w| (w.word().to_owned(), json!(count(w))))
            .collect();
        out.line("names", "names", parts.join(", "), value);
    }
    out.line("notes", "", "", notes.len());
    out.line("seconds", "time", format!("{seconds:.1} s"), seconds);
    let result = args.out.display().to_string();
    let page = args.out.join("report.html").display().to_string();
    out.line(
        "result",
        "result",
        format!("{result}  (look at {page})"),
        result,
    );
    out
}

/// How many tangles bear each certificate.
fn certificates(s: &Solution) -> Vec<(&'static str, usize)> {
    let kinds = [
        Certificate::All,
        Certificate::PricedOut,
        Certificate::Pool,
        Certificate::Bounded { gap_nats: 0.0 },
        Certificate::None,
    ];
    kinds
        .into_iter()
        .map(|kind| {
            let n = s
                .tangles
                .iter()
                .filter(|g| g.certificate.word() == kind.word())
                .count();
            (kind.word(), n)
        })
        .collect()
}
