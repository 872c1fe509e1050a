//! One file per command.

pub mod check;
pub mod list;
pub mod shell;
