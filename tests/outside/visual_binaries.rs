//! Elements to sky positions against published ephemerides of visual binaries.
//!
//! Source: Sixth Catalog of Orbits of Visual Binary Stars (Hartkopf & Mason, U.S. Naval
//! Observatory), elements and printed ephemerides 2005-2009; read in place from a folder beside
//! the repository, never copied. Without that folder there is nothing to compare and the test
//! says so.

use std::path::Path;

use asterskein::motion::elements::{BinaryElements, Elements, position_angle_separation};

#[test]
fn visual_binaries_stand_where_their_catalogue_says() {
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("../shared/data/visual_binaries.csv");
    let Ok(mut reader) = csv::Reader::from_path(&path) else {
        println!("skipped: no {}", path.display());
        return;
    };
    let heads = reader.headers().unwrap().clone();
    let mut count = 0;
    for row in reader.records() {
        let row = row.unwrap();
        let get = |name: &str| -> f64 {
            let at = heads.iter().position(|h| h == name).unwrap();
            row[at].parse().unwrap()
        };
        let orbit = Elements::from(BinaryElements {
            period_yr: get("period_yr"),
            semi_major_mas: 1000.0 * get("semi_major_arcsec"),
            eccentricity: get("eccentricity"),
            inclination_deg: get("inclination_deg"),
            node_deg: get("node_deg"),
            arg_pericentre_deg: get("arg_periastron_deg"),
            t_pericentre_yr: get("time_periastron_yr"),
        });
        let (r, _) = orbit.state_at(get("t_yr"));
        let (theta, rho) = position_angle_separation(r[0], r[1]);
        // Printed to 0.1 deg and 0.001 arcsec; epochs to the year's beginning.
        let turn = (theta - get("theta_deg_published") + 540.0).rem_euclid(360.0) - 180.0;
        assert!(turn.abs() <= 0.06, "{}: {theta} deg", &row[0]);
        let off = rho / 1000.0 - get("rho_arcsec_published");
        assert!(off.abs() <= 0.0006, "{}: {rho} mas", &row[0]);
        count += 1;
    }
    assert!(count >= 58, "{count}");
}
