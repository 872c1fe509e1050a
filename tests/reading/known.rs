//! Known stars and radial velocities.

use std::fs;

use asterskein::io::known::{read_known_stars, read_velocities};
use asterskein::model::campaign::{KnownStars, Velocities};
use asterskein::model::known::WhichStar;

fn stars(text: &str, for_priors: bool) -> Result<Vec<asterskein::model::known::KnownStar>, String> {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("known.csv");
    fs::write(&file, text).unwrap();
    let known = KnownStars {
        file,
        for_names: true,
        for_priors,
        for_frame: false,
    };
    let place = format!("{}/", folder.path().display());
    read_known_stars(&known).map_err(|f| f.to_string().replace(&place, ""))
}

#[test]
fn known_stars_need_a_name_a_place_and_a_time() {
    let text =
        "name,epoch_yr,x_mas,y_mas,vx_mas_yr,vy_mas_yr,mag\nK-east-3,2004.5,120.5,-4,3.5,,14.1\n";
    let read = stars(text, false).unwrap();
    assert_eq!(read[0].name, "K-east-3");
    assert_eq!((read[0].vx_mas_yr, read[0].vy_mas_yr), (Some(3.5), None));
    assert_eq!(
        stars(&text.replace("epoch_yr", "epoch"), false).unwrap_err(),
        "known.csv:1: no column `epoch_yr`; found name, epoch, x_mas, y_mas, vx_mas_yr, vy_mas_yr, mag"
    );
    let twice = format!("{text}K-east-3,2004.5,1,1,,,\n,2004.5,,1,,,\n");
    assert_eq!(
        stars(&twice, false).unwrap_err(),
        "known.csv:3, column `name`: name `K-east-3` is given twice (first in line 2); expected every name once\n\
         known.csv:4, column `name`: empty, but every row needs it\n\
         known.csv:4, column `x_mas`: empty, but every row needs it"
    );
}

#[test]
fn priors_need_errors() {
    let text = "name,epoch_yr,x_mas,y_mas,x_err_mas,y_err_mas\na,2004.5,1,2,0.1,0.1\n";
    assert!(stars(text, false).is_ok());
    let message = stars(text, true).unwrap_err();
    assert!(
        message.contains("column `vx_err_mas_yr`: empty"),
        "{message}"
    );
}

#[test]
fn velocities_belong_to_a_name_or_a_place() {
    let folder = tempfile::tempdir().unwrap();
    let file = folder.path().join("rv.csv");
    let read = |text: &str| {
        fs::write(&file, text).unwrap();
        read_velocities(&Velocities {
            file: file.clone(),
            tolerance_mas: 15.0,
        })
    };
    let good = read(
        "time_yr,name,x_mas,y_mas,rv_km_s,rv_err_km_s\n2003.5,K-1,,,-120,15\n2004.5,,3,4,80,20\n",
    )
    .unwrap();
    assert_eq!(good[0].star, WhichStar::Named("K-1".to_owned()));
    assert_eq!(
        good[1].star,
        WhichStar::At {
            x_mas: 3.0,
            y_mas: 4.0
        }
    );
    let bad = read("time_yr,name,rv_km_s,rv_err_km_s\n2003.5,,1,0\n2004.5,K-1,80,0\n").unwrap_err();
    let text = bad.to_string();
    assert!(
        text.contains(":2, column `name`: found `neither a name nor a place`"),
        "{text}"
    );
    assert!(
        text.contains(":3, column `rv_err_km_s`: found `0`"),
        "{text}"
    );
}
