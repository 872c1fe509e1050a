//! A track at work: its motion, magnitude and what it is at every epoch.

use crate::maths::cov2::Cov2;
use crate::motion::state_fit::{Fit, Obs};

/// Most stars that may share one detection.
pub const MAX_GROUP: usize = 5;

/// What a track is at one epoch.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Cell {
    /// Cannot be seen: outside the field, behind a mask, or a targeted list.
    Out,
    /// Should have been listed and was not.
    Missed,
    /// Alone in a detection.
    Alone(u32),
    /// One of several stars in a detection.
    Shared(u32),
}

impl Cell {
    /// The detection, if any.
    #[must_use]
    pub fn detection(self) -> Option<u32> {
        match self {
            Self::Alone(d) | Self::Shared(d) => Some(d),
            Self::Out | Self::Missed => None,
        }
    }
}

#[derive(Clone, Debug)]
pub struct Star {
    pub fit: Fit,
    pub mag: f64,
    /// Variance of the mean magnitude.
    pub mag_var: f64,
    pub cells: Vec<Cell>,
    /// Places worked out from blends that took part in the fit: (epoch, place), by epoch.
    pub blends: Vec<(u32, Obs)>,
    /// Evidence that the general cost does not hold \[nats\]: of pairs in a short campaign.
    pub ln_extra: f64,
    /// Evidence with everything else fixed \[nats\], from the last revision.
    pub worth: f64,
}

/// A star as predicted at one epoch, its own clean detection there left out.
#[derive(Clone, Copy, Debug)]
pub struct Pred {
    /// False when the star cannot be seen at this epoch (or no longer exists).
    pub active: bool,
    pub x: f64,
    pub y: f64,
    pub cov: Cov2,
    pub mag: f64,
    pub mag_var: f64,
    pub flux: f64,
    /// Chance of standing out from neighbours' wings.
    pub contrast: f64,
    /// How much a neighbour presses on its position (0..1).
    pub press: f64,
    /// ln(1 - chance of being listed).
    pub ln_miss: f64,
    /// ln of the chance of being apart from every neighbour.
    pub ln_apart: f64,
}

impl Pred {
    pub const NONE: Self = Self {
        active: false,
        x: 0.0,
        y: 0.0,
        cov: Cov2 {
            xx: 1.0,
            xy: 0.0,
            yy: 1.0,
        },
        mag: 0.0,
        mag_var: 1.0,
        flux: 0.0,
        contrast: 1.0,
        press: 0.0,
        ln_miss: 0.0,
        ln_apart: 0.0,
    };
}

/// The stars that share one detection.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct Group {
    n: u8,
    m: [u32; MAX_GROUP],
}

impl Group {
    pub const EMPTY: Self = Self {
        n: 0,
        m: [0; MAX_GROUP],
    };

    #[must_use]
    pub fn of(members: &[u32]) -> Self {
        let mut g = Self::default();
        for &k in members {
            g.push(k);
        }
        g
    }
    #[must_use]
    pub fn members(&self) -> &[u32] {
        &self.m[..self.n as usize]
    }
    #[must_use]
    pub fn len(&self) -> usize {
        self.n as usize
    }
    #[must_use]
    pub fn is_empty(&self) -> bool {
        self.n == 0
    }
    #[must_use]
    pub fn is_full(&self) -> bool {
        self.n as usize == MAX_GROUP
    }
    /// Adds a star; a full group stays as it is.
    pub fn push(&mut self, k: u32) {
        if !self.is_full() {
            self.m[self.n as usize] = k;
            self.n += 1;
        }
    }
    pub fn remove(&mut self, k: u32) {
        if let Some(i) = self.members().iter().position(|&m| m == k) {
            self.m.copy_within(i + 1..self.n as usize, i);
            self.n -= 1;
        }
    }
    /// Is any of these stars marked?
    #[must_use]
    pub fn touches(&self, marks: &[bool]) -> bool {
        self.members().iter().any(|&m| marks[m as usize])
    }
    /// Marks all of these stars, or clears their marks.
    pub fn mark(&self, marks: &mut [bool], value: bool) {
        for &m in self.members() {
            marks[m as usize] = value;
        }
    }
    #[must_use]
    pub fn has(&self, k: u32) -> bool {
        self.members().contains(&k)
    }
}
