//! Objects that somebody claims to have found, as read from a list of claims.

/// One claimed object.
#[derive(Clone, Debug, PartialEq)]
pub struct Claim {
    pub name: String,
    /// First line of the claim in its file.
    pub line: usize,
    pub body: ClaimBody,
}

/// How a claim says where its object is.
#[derive(Clone, Debug, PartialEq)]
pub enum ClaimBody {
    /// Positions or detections, in the order of the file.
    Points(Vec<ClaimPoint>),
    /// A track of the result: its number.
    Track(usize),
    Orbit(ClaimOrbit),
}

/// One claimed position.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ClaimPoint {
    /// `None`: a position with its own date that is no epoch of the campaign.
    pub epoch: Option<usize>,
    pub t_yr: f64,
    /// Common frame; `None` when only a detection is named.
    pub at_mas: Option<[f64; 2]>,
    /// Standard errors of the position, where given.
    pub err_mas: Option<[f64; 2]>,
    /// Row of the named detection in the epoch's canonical order.
    pub row: Option<usize>,
    pub mag: Option<f64>,
}

/// A claimed orbit about the central mass.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct ClaimOrbit {
    pub semi_major_mas: f64,
    /// The claim's own period, which carries its own mass; `None`: the campaign's mass holds.
    pub period_yr: Option<f64>,
    pub eccentricity: f64,
    pub inclination_deg: f64,
    pub node_deg: f64,
    pub arg_pericentre_deg: f64,
    pub t_pericentre_yr: f64,
    pub mag: Option<f64>,
}
