//! What the engine reports while it works. It names events only; whoever watches decides what
//! to show, so the same engine serves a progress bar, a log and a silent test.

use crate::model::note::Note;

/// Watches a run. Calls may come from several threads.
pub trait Observer: Sync {
    /// A stage begins; `total` is the number of steps it will take, where that is known.
    /// The stage before it has ended.
    fn stage(&self, name: &'static str, total: Option<u64>);
    /// So many steps of the current stage are done.
    fn advance(&self, steps: u64);
    /// Something worth saying that does not stop the run.
    fn note(&self, note: &Note);
}

/// Watches and says nothing.
#[derive(Clone, Copy, Debug, Default)]
pub struct Silent;

impl Observer for Silent {
    fn stage(&self, _name: &'static str, _total: Option<u64>) {}
    fn advance(&self, _steps: u64) {}
    fn note(&self, _note: &Note) {}
}
