//! Propagation, fits and elements against published values, high-precision cases and properties.

mod elements;
mod mass;
mod propagation;
mod reference;
mod starts;
mod terms;
#[path = "../outside/visual_binaries.rs"]
mod visual_binaries;
