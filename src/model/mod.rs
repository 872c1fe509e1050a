//! Every type that crosses a stage or reaches a file. No algorithm, no input or output.

pub mod campaign;
pub mod change;
pub mod claim;
pub mod detection;
pub mod flag;
pub mod known;
pub mod motion;
pub mod note;
pub mod region;
pub mod result;
pub mod ruling;
pub mod time;
