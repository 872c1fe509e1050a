//! The same list in every format, written by astropy 8.0.2 (`tests/outside/make_list_formats.py`):
//! units converted, masked values not measured, every value equal to the plain CSV's.

use std::fs;

use asterskein::io::{campaign::read_campaign, lists::read_lists};

const CAMPAIGN: &str = "[field]\nname = \"Lantern core\"\nreference_epoch = 2008.0\n\
    [stars]\nspeed_mas_yr = 6.0\n[instrument.first]\nfwhm_mas = 60.0\nunit = \"mas\"\n";

#[test]
fn every_format_gives_the_same_list() {
    let formats = super::fixture("formats");
    let mut names = vec![
        "list.csv",
        "list.ecsv",
        "comma.ecsv",
        "list.fits",
        "tabledata.vot",
        "binary.vot",
        "binary2.vot",
    ];
    if cfg!(feature = "parquet") {
        names.push("list.parquet");
    }
    let folder = tempfile::tempdir().unwrap();
    let mut text = CAMPAIGN.to_owned();
    for (k, name) in names.iter().enumerate() {
        // The kind is told by content, whatever the suffix says.
        let copy = format!("{k}.dat");
        fs::copy(formats.join(name), folder.path().join(&copy)).unwrap();
        text.push_str(&format!(
            "[[epoch]]\ntime = {}.5\nfile = \"{copy}\"\n",
            2000 + k
        ));
    }
    fs::write(folder.path().join("campaign.toml"), text).unwrap();
    let (campaign, _) = read_campaign(&folder.path().join("campaign.toml")).unwrap();
    let (lists, notes) = read_lists(&campaign).unwrap_or_else(|f| panic!("{f}"));
    assert_eq!(notes, []);
    let plain = &lists[0];
    assert_eq!(
        (plain.len(), plain.x[0], plain.mag[0].is_nan()),
        (7, -1750.0, true)
    );
    assert_eq!(plain.rv_km_s.iter().filter(|v| v.is_nan()).count(), 3);
    for (list, name) in lists.iter().zip(&names) {
        assert_eq!(format!("{list:?}"), format!("{plain:?}"), "{name}");
    }
}

const ONE_TABLE: &str = "[lists]\nfile = \"all.csv\"\nepoch_column = \"night\"\n\
    [field]\nname = \"Lantern core\"\nreference_epoch = 2008.0\n\
    [stars]\nspeed_mas_yr = 6.0\n[instrument.first]\nfwhm_mas = 60.0\n\
    [[epoch]]\ntime = 2003.28\nkey = \"2003-04-12\"\n\
    [[epoch]]\ntime = 2003.36\nkey = 7\n";

fn one_table(rows: &str) -> Result<(Vec<asterskein::model::detection::RawList>, String), String> {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("campaign.toml"), ONE_TABLE).unwrap();
    fs::write(folder.path().join("all.csv"), rows).unwrap();
    let (campaign, _) = read_campaign(&folder.path().join("campaign.toml")).unwrap();
    match read_lists(&campaign) {
        Ok((lists, notes)) => Ok((
            lists,
            notes
                .into_iter()
                .map(|n| n.text)
                .collect::<Vec<_>>()
                .join("\n"),
        )),
        Err(f) => {
            let place = format!("{}/", folder.path().display());
            Err(f.to_string().replace(&place, ""))
        }
    }
}

#[test]
fn one_table_holds_all_epochs() {
    let (lists, notes) = one_table(
        "night,id,x,y,x_err,y_err\n2003-04-12,1,5,6,1,1\n7.0,1,1,2,1,1\n2003-04-12,2,3,4,1,1\n\
         9,1,1,2,1,1\n7,2,0,2,1,1\n",
    )
    .unwrap();
    assert_eq!(lists[0].x, [3.0, 5.0]);
    assert_eq!(lists[0].file_row, [3, 1]);
    assert_eq!(lists[1].x, [0.0, 1.0]);
    assert!(
        notes.contains("belong to no epoch of the campaign: `9` (1 rows)"),
        "{notes}"
    );
}

#[test]
fn faults_in_one_table_name_the_line_of_the_file() {
    let message =
        one_table("night,id,x,y,x_err,y_err\n7,1,5,6,1,1\n2003-04-12,1,1,2,0,1\n7,1,5,7,1,1\n")
            .unwrap_err();
    assert_eq!(
        message,
        "all.csv:3, column `x_err`: found `0`, expected an error above 0\n\
         all.csv:4, column `id`: id `1` is given twice (first in line 2); expected every id once in a list"
    );
    let message = one_table("night,x,y,x_err,y_err\n7,5,6,1,1\n").unwrap_err();
    assert_eq!(
        message,
        "all.csv, column `night`: found `no row with `2003-04-12``, expected at least one detection for every epoch of the campaign"
    );
    let message = one_table("nights,x,y,x_err,y_err\n7,5,6,1,1\n").unwrap_err();
    assert_eq!(
        message,
        "all.csv:1: no column `night`; found nights, x, y, x_err, y_err; did you mean `nights`?"
    );
}
