//! The tables of a result, column by column: one function per file of the result directory.
//! Reading them back is [`super::read_run`]; the README lists every column, generated from here.

mod detections;
mod groups;
mod orbits;
mod tracks;

use crate::model::campaign::Campaign;
use crate::model::detection::{FieldEpoch, RawList};
use crate::model::result::Solution;

use super::table::Table;

// What a reader must know to find the columns again.
pub use groups::TERMS;
pub use orbits::{COVARIANCE_PAIRS, ELEMENTS, STATE, error_name};
pub use tracks::{SKY, suffix};

/// All that tables are made from.
#[derive(Clone, Copy, Debug)]
pub struct RunView<'a> {
    pub campaign: &'a Campaign,
    /// One per epoch of the campaign.
    pub lists: &'a [RawList],
    /// One per epoch of the campaign, in the final frame.
    pub epochs: &'a [FieldEpoch],
    pub solution: &'a Solution,
}

/// Every table of a result, in the order of the README.
#[must_use]
pub fn all(view: RunView<'_>) -> Vec<Table<'_>> {
    let mut tables = vec![
        tracks::table(view),
        detections::members(view),
        detections::leftovers(view),
        groups::epochs(view),
        groups::tangles(view),
        groups::rivals(view),
    ];
    if view.campaign.central.is_some() {
        tables.push(orbits::table(view));
    }
    tables
}

/// Nothing measured = `NaN`, which no format writes.
fn or_nan(value: Option<f64>) -> f64 {
    value.unwrap_or(f64::NAN)
}
