//! The report: what it holds, how large it gets, what it does with hostile names.
//!
//! How it behaves in a browser is checked by `tests/outside/test_report_browser.py`, on pages that
//! [`write_pages`] leaves where `ASTERSKEIN_REPORT_PAGES` says.

mod made;

use std::path::Path;
use std::time::Instant;

use asterskein::io::ecsv_write;
use asterskein::io::result_tables::{self, RunView};
use asterskein::output::report::{
    Budget, ExtraTable, FigureStyle, ReportInput, Scope, field_map, html, track_plot,
};
use made::{HOSTILE_NAME, Made, made};

fn view(m: &Made) -> RunView<'_> {
    RunView {
        campaign: &m.campaign,
        lists: &m.lists,
        epochs: &m.epochs,
        solution: &m.solution,
    }
}

fn input<'a>(m: &'a Made, extras: &'a [ExtraTable]) -> ReportInput<'a> {
    ReportInput::of(view(m), extras)
}

fn page(m: &Made, scope: &Scope, budget: Budget) -> String {
    html(&input(m, &[]), scope, budget).expect("a page")
}

#[test]
fn names_from_lists_cannot_leave_the_data() {
    let m = made(60, 8, 5);
    assert!(m.solution.tracks.iter().any(|t| t.name == HOSTILE_NAME));
    let page = page(&m, &Scope::Whole, Budget::default());
    assert!(!page.contains("onerror=alert"));
    assert_eq!(page.matches("</script>").count(), 2);
    assert!(!page.contains("http://") || !page.contains("src=\"http"));
    assert!(!page.contains("{{"));
}

#[test]
fn field_name_is_escaped() {
    let mut m = made(20, 4, 5);
    m.campaign.name = "<b>core</b>".to_owned();
    let page = page(&m, &Scope::Whole, Budget::default());
    assert!(!page.contains("<b>core") && page.contains("&lt;b&gt;core"));
}

#[test]
fn the_same_result_gives_the_same_page() {
    let (a, b) = (made(200, 10, 9), made(200, 10, 9));
    let whole = |m: &Made| page(m, &Scope::Whole, Budget::default());
    assert_eq!(whole(&a), whole(&b));
}

#[test]
fn a_part_is_smaller_than_the_whole() {
    let m = made(400, 12, 3);
    let whole = page(&m, &Scope::Whole, Budget::default()).len();
    let tangle = page(&m, &Scope::Tangle(0), Budget::default()).len();
    let region = page(
        &m,
        &Scope::Region([-100.0, -100.0, 100.0, 100.0]),
        Budget::default(),
    )
    .len();
    assert!(
        tangle < whole && region < whole,
        "{tangle} {region} {whole}"
    );
    // A tangle or a place that is not there gives a page that says so, not a fault.
    page(&m, &Scope::Tangle(10_000), Budget::default());
    page(&m, &Scope::Region([1e6, 1e6, 2e6, 2e6]), Budget::default());
}

#[test]
fn figures_are_written_for_every_kind_of_motion() {
    let m = made(120, 12, 3);
    let whole = input(&m, &[]);
    let map = field_map(&whole, &Scope::Whole, FigureStyle::default());
    assert!(map.starts_with("<svg") && map.contains("Lantern core"));
    for track in [0, 1, 2, 3] {
        let plot = track_plot(&whole, track, FigureStyle::default()).expect("a plot");
        assert!(!plot.contains("NaN") && !plot.contains("inf"));
        assert!(!plot.contains("<img"));
    }
    assert!(track_plot(&whole, 10_000, FigureStyle::default()).is_none());
}

/// Pages and tables for a look in a browser, and the size and time of a large one.
#[test]
fn write_pages() {
    let Ok(folder) = std::env::var("ASTERSKEIN_REPORT_PAGES") else {
        return;
    };
    let folder = Path::new(&folder);
    std::fs::create_dir_all(folder).unwrap();
    let m = made(600, 40, 11);
    for table in result_tables::all(view(&m)) {
        let mut out = Vec::new();
        ecsv_write::write(&table, &mut out).unwrap();
        std::fs::write(folder.join(format!("{}.ecsv", table.name)), out).unwrap();
    }
    let extras = audit_tables();
    let small = html(&input(&m, &extras), &Scope::Whole, Budget::default()).unwrap();
    std::fs::write(folder.join("small.html"), small).unwrap();
    let tangle = page(&m, &Scope::Tangle(0), Budget::default());
    std::fs::write(folder.join("tangle.html"), tangle).unwrap();
    let map = field_map(&input(&m, &[]), &Scope::Whole, FigureStyle::default());
    std::fs::write(folder.join("field.svg"), map).unwrap();
    let plot = track_plot(&input(&m, &[]), 2, FigureStyle::default()).unwrap();
    std::fs::write(folder.join("track.svg"), plot).unwrap();
    let mut sizes = String::new();
    for (name, tracks, epochs) in [("large", 5000, 60), ("wide", 30_000, 20)] {
        let m = made(tracks, epochs, 12);
        let clock = Instant::now();
        let page = page(&m, &Scope::Whole, Budget::default());
        sizes.push_str(&format!(
            "{name}: {tracks} tracks x {epochs} epochs: {:.2} MB, made in {:.2} s\n",
            page.len() as f64 / 1e6,
            clock.elapsed().as_secs_f64()
        ));
        assert!(page.len() < 15_000_000, "{sizes}");
        std::fs::write(folder.join(format!("{name}.html")), page).unwrap();
    }
    std::fs::write(folder.join("sizes.txt"), sizes).unwrap();
}

fn audit_tables() -> Vec<ExtraTable> {
    let table = |name: &str, columns: &[&str], rows: &[&[&str]]| ExtraTable {
        name: name.to_owned(),
        columns: columns.iter().map(ToString::to_string).collect(),
        rows: rows
            .iter()
            .map(|r| r.iter().map(ToString::to_string).collect())
            .collect(),
    };
    vec![
        table(
            "verdicts",
            &[
                "claim",
                "verdict",
                "p_real",
                "ln_odds",
                "chance_p",
                "n_positions",
                "n_explained",
                "best_rival",
                "needs",
            ],
            &[
                &[
                    "C1", "stands", "0.98", "3.9", "0.004", "9", "1", "L00007", "nothing",
                ],
                &[
                    "C2",
                    "strung_together",
                    "0.02",
                    "-4.1",
                    "0.3",
                    "7",
                    "6",
                    "L00002;L00009",
                    "",
                ],
            ],
        ),
        table(
            "evidence",
            &[
                "claim",
                "epoch",
                "x_mas",
                "y_mas",
                "nats_real",
                "nats_rival",
            ],
            &[
                &["C1", "0", "10.0", "12.0", "1.2", "-0.4"],
                &["C1", "1", "11.0", "12.5", "0.8", "-0.1"],
                &["C2", "0", "40.0", "-9.0", "-2.0", "0.7"],
            ],
        ),
        table(
            "completeness",
            &[
                "by",
                "low",
                "high",
                "n",
                "n_found",
                "completeness",
                "completeness_err",
            ],
            &[
                &["mag", "12", "14", "40", "39", "0.975", "0.02"],
                &["mag", "14", "16", "40", "33", "0.825", "0.06"],
                &["radius_mas", "0", "200", "30", "21", "0.70", "0.08"],
            ],
        ),
    ]
}
