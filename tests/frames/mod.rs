//! Frames: maps, blind starts, whole campaigns with unknown frames.

mod campaigns;
mod made;
mod maps;
mod starts;
