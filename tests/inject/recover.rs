//! `recover` from end to end on a small field: what is counted, and that it repeats.

use std::fs;

use asterskein::io::ecsv_read;

use crate::audit::{program, write_and_link};

#[test]
fn made_up_stars_are_counted_and_the_run_repeats() {
    let keep = tempfile::tempdir().expect("a folder");
    let folder = keep.path();
    write_and_link(folder);
    let recover = |out: &str, more: &[&str]| {
        let args = ["recover", "run", "--stars", "10", "--quiet", "--out", out];
        let (code, said) = program(folder, &[&args[..], more].concat());
        assert_eq!(code, 0, "{said}");
        let read = |name: &str| fs::read(folder.join(out).join(name)).expect("a table");
        (read("injected.ecsv"), read("completeness.ecsv"))
    };
    let first = recover("one", &[]);
    assert_eq!(first, recover("two", &["--threads", "1"]));
    assert_ne!(first.0, recover("three", &["--seed", "2"]).0);

    let stars = ecsv_read::read(&first.0).expect("ECSV");
    assert_eq!(stars.n_rows(), 10);
    let outcomes = stars.texts("outcome").expect("outcomes");
    let known = ["whole", "found", "lost", "unseen"];
    assert!(outcomes.iter().all(|o| known.contains(&o.as_str())));
    // Sixteen stars in three square arcseconds hide hardly anybody: of those bright enough to be
    // seen in most of the 24 lists, most are found.
    let present = stars.ints("n_present").expect("counts");
    let (mut seen, mut found) = (0, 0);
    for (outcome, n) in outcomes.iter().zip(&present) {
        if n.is_some_and(|n| n >= 12) {
            seen += 1;
            found += usize::from(matches!(outcome.as_str(), "whole" | "found"));
        }
    }
    assert!(2 * found >= seen, "{found} of {seen}");
}
