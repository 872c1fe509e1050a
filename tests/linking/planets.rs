//! Planets about the Sun (JPL DE421; `fixtures/planets-sparse/WHY.md`).

use std::collections::BTreeMap;

use super::{Field, fixture, link, rows};

/// Ids of each body's detections by epoch.
fn bodies(name: &str) -> BTreeMap<String, BTreeMap<usize, String>> {
    let mut bodies: BTreeMap<String, BTreeMap<usize, String>> = BTreeMap::new();
    for row in rows(&fixture(name).join("bodies.csv")) {
        let [epoch, id, body] = <[String; 3]>::try_from(row).unwrap();
        bodies
            .entry(body)
            .or_default()
            .insert(epoch.parse().unwrap(), id);
    }
    bodies
}

/// The track that holds exactly the detections of a body.
fn whole(field: &Field, detections: &BTreeMap<usize, String>) -> Option<usize> {
    field.members.iter().position(|m| m == detections)
}

#[test]
fn every_body_is_whole_even_when_it_turns_between_epochs() {
    let field = link(&fixture("planets-sparse"));
    let bodies = bodies("planets-sparse");
    assert_eq!(bodies.len(), 9);
    for (body, detections) in &bodies {
        assert!(whole(&field, detections).is_some(), "{body} is not whole");
    }
    // Elements of those whose orbits the others do not disturb, within four standard errors.
    let mut compared = 0;
    for row in rows(&fixture("planets-sparse").join("elements.csv")) {
        if row[0].as_str() > "b4" {
            continue;
        }
        let value = |k: usize| row[k].parse::<f64>().unwrap();
        let track = whole(&field, &bodies[&row[0]]).unwrap();
        let orbit = field.linked.solution.tracks[track].orbit.unwrap();
        for (what, found, expected) in [
            ("semi-major axis", orbit.semi_major_au.unwrap(), value(1)),
            ("eccentricity", orbit.eccentricity, value(2)),
            ("inclination", orbit.inclination_deg, value(3)),
            ("period", orbit.period_yr.unwrap(), value(4)),
        ] {
            let (v, err) = found;
            assert!(
                (v - expected).abs() < 4.0 * err && err < 0.25 * expected.max(0.01),
                "{what} of {}: {v} +- {err}, expected {expected}",
                row[0]
            );
            compared += 1;
        }
    }
    assert_eq!(compared, 16);
}

#[test]
fn positions_better_than_any_orbit_do_not_break_tracks() {
    let field = link(&fixture("planets-season"));
    let bodies = bodies("planets-season");
    for body in ["b1", "b2", "b3", "b4"] {
        assert!(
            whole(&field, &bodies[body]).is_some(),
            "{body} is not whole"
        );
    }
    for epoch in &field.linked.solution.epochs {
        assert!(epoch.error_floor_mas > 0.05, "{}", epoch.error_floor_mas);
    }
}
