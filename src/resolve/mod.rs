//! Choosing which tracks exist and what every detection is, and what is proven about it.

pub mod belief;
pub mod bound;
pub mod cost;
pub mod exact;
pub mod grid;
pub mod grow;
pub mod holders;
pub mod joint;
pub mod pack;
pub mod posterior;
pub mod program;
pub mod rivals;
pub mod scene;
pub mod star;
pub mod work;
