//! The order of stages, and everything that runs in parallel.

pub mod observer;
pub mod settings;

pub use observer::{Observer, Silent};
pub use settings::Settings;
