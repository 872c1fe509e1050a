//! What a run may be told beyond the campaign. Budgets are counts, never seconds, so that a
//! run repeats byte for byte on any machine.

use serde::Serialize;

use crate::model::ruling::Ruling;

/// Settings of a run; the default is what `link` uses when nothing is said.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Settings {
    /// Worker threads, 0 = one per processor. Does not change the result.
    #[serde(skip)]
    pub threads: usize,
    /// Seed of every random draw.
    pub seed: u64,
    /// Fit GM/D^3 of the central mass along with the orbits.
    pub refine_mass: bool,
    /// Go on when an epoch cannot be placed in the common frame, leaving it out.
    pub allow_unplaced: bool,
    /// Side of the square tiles in which a wide field is worked through; `None`: chosen from
    /// the number of detections.
    pub tile_mas: Option<f64>,
    /// Decisions of a human: hard constraints.
    #[serde(skip)]
    pub rulings: Vec<Ruling>,
}

impl Default for Settings {
    fn default() -> Self {
        Self {
            threads: 0,
            seed: 1,
            refine_mass: false,
            allow_unplaced: false,
            tile_mas: None,
            rulings: Vec::new(),
        }
    }
}
