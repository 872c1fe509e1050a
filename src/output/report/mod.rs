//! The report: one self-contained HTML file to look at a result with, and static figures.
//!
//! `select` decides what goes in (all of a run, a part, or less detail for a very large field),
//! `data` turns that into a compact model, `columns` packs it, `page` wraps it in the page with
//! its script and style; `figure` draws SVG for papers from the same input.

mod columns;
mod data;
mod extras;
mod figure;
mod page;
mod path;
mod select;

use crate::io::result_tables::RunView;
use crate::model::campaign::Campaign;
use crate::model::detection::{FieldEpoch, RawList};
use crate::model::result::Solution;

pub use extras::{AUDIT, RECOVERY, read_extras};
pub use figure::{FigureStyle, field_map, track_plot};
pub use page::{ReportError, html};
pub use select::{Budget, Scope};

/// What a report is made from.
#[derive(Clone, Copy, Debug)]
pub struct ReportInput<'a> {
    pub campaign: &'a Campaign,
    /// One per epoch of the campaign, in its order.
    pub epochs: &'a [FieldEpoch],
    /// The lists as read, for their identifiers; one per epoch.
    pub lists: &'a [RawList],
    pub solution: &'a Solution,
    /// Tables of an audit or a recovery, where there are any; and the notes of a result that
    /// was read back, as a table `notes` (what, place, text).
    pub extras: &'a [ExtraTable],
}

impl<'a> ReportInput<'a> {
    /// From what the tables are made from.
    #[must_use]
    pub fn of(view: RunView<'a>, extras: &'a [ExtraTable]) -> Self {
        Self {
            campaign: view.campaign,
            epochs: view.epochs,
            lists: view.lists,
            solution: view.solution,
            extras,
        }
    }
}

/// A table shown as it stands, and drawn where its columns are known.
#[derive(Clone, Debug, Default, serde::Serialize)]
pub struct ExtraTable {
    /// File name without suffix: `verdicts`, `evidence`, `injected`, `completeness`; or `notes`.
    pub name: String,
    pub columns: Vec<String>,
    pub rows: Vec<Vec<String>>,
}
