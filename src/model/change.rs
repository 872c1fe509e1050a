//! The wording of what a rival explanation changes.
//!
//! [`Rival::change`](super::result::Rival) is text for people, and the report draws it, so the
//! sentences have one form: clauses joined by `; `, each of them one [`Change`]. Detections are
//! written `epoch name:id`. Clauses of another form are allowed and are shown as they stand.

use std::collections::BTreeMap;
use std::fmt;

use super::campaign::Campaign;
use super::detection::RawList;
use super::result::Rival;

/// A detection as people name it.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct DetectionName {
    pub epoch_name: String,
    pub id: String,
}

impl fmt::Display for DetectionName {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}:{}", self.epoch_name, self.id)
    }
}

/// One difference between a rival explanation and the best one.
#[derive(Clone, Debug, PartialEq, Eq)]
pub enum Change {
    /// `track` holds a detection that was another track's (`from`), or nobody's. The loser
    /// keeps it no longer.
    Takes {
        track: String,
        detection: DetectionName,
        from: Option<String>,
    },
    /// `track` also holds a detection that its present owners keep (a blend).
    Shares {
        track: String,
        detection: DetectionName,
    },
    /// `track` no longer holds the detection.
    Drops {
        track: String,
        detection: DetectionName,
    },
    /// The track does not exist; its detections are free.
    Vanishes { track: String },
}

impl fmt::Display for Change {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        match self {
            Self::Takes {
                track,
                detection,
                from: Some(from),
            } => write!(f, "{track} takes {detection} from {from}"),
            Self::Takes {
                track,
                detection,
                from: None,
            } => write!(f, "{track} takes {detection}"),
            Self::Shares { track, detection } => write!(f, "{track} shares {detection}"),
            Self::Drops { track, detection } => write!(f, "{track} drops {detection}"),
            Self::Vanishes { track } => write!(f, "{track} vanishes"),
        }
    }
}

impl Change {
    /// Reads one clause; `None` when it has another form.
    #[must_use]
    pub fn read(clause: &str) -> Option<Self> {
        let clause = clause.trim();
        if let Some(track) = clause.strip_suffix(" vanishes") {
            return Some(Self::Vanishes {
                track: track.to_owned(),
            });
        }
        if let Some((track, rest)) = clause.split_once(" takes ") {
            let (what, from) = match rest.rsplit_once(" from ") {
                Some((what, from)) => (what, Some(from.to_owned())),
                None => (rest, None),
            };
            return Some(Self::Takes {
                track: track.to_owned(),
                detection: read_detection(what)?,
                from,
            });
        }
        let (track, detection, shares) = match clause.split_once(" shares ") {
            Some((track, what)) => (track, what, true),
            None => {
                let (track, what) = clause.split_once(" drops ")?;
                (track, what, false)
            }
        };
        let (track, detection) = (track.to_owned(), read_detection(detection)?);
        Some(if shares {
            Self::Shares { track, detection }
        } else {
            Self::Drops { track, detection }
        })
    }

    /// The detection that changes hands, where there is one.
    #[must_use]
    pub fn into_detection(self) -> Option<DetectionName> {
        match self {
            Self::Takes { detection, .. }
            | Self::Shares { detection, .. }
            | Self::Drops { detection, .. } => Some(detection),
            Self::Vanishes { .. } => None,
        }
    }

    /// Joins clauses into the text of a rival.
    #[must_use]
    pub fn sentence(changes: &[Self]) -> String {
        let words: Vec<String> = changes.iter().map(ToString::to_string).collect();
        words.join("; ")
    }
}

/// Linking names detections by their row; this puts the identifiers of the lists in place of rows.
/// `lists` are in the order of the campaign's epochs. Clauses that name no row stay as they are.
pub fn rows_to_ids(rivals: &mut [Rival], campaign: &Campaign, lists: &[RawList]) {
    let by_name: BTreeMap<&str, &RawList> = campaign
        .epochs
        .iter()
        .map(|e| e.name.as_str())
        .zip(lists)
        .collect();
    let rename = |d: &mut DetectionName| {
        let list = by_name.get(d.epoch_name.as_str());
        let row = d.id.parse::<usize>().ok();
        if let (Some(list), Some(row)) = (list, row)
            && row < list.ids.len()
        {
            d.id = list.ids.text(row);
        }
    };
    for rival in rivals {
        let clauses = rival
            .change
            .split("; ")
            .map(|clause| match Change::read(clause) {
                Some(mut change) => {
                    match &mut change {
                        Change::Takes { detection, .. }
                        | Change::Shares { detection, .. }
                        | Change::Drops { detection, .. } => rename(detection),
                        Change::Vanishes { .. } => {}
                    }
                    change.to_string()
                }
                None => clause.to_owned(),
            });
        rival.change = clauses.collect::<Vec<_>>().join("; ");
    }
}

/// Epoch names may hold a colon, identifiers rarely do: the last colon divides.
fn read_detection(text: &str) -> Option<DetectionName> {
    let (epoch_name, id) = text.rsplit_once(':')?;
    (!epoch_name.is_empty() && !id.is_empty()).then(|| DetectionName {
        epoch_name: epoch_name.to_owned(),
        id: id.to_owned(),
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_clause_reads_back() {
        let detection = DetectionName {
            epoch_name: "2003 apr".to_owned(),
            id: "17".to_owned(),
        };
        let track = "L00012".to_owned();
        let all = [
            Change::Takes {
                track: track.clone(),
                detection: detection.clone(),
                from: Some("K-east-3".to_owned()),
            },
            Change::Takes {
                track: track.clone(),
                detection: detection.clone(),
                from: None,
            },
            Change::Shares {
                track: track.clone(),
                detection: detection.clone(),
            },
            Change::Drops {
                track: track.clone(),
                detection,
            },
            Change::Vanishes { track },
        ];
        let text = Change::sentence(&all);
        let read: Vec<Change> = text.split("; ").filter_map(Change::read).collect();
        assert_eq!(read, all);
        assert_eq!(Change::read("something else altogether"), None);
    }

    #[test]
    fn clauses_that_are_not_of_the_form_stay() {
        let mut rivals = [Rival {
            tangle: 0,
            rank: 1,
            ln_odds: -1.0,
            change: "L00001 takes 2003 apr:0 from L00002; a further star".to_owned(),
        }];
        let before = rivals[0].change.clone();
        let campaign = Campaign {
            path: std::path::PathBuf::new(),
            name: String::new(),
            reference: crate::model::time::JulianYear(2000.0),
            origin: None,
            central: None,
            stars: crate::model::campaign::StarMotions {
                speed_mas_yr: 1.0,
                foreground: None,
            },
            instruments: Vec::new(),
            epochs: Vec::new(),
            lists: None,
            known_stars: None,
            velocities: None,
        };
        rows_to_ids(&mut rivals, &campaign, &[]);
        assert_eq!(rivals[0].change, before);
    }
}
