//! The one table of flags. README's section on flags is generated from it and tested.

/// A set of flags.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Flags(pub u32);

macro_rules! flags {
    ($($bit:literal $name:ident $word:literal $meaning:literal;)*) => {
        impl Flags {
            $(pub const $name: Self = Self(1 << $bit);)*
        }
        /// (flag, word in tables, meaning), in the order in which they are written.
        pub const TABLE: &[(Flags, &str, &str)] = &[$((Flags::$name, $word, $meaning),)*];
    };
}

flags! {
    0 AMBIGUOUS "ambiguous" "the best rival explanation is within 3 nats, or the membership probability is below 0.9";
    1 MERGED "merged" "shares a detection with another track";
    2 CROSSING "crossing" "came within a resolution element of another track; its identity after that is less sure";
    3 UNPROVEN "unproven" "belongs to a tangle without a certificate";
    4 CAPPED "capped" "a limit on the search was reached here";
    5 FEW_EPOCHS "few_epochs" "rests on fewer than five detections of its own";
    6 SEASON_GAP "season_gap" "crosses a gap during which its path could not be followed";
    7 FIELD_EDGE "field_edge" "comes within a resolution element of the edge of the field";
    8 COMPANION_ARTEFACT "companion_artefact" "keeps close company with a much brighter star and may be an artefact of it";
    9 TWIN "twin" "a second detection of the same star exists in one epoch";
    10 OFF_MODEL "off_model" "residuals are too large, or of one sign in a row";
    11 NOT_CENTRAL "not_central" "the acceleration does not point at the central mass, or exceeds mu/R^2";
    12 FLUX_JUMP "flux_jump" "a member is much brighter or fainter than the track";
    13 VARIABLE "variable" "the magnitude varies by more than its errors";
    14 WEAK_FRAME "weak_frame" "lies in an epoch whose frame rests on few anchors";
    15 RULED "ruled" "a human ruling decided";
}

impl Flags {
    #[must_use]
    pub fn has(self, other: Self) -> bool {
        self.0 & other.0 != 0
    }
    pub fn set(&mut self, other: Self) {
        self.0 |= other.0;
    }
    /// The flags of a cell; words that are not in the table are passed over.
    #[must_use]
    pub fn from_words(cell: &str) -> Self {
        let mut flags = Self::default();
        for word in cell.split(';') {
            if let Some((flag, ..)) = TABLE.iter().find(|(_, w, _)| *w == word) {
                flags.set(*flag);
            }
        }
        flags
    }
    /// Words joined by `;`, in table order.
    #[must_use]
    pub fn words(self) -> String {
        let mut out = String::new();
        for (flag, word, _) in TABLE {
            if self.has(*flag) {
                if !out.is_empty() {
                    out.push(';');
                }
                out.push_str(word);
            }
        }
        out
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn bits_and_words_are_unique() {
        for (k, a) in TABLE.iter().enumerate() {
            for b in &TABLE[k + 1..] {
                assert!(a.0.0 & b.0.0 == 0 && a.1 != b.1, "{} and {}", a.1, b.1);
            }
        }
    }
}
