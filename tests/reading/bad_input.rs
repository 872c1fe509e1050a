//! Every `fixtures/bad-*` holds a campaign that cannot be read and `expected.txt`, the message a
//! person gets. `UPDATE_EXPECTED=1` rewrites the messages; read the difference before keeping it.

use asterskein::io::{campaign::read_campaign, lists::read_lists};
use std::fs;

#[test]
fn every_bad_campaign_gets_its_message() {
    let folder = super::fixture("");
    let mut names: Vec<String> = fs::read_dir(&folder)
        .unwrap()
        .filter_map(|e| e.unwrap().file_name().into_string().ok())
        .filter(|n| n.starts_with("bad-"))
        .collect();
    names.sort();
    assert!(names.len() >= 20, "fixtures are missing");
    let mut wrong = Vec::new();
    for name in names {
        let case = folder.join(&name);
        let message = match read_campaign(&case.join("campaign.toml")) {
            Err(faults) => faults.to_string(),
            Ok((campaign, _)) => match read_lists(&campaign) {
                Err(faults) => faults.to_string(),
                Ok(_) => "no fault found".to_owned(),
            },
        };
        let message = message.replace(&format!("{}/", case.display()), "") + "\n";
        let expected_file = case.join("expected.txt");
        if std::env::var_os("UPDATE_EXPECTED").is_some() {
            fs::write(&expected_file, &message).unwrap();
        }
        let expected = fs::read_to_string(&expected_file).unwrap_or_default();
        if message != expected {
            wrong.push(format!("{name}: got\n{message}expected\n{expected}"));
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}
