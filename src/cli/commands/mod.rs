//! One file per command.

pub mod audit;
pub mod beside;
pub mod check;
pub mod explain;
pub mod handoff;
pub mod link;
pub mod list;
pub mod mock;
pub mod recover;
pub mod report;
pub mod score;
pub mod shell;
