//! `audit` from end to end: a small field about a mass with one fast star, a claim of that star,
//! one strung together from others, and claims that cannot be read.

use std::collections::BTreeMap;
use std::fmt::Write;
use std::fs;
use std::path::Path;
use std::process::Command;

use asterskein::io::ecsv_read;
use asterskein::maths::units::gm_mas3_yr2;
use asterskein::motion::elements::Elements;

const EPOCHS: usize = 24;
const STARS: usize = 16;

/// The golden-ratio sequences: uniform in (0, 1), the same every time.
fn even(k: usize, c: usize) -> f64 {
    const STEPS: [f64; 4] = [0.819_172_51, 0.671_043_61, 0.549_700_48, 0.450_306_93];
    ((k as f64 + 0.5) * STEPS[c]).fract()
}

/// Star 0 is fast and near the mass, the others far out.
fn star(k: usize) -> Elements {
    let (a, e) = if k == 0 {
        (120.0, 0.4)
    } else {
        (500.0 + 900.0 * even(k, 0), 0.3 * even(k, 1))
    };
    Elements {
        gm_mas3_yr2: gm_mas3_yr2(2.6e6, 7100.0),
        pericentre_mas: a * (1.0 - e),
        eccentricity: e,
        inclination_deg: if k == 0 { 40.0 } else { 30.0 * even(k, 2) },
        node_deg: 360.0 * even(k, 3),
        arg_pericentre_deg: 360.0 * even(k, 1),
        t_pericentre_yr: 1990.0 + 15.0 * even(k, 2),
        semi_major_mas: Some(a),
    }
}

fn time(e: usize) -> f64 {
    2000.0 + 0.5 * e as f64
}

/// Row k of every list, with the identifier k, is star k.
fn write_campaign(folder: &Path) {
    let mut toml = String::from(
        "[field]\nname = \"Lantern core\"\nreference_epoch = 2005.0\n\
         [central_mass]\nmass_msun = 2.6e6\ndistance_pc = 7100.0\nx_mas = 0.0\ny_mas = 0.0\n\
         [stars]\nspeed_mas_yr = 6.0\n[instrument.first]\nfwhm_mas = 55.0\nlimit_mag = 17.0\n",
    );
    for e in 0..EPOCHS {
        let _ = write!(
            toml,
            "[[epoch]]\nname = \"s{e}\"\ntime = {}\nfile = \"e{e}.csv\"\ninstrument = \"first\"\n",
            time(e)
        );
        let mut list = String::from("id,x,y,x_err,y_err,mag,mag_err\n");
        for k in 0..STARS {
            let (r, _) = star(k).state_at(time(e));
            let noise = |c| 0.8 * (even(37 * e + k, c) - 0.5);
            let mag = 12.0 + 3.0 * even(k, 0) + 0.04 * (even(e + 5 * k, 1) - 0.5);
            let _ = writeln!(
                list,
                "{k},{:.3},{:.3},0.3,0.3,{mag:.3},0.02",
                r[0] + noise(2),
                r[1] + noise(3)
            );
        }
        fs::write(folder.join(format!("e{e}.csv")), list).expect("a list");
    }
    fs::write(folder.join("campaign.toml"), toml).expect("a campaign");
}

pub fn program(folder: &Path, args: &[&str]) -> (i32, String) {
    let out = Command::new(env!("CARGO_BIN_EXE_asterskein"))
        .args(args)
        .current_dir(folder)
        .output()
        .expect("the program starts");
    let said = String::from_utf8_lossy(&out.stderr).into_owned();
    (out.status.code().unwrap_or(-1), said)
}

/// The campaign written into a folder and linked into `run`.
pub fn write_and_link(folder: &Path) {
    write_campaign(folder);
    let args = ["link", "campaign.toml", "--out", "run", "--quiet"];
    let (code, said) = program(folder, &args);
    assert_eq!(code, 0, "{said}");
}

/// A column of a table by claim.
fn by_claim(folder: &Path, column: &str) -> BTreeMap<String, String> {
    let bytes = fs::read(folder.join("audit/verdicts.ecsv")).expect("verdicts");
    let table = ecsv_read::read(&bytes).expect("ECSV");
    let claims = table.texts("claim").expect("claims");
    let values = table.texts(column).expect("the column");
    claims.into_iter().zip(values).collect()
}

#[test]
fn claims_are_judged_and_bad_ones_refused() {
    let keep = tempfile::tempdir().expect("a folder");
    let folder = keep.path();
    write_and_link(folder);

    let mut claims = String::from("claim,epoch,id,x_mas,y_mas\n");
    for e in 0..EPOCHS {
        // The fast star, under its own detections; and another star at every epoch.
        let _ = writeln!(claims, "fast,{e},0,,");
        let _ = writeln!(claims, "mixed,s{e},{},,", 1 + (5 * e) % (STARS - 1));
    }
    claims.push_str("early,99,,0,0\nearly,1,,0,0\nlone,0,,0,0\n");
    fs::write(folder.join("claims.csv"), claims).expect("claims");
    let audit = |out: &str, scrambles: &str, more: &[&str]| {
        let args = [
            "audit",
            "run",
            "--claims",
            "claims.csv",
            "--out",
            out,
            "--scrambles",
            scrambles,
        ];
        program(folder, &[&args[..], more].concat())
    };
    // A hundred scrambles are the least that let a claim stand.
    let (code, said) = audit("audit", "100", &[]);
    assert_eq!(code, 1, "two claims are refused: {said}");
    let line = 2 + 2 * EPOCHS;
    assert!(
        said.contains(&format!("claims.csv:{line}, column `epoch`: found `99`")),
        "{said}"
    );
    assert!(said.contains("expected at least two positions"), "{said}");

    let verdicts = by_claim(folder, "verdict");
    assert_eq!(verdicts.len(), 2);
    assert_eq!(verdicts["fast"], "stands");
    assert_eq!(verdicts["mixed"], "strung_together");
    for table in ["evidence.ecsv", "settling.ecsv"] {
        assert!(folder.join("audit").join(table).exists());
    }

    // The same bytes with another number of threads; an existing result is not replaced unasked.
    let few = |more: &[&str]| {
        let (code, said) = audit("few", "3", more);
        assert_eq!(code, 1, "{said}");
        fs::read(folder.join("few/verdicts.ecsv")).expect("verdicts")
    };
    let before = few(&["--threads", "1"]);
    assert_eq!(before, few(&["--replace", "--threads", "3"]));
    assert!(audit("few", "3", &[]).1.contains("few"));
}

#[test]
fn a_claimed_orbit_and_a_track_are_the_star_they_describe() {
    let keep = tempfile::tempdir().expect("a folder");
    let folder = keep.path();
    write_and_link(folder);
    let s = star(0);
    let mut claims = String::from(
        "claim,track,semi_major_mas,eccentricity,inclination_deg,node_deg,arg_pericentre_deg,\
         t_pericentre_yr\n",
    );
    let _ = writeln!(
        claims,
        "orbit,,120,{},{},{},{},{}\nbrightest,L00001,,,,,,\nopen,,120,1.2,1,1,1,2000",
        s.eccentricity, s.inclination_deg, s.node_deg, s.arg_pericentre_deg, s.t_pericentre_yr
    );
    fs::write(folder.join("claims.csv"), claims).expect("claims");
    let args = [
        "audit",
        "run",
        "--claims",
        "claims.csv",
        "--out",
        "audit",
        "--scrambles",
        "100",
    ];
    let (code, said) = program(folder, &args);
    assert_eq!(code, 1, "an open orbit is refused: {said}");
    assert!(
        said.contains("claims.csv:4, column `eccentricity`: found `1.2`"),
        "{said}"
    );
    let verdicts = by_claim(folder, "verdict");
    assert_eq!(verdicts["orbit"], "stands");
    assert_eq!(verdicts["brightest"], "stands");
    assert!(by_claim(folder, "track")["orbit"].starts_with('L'));
}
