//! Names that last: what becomes of a name when stars split, join, vanish or are reduced anew.

use std::fs;

use asterskein::frame::known;
use asterskein::io::lists::read_lists;
use asterskein::io::result_tables::RunView;
use asterskein::io::run_info::Input;
use asterskein::io::write_run::inputs_of;
use asterskein::model::result::{Membership, Solution};
use asterskein::output::naming::{self, OldNames, Renaming, What};

use super::sample::Sample;
use super::write;

/// The sample, its old names, and digests of its lists.
fn old() -> (tempfile::TempDir, Sample, OldNames, Vec<Input>) {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    write(&sample, &folder.path().join("run"));
    let old = naming::read_old(&folder.path().join("run")).expect("old names");
    let inputs = inputs_of(&sample.campaign, &[]).expect("digests");
    (folder, sample, old, inputs)
}

fn rename(sample: &Sample, solution: &Solution, inputs: &[Input], old: &OldNames) -> Renaming {
    let view = RunView {
        solution,
        ..sample.view()
    };
    naming::rename(view, inputs, old, &[])
}

fn what(r: &Renaming) -> Vec<(&str, &str, What, usize)> {
    r.rows
        .iter()
        .map(|r| (r.track.as_str(), r.old_track.as_str(), r.what, r.n_shared))
        .collect()
}

fn own(track: usize, epoch: usize, row: usize, like: &Membership) -> Membership {
    Membership {
        track,
        epoch,
        row,
        share: 1.0,
        ..like.clone()
    }
}

#[test]
fn an_unchanged_result_keeps_every_name_with_members() {
    let (_keep, sample, old, inputs) = old();
    let r = rename(&sample, &sample.solution, &inputs, &old);
    // The third track of the sample holds nothing, so nothing can tell that it is the same.
    assert_eq!(r.names, ["L00001", "K-east-3", "L00004"]);
    assert_eq!(
        what(&r),
        [
            ("L00001", "L00001", What::Kept, 2),
            ("K-east-3", "K-east-3", What::Kept, 2),
            ("L00004", "", What::New, 0),
            ("", "L00003", What::Lost, 0),
        ]
    );
    assert_eq!(r.last_number, 4);
}

#[test]
fn joined_and_split_names_are_told_apart() {
    let (_keep, sample, old, inputs) = old();
    let mut joined = sample.solution.clone();
    let like = joined.members[0].clone();
    joined.tracks.truncate(1);
    joined.members = vec![
        own(0, 0, 1, &like),
        own(0, 1, 1, &like),
        own(0, 0, 0, &like),
    ];
    let r = rename(&sample, &joined, &inputs, &old);
    assert_eq!(r.names, ["L00001"]);
    assert_eq!(what(&r)[1], ("L00001", "K-east-3", What::Joined, 2));

    let mut split = sample.solution.clone();
    // `one:7` and `two:1` were L00001; now each is a star of its own.
    split.members = vec![
        own(0, 1, 1, &like),
        own(1, 0, 0, &like),
        own(2, 0, 1, &like),
    ];
    let r = rename(&sample, &split, &inputs, &old);
    assert_eq!(r.names[2], "L00001");
    assert_eq!(r.names[1], "K-east-3");
    assert_eq!(r.names[0], "L00004");
    assert_eq!(what(&r)[0], ("L00004", "L00001", What::Split, 1));
}

#[test]
fn a_list_reduced_anew_is_matched_by_place() {
    let (keep, mut sample, old, _) = old();
    // New identifiers, and every place moved a little.
    fs::write(
        keep.path().join("e1.csv"),
        "id,x,y,x_err,y_err,mag,mag_err,sharpness\n\
         a,101.5,-3.0,0.5,0.5,14.2,0.02,\nb,-19.0,39.5,0.5,0.5,,,\nc,500.0,500.5,1,1,16.1,0.1,x\n",
    )
    .expect("written");
    (sample.lists, _) = read_lists(&sample.campaign).expect("lists");
    sample.epochs = known::register(&sample.campaign, &sample.lists).expect("known frames");
    let inputs = inputs_of(&sample.campaign, &[]).expect("digests");
    let r = rename(&sample, &sample.solution, &inputs, &old);
    assert_eq!(&r.names[..2], ["L00001", "K-east-3"]);
    assert_eq!(what(&r)[0], ("L00001", "L00001", What::Kept, 2));
}

#[test]
fn rivals_speak_the_new_names() {
    let (_keep, sample, ..) = old();
    let mut solution = sample.solution.clone();
    let names = ["A".to_owned(), "B".to_owned(), "C".to_owned()];
    naming::apply(&mut solution, &names);
    assert_eq!(solution.tracks[1].name, "B");
    assert_eq!(
        solution.rivals[0].change,
        "B takes two:1 from A; A drops one:7"
    );
}
