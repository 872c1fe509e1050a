//! How stars move: propagation about a mass, fits, orbit elements.
//!
//! All orbits are relative to the mass: x east, y north, z away from the observer.

pub mod kepler;
