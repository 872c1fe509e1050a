//! Real positions given twice, as offsets and as directions (`fixtures/sky-hpm2/WHY.md`).

use asterskein::frame::known::register;
use asterskein::io::{campaign::read_campaign, lists::read_lists};
use asterskein::model::detection::{FieldEpoch, RawList};

fn field(name: &str) -> (Vec<RawList>, Vec<FieldEpoch>) {
    let path = super::fixture("sky-hpm2").join(name);
    let (campaign, _) = read_campaign(&path).unwrap_or_else(|f| panic!("{f}"));
    let (lists, _) = read_lists(&campaign).unwrap_or_else(|f| panic!("{f}"));
    let epochs = register(&campaign, &lists).unwrap();
    (lists, epochs)
}

#[test]
fn directions_and_offsets_give_the_same_field() {
    let (offset_lists, offsets) = field("campaign.toml");
    let (direction_lists, directions) = field("campaign_deg.toml");
    // Half a unit of the last printed digit of a direction, on two axes, and of an offset.
    const ROUNDING_MAS: f64 = 0.005;
    let mut n = 0;
    for e in 0..offsets.len() {
        for k in 0..direction_lists[e].len() {
            let id = direction_lists[e].ids.text(k);
            let other = (0..offset_lists[e].len())
                .find(|&j| offset_lists[e].ids.text(j) == id)
                .unwrap();
            let (d, o) = (&directions[e], &offsets[e]);
            let apart = (d.x_mas[k] - o.x_mas[other]).hypot(d.y_mas[k] - o.y_mas[other]);
            assert!(apart < ROUNDING_MAS, "epoch {e}, {id}: {apart} mas");
            // Errors stretch with the plane: by up to 1/cos^2 of the distance from the origin.
            let far = o.x_mas[other].hypot(o.y_mas[other]) / 206_264_806.0;
            let stretch = d.cov_mas2[k].max_var() / o.cov_mas2[other].max_var();
            assert!(
                stretch > 0.999 && stretch < 1.001 * (1.0 + far * far).powi(2),
                "epoch {e}, {id}: {stretch}"
            );
            n += 1;
        }
        assert!(directions[e].region.outline_mas.len() >= 3);
    }
    assert_eq!(n, 82 + 234);
}
