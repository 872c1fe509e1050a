//! Findings that do not stop a run, as data: only the printer turns them into words.

/// A non-fatal finding: what, where, and what to do about it.
#[derive(Clone, Debug, PartialEq, serde::Serialize)]
pub struct Note {
    /// Short stable word for the kind of finding, e.g. `unknown_column`.
    pub what: &'static str,
    /// The place: a file, an epoch, a track.
    pub place: String,
    /// One sentence with the numbers.
    pub text: String,
}
