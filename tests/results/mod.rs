//! A result written to a directory and read back.

mod handoff;
mod naming;
mod rulings;
pub mod sample;

use std::fs;
use std::path::Path;

use asterskein::io::read_run::{RunError, read_run};
use asterskein::io::result_tables::{self, RunView};
use asterskein::io::run_dir::{Existing, RunDir};
use asterskein::io::run_info::Timing;
use asterskein::io::write_run::{self, RunRecord};
use asterskein::io::{ecsv_read, ecsv_write};

use sample::Sample;

pub fn write(sample: &Sample, out: &Path) {
    let view = sample.view();
    let dir = RunDir::begin(out, Existing::Refuse).expect("a free directory");
    write_run::write_tables(&dir, view, &[]).expect("tables");
    let record = RunRecord {
        inputs: write_run::inputs_of(&sample.campaign, &[]).expect("digests"),
        settings: serde_json::json!({"seed": 1}),
        notes: Vec::new(),
        last_number: 3,
        timing: Timing::default(),
    };
    write_run::write_info(&dir, view, record).expect("run.json");
    dir.finish().expect("in place");
}

fn texts(view: RunView<'_>) -> Vec<(String, String)> {
    result_tables::all(view)
        .iter()
        .map(|t| {
            let mut out = Vec::new();
            ecsv_write::write(t, &mut out).expect("memory");
            (t.name.clone(), String::from_utf8(out).expect("text"))
        })
        .collect()
}

#[test]
fn what_is_read_back_writes_the_same_tables() {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    let out = folder.path().join("run");
    write(&sample, &out);
    let run = read_run(&out).expect("a result");
    let again = RunView {
        campaign: &run.campaign,
        lists: &run.lists,
        epochs: &run.epochs,
        solution: &run.solution,
    };
    let (before, after) = (texts(sample.view()), texts(again));
    assert_eq!(before.len(), 7);
    for ((name, a), (_, b)) in before.iter().zip(&after) {
        assert_eq!(a, b, "{name}");
    }
    for (e, (a, b)) in sample.epochs.iter().zip(&run.epochs).enumerate() {
        assert_eq!(a.region, b.region, "epoch {e}");
        assert_eq!(a.mag.len(), b.mag.len(), "epoch {e}");
    }
    assert_eq!(run.info.counts["detections"], 5);
}

#[test]
fn no_cell_is_nan_and_every_column_is_described() {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    for (name, text) in texts(sample.view()) {
        let table = ecsv_read::read(text.as_bytes()).expect("our own table");
        for column in &table.columns {
            assert!(!column.description.is_empty(), "{name}.{}", column.name);
        }
        for line in text.lines().filter(|l| !l.starts_with('#')).skip(1) {
            for cell in line.split(',') {
                assert!(
                    !["nan", "inf", "-inf"].contains(&cell.to_lowercase().as_str()),
                    "{line}"
                );
            }
        }
    }
}

#[test]
fn a_changed_list_is_refused_by_name() {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    let out = folder.path().join("run");
    write(&sample, &out);
    let list = folder.path().join("e1.csv");
    let text = fs::read_to_string(&list).expect("a list");
    fs::write(&list, text.replace("14.1", "14.2")).expect("written");
    fs::remove_file(folder.path().join("mask.csv")).expect("removed");
    let Err(RunError::Changed(inputs)) = read_run(&out) else {
        panic!("changed inputs were accepted");
    };
    let found: Vec<(bool, bool)> = inputs
        .iter()
        .map(|i| (i.path.ends_with("e1.csv"), i.missing))
        .collect();
    assert_eq!(found.len(), 2);
    assert!(found.contains(&(true, false)) && found.contains(&(false, true)));
}

#[test]
fn a_result_may_move_with_its_campaign() {
    let folder = tempfile::tempdir().expect("a folder");
    let home = folder.path().join("a");
    fs::create_dir(&home).expect("made");
    let sample = Sample::new(&home);
    write(&sample, &home.join("run"));
    fs::rename(&home, folder.path().join("b")).expect("moved");
    read_run(&folder.path().join("b/run")).expect("a result");
}

#[test]
fn a_foreign_directory_is_not_a_result() {
    let folder = tempfile::tempdir().expect("a folder");
    assert!(matches!(read_run(folder.path()), Err(RunError::NotARun(_))));
}
