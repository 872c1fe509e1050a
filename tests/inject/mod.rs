//! Made-up campaigns against what theory says of them.
mod confusion;
mod recover;
