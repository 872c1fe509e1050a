//! Real stars in two catalogues 24.75 years apart (`fixtures/sky-companions/WHY.md`,
//! `fixtures/sky-hpm2/WHY.md`).

use std::path::Path;

use super::{Field, fixture, link, rows};

/// Is a pair of the two lists one track?
fn holds(field: &Field, first: &str, second: &str) -> bool {
    field.members.iter().any(|m| {
        m.get(&0).is_some_and(|id| id == first) && m.get(&1).is_some_and(|id| id == second)
    })
}

/// Known pairs: (all, of them linked), and whether the star at the origin of the first list is
/// linked right.
fn judge(folder: &Path) -> (usize, usize, bool) {
    let field = link(folder);
    let epoch = &field.linked.epochs[0];
    let centre = (0..epoch.len())
        .min_by(|&a, &b| {
            let far = |k: usize| epoch.x_mas[k].hypot(epoch.y_mas[k]);
            far(a).total_cmp(&far(b))
        })
        .map(|k| field.ids[0][k].clone())
        .unwrap();
    let pairs = rows(&folder.join("pairs.csv"));
    let right = pairs.iter().filter(|p| holds(&field, &p[0], &p[1])).count();
    let centre_right = pairs
        .iter()
        .any(|p| p[0] == centre && holds(&field, &p[0], &p[1]));
    (pairs.len(), right, centre_right)
}

#[test]
fn stars_that_pass_others_keep_their_identity() {
    let (mut all, mut right, mut centres) = (0, 0, 0);
    for k in 1..=12 {
        let folder = fixture("sky-companions").join(format!("f{k:02}"));
        let (n, ok, centre) = judge(&folder);
        all += n;
        right += ok;
        centres += usize::from(centre);
        // Two companions that move along with each other, both among strangers.
        assert!(
            centre || !matches!(k, 3 | 5),
            "the pair of field {k} is torn"
        );
    }
    assert_eq!(all, 40);
    assert!(right >= 38, "{right} of {all} pairs");
    assert!(centres >= 10, "{centres} of 12 central stars");
}

#[test]
fn a_star_of_very_large_motion_is_found_across_a_crowded_field() {
    let (all, right, centre) = judge(&fixture("sky-hpm2"));
    assert!(centre, "the central star is wrong");
    assert!(all == 80 && right >= 79, "{right} of {all} pairs");
}
