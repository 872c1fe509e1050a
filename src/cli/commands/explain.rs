//! `explain`: why a track or a detection came out as it did, how sure that is, and a ruling to
//! paste for those who know better.

use std::fmt::Write;
use std::path::PathBuf;

use asterskein::io::read_run::{self, Run};
use asterskein::model::change::{Change, DetectionName};
use asterskein::model::flag::{self, Flags};
use asterskein::model::result::{Certificate, Membership, Rival};
use serde_json::json;

use super::super::exit::{Exit, UsageError};
use super::super::lines::{Align, Lines};
use super::super::printer::Printer;

/// Links below this probability are shown one by one.
const SURE: f64 = 0.9;

#[derive(Debug, clap::Args)]
pub struct Args {
    /// Result directory written by `link`.
    pub run: PathBuf,
    /// A track (`L00012`) or a detection (`epoch name:id`).
    pub what: String,
}

pub fn run(args: &Args, printer: &Printer) -> anyhow::Result<Exit> {
    let run = read_run::read_run(&args.run)?;
    let s = &run.solution;
    let text = if let Some(t) = s.tracks.iter().position(|t| t.name == args.what) {
        if printer.json {
            track_json(&run, t).to_string()
        } else {
            track(&run, t)
        }
    } else if let Some((epoch, row)) = find_detection(&run, &args.what) {
        if printer.json {
            detection_json(&run, epoch, row).to_string()
        } else {
            detection(&run, epoch, row)
        }
    } else {
        return Err(UsageError(format!(
            "{} has neither a track `{}` nor a detection of that name (`epoch name:id`); \
             `asterskein list` shows the tracks",
            args.run.display(),
            args.what
        ))
        .into());
    };
    printer.data(&text);
    Ok(Exit::Done)
}

/// Epoch names may hold colons: every split is tried.
fn find_detection(run: &Run, text: &str) -> Option<(usize, usize)> {
    text.match_indices(':').find_map(|(at, _)| {
        let (name, id) = (text[..at].trim(), text[at + 1..].trim());
        let e = run.campaign.epochs.iter().position(|e| e.name == name)?;
        let ids = &run.lists[e].ids;
        // An epoch that was not placed has no detections in the result.
        let row = (0..run.epochs[e].len()).find(|&r| ids.text(r) == id)?;
        Some((e, row))
    })
}

fn name_of(run: &Run, epoch: usize, row: usize) -> String {
    let name = DetectionName {
        epoch_name: run.campaign.epochs[epoch].name.clone(),
        id: run.lists[epoch].ids.text(row),
    };
    name.to_string()
}

/// The surest member of a track other than one detection: what a ruling can hold on to.
fn surest(run: &Run, track: usize, not: (usize, usize)) -> Option<&Membership> {
    run.solution
        .members
        .iter()
        .filter(|m| m.track == track && m.share >= 1.0 && (m.epoch, m.row) != not)
        .max_by(|a, b| {
            a.probability
                .total_cmp(&b.probability)
                .then(b.epoch.cmp(&a.epoch))
        })
}

/// Flags with their meanings, one per line.
fn meanings(flags: Flags) -> String {
    flag::TABLE
        .iter()
        .filter(|(f, ..)| flags.has(*f))
        .map(|(_, word, meaning)| format!("  {word}: {meaning}\n"))
        .collect()
}

/// Members of a track, with those who share each.
fn others(run: &Run, m: &Membership) -> String {
    let names: Vec<&str> = run
        .solution
        .members
        .iter()
        .filter(|o| (o.epoch, o.row) == (m.epoch, m.row) && o.track != m.track)
        .map(|o| run.solution.tracks[o.track].name.as_str())
        .collect();
    names.join(" ")
}

fn rivals_of<'a>(run: &'a Run, tangle: usize, name: &'a str) -> impl Iterator<Item = &'a Rival> {
    run.solution
        .rivals
        .iter()
        .filter(move |r| r.tangle == tangle)
        .filter(move |r| r.change.split([' ', ';']).any(|word| word == name))
}

fn track(run: &Run, t: usize) -> String {
    let s = &run.solution;
    let track = &s.tracks[t];
    let mut out = String::new();
    // Writing to a text cannot fail.
    let _ = writeln!(
        out,
        "{}: {} detections from {:.2} to {:.2}, {} motion",
        track.name,
        track.n_members,
        track.first_yr,
        track.last_yr,
        track.motion.kind.word()
    );
    let _ = writeln!(
        out,
        "  one real star with probability {:.4}; chi2 {:.1} for {} degrees of freedom",
        track.probability, track.chi2, track.dof
    );
    let _ = writeln!(
        out,
        "  at {:.2}: x {:.3} +- {:.3} mas, y {:.3} +- {:.3} mas, {:.4} +- {:.4} and {:.4} +- {:.4} mas/yr",
        track.mean_epoch_yr,
        track.x_mean_mas,
        track.x_mean_err_mas,
        track.y_mean_mas,
        track.y_mean_err_mas,
        track.vx_mean_mas_yr,
        track.vx_mean_err_mas_yr,
        track.vy_mean_mas_yr,
        track.vy_mean_err_mas_yr
    );
    if let Some(mag) = track.mag {
        let scatter = track
            .mag_scatter
            .map_or_else(String::new, |s| format!(", scatter {s:.2}"));
        let _ = writeln!(out, "  magnitude {mag:.2}{scatter}");
    }
    out.push_str(&meanings(track.flags));
    let members: Vec<&Membership> = s.members.iter().filter(|m| m.track == t).collect();
    let doubtful: Vec<&&Membership> = members
        .iter()
        .filter(|m| m.probability < SURE || m.share < 1.0)
        .collect();
    if doubtful.is_empty() {
        let _ = writeln!(
            out,
            "\nEvery detection is its own, with probability {SURE} or more."
        );
    } else {
        out.push_str("\nDetections that are shared or not sure:\n");
        let mut lines = Lines::new(&[
            ("detection", Align::Left),
            ("probability", Align::Right),
            ("share", Align::Right),
            ("dx_mas", Align::Right),
            ("dy_mas", Align::Right),
            ("with", Align::Left),
        ]);
        for m in &doubtful {
            lines.push(vec![
                name_of(run, m.epoch, m.row),
                format!("{:.3}", m.probability),
                format!("{:.2}", m.share),
                format!("{:.2}", m.dx_mas),
                format!("{:.2}", m.dy_mas),
                others(run, m),
            ]);
        }
        let _ = write!(out, "{lines}");
    }
    if let Some(g) = track.tangle {
        out.push_str(&tangle(run, g, &track.name));
    } else {
        out.push_str("\nNo other star competes for its detections.\n");
    }
    let rival = track
        .tangle
        .and_then(|g| rivals_of(run, g, &track.name).next());
    let unsure = doubtful
        .iter()
        .min_by(|a, b| a.probability.total_cmp(&b.probability));
    if let Some(text) = rival.and_then(|r| rulings_for(run, r)) {
        out.push_str(&text);
    } else if let Some(m) = unsure {
        out.push_str(&together(run, "To fix this link:", (m.epoch, m.row), t));
    }
    out
}

fn tangle(run: &Run, g: usize, name: &str) -> String {
    let mut out = String::new();
    let Some(tangle) = run.solution.tangles.get(g) else {
        return out;
    };
    let proven = match tangle.certificate {
        Certificate::All => "every explanation was tried".to_owned(),
        Certificate::PricedOut => "no one further track would improve it".to_owned(),
        Certificate::Pool => "best over the tracks considered".to_owned(),
        Certificate::Bounded { gap_nats } => format!("within {gap_nats:.2} nats of the best"),
        Certificate::None => "nothing is proven".to_owned(),
    };
    let _ = writeln!(
        out,
        "\nTangle {g}: {} tracks, {} detections, {} epochs; {proven}.",
        tangle.tracks.len(),
        tangle.n_detections,
        tangle.n_epochs
    );
    let mut any = false;
    for r in rivals_of(run, g, name) {
        any = true;
        let _ = writeln!(
            out,
            "  rival {}: ln odds {:.2}: {}",
            r.rank, r.ln_odds, r.change
        );
    }
    if !any {
        out.push_str("  No kept rival explanation changes this track.\n");
    }
    out
}

/// Rulings that settle the first change of a rival, either way.
fn rulings_for(run: &Run, rival: &Rival) -> Option<String> {
    let tracks = &run.solution.tracks;
    let index = |name: &str| tracks.iter().position(|t| t.name == name);
    rival.change.split("; ").find_map(|clause| {
        let Change::Takes {
            track,
            detection,
            from,
        } = Change::read(clause)?
        else {
            return None;
        };
        let at = find_detection(run, &detection.to_string())?;
        let taker = index(&track)?;
        let mut out = String::new();
        if let Some(owner) = from.as_deref().and_then(index) {
            out.push_str(&together(run, "To keep it as it is:", at, owner));
        }
        out.push_str(&together(
            run,
            &format!("To follow rival {}:", rival.rank),
            at,
            taker,
        ));
        Some(out)
    })
}

/// A ruling that ties a detection to a track through the track's surest member.
fn together(run: &Run, heading: &str, at: (usize, usize), track: usize) -> String {
    let Some(anchor) = surest(run, track, at) else {
        return String::new();
    };
    format!(
        "\n{heading}\n\n[[together]]\ndetections = [{}, {}]\nreason = \"\"   # say why\nauthor = \"\"\n",
        quoted(&name_of(run, at.0, at.1)),
        quoted(&name_of(run, anchor.epoch, anchor.row)),
    )
}

/// A TOML text: for such names its basic strings are those of JSON.
fn quoted(text: &str) -> String {
    serde_json::Value::from(text).to_string()
}

fn detection(run: &Run, epoch: usize, row: usize) -> String {
    let s = &run.solution;
    let e = &run.epochs[epoch];
    let name = name_of(run, epoch, row);
    let mut out = format!(
        "{name}: {:.4}, x {:.3} mas, y {:.3} mas",
        e.time.yr(),
        e.x_mas[row],
        e.y_mas[row]
    );
    if e.mag[row].is_finite() {
        let _ = write!(out, ", magnitude {:.2}", e.mag[row]);
    }
    out.push('\n');
    let owners: Vec<&Membership> = s
        .members
        .iter()
        .filter(|m| (m.epoch, m.row) == (epoch, row))
        .collect();
    for m in &owners {
        let _ = writeln!(
            out,
            "  {} holds it with probability {:.3}, flux share {:.2}, residual {:.2}, {:.2} mas",
            s.tracks[m.track].name, m.probability, m.share, m.dx_mas, m.dy_mas
        );
        out.push_str(&meanings(m.flags));
    }
    let free = s
        .leftovers
        .iter()
        .find(|l| (l.epoch, l.row) == (epoch, row));
    if let Some(l) = free {
        let _ = writeln!(
            out,
            "  in no track; false with probability {:.3}",
            l.p_false
        );
        out.push_str(&meanings(l.flags));
        if let Some((t, distance)) = l.nearest {
            let _ = writeln!(
                out,
                "  the nearest track is {}, {distance:.1} mas away",
                s.tracks[t].name
            );
            let heading = format!("If it belongs to {}:", s.tracks[t].name);
            out.push_str(&together(run, &heading, (epoch, row), t));
        }
    }
    for m in &owners {
        let heading = format!("To tie it to {}:", s.tracks[m.track].name);
        out.push_str(&together(run, &heading, (epoch, row), m.track));
    }
    let _ = write!(
        out,
        "\nIf it is an artefact:\n\n[[discard]]\ndetection = {}\nreason = \"\"   # say why\nauthor = \"\"\n",
        quoted(&name)
    );
    out
}

fn track_json(run: &Run, t: usize) -> serde_json::Value {
    let s = &run.solution;
    let track = &s.tracks[t];
    let members: Vec<_> = s
        .members
        .iter()
        .filter(|m| m.track == t)
        .map(|m| {
            json!({
                "detection": name_of(run, m.epoch, m.row),
                "probability": m.probability,
                "share": m.share,
                "with": others(run, m),
            })
        })
        .collect();
    let rivals: Vec<_> = track
        .tangle
        .into_iter()
        .flat_map(|g| rivals_of(run, g, &track.name))
        .map(|r| json!({"rank": r.rank, "ln_odds": r.ln_odds, "change": r.change}))
        .collect();
    json!({
        "track": track.name,
        "probability": track.probability,
        "model": track.motion.kind.word(),
        "flags": track.flags.words(),
        "tangle": track.tangle,
        "certificate": track.tangle.and_then(|g| s.tangles.get(g)).map(|g| g.certificate.word()),
        "members": members,
        "rivals": rivals,
    })
}

fn detection_json(run: &Run, epoch: usize, row: usize) -> serde_json::Value {
    let s = &run.solution;
    let held: Vec<_> = s
        .members
        .iter()
        .filter(|m| (m.epoch, m.row) == (epoch, row))
        .map(|m| {
            json!({
                "track": s.tracks[m.track].name,
                "probability": m.probability,
                "share": m.share,
                "flags": m.flags.words(),
            })
        })
        .collect();
    let free = s
        .leftovers
        .iter()
        .find(|l| (l.epoch, l.row) == (epoch, row));
    json!({
        "detection": name_of(run, epoch, row),
        "x_mas": run.epochs[epoch].x_mas[row],
        "y_mas": run.epochs[epoch].y_mas[row],
        "held_by": held,
        "p_false": free.map(|l| l.p_false),
        "nearest_track": free.and_then(|l| l.nearest).map(|n| s.tracks[n.0].name.clone()),
    })
}
