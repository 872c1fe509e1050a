//! Rulings: bound to detections, refused when they name nothing or contradict each other.

use std::fs;

use asterskein::io::rulings::read_rulings;
use asterskein::model::ruling::{Decision, DetectionAt, Ruling};

use super::sample::Sample;

fn read(text: &str) -> Result<Vec<Ruling>, String> {
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    let path = folder.path().join("rulings.toml");
    fs::write(&path, text).expect("written");
    read_rulings(&path, &sample.campaign, &sample.lists).map_err(|faults| {
        faults
            .to_string()
            .replace(&path.display().to_string(), "rulings.toml")
    })
}

fn at(sample: &Sample, epoch: usize, id: &str) -> DetectionAt {
    let ids = &sample.lists[epoch].ids;
    let row = (0..ids.len()).find(|&r| ids.text(r) == id).expect("an id");
    DetectionAt { epoch, row }
}

#[test]
fn all_four_kinds_are_read() {
    let text = r#"
[[together]]
detections = ["one:7", "two : 1"]
reason = "same colour"
author = "A. Observer"

[[apart]]
detections = ["one:9", "two:3"]
reason = "too far"

[[discard]]
detection = "two:2"
reason = "on a spike"

[[name]]
detection = "one:7"
name = "K-east-3"
"#;
    let folder = tempfile::tempdir().expect("a folder");
    let sample = Sample::new(folder.path());
    let rulings = read(text).expect("sound rulings");
    let lines: Vec<usize> = rulings.iter().map(|r| r.line).collect();
    assert_eq!(lines, [2, 7, 11, 15]);
    assert_eq!(
        rulings[0].decision,
        Decision::Together(vec![at(&sample, 0, "7"), at(&sample, 1, "1")])
    );
    assert_eq!(rulings[0].author.as_deref(), Some("A. Observer"));
    assert_eq!(rulings[2].decision, Decision::Discard(at(&sample, 1, "2")));
    assert_eq!(
        rulings[3].decision,
        Decision::Name(at(&sample, 0, "7"), "K-east-3".to_owned())
    );
}

fn refused(text: &str, expected: &str) {
    let message = read(text).expect_err("a fault");
    assert!(
        message.contains(expected),
        "{message}\n-- does not contain --\n{expected}"
    );
}

#[test]
fn what_names_nothing_is_a_fault_with_its_line() {
    let head = "[[discard]]\nreason = \"r\"\n";
    refused(
        &format!("{head}detection = \"tow:1\"\n"),
        "rulings.toml:3:13: unknown epoch `tow`; did you mean `two`?",
    );
    refused(
        &format!("{head}detection = \"two:99\"\n"),
        "rulings.toml:3:13: unknown detection of epoch `two` `99`",
    );
    refused(
        &format!("{head}detection = \"99\"\n"),
        "expected \"epoch name:id\"",
    );
    refused("[[discard]]\ndetection = \"two:1\"\n", "has no `reason`");
    refused("[[discrad]]\n", "did you mean `discard`?");
    refused(
        "[[together]]\ndetections = [\"one:7\"]\nreason = \"r\"\n",
        "two or more detections",
    );
}

#[test]
fn contradictions_name_both_lines() {
    let together = "[[together]]\ndetections = [\"one:7\", \"two:1\"]\nreason = \"r\"\n";
    refused(
        &format!("{together}[[apart]]\ndetections = [\"two:1\", \"one:7\"]\nreason = \"r\"\n"),
        "rulings.toml:4:1: contradicts the ruling at line 1: there the detections are the same star",
    );
    refused(
        &format!("{together}[[discard]]\ndetection = \"two:1\"\nreason = \"r\"\n"),
        "rulings.toml:1:1: contradicts the ruling at line 4",
    );
    refused(
        &format!("{together}[[together]]\ndetections = [\"one:7\", \"two:2\"]\nreason = \"r\"\n"),
        "a star has one detection in an epoch",
    );
    let name =
        |id: &str, name: &str| format!("[[name]]\ndetection = \"{id}\"\nname = \"{name}\"\n");
    refused(
        &format!("{together}{}{}", name("one:7", "A"), name("two:1", "B")),
        "rulings.toml:7:1: contradicts the ruling at line 4: one star cannot have two names",
    );
    refused(
        &format!("{}{}", name("one:7", "A"), name("one:9", "A")),
        "two stars cannot have one name",
    );
}
