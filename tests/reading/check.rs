//! The check of a campaign: all faults at once, figures of good lists, oddities.

use std::fs;

use asterskein::io::check::{Check, check};

/// A field of stars strewn without symmetry.
fn rows(sign: f64, scale: f64, n: u32) -> String {
    let mut text = "id,x,y,x_err,y_err,mag,mag_err\n".to_owned();
    for k in 0..n {
        let t = f64::from(k);
        let x = sign * 4000.0 * (t * 0.754_877_666).fract();
        let y = 4000.0 * (t * 0.569_840_290).fract();
        let (x, y) = (scale * x, scale * y);
        let mag = 12.0 + 0.02 * t;
        text.push_str(&format!(
            "{k},{x:.6},{y:.6},{:.6},{:.6},{mag:.2},0.03\n",
            scale, scale
        ));
    }
    text
}

fn checked(epochs: &[(&str, String)]) -> Check {
    let folder = tempfile::tempdir().unwrap();
    let mut text = "[field]\nname = \"Lantern core\"\nreference_epoch = 2008.0\n[stars]\n\
        speed_mas_yr = 6.0\n[instrument.first]\nfwhm_mas = 60.0\n"
        .to_owned();
    for (k, (time, rows)) in epochs.iter().enumerate() {
        fs::write(folder.path().join(format!("{k}.csv")), rows).unwrap();
        text.push_str(&format!("[[epoch]]\ntime = {time}\nfile = \"{k}.csv\"\n"));
    }
    fs::write(folder.path().join("campaign.toml"), text).unwrap();
    check(&folder.path().join("campaign.toml"))
}

fn kinds(found: &Check) -> Vec<&str> {
    let mut kinds: Vec<&str> = found.notes.iter().map(|n| n.what).collect();
    kinds.dedup();
    kinds
}

#[test]
fn figures_of_a_good_list() {
    let found = checked(&[
        ("2000.25", rows(1.0, 1.0, 150)),
        ("2003.75", rows(1.0, 1.0, 149)),
    ]);
    assert!(found.faults.is_empty());
    let e = &found.epochs[1];
    assert_eq!((e.n_rows, e.gap_yr), (149, Some(3.5)));
    assert_eq!((e.err_floor_mas, e.err_median_mas), (Some(1.0), Some(1.0)));
    assert_eq!(e.mag.unwrap()[0], 12.0);
    // 150 stars in 16 square arcsec, a disc of 60 mas: 0.0265 by hand.
    let crowding = e.crowding.unwrap();
    assert!((crowding - 0.0265).abs() < 0.006, "{crowding}");
    assert_eq!(kinds(&found), ["errors_alike"]);
}

#[test]
fn faults_of_all_lists_come_together_and_good_ones_are_still_summed_up() {
    let found = checked(&[
        ("2000.25", rows(1.0, 1.0, 20).replace("\n3,", "\n4,")),
        ("2001.25", rows(1.0, 1.0, 20)),
        ("2002.25", rows(1.0, 1.0, 20).replace("x_err", "xerr")),
    ]);
    assert_eq!((found.faults.count(), found.epochs.len()), (2, 1));
    assert_eq!(found.epochs[0].epoch, 1);
}

#[test]
fn oddities_are_named() {
    let twin = rows(1.0, 1.0, 150).replace("\n7,", "\n7,1.0,1.0,1,1,12,0.03\n700,");
    let twin = twin.replace("\n8,", "\n8,1.0,1.0,1,1,99.9,0.03\n800,");
    let found = checked(&[
        ("2003.25", rows(1.0, 1.0, 150)),
        ("2001.0", rows(-1.0, 1.0, 150)),
        ("2004.25", rows(1.0, 0.001, 150)),
        ("2004.25", twin),
    ]);
    let kinds = kinds(&found);
    for kind in [
        "out_of_order",
        "same_time",
        "calendar_year",
        "repeated_rows",
        "stand_in_magnitude",
        "odd_width",
        "flipped_axis",
    ] {
        assert!(kinds.contains(&kind), "{kind} is not among {kinds:?}");
    }
}
