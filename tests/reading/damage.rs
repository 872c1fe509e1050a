//! Damaged files end in a fault or in a list, never in a panic.

use std::collections::BTreeMap;
use std::io;
use std::path::{Path, PathBuf};

use asterskein::io::campaign::read_campaign_from;
use asterskein::io::files::Files;
use asterskein::io::lists::read_lists_from;

struct Memory(BTreeMap<PathBuf, Vec<u8>>);

impl Files for Memory {
    fn read(&self, path: &Path) -> io::Result<Vec<u8>> {
        let bytes = self.0.get(path).cloned();
        bytes.ok_or_else(|| io::Error::from(io::ErrorKind::NotFound))
    }
    fn is_file(&self, path: &Path) -> bool {
        self.0.contains_key(path)
    }
    fn names_beside(&self, _path: &Path) -> Vec<String> {
        Vec::new()
    }
}

const CAMPAIGN: &str = "[field]\nname = \"Lantern core\"\nreference_epoch = 2008.0\n\
    [stars]\nspeed_mas_yr = 6.0\n[instrument.first]\nfwhm_mas = 60.0\nunit = \"mas\"\n\
    [[epoch]]\ntime = 2000.5\nfile = \"list\"\n";

/// Small repeatable random numbers (a linear congruential generator, constants of Knuth's MMIX).
struct Dice(u64);

impl Dice {
    fn below(&mut self, n: usize) -> usize {
        self.0 = self
            .0
            .wrapping_mul(6_364_136_223_846_793_005)
            .wrapping_add(1_442_695_040_888_963_407);
        (self.0 >> 33) as usize % n.max(1)
    }
}

const MARKS: &[u8] = b"0123456789-.,eE\n\"<>&;*#[]= ";

/// A few bytes changed, removed or doubled, or the end cut off.
fn damaged(good: &[u8], dice: &mut Dice) -> Vec<u8> {
    let mut bytes = good.to_vec();
    for _ in 0..=dice.below(4) {
        let at = dice.below(bytes.len());
        match dice.below(6) {
            0 => bytes.truncate(at),
            1 => {
                let to = (at + dice.below(40)).min(bytes.len());
                bytes.drain(at..to);
            }
            2 => {
                let to = (at + dice.below(40)).min(bytes.len());
                let again = bytes[at..to].to_vec();
                bytes.splice(at..at, again);
            }
            3 if !bytes.is_empty() => bytes[at] = dice.below(256) as u8,
            _ if !bytes.is_empty() => bytes[at] = MARKS[dice.below(MARKS.len())],
            _ => {}
        }
    }
    bytes
}

fn read(campaign: Vec<u8>, list: Vec<u8>) -> bool {
    let files = Memory(BTreeMap::from([
        (PathBuf::from("campaign.toml"), campaign),
        (PathBuf::from("list"), list),
    ]));
    let Ok((campaign, _)) = read_campaign_from(&files, Path::new("campaign.toml")) else {
        return false;
    };
    match read_lists_from(&files, &campaign) {
        Ok((lists, _)) => {
            assert!(lists[0].x.iter().chain(&lists[0].y).all(|v| v.is_finite()));
            true
        }
        Err(faults) => {
            assert!(!faults.to_string().is_empty());
            false
        }
    }
}

#[test]
fn damaged_lists_of_every_format() {
    let mut names = vec![
        "list.csv",
        "list.ecsv",
        "list.fits",
        "tabledata.vot",
        "binary.vot",
        "binary2.vot",
    ];
    if cfg!(feature = "parquet") {
        names.push("list.parquet");
    }
    for name in names {
        let good = std::fs::read(super::fixture("formats").join(name)).unwrap();
        assert!(read(CAMPAIGN.into(), good.clone()), "{name}");
        let n_refused = (0..300)
            .filter(|&seed| {
                let bytes = damaged(&good, &mut Dice(seed));
                !read(CAMPAIGN.into(), bytes)
            })
            .count();
        assert!(
            n_refused > 50,
            "{name}: damage goes unnoticed ({n_refused})"
        );
    }
}

#[test]
fn damaged_campaigns() {
    let list = std::fs::read(super::fixture("formats").join("list.csv")).unwrap();
    for seed in 0..500 {
        read(damaged(CAMPAIGN.as_bytes(), &mut Dice(seed)), list.clone());
    }
}
