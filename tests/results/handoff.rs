//! The hand-over of a made result.

use asterskein::io::ecsv_read;
use asterskein::io::run_dir::{Existing, RunDir};
use asterskein::model::flag::Flags;
use asterskein::output::handoff::{self, Choice, Confusion, HandoffError, MARKER};

use super::sample::Sample;

#[test]
fn every_file_is_written_and_reads_back() {
    let folder = tempfile::tempdir().unwrap();
    let sample = Sample::new(folder.path());
    let out = folder.path().join("fit");
    let chosen = handoff::choose(&sample.solution, &Choice::All).unwrap();
    let dir = RunDir::begin(&out, Existing::Refuse).unwrap();
    let done = handoff::write(&dir, sample.view(), &chosen).unwrap();
    dir.finish().unwrap();
    assert_eq!(done.tracks, sample.solution.tracks.len());
    assert_eq!(done.observations, sample.solution.members.len());

    let starts = ecsv_read::read(&std::fs::read(out.join(MARKER)).unwrap()).unwrap();
    let files = starts.texts("file").unwrap();
    assert_eq!(files.len(), done.tracks);
    let mut rows = 0;
    for (track, file) in sample.solution.tracks.iter().zip(&files) {
        let table = ecsv_read::read(&std::fs::read(out.join(file)).unwrap()).unwrap();
        rows += table.n_rows();
        assert_eq!(table.n_rows(), {
            let members = sample.solution.members.iter();
            members
                .filter(|m| sample.solution.tracks[m.track].name == track.name)
                .count()
        });
        // Julian year and MJD are the same time (J2000.0 = MJD 51544.5, by definition).
        let (yr, mjd) = (
            table.floats("time_yr").unwrap(),
            table.floats("mjd").unwrap(),
        );
        for (y, m) in yr.iter().zip(&mjd) {
            assert!((m - 51_544.5 - (y - 2000.0) * 365.25).abs() < 1e-6);
        }
        assert!(yr.windows(2).all(|w| w[0] <= w[1]));
        // The parts of the covariance add up.
        let get = |name: &str| table.floats(name).unwrap();
        let (total, list) = (get("cov_xx_mas2"), get("list_xx_mas2"));
        let (frame, confusion) = (get("frame_var_mas2"), get("confusion_var_mas2"));
        for k in 0..table.n_rows() {
            assert!((total[k] - list[k] - frame[k] - confusion[k]).abs() < 1e-12 * total[k]);
        }
    }
    assert_eq!(rows, done.observations);
    let readme = std::fs::read_to_string(out.join("README.md")).unwrap();
    assert!(readme.contains("mirror image") && readme.contains("## Merged detections"));
    assert!(out.join("centre.ecsv").exists());
}

#[test]
fn merged_detections_are_kept_and_marked() {
    let folder = tempfile::tempdir().unwrap();
    let mut sample = Sample::new(folder.path());
    sample.solution.members[0].share = 0.25;
    sample.solution.members[0].dx_mas = 0.5;
    sample.solution.members[0].flags.set(Flags::MERGED);
    let track = sample.solution.members[0].track;
    let rows = handoff::observations(sample.view(), &Confusion::new(sample.view()), track);
    let merged = rows.iter().find(|o| o.merged).unwrap();
    assert!(!merged.clean && merged.share < 1.0);
    // A quarter of the light: errors four times as large, variances sixteen times.
    let alone = sample.epochs[merged.epoch].cov_mas2[merged.row];
    let report = &sample.solution.epochs[merged.epoch];
    let factor = if report.error_factor > 0.0 {
        report.error_factor
    } else {
        1.0
    };
    let want = 16.0 * (alone.xx * factor.powi(2) + report.error_floor_mas.powi(2));
    assert!((merged.list.xx - want).abs() < 1e-9 * want);
}

#[test]
fn an_unknown_track_is_refused_with_the_nearest_name() {
    let folder = tempfile::tempdir().unwrap();
    let sample = Sample::new(folder.path());
    let wanted = format!("{}x", sample.solution.tracks[0].name);
    let choice = Choice::Named(vec![wanted.clone()]);
    match handoff::choose(&sample.solution, &choice) {
        Err(HandoffError::NoTrack { name, nearest }) => {
            assert_eq!(name, wanted);
            assert_eq!(nearest.as_ref(), Some(&sample.solution.tracks[0].name));
        }
        other => panic!("{other:?}"),
    }
}

#[test]
fn confusion_noise_agrees_with_its_worked_example() {
    // 4e-5 stars per mas^2 and mag from 2 mag below the star on, fwhm 55 mas: 1.0 mas
    // (own integral 2 pi s^4 int q^2 rho dm, evaluated by hand).
    let var = Confusion::variance(4e-5, 14.0, 16.0, 55.0);
    assert!((var.sqrt() - 1.0).abs() < 0.02, "{}", var.sqrt());
}
