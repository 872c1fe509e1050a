//! A score as lined-up text.

use std::fmt;

use super::{ClassFigures, Score};

impl fmt::Display for Score {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        let figures = serde_json::to_value(&self.figures).map_err(|_| fmt::Error)?;
        // Struct order, not the alphabetic order of a JSON map.
        for (title, names) in GROUPS {
            writeln!(f, "{title}")?;
            for name in *names {
                let text = match &figures[*name] {
                    serde_json::Value::Number(n) if n.is_u64() => n.to_string(),
                    value => decimal(value.as_f64()),
                };
                writeln!(f, "  {name:<26}{text:>10}")?;
            }
        }
        if let Some(n) = self.pulls.tracks {
            writeln!(
                f,
                "Errors of {n} tracks (perfect: 0.683 and 0.954; misses in mas, mas/yr)"
            )?;
            for (name, value) in &self.pulls.figures {
                writeln!(f, "  {name:<34}{value:>10.4}")?;
            }
        }
        writeln!(f, "By class")?;
        writeln!(
            f,
            "  {:<10}{:>7}{:>11}{:>8}{:>8}{:>13}{:>15}",
            "", "stars", "precision", "recall", "whole", "link recall", "switches/star"
        )?;
        let classes = &self.by_class;
        for (name, c) in [
            ("strong", &classes.strong),
            ("encounter", &classes.encounter),
            ("calm", &classes.calm),
        ] {
            class_line(f, name, c)?;
        }
        if !self.calibration.is_empty() {
            writeln!(f, "Calibration")?;
            writeln!(
                f,
                "  {:<10}{:>9}{:>10}{:>8}",
                "stated", "members", "mean", "right"
            )?;
            for b in &self.calibration {
                writeln!(
                    f,
                    "  {:<10}{:>9}{:>10.3}{:>8.3}",
                    b.bin, b.n, b.mean_probability, b.fraction_right
                )?;
            }
        }
        Ok(())
    }
}

fn class_line(f: &mut fmt::Formatter<'_>, name: &str, c: &ClassFigures) -> fmt::Result {
    writeln!(
        f,
        "  {name:<10}{:>7}{:>11}{:>8}{:>8}{:>13}{:>15}",
        c.stars,
        decimal(c.identity_precision),
        decimal(c.identity_recall),
        decimal(c.whole_stars),
        decimal(c.link_recall),
        decimal(c.switches_per_star)
    )
}

fn decimal(value: Option<f64>) -> String {
    value.map_or_else(|| "n/a".to_owned(), |v| format!("{v:.4}"))
}

const GROUPS: &[(&str, &[&str])] = &[
    (
        "Identity",
        &[
            "identity_precision",
            "identity_recall",
            "identity_f1",
            "whole_stars",
            "eligible_stars",
            "tracks",
            "spurious_tracks",
            "fragment_tracks",
            "memberships",
            "true_memberships",
        ],
    ),
    (
        "Links",
        &[
            "link_precision",
            "link_recall",
            "identity_switches",
            "switches_per_star",
        ],
    ),
    (
        "Merged detections",
        &[
            "merge_precision",
            "merge_recall",
            "merge_recall_separable",
            "merge_all_right",
            "merged_detections",
            "merged_fraction",
        ],
    ),
    (
        "Probability and doubt",
        &[
            "wrong_memberships",
            "doubt_recall",
            "doubt_cost",
            "doubt_precision",
            "brier",
            "brier_constant",
            "calibration_error",
        ],
    ),
    (
        "Rows that should not exist",
        &[
            "two_in_one_epoch",
            "single_detection_tracks",
            "repeated_rows",
            "unknown_rows",
        ],
    ),
];

#[cfg(test)]
mod tests {
    use super::*;
    use crate::audit::score::Figures;

    #[test]
    fn every_figure_is_shown_once() {
        let all = serde_json::to_value(Figures::default()).unwrap();
        let mut wanted: Vec<&str> = all
            .as_object()
            .unwrap()
            .keys()
            .map(String::as_str)
            .collect();
        let mut shown: Vec<&str> = GROUPS.iter().flat_map(|g| g.1.iter().copied()).collect();
        wanted.sort_unstable();
        shown.sort_unstable();
        assert_eq!(wanted, shown);
    }
}
