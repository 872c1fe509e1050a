//! `audit`: claimed objects against everything else that could have made their positions.

use std::path::{Path, PathBuf};

use asterskein::audit::claims::{self, Case};
use asterskein::audit::judge::{Judged, judge};
use asterskein::audit::tables::{self, Names};
use asterskein::audit::verdict::Verdict;
use asterskein::engine::Observer;
use asterskein::engine::reopen::{in_parallel, reopen};
use asterskein::io::claims::{Known, read_claims};
use asterskein::io::ecsv_write;
use asterskein::io::read_run::read_run;
use asterskein::io::run_dir::{Existing, RunDir};
use serde_json::json;

use super::super::exit::Exit;
use super::super::lines::{Align, Lines};
use super::super::printer::Printer;
use super::super::progress::Progress;
use super::beside;

/// The mark of an earlier result of this command.
const MARKER: &str = "verdicts.ecsv";

#[derive(Debug, clap::Args)]
#[command(
    after_help = "Claims are a CSV table: positions (claim,epoch,x_mas,y_mas or claim,time_yr,x_mas,y_mas), \
                  detections (claim,epoch,id), a track of the result (claim,track), or an orbit \
                  (claim,semi_major_mas,eccentricity,inclination_deg,node_deg,arg_pericentre_deg,\
                  t_pericentre_yr and, for a mass of its own, period_yr).\n\
                  A claim that cannot be read is refused by file and line, the others are audited; \
                  the command then ends with code 1."
)]
pub struct Args {
    /// Result directory written by `link`.
    pub run: PathBuf,
    /// The claimed objects.
    #[arg(long, value_name = "FILE")]
    pub claims: PathBuf,
    /// Directory for the tables (default: the run's name with `-audit` added).
    #[arg(long, short, value_name = "DIR")]
    pub out: Option<PathBuf>,
    /// Replace an earlier result in that directory.
    #[arg(long)]
    pub replace: bool,
    /// Scrambled campaigns searched for each claim.
    #[arg(long, value_name = "N", default_value_t = 200, value_parser = clap::value_parser!(u32).range(1..))]
    pub scrambles: u32,
    /// Seed of the random numbers.
    #[arg(long, value_name = "N", default_value_t = 1)]
    pub seed: u64,
}

pub fn run(args: &Args, printer: &Printer, threads: usize) -> anyhow::Result<Exit> {
    let out = beside::directory(args.out.as_deref(), &args.run, "-audit")?;
    let existing = Existing::asked(args.replace, MARKER);
    let dir = RunDir::begin(&out, existing)?;
    let progress = Progress::new(printer);
    progress.stage("reading", None);
    let run = read_run(&args.run)?;
    let known = Known {
        campaign: &run.campaign,
        lists: &run.lists,
        solution: &run.solution,
    };
    let read = read_claims(&args.claims, known)?;
    for (name, faults) in &read.refused {
        let what = format!("claim `{name}` is refused:\n{faults}");
        printer.error(&anyhow::Error::msg(what));
    }
    if read.claims.is_empty() {
        return Ok(Exit::Failed);
    }
    progress.stage("fitting the run again", None);
    let reopened = reopen(&run.campaign, &run.epochs, &run.solution);
    let cases: Vec<Case> = read
        .claims
        .iter()
        .map(|c| {
            claims::case(
                &c.name,
                &c.body,
                &run.campaign,
                &run.solution,
                &reopened.scene,
            )
        })
        .collect();
    progress.stage("auditing", Some(cases.len() as u64));
    let mut judged: Vec<Judged> = in_parallel(threads, cases.len(), |k| {
        let judged = judge(&reopened, cases[k].clone());
        progress.advance(1);
        judged
    })?;
    let n = args.scrambles as usize;
    progress.stage("scrambling", Some((n * judged.len()) as u64));
    let scrambled: Vec<f64> = in_parallel(threads, n * judged.len(), |i| {
        let odds = judged[i / n].scramble(&reopened, args.seed, i as u64);
        progress.advance(1);
        odds
    })?;
    for (j, s) in judged.iter_mut().zip(scrambled.chunks(n)) {
        j.conclude(s.to_vec());
    }
    progress.finish();

    let stars: Vec<String> = reopened
        .track_of
        .iter()
        .map(|&t| run.solution.tracks[t].name.clone())
        .collect();
    let names = Names {
        campaign: &run.campaign,
        lists: &run.lists,
        stars: &stars,
    };
    for table in [
        tables::verdicts(&judged, names),
        tables::evidence(&judged, names),
        tables::settling(&judged, names),
    ] {
        dir.write(&format!("{}.ecsv", table.name), |w| {
            ecsv_write::write(&table, w)
        })?;
    }
    dir.finish()?;
    say(printer, &judged, names, read.refused.len(), &out);
    Ok(if read.refused.is_empty() {
        Exit::Done
    } else {
        Exit::Failed
    })
}

/// The verdicts, for people or as JSON.
fn say(printer: &Printer, judged: &[Judged], names: Names<'_>, n_refused: usize, out: &Path) {
    if printer.json {
        let claims: Vec<_> = judged
            .iter()
            .map(|j| {
                json!({
                    "claim": j.case.name,
                    "verdict": j.verdict.word(),
                    "p_real": j.odds.p_real(),
                    "ln_odds": j.odds.ln_odds,
                    "chance_p": j.chance_p,
                    "needs": tables::needs(j, names),
                })
            })
            .collect();
        let all = json!({ "claims": claims, "refused": n_refused, "result": out });
        printer.data(&all.to_string());
        return;
    }
    if printer.quiet {
        return;
    }
    let mut t = Lines::new(&[
        ("claim", Align::Left),
        ("verdict", Align::Left),
        ("p_real", Align::Right),
        ("ln odds", Align::Right),
        ("chance p", Align::Right),
        ("positions", Align::Right),
        ("explained", Align::Right),
        ("in words", Align::Left),
    ]);
    for j in judged {
        t.push(vec![
            j.case.name.clone(),
            j.verdict.word().to_owned(),
            format!("{:.3}", j.odds.p_real()),
            format!("{:.1}", j.odds.ln_odds),
            format!("{:.3}", j.chance_p),
            j.case.places.len().to_string(),
            j.n_explained().to_string(),
            j.verdict.sentence().to_owned(),
        ]);
    }
    printer.data(&t.to_string());
    let counts: Vec<String> = Verdict::ALL
        .iter()
        .filter_map(|v| {
            let n = judged.iter().filter(|j| j.verdict == *v).count();
            (n > 0).then(|| format!("{n} {}", v.word()))
        })
        .collect();
    printer.data(&format!(
        "claims  {}  ({})",
        judged.len(),
        counts.join(", ")
    ));
    if n_refused > 0 {
        printer.data(&format!("refused {n_refused}"));
    }
    printer.data(&format!("result  {}", out.display()));
}
