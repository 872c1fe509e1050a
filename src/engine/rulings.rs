//! Rulings of a human around the search: discarded detections never enter it, and a result that
//! breaks a ruling is refused. Tracks and detections that a ruling touches are flagged.
//!
//! The search itself does not yet know `together` and `apart`: where its best explanation
//! agrees with them nothing is lost, where it does not the run ends with the ruling's line.

use std::borrow::Cow;
use std::collections::BTreeSet;

use crate::model::change::Change;
use crate::model::detection::FieldEpoch;
use crate::model::flag::Flags;
use crate::model::result::{Leftover, Solution};
use crate::model::ruling::{Decision, DetectionAt, Ruling};

/// Detections that take no part, by epoch; rows ascending.
#[derive(Debug)]
pub struct Discards {
    rows: Vec<Vec<usize>>,
}

impl Discards {
    #[must_use]
    pub fn of(rulings: &[Ruling], n_epochs: usize) -> Self {
        let mut rows = vec![BTreeSet::new(); n_epochs];
        for r in rulings {
            if let Decision::Discard(d) = &r.decision {
                rows[d.epoch].insert(d.row);
            }
        }
        Self {
            rows: rows.into_iter().map(|r| r.into_iter().collect()).collect(),
        }
    }

    /// The epochs without the discarded rows.
    #[must_use]
    pub fn without<'a>(&self, epochs: &'a [FieldEpoch]) -> Cow<'a, [FieldEpoch]> {
        if self.rows.iter().all(Vec::is_empty) {
            return Cow::Borrowed(epochs);
        }
        epochs
            .iter()
            .zip(&self.rows)
            .map(|(e, rows)| {
                let mut e = e.clone();
                for column in [
                    &mut e.x_mas,
                    &mut e.y_mas,
                    &mut e.mag,
                    &mut e.mag_err,
                    &mut e.rv_km_s,
                    &mut e.rv_err_km_s,
                    &mut e.quality,
                ] {
                    drop_rows(column, rows);
                }
                drop_rows(&mut e.cov_mas2, rows);
                e
            })
            .collect()
    }

    /// Counts rows as in the lists again, also in the wording of rivals; the discarded ones become
    /// leftovers. `epoch_names` are those of the campaign.
    pub fn restore(&self, solution: &mut Solution, epoch_names: &[&str]) {
        if self.rows.iter().all(Vec::is_empty) {
            return;
        }
        for rival in &mut solution.rivals {
            let clauses = rival.change.split("; ").map(|clause| {
                let Some(mut change) = Change::read(clause) else {
                    return clause.to_owned();
                };
                if let Change::Takes { detection, .. }
                | Change::Shares { detection, .. }
                | Change::Drops { detection, .. } = &mut change
                {
                    let epoch = epoch_names.iter().position(|n| *n == detection.epoch_name);
                    if let (Some(e), Ok(row)) = (epoch, detection.id.parse()) {
                        detection.id = self.row_in_list(e, row).to_string();
                    }
                }
                change.to_string()
            });
            rival.change = clauses.collect::<Vec<_>>().join("; ");
        }
        for m in &mut solution.members {
            m.row = self.row_in_list(m.epoch, m.row);
        }
        for l in &mut solution.leftovers {
            l.row = self.row_in_list(l.epoch, l.row);
        }
        for (epoch, rows) in self.rows.iter().enumerate() {
            solution.leftovers.extend(rows.iter().map(|&row| Leftover {
                epoch,
                row,
                p_false: 1.0,
                nearest: None,
                flags: Flags::RULED,
            }));
            if let Some(report) = solution.epochs.get_mut(epoch) {
                report.n_list += rows.len();
                report.n_unmatched += rows.len();
            }
        }
        solution.leftovers.sort_by_key(|l| (l.epoch, l.row));
    }

    fn row_in_list(&self, epoch: usize, row: usize) -> usize {
        // Every discarded row at or before it pushes it one further.
        self.rows[epoch]
            .iter()
            .fold(row, |row, &gone| if gone <= row { row + 1 } else { row })
    }
}

fn drop_rows<T>(column: &mut Vec<T>, rows: &[usize]) {
    let mut k = 0;
    column.retain(|_| {
        k += 1;
        rows.binary_search(&(k - 1)).is_err()
    });
}

/// A ruling that a result does not follow.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Broken {
    pub line: usize,
    pub ruling: &'static str,
    /// Tracks that hold the detections, as named in the result.
    pub tracks: Vec<String>,
}

/// Flags what rulings touch.
///
/// # Errors
/// The first ruling that the result breaks.
pub fn apply(solution: &mut Solution, rulings: &[Ruling]) -> Result<(), Broken> {
    for r in rulings {
        let (detections, word): (&[DetectionAt], _) = match &r.decision {
            Decision::Together(all) => (all, "together"),
            Decision::Apart(all) => (all, "apart"),
            Decision::Name(d, _) => (std::slice::from_ref(d), "name"),
            Decision::Discard(_) => continue,
        };
        let held: Vec<BTreeSet<usize>> = detections
            .iter()
            .map(|d| {
                let here = solution
                    .members
                    .iter()
                    .filter(|m| (m.epoch, m.row) == (d.epoch, d.row));
                here.map(|m| m.track).collect()
            })
            .collect();
        let followed = match &r.decision {
            Decision::Together(_) => held[0].iter().any(|t| held.iter().all(|h| h.contains(t))),
            // A merged detection may belong to both stars, but no star to both detections.
            Decision::Apart(_) => {
                (0..held.len()).all(|a| (a + 1..held.len()).all(|b| held[a].is_disjoint(&held[b])))
            }
            _ => !held[0].is_empty(),
        };
        if !followed {
            let tracks = held.iter().flatten().collect::<BTreeSet<_>>();
            return Err(Broken {
                line: r.line,
                ruling: word,
                tracks: tracks
                    .into_iter()
                    .map(|&t| solution.tracks[t].name.clone())
                    .collect(),
            });
        }
        for &t in held.iter().flatten() {
            solution.tracks[t].flags.set(Flags::RULED);
        }
        for m in &mut solution.members {
            if detections
                .iter()
                .any(|d| (m.epoch, m.row) == (d.epoch, d.row))
            {
                m.flags.set(Flags::RULED);
            }
        }
    }
    Ok(())
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::maths::cov2::Cov2;
    use crate::model::region::Region;
    use crate::model::result::{EpochReport, Membership, Rival};
    use crate::model::time::JulianYear;

    fn discard(row: usize) -> Ruling {
        Ruling {
            decision: Decision::Discard(DetectionAt { epoch: 0, row }),
            reason: "a spike".to_owned(),
            author: None,
            line: 1,
        }
    }

    #[test]
    fn rows_go_and_come_back_as_they_were() {
        let x: Vec<f64> = (0..6).map(f64::from).collect();
        let epoch = FieldEpoch {
            time: JulianYear(2000.0),
            instrument: 0,
            fwhm_mas: 50.0,
            x_mas: x.clone(),
            y_mas: x.clone(),
            cov_mas2: vec![Cov2::round(1.0); 6],
            mag: x.clone(),
            mag_err: x,
            rv_km_s: Vec::new(),
            rv_err_km_s: Vec::new(),
            quality: Vec::new(),
            region: Region::default(),
        };
        let discards = Discards::of(&[discard(3), discard(0), discard(3)], 1);
        let epochs = [epoch];
        let kept = discards.without(&epochs);
        assert_eq!(kept[0].x_mas, [1.0, 2.0, 4.0, 5.0]);
        assert_eq!((kept[0].cov_mas2.len(), kept[0].rv_km_s.len()), (4, 0));
        let mut solution = Solution {
            members: (0..4)
                .map(|row| Membership {
                    track: 0,
                    epoch: 0,
                    row,
                    probability: 1.0,
                    share: 1.0,
                    dx_mas: 0.0,
                    dy_mas: 0.0,
                    flags: Flags::default(),
                })
                .collect(),
            epochs: vec![EpochReport {
                n_list: 4,
                ..EpochReport::default()
            }],
            ..Solution::default()
        };
        solution.rivals.push(Rival {
            tangle: 0,
            rank: 1,
            ln_odds: -1.0,
            change: "L00001 drops one:2".to_owned(),
        });
        discards.restore(&mut solution, &["one"]);
        assert_eq!(solution.rivals[0].change, "L00001 drops one:4");
        let rows: Vec<usize> = solution.members.iter().map(|m| m.row).collect();
        assert_eq!(rows, [1, 2, 4, 5]);
        let gone: Vec<usize> = solution.leftovers.iter().map(|l| l.row).collect();
        assert_eq!(gone, [0, 3]);
        assert_eq!(solution.epochs[0].n_list, 6);
    }
}
