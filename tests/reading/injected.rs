//! Files that fail in ways a disk shows rarely, or never to an administrator.

use std::collections::BTreeMap;
use std::io;
use std::path::Path;

use asterskein::io::campaign::read_campaign_from;
use asterskein::io::files::Files;
use asterskein::io::lists::read_lists_from;

/// Files in memory; `None` cannot be opened.
struct Memory(BTreeMap<&'static str, Option<Vec<u8>>>);

impl Files for Memory {
    fn read(&self, path: &Path) -> io::Result<Vec<u8>> {
        match self.0.get(path.to_str().unwrap()) {
            Some(Some(bytes)) => Ok(bytes.clone()),
            Some(None) => Err(io::Error::from(io::ErrorKind::PermissionDenied)),
            None => Err(io::Error::from(io::ErrorKind::NotFound)),
        }
    }
    fn is_file(&self, path: &Path) -> bool {
        self.0.contains_key(path.to_str().unwrap())
    }
    fn names_beside(&self, _path: &Path) -> Vec<String> {
        self.0.keys().map(|&k| k.to_owned()).collect()
    }
}

const CAMPAIGN: &str = r#"
[field]
name = "Lantern core"
reference_epoch = 2008.0
[stars]
speed_mas_yr = 6.0
[instrument.first]
fwhm_mas = 60.0
[[epoch]]
time = 1996.35
file = "a.csv"
[[epoch]]
time = 1999.5
file = "b.csv"
"#;
const LIST: &str = "x,y,x_err,y_err\n1,2,1,1\n3,4,1,1\n";

fn memory(a: Option<Vec<u8>>) -> Memory {
    Memory(BTreeMap::from([
        ("campaign.toml", Some(CAMPAIGN.into())),
        ("a.csv", a),
        ("b.csv", Some(LIST.into())),
    ]))
}

#[test]
fn an_unreadable_list_is_named_with_its_reason() {
    let files = memory(None);
    let (campaign, _) = read_campaign_from(&files, Path::new("campaign.toml")).unwrap();
    let faults = read_lists_from(&files, &campaign).unwrap_err();
    assert_eq!(
        faults.to_string(),
        "a.csv: cannot be read: permission denied"
    );
}

#[test]
fn a_list_that_vanished_is_named_with_its_neighbour() {
    let mut files = memory(None);
    let (campaign, _) = read_campaign_from(&files, Path::new("campaign.toml")).unwrap();
    files.0.remove("a.csv");
    let faults = read_lists_from(&files, &campaign).unwrap_err();
    assert_eq!(
        faults.to_string(),
        "a.csv: no such file; did you mean `b.csv`?"
    );
}

#[test]
fn a_missing_campaign_file_is_a_fault() {
    let faults = read_campaign_from(&memory(None), Path::new("campain.toml")).unwrap_err();
    assert_eq!(
        faults.to_string(),
        "campain.toml: no such file; did you mean `campaign.toml`?"
    );
}

#[test]
fn damaged_gzip_is_a_fault() {
    let files = memory(Some(vec![0x1f, 0x8b, 8, 0, 0, 0, 0, 0, 0, 3, 1, 2, 3]));
    let (campaign, _) = read_campaign_from(&files, Path::new("campaign.toml")).unwrap();
    let faults = read_lists_from(&files, &campaign).unwrap_err();
    assert!(
        faults.to_string().starts_with("a.csv: malformed gzip"),
        "{faults}"
    );
}
