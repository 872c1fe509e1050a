//! Choosing which tracks exist and what every detection is, and what is proven about it.

pub mod bound;
pub mod exact;
pub mod pack;
pub mod posterior;
pub mod program;
pub mod rivals;
