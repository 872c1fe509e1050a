//! What a list may look like and still be read.

use std::fs;
use std::io::Write;

use asterskein::io::{campaign::read_campaign, lists::read_lists};
use asterskein::model::campaign::Campaign;
use asterskein::model::detection::{Ids, RawList};

const HEAD: &str = "[field]\nname = \"Lantern core\"\nreference_epoch = 2008.0\n\
    origin = { ra_deg = 197.15, dec_deg = -41.02 }\n[stars]\nspeed_mas_yr = 6.0\n";

/// Reads one list with the given instrument keys.
fn read_one(instrument: &str, list: &[u8]) -> (Campaign, RawList) {
    let folder = tempfile::tempdir().unwrap();
    let text = format!(
        "{HEAD}[instrument.first]\nfwhm_mas = 60.0\n{instrument}\n\
         [[epoch]]\ntime = 2000.0\nfile = \"list.dat\"\n"
    );
    fs::write(folder.path().join("campaign.toml"), text).unwrap();
    fs::write(folder.path().join("list.dat"), list).unwrap();
    let (campaign, _) = read_campaign(&folder.path().join("campaign.toml")).unwrap();
    let (mut lists, _) = read_lists(&campaign).unwrap_or_else(|f| panic!("{f}"));
    (campaign, lists.remove(0))
}

const PLAIN: &str = "id,x,y,x_err,y_err,mag,mag_err\nb,3,4,1,2,15,0.1\na,1,2,1,2,,\n";

#[test]
fn rows_come_in_canonical_order_whatever_the_file_says() {
    let (_, list) = read_one("", PLAIN.as_bytes());
    assert_eq!(list.x, [1.0, 3.0]);
    assert_eq!(list.ids, Ids::Text(vec!["a".into(), "b".into()]));
    assert_eq!(list.file_row, [2, 1]);
    assert!(list.mag[0].is_nan() && list.mag_err[0].is_nan());
    assert_eq!(list.err[0].unwrap().yy, 4.0);
}

#[test]
fn byte_order_mark_and_carriage_returns_change_nothing() {
    let (_, plain) = read_one("", PLAIN.as_bytes());
    let dos = format!("\u{feff}{}", PLAIN.replace('\n', "\r\n"));
    let (_, list) = read_one("", dos.as_bytes());
    assert_eq!(format!("{list:?}"), format!("{plain:?}"));
}

#[test]
fn quotes_blank_lines_and_comments_change_nothing() {
    let (_, plain) = read_one("", PLAIN.as_bytes());
    let fussy = PLAIN.replace("\nb,", "\n\n# second night\n\"b\",");
    let (_, list) = read_one("", fussy.as_bytes());
    assert_eq!(format!("{list:?}"), format!("{plain:?}"));
    let (_, unquoted) = read_one("", fussy.replace('"', "").as_bytes());
    assert_eq!(format!("{unquoted:?}"), format!("{plain:?}"));
}

#[test]
fn gzip_is_told_by_content() {
    let (_, plain) = read_one("", PLAIN.as_bytes());
    let mut zip = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    zip.write_all(PLAIN.as_bytes()).unwrap();
    let (_, list) = read_one("", &zip.finish().unwrap());
    assert_eq!(format!("{list:?}"), format!("{plain:?}"));
}

#[test]
fn numbered_columns_read_white_space_tables() {
    let (_, list) = read_one(
        "columns = { x = 2, y = 3, mag = 5 }\ndefault_err_mas = 2.0\ndefault_mag_err = 0.1",
        b"# nr x y sharp mag\n  7  1.5   2.5  0.3  14.0\n  8\t-1.5  0.5  0.2  15.0\n",
    );
    assert_eq!((list.x[0], list.y[0], list.mag[0]), (-1.5, 0.5, 15.0));
    assert_eq!(list.err, [None, None]);
    // Without an id the row number serves.
    assert_eq!(list.ids, Ids::Numbers(vec![2, 1]));
}

#[test]
fn renamed_and_kept_columns_are_found() {
    let (_, list) = read_one(
        "columns = { x = \"xpos\", y = \"ypos\" }\nkeep = [\"sharpness\"]\ndefault_err_mas = 2.0",
        b"xpos,ypos,sharpness\n5,6,0.51\n1,2,0.4\n",
    );
    assert_eq!(list.x, [1.0, 5.0]);
    assert_eq!(
        list.kept,
        [(
            "sharpness".to_owned(),
            vec!["0.4".to_owned(), "0.51".to_owned()]
        )]
    );
}

#[test]
fn error_ellipses_become_covariances() {
    let (_, list) = read_one("", b"x,y,err_major,err_minor,err_pa_deg\n1,2,3,1,90\n");
    let c = list.err[0].unwrap();
    assert!((c.xx - 9.0).abs() < 1e-12 && (c.yy - 1.0).abs() < 1e-12 && c.xy.abs() < 1e-12);
}

#[test]
fn an_epoch_overrides_its_instrument() {
    let folder = tempfile::tempdir().unwrap();
    let text = format!(
        "{HEAD}[instrument.first]\nfwhm_mas = 60.0\nunit = \"pixel\"\nscale_mas = 13.3\n\
         [[epoch]]\nname = \"1996-may\"\ndate = \"1996-05-08T12:00:00\"\nfile = \"a.csv\"\nfwhm_mas = 80.0\n\
         [[epoch]]\nmjd = 51544.5\nfile = \"b.csv\"\nunit = \"arcsec\"\n"
    );
    fs::write(folder.path().join("campaign.toml"), text).unwrap();
    fs::write(folder.path().join("a.csv"), PLAIN).unwrap();
    fs::write(folder.path().join("b.csv"), PLAIN).unwrap();
    let (campaign, _) = read_campaign(&folder.path().join("campaign.toml")).unwrap();
    use asterskein::model::campaign::Unit;
    let [a, b] = &campaign.epochs[..] else {
        panic!("two epochs")
    };
    assert_eq!((a.name.as_str(), b.name.as_str()), ("1996-may", "b"));
    assert_eq!(
        (a.settings.fwhm_mas, a.settings.error_unit),
        (80.0, Unit::Pixel)
    );
    // The error unit follows the unit unless it is given.
    assert_eq!(
        (b.settings.unit, b.settings.error_unit),
        (Unit::Arcsec, Unit::Arcsec)
    );
    assert!((a.time.mjd() - 50_211.5).abs() < 1e-9 && b.time.yr() == 2000.0);
}
