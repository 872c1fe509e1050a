//! What is known before linking: stars with names, and radial velocities taken apart from images.

/// A star of an existing list. Positions in the common frame at its own epoch.
#[derive(Clone, Debug, PartialEq)]
pub struct KnownStar {
    pub name: String,
    pub epoch_yr: f64,
    pub x_mas: f64,
    pub y_mas: f64,
    pub x_err_mas: Option<f64>,
    pub y_err_mas: Option<f64>,
    pub vx_mas_yr: Option<f64>,
    pub vy_mas_yr: Option<f64>,
    pub vx_err_mas_yr: Option<f64>,
    pub vy_err_mas_yr: Option<f64>,
    pub mag: Option<f64>,
}

/// One radial velocity, of a star named or found at a place.
#[derive(Clone, Debug, PartialEq)]
pub struct StarVelocity {
    pub time_yr: f64,
    pub star: WhichStar,
    pub rv_km_s: f64,
    pub rv_err_km_s: f64,
}

/// The star a velocity belongs to.
#[derive(Clone, Debug, PartialEq)]
pub enum WhichStar {
    Named(String),
    /// Position in the common frame at the time of the velocity.
    At {
        x_mas: f64,
        y_mas: f64,
    },
}
