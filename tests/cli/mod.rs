//! The program as a person meets it: exit code, standard output and standard error.
//!
//! Each case is compared with a text file beside this one; `ASTERSKEIN_ACCEPT=1` rewrites them.
//! Folders and times are filtered.

mod linking;

use std::fs;
use std::path::{Path, PathBuf};
use std::process::Command;

use crate::results::sample::Sample;
use crate::results::write;

/// Runs the program in a folder.
fn run(folder: &Path, args: &[&str]) -> (i32, String, String) {
    let out = Command::new(env!("CARGO_BIN_EXE_asterskein"))
        .args(args)
        .current_dir(folder)
        .env("NO_COLOR", "1")
        .output()
        .expect("the program starts");
    let text = |bytes: &[u8]| String::from_utf8(bytes.to_vec()).expect("UTF-8");
    (
        out.status.code().unwrap_or(-1),
        text(&out.stdout),
        text(&out.stderr),
    )
}

/// Compares a run with its file.
fn case(name: &str, folder: &Path, args: &[&str]) {
    let (code, stdout, stderr) = run(folder, args);
    let shown = format!(
        "$ asterskein {}\nexit code {code}\n-- standard output\n{stdout}-- standard error\n{stderr}",
        args.join(" ")
    );
    let shown = filtered(&shown, folder);
    let path = Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("tests/cli")
        .join(format!("{name}.txt"));
    if std::env::var_os("ASTERSKEIN_ACCEPT").is_some() {
        fs::write(&path, &shown).expect("a writable case");
    }
    let expected = fs::read_to_string(&path).unwrap_or_default();
    assert!(
        shown == expected,
        "{} differs (ASTERSKEIN_ACCEPT=1 accepts)\n-- now\n{shown}\n-- expected\n{expected}",
        path.display()
    );
}

fn filtered(text: &str, folder: &Path) -> String {
    let real = folder.canonicalize().expect("a folder");
    text.replace(&real.display().to_string(), "FOLDER")
        .replace(&folder.display().to_string(), "FOLDER")
        .replace(env!("CARGO_PKG_VERSION"), "VERSION")
        .lines()
        .map(|l| {
            if l.starts_with("time ") && l.ends_with(" s") {
                "time  TIME\n".to_owned()
            } else {
                format!("{l}\n")
            }
        })
        .collect()
}

/// The sample campaign, with its made-up result in `run`.
fn sample() -> (tempfile::TempDir, PathBuf) {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    write(&sample, &folder.path().join("run"));
    let path = folder.path().to_owned();
    (folder, path)
}

#[test]
fn wrong_usage() {
    let (_keep, folder) = sample();
    case("no-command", &folder, &["lnik"]);
    case(
        "list-unknown-column",
        &folder,
        &["list", "run", "--columns", "trakc"],
    );
    case(
        "list-unknown-flag",
        &folder,
        &["list", "run", "--flag", "shiny"],
    );
}

#[test]
fn list_lines_up() {
    let (_keep, folder) = sample();
    case("list-tracks", &folder, &["list", "run"]);
    case(
        "list-members-of-one",
        &folder,
        &["list", "run", "members", "--track", "K-east-3"],
    );
    case("list-tangles", &folder, &["list", "run", "tangles"]);
    case(
        "list-flagged",
        &folder,
        &[
            "list",
            "run",
            "--flag",
            "merged",
            "--columns",
            "track,flags",
        ],
    );
    case(
        "list-json",
        &folder,
        &[
            "list",
            "run",
            "epochs",
            "--json",
            "--columns",
            "epoch_name,rms_mas,failed",
        ],
    );
}

#[test]
fn explain_says_why_and_what_to_paste() {
    let (_keep, folder) = sample();
    case("explain-track", &folder, &["explain", "run", "L00001"]);
    case(
        "explain-plain-track",
        &folder,
        &["explain", "run", "L00003"],
    );
    case("explain-member", &folder, &["explain", "run", "two:1"]);
    case("explain-leftover", &folder, &["explain", "run", "two:2"]);
    case("explain-unknown", &folder, &["explain", "run", "L9"]);
    case(
        "explain-json",
        &folder,
        &["explain", "run", "one:9", "--json"],
    );
}

#[test]
fn what_explain_prints_is_a_sound_ruling() {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    write(&sample, &folder.path().join("run"));
    let (code, text, _) = run(folder.path(), &["explain", "run", "two:2"]);
    assert_eq!(code, 0);
    let toml: String = text
        .lines()
        .skip_while(|l| *l != "[[discard]]")
        .map(|l| l.replace("reason = \"\"", "reason = \"on a spike\"") + "\n")
        .map(|l| {
            if l.starts_with("author") {
                String::new()
            } else {
                l
            }
        })
        .collect();
    let path = folder.path().join("rulings.toml");
    fs::write(&path, toml).expect("written");
    let rulings = asterskein::io::rulings::read_rulings(&path, &sample.campaign, &sample.lists)
        .expect("sound");
    assert_eq!(rulings.len(), 1);
    assert_eq!(rulings[0].reason, "on a spike");
}

#[test]
fn check_shows_the_lists_and_every_fault() {
    let (_keep, folder) = sample();
    case("check", &folder, &["check", "campaign.toml"]);
    case(
        "check-quiet",
        &folder,
        &["check", "campaign.toml", "--quiet"],
    );
    case("check-json", &folder, &["check", "campaign.toml", "--json"]);
    fs::write(
        folder.join("e0.csv"),
        "id,x,y,x_err,y_err,mag,sharpness\n7,1,nan,0.5,-1,14,\n7,2,3,0.5,0.5,,\n",
    )
    .expect("written");
    fs::write(folder.join("e1.csv"), "id,x,x_err,y_err\n1,2,3,4\n").expect("written");
    case("check-faults", &folder, &["check", "campaign.toml"]);
}

#[test]
fn results_that_do_not_fit_are_refused() {
    let (_keep, folder) = sample();
    case("list-no-result", &folder, &["list", "nowhere"]);
    let list = folder.join("e1.csv");
    let text = fs::read_to_string(&list).expect("a list");
    fs::write(&list, text.replace("14.1", "14.2")).expect("written");
    case(
        "explain-changed-list",
        &folder,
        &["explain", "run", "L00001"],
    );
}

#[test]
fn completions_and_man_page_name_every_command() {
    let (_keep, folder) = sample();
    let (_, help, _) = run(&folder, &["--help"]);
    let commands: Vec<&str> = help
        .lines()
        .skip_while(|l| *l != "Commands:")
        .skip(1)
        .take_while(|l| !l.is_empty())
        .filter_map(|l| l.split_whitespace().next())
        .filter(|c| *c != "help")
        .collect();
    assert!(commands.len() >= 3);
    let (code, man, _) = run(&folder, &["man"]);
    assert_eq!(code, 0);
    let (code, bash, _) = run(&folder, &["completions", "bash"]);
    assert_eq!(code, 0);
    for command in commands {
        assert!(bash.contains(command), "{command} has no completion");
        let section = format!(".SH COMMAND {}", command.to_uppercase());
        assert!(man.contains(&section), "{command} is not in the man page");
    }
}
