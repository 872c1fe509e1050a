//! Decisions of a human, bound to the detections they speak of.

/// One detection: epoch in campaign order, row in the epoch's canonical order.
#[derive(Clone, Copy, Debug, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub struct DetectionAt {
    pub epoch: usize,
    pub row: usize,
}

/// What was decided.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Decision {
    /// These detections are one star (two or more, each of another epoch).
    Together(Vec<DetectionAt>),
    /// No two of these detections are the same star.
    Apart(Vec<DetectionAt>),
    /// An artefact: part of no track.
    Discard(DetectionAt),
    /// The track that holds this detection bears this name.
    Name(DetectionAt, String),
}

/// A decision with its grounds. Read and checked against each other by `io::rulings`.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Ruling {
    pub decision: Decision,
    pub reason: String,
    pub author: Option<String>,
    /// Line of the rulings file, counted from 1.
    pub line: usize,
}
