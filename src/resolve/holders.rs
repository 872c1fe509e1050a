//! Which stars hold each detection of an epoch: a full table for the whole field, or a short
//! list for a small part of it.

use super::star::Group;

#[derive(Clone, Debug)]
pub enum Holders {
    /// One group per detection.
    All(Vec<Group>),
    /// Only held detections, by number.
    Few(Vec<(u32, Group)>),
}

impl Default for Holders {
    fn default() -> Self {
        Self::Few(Vec::new())
    }
}

const NOBODY: Group = Group::EMPTY;

impl Holders {
    /// Nobody holds any of `n` detections.
    #[must_use]
    pub fn all(n: usize) -> Self {
        Self::All(vec![Group::default(); n])
    }

    /// The stars that hold a detection.
    #[must_use]
    pub fn of(&self, d: usize) -> &Group {
        match self {
            Self::All(groups) => &groups[d],
            Self::Few(held) => held
                .binary_search_by_key(&(d as u32), |h| h.0)
                .map_or(&NOBODY, |i| &held[i].1),
        }
    }

    pub fn push(&mut self, d: u32, k: u32) {
        match self {
            Self::All(groups) => groups[d as usize].push(k),
            Self::Few(held) => match held.binary_search_by_key(&d, |h| h.0) {
                Ok(i) => held[i].1.push(k),
                Err(i) => held.insert(i, (d, Group::of(&[k]))),
            },
        }
    }

    pub fn remove(&mut self, d: u32, k: u32) {
        match self {
            Self::All(groups) => groups[d as usize].remove(k),
            Self::Few(held) => {
                if let Ok(i) = held.binary_search_by_key(&d, |h| h.0) {
                    held[i].1.remove(k);
                }
            }
        }
    }

    /// Every detection that is held, with its stars, by number.
    pub fn held(&self) -> impl Iterator<Item = (usize, &Group)> {
        let (all, few) = match self {
            Self::All(groups) => (groups.as_slice(), [].as_slice()),
            Self::Few(held) => ([].as_slice(), held.as_slice()),
        };
        all.iter()
            .enumerate()
            .chain(few.iter().map(|(d, g)| (*d as usize, g)))
            .filter(|(_, g)| !g.is_empty())
    }
}
