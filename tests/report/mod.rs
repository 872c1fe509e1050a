//! The report: what it holds, how large it gets, what it does with hostile names.
//!
//! How it behaves in a browser is checked by `tests/outside/test_report_browser.py`, on pages that
//! [`write_pages`] leaves where `ASTERSKEIN_REPORT_PAGES` says.

mod made;

use std::io::Read;
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

/// The header that a page carries: base64 (RFC 4648), zlib, a length, JSON.
fn header_of(page: &str) -> serde_json::Value {
    let start = page.find("id=\"run\">").expect("data") + 9;
    let text = &page[start..start + page[start..].find('<').expect("an end")];
    let digit = |c: u8| match c {
        b'A'..=b'Z' => c - b'A',
        b'a'..=b'z' => c - b'a' + 26,
        b'0'..=b'9' => c - b'0' + 52,
        b'+' => 62,
        _ => 63,
    };
    let mut packed = Vec::new();
    for quad in text.trim_end_matches('=').as_bytes().chunks(4) {
        let word = quad
            .iter()
            .fold(0_u32, |w, &c| (w << 6) | u32::from(digit(c)))
            << (6 * (4 - quad.len()));
        packed.extend((0..quad.len() - 1).map(|k| (word >> (16 - 8 * k)) as u8));
    }
    let mut plain = Vec::new();
    flate2::read::ZlibDecoder::new(&packed[..])
        .read_to_end(&mut plain)
        .expect("zlib");
    let length = u32::from_le_bytes(plain[..4].try_into().expect("a length"));
    serde_json::from_slice(&plain[4..4 + length as usize]).expect("JSON")
}

#[test]
fn a_large_field_is_thinned_and_says_so() {
    let m = made(400, 20, 21);
    let budget = Budget {
        detections: 3000,
        tracks: 150,
    };
    let whole = header_of(&page(&m, &Scope::Whole, Budget::default()));
    let thin = header_of(&page(&m, &Scope::Whole, budget));
    assert_eq!(whole["left_out"].as_array().unwrap().len(), 0);
    let words = thin["left_out"].to_string();
    assert!(words.contains("250 further tracks"), "{words}");
    // Counts are those of the run, not of the page.
    assert_eq!(thin["counts"], whole["counts"]);
    assert_eq!(thin["counts"]["tracks"], 400);
    let shown = thin["epochs"].as_array().unwrap().iter();
    let n: u64 = shown.map(|e| e["shown"].as_u64().unwrap()).sum();
    assert!((1500..=3000).contains(&n), "{n} detections");
    // Confused and flagged tracks come first.
    let names = thin["tracks"]["name"].as_array().unwrap();
    assert_eq!(names.len(), 150);
    let confused = m.solution.tracks.iter().filter(|t| t.tangle.is_some());
    for t in confused.take(100) {
        assert!(names.iter().any(|n| n == t.name.as_str()), "{}", t.name);
    }
}

#[test]
fn a_tangle_comes_with_its_neighbours_and_rivals() {
    let m = made(400, 20, 21);
    let wanted = &m.solution.tangles[0];
    let part = header_of(&page(&m, &Scope::Tangle(0), Budget::default()));
    let names = part["tracks"]["name"].as_array().unwrap();
    for &k in &wanted.tracks {
        let name = m.solution.tracks[k].name.as_str();
        assert!(names.iter().any(|n| n == name), "{name}");
    }
    assert!(names.len() < 400);
    let tangle = &part["tangles"][0];
    let n_rivals = m.solution.rivals.iter().filter(|r| r.tangle == 0).count();
    assert_eq!(tangle["rivals"].as_array().unwrap().len(), n_rivals);
    // What the rival's words say is what is drawn.
    assert_eq!(tangle["rivals"][0]["drawn"][0][0], 2, "drops");
}

#[test]
fn names_from_lists_cannot_leave_the_data() {
    let m = made(60, 8, 5);
    assert!(m.solution.tracks.iter().any(|t| t.name == HOSTILE_NAME));
    let page = page(&m, &Scope::Whole, Budget::default());
    assert!(!page.contains("onerror=alert"));
    assert_eq!(header_of(&page)["tracks"]["name"][3], HOSTILE_NAME);
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
