//! The order of stages, and everything that runs in parallel.

pub mod estimate;
pub mod frames;
pub mod observer;
pub mod orbits;
pub mod pairs;
pub mod pipeline;
pub mod prepare;
pub mod reopen;
pub mod revolving;
pub mod rounds;
pub mod rulings;
pub mod seeds;
pub mod settings;

pub use frames::{Linked, link_lists};
pub use observer::{Observer, Silent};
pub use pipeline::{EngineError, link};
pub use settings::Settings;
