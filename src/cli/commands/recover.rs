//! `recover`: made-up stars in the real lists, linked again and counted.

use std::fs;
use std::io::{BufRead, BufReader, Write};
use std::path::{Path, PathBuf};

use anyhow::{Context, bail};
use asterskein::engine::{Observer, Settings};
use asterskein::inject::recover::{
    Linked, Outcome, Recovered, Recovery, bins, completeness_table, injected_table,
};
use asterskein::io::ecsv_write;
use asterskein::io::read_run::{Run, read_run};
use asterskein::io::run_dir::{Existing, RunDir};
use asterskein::io::run_info;
use serde::{Deserialize, Serialize};

use super::super::exit::Exit;
use super::super::printer::{Printer, Summary};
use super::super::progress::Progress;
use super::beside;

/// The mark of an earlier result of this command.
const MARKER: &str = "completeness.ecsv";

#[derive(Debug, clap::Args)]
pub struct Args {
    /// Result directory written by `link`.
    pub run: PathBuf,
    /// Made-up stars in all; a few at a time are put into the lists.
    #[arg(long, value_name = "N", default_value_t = 200, value_parser = clap::value_parser!(u32).range(1..))]
    pub stars: u32,
    /// Seed of the random numbers.
    #[arg(long, value_name = "N", default_value_t = 1)]
    pub seed: u64,
    /// Directory for the tables (default: the run's name with `-recover` added).
    #[arg(long, short, value_name = "DIR")]
    pub out: Option<PathBuf>,
    /// Replace an earlier result in that directory.
    #[arg(long)]
    pub replace: bool,
    /// Forget what an interrupted attempt has done.
    #[arg(long)]
    pub restart: bool,
}

pub fn run(args: &Args, printer: &Printer, threads: usize) -> anyhow::Result<Exit> {
    let out = beside::directory(args.out.as_deref(), &args.run, "-recover")?;
    let existing = Existing::asked(args.replace, MARKER);
    let dir = RunDir::begin(&out, existing)?;
    let progress = Progress::new(printer);
    progress.stage("reading", None);
    let run = read_run(&args.run)?;
    let linked = Linked {
        campaign: &run.campaign,
        epochs: &run.epochs,
        solution: &run.solution,
    };
    let recovery = Recovery::new(linked, args.stars as usize, args.seed);
    let n_batches = recovery.n_batches();
    let diary_path = beside::sibling(&out, ".recover-progress");
    let mut diary = Diary::open(&diary_path, &Header::of(args, &run)?, args.restart)?;
    if !diary.done.is_empty() {
        printer.talk(&format!(
            "going on after {} of {n_batches} batches done earlier",
            diary.done.len()
        ));
    }
    let settings = Settings {
        threads,
        ..Settings::default()
    };
    progress.stage("linking with made-up stars", Some(n_batches as u64));
    progress.advance(diary.done.len() as u64);
    for number in diary.done.len()..n_batches {
        let batch = recovery.batch(number, &settings)?;
        diary.add(batch)?;
        progress.advance(1);
    }
    progress.finish();

    let stars: Vec<Recovered> = diary.done.iter().flatten().cloned().collect();
    dir.write("injected.ecsv", |w| {
        ecsv_write::write(&injected_table(&stars), w)
    })?;
    let counts = bins(&stars);
    dir.write(MARKER, |w| {
        ecsv_write::write(&completeness_table(&counts), w)
    })?;
    dir.finish()?;
    fs::remove_file(&diary_path)
        .with_context(|| format!("cannot remove {}", diary_path.display()))?;
    printer.summary(&summary(&stars, &out));
    Ok(Exit::Done)
}

/// What an attempt depends on; another attempt may only go on from an equal one.
#[derive(Clone, Debug, PartialEq, Eq, Serialize, Deserialize)]
struct Header {
    version: String,
    run_digest: String,
    stars: u32,
    seed: u64,
}

impl Header {
    fn of(args: &Args, run: &Run) -> anyhow::Result<Self> {
        let file = run.folder.join(run_info::FILE);
        Ok(Self {
            version: env!("CARGO_PKG_VERSION").to_owned(),
            run_digest: run_info::sha256(&file)
                .with_context(|| format!("cannot read {}", file.display()))?,
            stars: args.stars,
            seed: args.seed,
        })
    }
}

/// Finished batches, on disk line by line, so that a stopped attempt can be gone on with.
struct Diary {
    done: Vec<Vec<Recovered>>,
    file: fs::File,
    path: PathBuf,
}

impl Diary {
    fn open(path: &Path, header: &Header, restart: bool) -> anyhow::Result<Self> {
        let mut done = Vec::new();
        if !restart && path.exists() {
            let mut lines = BufReader::new(fs::File::open(path)?).lines();
            let first = lines.next().transpose()?.unwrap_or_default();
            if serde_json::from_str::<Header>(&first).ok().as_ref() != Some(header) {
                bail!(
                    "{} belongs to an attempt with another run, number of stars or seed; \
                     pass --restart to forget it",
                    path.display()
                );
            }
            // The last line may be cut short; its batch is done again.
            done.extend(lines.map_while(|l| serde_json::from_str(&l.ok()?).ok()));
        }
        let mut diary = Self {
            done: Vec::new(),
            file: fs::File::create(path)
                .with_context(|| format!("cannot write {}", path.display()))?,
            path: path.to_owned(),
        };
        diary.line(&serde_json::to_string(header)?)?;
        for batch in done {
            diary.add(batch)?;
        }
        Ok(diary)
    }

    fn add(&mut self, batch: Vec<Recovered>) -> anyhow::Result<()> {
        self.line(&serde_json::to_string(&batch)?)?;
        self.done.push(batch);
        Ok(())
    }

    fn line(&mut self, text: &str) -> anyhow::Result<()> {
        writeln!(self.file, "{text}")
            .and_then(|()| self.file.flush())
            .with_context(|| format!("cannot write {}", self.path.display()))
    }
}

fn summary(stars: &[Recovered], out: &Path) -> Summary {
    let n = stars.len();
    let count = |test: &dyn Fn(&Recovered) -> bool| stars.iter().filter(|s| test(s)).count();
    let share = |a: usize, of: usize| {
        if of == 0 {
            a.to_string()
        } else {
            format!("{a}  ({:.1} %)", 100.0 * a as f64 / of as f64)
        }
    };
    let seen = count(&|s| s.outcome != Outcome::Unseen);
    let found = count(&|s| s.outcome.is_found());
    let whole = count(&|s| s.outcome == Outcome::Whole);
    let pairs = count(&|s| s.pair.is_some()) / 2;
    let fakes = count(&|s| s.fakes_orbit) / 2;
    let mut t = Summary::default();
    t.line("stars", "made-up stars", n.to_string(), n);
    t.line("seen", "  seen twice or more", share(seen, n), seen);
    t.line("found", "  found in one track", share(found, seen), found);
    t.line(
        "whole",
        "  with nothing missing or foreign",
        share(whole, seen),
        whole,
    );
    t.line("pairs", "passing pairs", pairs.to_string(), pairs);
    t.line(
        "fake_orbits",
        "  that fake a short orbit",
        share(fakes, pairs),
        fakes,
    );
    let result = out.display().to_string();
    t.line("result", "result", result.clone(), result);
    t
}
