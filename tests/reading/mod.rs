//! Reading campaigns and lists: what is accepted, and what every fault says.

mod accepted;
mod bad_input;
mod check;
mod damage;
mod formats;
mod injected;
mod known;
mod sky;

use std::path::{Path, PathBuf};

/// A folder of `fixtures/`.
fn fixture(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("fixtures")
        .join(name)
}
