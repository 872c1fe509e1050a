//! `link` from end to end on a small field that is made here: straight stars, no merges.

use std::fmt::Write;
use std::fs;
use std::path::Path;

use super::run;

const EPOCHS: usize = 7;

/// Numbers in 0..1 from a counter (a linear congruential generator; Knuth's MMIX constants,
/// quoted from memory).
struct Dice(u64);

impl Dice {
    fn roll(&mut self) -> f64 {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 11) as f64 / (1_u64 << 53) as f64
    }
    /// Near enough to a normal deviate for errors.
    fn error(&mut self) -> f64 {
        (0..12).map(|_| self.roll()).sum::<f64>() - 6.0
    }
}

/// Writes a campaign of so many epochs; `turned` lists have their rows in reverse.
fn campaign(folder: &Path, n_epochs: usize, turned: bool) {
    fs::create_dir_all(folder).expect("a folder");
    let mut toml = String::from(
        "[field]\nname = \"Lantern core\"\nreference_epoch = 2003.0\n\n[stars]\nspeed_mas_yr = 6.0\n\n\
         [instrument.first]\nfwhm_mas = 55.0\nlimit_mag = 17.0\n",
    );
    let mut dice = Dice(7);
    let stars: Vec<[f64; 5]> = (0..49)
        .map(|k| {
            let (i, j) = ((k % 7) as f64, (k / 7) as f64);
            [
                300.0 * (i - 3.0) + 60.0 * dice.roll(),
                300.0 * (j - 3.0) + 60.0 * dice.roll(),
                8.0 * (dice.roll() - 0.5),
                8.0 * (dice.roll() - 0.5),
                12.0 + 4.0 * dice.roll(),
            ]
        })
        .collect();
    for e in 0..n_epochs {
        let time = 2000.0 + e as f64;
        let _ = write!(
            toml,
            "\n[[epoch]]\nname = \"y{e}\"\ntime = {time}\nfile = \"e{e}.csv\"\ninstrument = \"first\"\n"
        );
        // Each list has its own stream, so that a further epoch changes no earlier list.
        let mut dice = Dice(100 + e as u64);
        let mut rows: Vec<String> = stars
            .iter()
            .enumerate()
            .map(|(k, s)| {
                let dt = time - 2003.0;
                format!(
                    "{},{:.4},{:.4},0.5,0.5,{:.3},0.03",
                    k + 1,
                    s[0] + s[2] * dt + 0.5 * dice.error(),
                    s[1] + s[3] * dt + 0.5 * dice.error(),
                    s[4] + 0.03 * dice.error()
                )
            })
            .collect();
        if turned {
            rows.reverse();
        }
        let text = format!("id,x,y,x_err,y_err,mag,mag_err\n{}\n", rows.join("\n"));
        fs::write(folder.join(format!("e{e}.csv")), text).expect("written");
    }
    fs::write(folder.join("field.toml"), toml).expect("written");
}

fn link(folder: &Path, args: &[&str]) -> serde_json::Value {
    let all = [&["link", "field.toml", "--json", "--quiet"], args].concat();
    let (code, stdout, stderr) = run(folder, &all);
    assert_eq!(code, 0, "{stderr}");
    serde_json::from_str(&stdout).expect("a summary as JSON")
}

fn tables(folder: &Path) -> Vec<(String, Vec<u8>)> {
    let mut all: Vec<(String, Vec<u8>)> = fs::read_dir(folder)
        .expect("a result")
        .map(|e| e.expect("an entry").path())
        .filter(|p| p.extension().is_some_and(|x| x == "ecsv"))
        .map(|p| (p.display().to_string(), fs::read(&p).expect("a table")))
        .map(|(p, b)| (p.rsplit('/').next().unwrap_or("").to_owned(), b))
        .collect();
    all.sort();
    all
}

fn names(folder: &Path) -> Vec<String> {
    let table = asterskein::io::read_run::read_table(folder, "tracks").expect("tracks");
    table.texts("track").expect("names")
}

#[test]
fn the_same_bytes_for_any_number_of_threads_and_order_of_rows() {
    let dir = tempfile::tempdir().expect("a folder");
    let (a, b) = (dir.path().join("a"), dir.path().join("b"));
    campaign(&a, EPOCHS, false);
    campaign(&b, EPOCHS, true);
    let found = link(&a, &["--out", "one", "--threads", "1"]);
    link(&a, &["--out", "two", "--threads", "2"]);
    link(&b, &["--out", "one"]);
    assert_eq!(found["tracks"], 49);
    assert_eq!(found["leftovers"], 0);
    let one = tables(&a.join("one"));
    assert!(one.len() >= 6);
    assert!(one == tables(&a.join("two")), "threads change the tables");
    assert!(
        one == tables(&b.join("one")),
        "the order of rows changes the tables"
    );
}

#[test]
fn names_last_when_an_epoch_is_added_and_when_nothing_changes() {
    let dir = tempfile::tempdir().expect("a folder");
    campaign(dir.path(), EPOCHS, false);
    link(dir.path(), &["--out", "run1"]);
    campaign(dir.path(), EPOCHS + 1, false);
    let more = link(dir.path(), &["--out", "run2", "--names-from", "run1"]);
    assert_eq!(more["names"]["kept"], 49);
    assert_eq!(more["names"]["lost"], 0);
    let again = link(dir.path(), &["--out", "run3", "--names-from", "run2"]);
    assert_eq!(again["names"]["kept"], 49);
    let (mut before, mut after) = (
        names(&dir.path().join("run1")),
        names(&dir.path().join("run3")),
    );
    assert_eq!(names(&dir.path().join("run2")), after);
    before.sort();
    after.sort();
    assert_eq!(before, after);
    assert!(dir.path().join("run2/renamed.ecsv").exists());
}

#[test]
fn a_ruled_name_is_borne_by_its_track() {
    let dir = tempfile::tempdir().expect("a folder");
    campaign(dir.path(), EPOCHS, false);
    let ruling = "[[name]]\ndetection = \"y3:12\"\nname = \"K-east-3\"\n";
    fs::write(dir.path().join("r.toml"), ruling).expect("written");
    link(dir.path(), &["--out", "run", "--rulings", "r.toml"]);
    let (code, text, _) = run(dir.path(), &["explain", "run", "y5:12"]);
    assert_eq!(code, 0);
    assert!(text.contains("K-east-3 holds it"), "{text}");
}

#[test]
fn rulings_are_followed_or_the_run_fails() {
    let dir = tempfile::tempdir().expect("a folder");
    campaign(dir.path(), EPOCHS, false);
    let rule = |text: &str| fs::write(dir.path().join("r.toml"), text).expect("written");
    rule(
        "[[discard]]\ndetection = \"y2:12\"\nreason = \"a spike\"\n\
         [[together]]\ndetections = [\"y1:12\", \"y4:12\"]\nreason = \"clear\"\n\
         [[apart]]\ndetections = [\"y1:12\", \"y4:13\"]\nreason = \"clear\"\n",
    );
    let found = link(dir.path(), &["--out", "run", "--rulings", "r.toml"]);
    assert_eq!(found["leftovers"], 1);
    assert_eq!(found["memberships"], 49 * EPOCHS - 1);
    let (_, text, _) = run(dir.path(), &["explain", "run", "y2:12"]);
    assert!(
        text.contains("in no track") && text.contains("ruled:"),
        "{text}"
    );
    let (_, text, _) = run(
        dir.path(),
        &["list", "run", "--flag", "ruled", "--columns", "track"],
    );
    assert_eq!(text.lines().count(), 3, "{text}");
    // What contradicts the data so plainly is said, and nothing is written.
    rule("[[together]]\ndetections = [\"y1:12\", \"y4:13\"]\nreason = \"no\"\n");
    let args = ["link", "field.toml", "--out", "two", "--rulings", "r.toml"];
    let (code, _, stderr) = run(dir.path(), &args);
    assert_eq!(code, 1);
    assert!(stderr.contains("`together` at line 1"), "{stderr}");
    assert!(!dir.path().join("two").exists());
}

#[test]
fn outputs_are_whole_or_absent() {
    let dir = tempfile::tempdir().expect("a folder");
    campaign(dir.path(), EPOCHS, false);
    // A fault in a list: nothing appears.
    let list = dir.path().join("e2.csv");
    let sound = fs::read_to_string(&list).expect("a list");
    fs::write(&list, sound.replacen(",0.5,", ",-0.5,", 1)).expect("written");
    let (code, _, stderr) = run(dir.path(), &["link", "field.toml", "--out", "run"]);
    assert_eq!(code, 1);
    assert!(stderr.contains("e2.csv:2"), "{stderr}");
    let left: Vec<String> = fs::read_dir(dir.path())
        .expect("a folder")
        .map(|e| {
            e.expect("an entry")
                .file_name()
                .to_string_lossy()
                .into_owned()
        })
        .filter(|n| !n.ends_with(".csv") && n != "field.toml")
        .collect();
    assert!(left.is_empty(), "{left:?}");
    fs::write(&list, sound).expect("written");

    // A directory of someone else's is never replaced.
    fs::create_dir(dir.path().join("run")).expect("made");
    fs::write(dir.path().join("run/thesis.tex"), "").expect("written");
    for args in [&["--out", "run"][..], &["--out", "run", "--replace"]] {
        let all = [&["link", "field.toml"], args].concat();
        let (code, _, _) = run(dir.path(), &all);
        assert_eq!(code, 1);
    }
    assert!(dir.path().join("run/thesis.tex").exists());

    // Every format holds every table.
    link(dir.path(), &["--out", "fits", "--format", "fits"]);
    link(
        dir.path(),
        &["--out", "fits", "--replace", "--format", "votable"],
    );
    for name in [
        "tracks.ecsv",
        "tracks.vot",
        "members.vot",
        "run.json",
        "report.html",
    ] {
        assert!(dir.path().join("fits").join(name).exists(), "{name}");
    }
    assert!(!dir.path().join("fits/tracks.fits").exists());
}

#[cfg(unix)]
#[test]
fn an_interrupt_leaves_nothing_behind() {
    use std::process::{Command, Stdio};
    use std::time::{Duration, Instant};

    let dir = tempfile::tempdir().expect("a folder");
    campaign(dir.path(), EPOCHS, false);
    let mut child = Command::new(env!("CARGO_BIN_EXE_asterskein"))
        .args(["link", "field.toml", "--out", "run", "--quiet"])
        .current_dir(dir.path())
        .stderr(Stdio::null())
        .spawn()
        .expect("the program starts");
    let hidden = || {
        fs::read_dir(dir.path())
            .expect("a folder")
            .map(|e| {
                e.expect("an entry")
                    .file_name()
                    .to_string_lossy()
                    .into_owned()
            })
            .filter(|n| n.starts_with('.') || n == "run")
            .collect::<Vec<_>>()
    };
    let start = Instant::now();
    while hidden().is_empty() && start.elapsed() < Duration::from_secs(60) {
        std::thread::sleep(Duration::from_millis(1));
    }
    let sent = Command::new("kill")
        .args(["-INT", &child.id().to_string()])
        .status()
        .expect("kill runs");
    assert!(sent.success());
    let status = child.wait().expect("the program ends");
    // Either it was stopped, or it had already finished: then the result is whole.
    if status.success() {
        assert_eq!(hidden(), ["run"]);
        assert!(dir.path().join("run/run.json").exists());
    } else {
        assert_eq!(hidden(), Vec::<String>::new());
    }
}
