//! How stars move: propagation about a mass, fits, orbit elements.
//!
//! Orbits are relative to the mass: x east, y north, z away from the observer; mas, years.

pub mod elements;
pub mod kepler;
pub mod linear;
pub mod orbit_columns;
pub mod orbit_fit;
pub mod refine_mass;
pub mod start;
pub mod state;
pub mod state_fit;
pub mod terms;
pub mod three_points;
pub mod wander;
