//! The README of a hand-over directory.

use std::fmt::Write;

use super::Summary;
use crate::io::result_tables::RunView;

pub fn readme(view: RunView<'_>, summary: &Summary, has_orbits: bool) -> String {
    let c = view.campaign;
    let mut t = String::new();
    // Writing to a String cannot fail.
    let _ = write!(
        t,
        "# Observations of {n} tracks of {field}\n\n\
         {obs} observations, {merged} of them merged with other stars, {rv} with a radial velocity.\n\n\
         ## Files\n\n\
         * `<track>.ecsv`: one row per detection, in order of time.\n\
         * `starts.ecsv`: one row per track: motion at Julian year {t_ref}, covariance, and for Keplerian tracks\n  \
         the state (x, y, z, vx, vy, vz) and the elements; `file` names the table of observations.\n",
        n = summary.tracks,
        field = c.name,
        obs = summary.observations,
        merged = summary.merged,
        rv = summary.velocities,
        t_ref = c.reference.yr(),
    );
    if has_orbits {
        t.push_str("* `orbits.ecsv`: every minimum of the orbit fits that was kept, best first.\n");
    }
    if c.central.is_some() {
        t.push_str("* `centre.ecsv`: the central mass as used in linking.\n");
    }
    t.push_str(
        "\nAll tables are ECSV: CSV under `#` lines that hold types, units and descriptions. An empty cell means none.\n\n\
         ## Conventions\n\n\
         * x toward east, y toward north on the tangent plane, in mas; z away from the observer. A positive radial velocity recedes.\n\
         * Times are Julian years (J2000.0 = JD 2451545.0) and modified Julian dates; time scales are not told apart.\n\
         * Node: position angle (north through east) of the point where the star crosses the sky plane receding. Inclination\n  \
         below 90 deg when the position angle grows with time. Without radial velocities (`sign_known` false) the mirror image\n  \
         (z, vz, node, argument of pericentre) -> (-z, -vz, node + 180, argument + 180) fits as well.\n\
         * States are in the field frame: subtract the place and motion of the mass (`centre.ecsv`) for a state relative to it.\n\n\
         ## Errors\n\n\
         The covariance `cov_*` of each place is the sum of three parts that are also given on their own:\n\n\
         * `list_*`: the list's error times the factor and plus the floor found for the epoch in linking;\n\
         * `frame_var_mas2`: per axis, the same error for all stars of one epoch. Fitting several stars together, treat it as one\n  \
         shift per epoch and axis with this variance rather than as independent noise;\n\
         * `confusion_var_mas2`: per axis, the pull of stars too faint to be seen. It changes over the time two stars take to\n  \
         drift apart by a resolution element, so neighbouring epochs share it.\n\n\
         ## Merged detections\n\n\
         They are kept and marked (`merged`, `share`). `x_mas`, `y_mas` are the place of the blend; `star_x_mas`, `star_y_mas`\n\
         the place it implies for the star alone, given the linked motion of the others: the misfit of the blend divided by the\n\
         share. That place leans on the linked motion, so it is not independent evidence; `use` is false for these rows and for\n\
         members less sure than 0.9. `probability` can serve as a weight, or in a mixture with an outlier term.\n",
    );
    t
}
