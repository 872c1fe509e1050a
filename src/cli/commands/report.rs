//! `report`: the picture of a result again, or of a part of it; figures for papers.

use std::fs;
use std::path::{Path, PathBuf};

use anyhow::Context;
use asterskein::engine::Observer;
use asterskein::io::read_run::{Run, read_run};
use asterskein::output::report::{
    AUDIT, Budget, ExtraTable, FigureStyle, RECOVERY, ReportInput, Scope, field_map, html,
    read_extras, track_plot,
};

use super::super::exit::{Exit, UsageError};
use super::super::printer::{Printer, Summary};
use super::super::progress::Progress;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// Result directory written by `link`.
    pub run: PathBuf,
    /// Only these tracks and their neighbours.
    #[arg(long, value_delimiter = ',', value_name = "NAMES", conflicts_with_all = ["tangle", "region"])]
    pub track: Vec<String>,
    /// Only this tangle and its neighbours.
    #[arg(long, value_name = "K", conflicts_with = "region")]
    pub tangle: Option<usize>,
    /// Only this part of the field [mas].
    #[arg(
        long,
        value_name = "X0,Y0,X1,Y1",
        value_parser = read_region,
        allow_hyphen_values = true
    )]
    pub region: Option<[f64; 4]>,
    /// The page; default: `report.html` in the result directory, or `report-PART.html` for a part.
    #[arg(long, value_name = "FILE")]
    pub out: Option<PathBuf>,
    /// Write figures for papers (a field map, and a plot of each track of --track) into a
    /// directory instead of a page.
    #[arg(long, value_name = "DIR", conflicts_with = "out")]
    pub svg: Option<PathBuf>,
    /// Directory of an audit to show as well; default: `audit` in the result directory.
    #[arg(long, value_name = "DIR")]
    pub audit: Option<PathBuf>,
    /// Directory of a recovery to show as well; default: `recover` in the result directory.
    #[arg(long, value_name = "DIR")]
    pub recovery: Option<PathBuf>,
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let progress = Progress::new(printer);
    progress.stage("reading", None);
    let run = read_run(&args.run)?;
    let scope = scope(args, &run)?;
    let mut extras = extra(args.audit.as_deref(), &args.run.join("audit"), AUDIT)?;
    extras.extend(extra(
        args.recovery.as_deref(),
        &args.run.join("recover"),
        RECOVERY,
    )?);
    extras.push(notes(&run));
    let input = ReportInput {
        campaign: &run.campaign,
        epochs: &run.epochs,
        lists: &run.lists,
        solution: &run.solution,
        extras: &extras,
    };
    progress.stage("drawing", None);
    let written = match &args.svg {
        Some(folder) => figures(&input, &scope, folder)?,
        None => vec![page(args, &input, &scope)?],
    };
    progress.finish();
    let mut s = Summary::default();
    for path in &written {
        let bytes = fs::metadata(path).map(|m| m.len()).unwrap_or(0);
        s.line(
            "written",
            "written",
            format!("{} ({:.1} MB)", path.display(), bytes as f64 / 1e6),
            path.display().to_string(),
        );
    }
    printer.summary(&s);
    Ok(Exit::Done)
}

/// Four numbers joined by commas.
fn read_region(text: &str) -> Result<[f64; 4], String> {
    let numbers: Vec<f64> = text
        .split(',')
        .map(|part| part.trim().parse::<f64>())
        .collect::<Result<_, _>>()
        .map_err(|_| "four numbers in mas, joined by commas, were expected".to_owned())?;
    match numbers[..] {
        [x0, y0, x1, y1] if numbers.iter().all(|v| v.is_finite()) => Ok([x0, y0, x1, y1]),
        _ => Err(format!(
            "four numbers in mas were expected, {} found",
            numbers.len()
        )),
    }
}

fn scope(args: &Args, run: &Run) -> anyhow::Result<Scope> {
    let tracks = &run.solution.tracks;
    if !args.track.is_empty() {
        let find = |name: &String| {
            tracks.iter().position(|t| t.name == *name).ok_or_else(|| {
                UsageError(format!(
                    "no track is called `{name}`; `asterskein list {}` shows the names",
                    run.folder.display()
                ))
            })
        };
        return Ok(Scope::Tracks(
            args.track.iter().map(find).collect::<Result<_, _>>()?,
        ));
    }
    if let Some(k) = args.tangle {
        let n = run.solution.tangles.len();
        if k >= n {
            return Err(UsageError(match n {
                0 => "this result has no tangles".to_owned(),
                _ => format!(
                    "there is no tangle {k}; they are counted from 0 to {}",
                    n - 1
                ),
            })
            .into());
        }
        return Ok(Scope::Tangle(k));
    }
    if let Some(corners) = args.region {
        return Ok(Scope::Region(corners));
    }
    Ok(Scope::Whole)
}

/// The notes of the run, as a table.
fn notes(run: &Run) -> ExtraTable {
    let notes = run.info.notes.iter();
    ExtraTable {
        name: "notes".to_owned(),
        columns: ["what", "place", "text"].map(str::to_owned).to_vec(),
        rows: notes
            .map(|n| vec![n.what.clone(), n.place.clone(), n.text.clone()])
            .collect(),
    }
}

/// A directory that was asked for must hold something; the default may be missing.
fn extra(asked: Option<&Path>, default: &Path, names: &[&str]) -> anyhow::Result<Vec<ExtraTable>> {
    let found = read_extras(asked.unwrap_or(default), names)?;
    match asked {
        Some(folder) if found.is_empty() => Err(UsageError(format!(
            "{}: none of {} is there",
            folder.display(),
            names.join(".ecsv, ") + ".ecsv"
        ))
        .into()),
        _ => Ok(found),
    }
}

fn page(args: &Args, input: &ReportInput, scope: &Scope) -> anyhow::Result<PathBuf> {
    let name = match scope {
        Scope::Whole => "report.html".to_owned(),
        Scope::Tracks(_) => format!("report-{}.html", file_name(&args.track[0])),
        Scope::Tangle(k) => format!("report-tangle-{k}.html"),
        Scope::Region(_) => "report-region.html".to_owned(),
    };
    let path = args.out.clone().unwrap_or_else(|| args.run.join(name));
    replace(&path, &html(input, scope, Budget::default())?)?;
    Ok(path)
}

fn figures(input: &ReportInput, scope: &Scope, folder: &Path) -> anyhow::Result<Vec<PathBuf>> {
    fs::create_dir_all(folder).with_context(|| format!("cannot make {}", folder.display()))?;
    let style = FigureStyle::default();
    let map = folder.join("field.svg");
    replace(&map, &field_map(input, scope, style))?;
    let mut written = vec![map];
    if let Scope::Tracks(tracks) = scope {
        for &k in tracks {
            if let Some(plot) = track_plot(input, k, style) {
                let name = file_name(&input.solution.tracks[k].name);
                let path = folder.join(format!("track-{name}.svg"));
                replace(&path, &plot)?;
                written.push(path);
            }
        }
    }
    Ok(written)
}

/// Writes beside the target first, so that an old file is replaced whole or not at all.
fn replace(path: &Path, text: &str) -> anyhow::Result<()> {
    let mut partial = path.as_os_str().to_owned();
    partial.push(".partial");
    let partial = PathBuf::from(partial);
    let done = fs::write(&partial, text).and_then(|()| fs::rename(&partial, path));
    if done.is_err() {
        let _ = fs::remove_file(&partial);
    }
    done.with_context(|| format!("cannot write {}", path.display()))
}

/// A name from a list may hold anything; a file name keeps letters, digits and a few signs.
fn file_name(name: &str) -> String {
    name.chars()
        .map(|c| match c {
            c if c.is_alphanumeric() => c,
            '-' | '_' | '.' | '+' => c,
            _ => '_',
        })
        .collect()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn regions_are_four_numbers() {
        assert_eq!(read_region("-5,-6.5,7,8"), Ok([-5.0, -6.5, 7.0, 8.0]));
        assert!(read_region("1,2,3").is_err());
        assert!(read_region("1,2,3,x").is_err());
        assert!(read_region("1,2,3,inf").is_err());
    }

    #[test]
    fn names_become_file_names() {
        assert_eq!(file_name("K-east/../3 </script>"), "K-east_.._3___script_");
    }
}
