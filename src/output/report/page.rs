//! Puts the page together from its parts.

use std::io;

use minijinja::value::Value;
use minijinja::{Environment, context};

use super::columns::payload;
use super::data::build;
use super::select::{Budget, Scope, select};
use super::{ReportInput, path};

const PAGE: &str = include_str!("assets/page.html");
const STYLE: &str = include_str!("assets/style.css");
/// In the order in which they use each other.
const SCRIPT: &[&str] = &[
    include_str!("assets/data.js"),
    include_str!("assets/parts.js"),
    include_str!("assets/charts.js"),
    include_str!("assets/map.js"),
    include_str!("assets/field.js"),
    include_str!("assets/track.js"),
    include_str!("assets/tangle.js"),
    include_str!("assets/epoch.js"),
    include_str!("assets/extras.js"),
    include_str!("assets/main.js"),
];

/// Why no page could be made.
#[derive(Debug, thiserror::Error)]
pub enum ReportError {
    #[error("the report could not be put together: {0}")]
    Template(#[from] minijinja::Error),
    #[error("the report's data could not be written down: {0}")]
    Json(#[from] serde_json::Error),
    #[error("the report's data could not be packed: {0}")]
    Pack(#[from] io::Error),
}

/// The whole page as one text.
///
/// # Errors
/// None that data can cause; the error says which step failed.
pub fn html(input: &ReportInput, scope: &Scope, budget: Budget) -> Result<String, ReportError> {
    let selection = select(input, scope, budget);
    let (header, columns) = build(input, &selection);
    let data = payload(&serde_json::to_vec(&header)?, &columns)?;
    let s = input.solution;
    let summary = format!(
        "{} tracks from {} detections in {} epochs ({} to {}).",
        s.tracks.len(),
        input.epochs.iter().map(|e| e.len()).sum::<usize>(),
        input.epochs.len(),
        path::round(first_time(input), 2),
        path::round(last_time(input), 2),
    );
    let mut env = Environment::new();
    env.add_template("page.html", PAGE)?;
    let page = env.get_template("page.html")?;
    Ok(page.render(context! {
        field => &input.campaign.name,
        program => concat!(env!("CARGO_PKG_NAME"), " ", env!("CARGO_PKG_VERSION")),
        summary => summary,
        // Our own files and base64: nothing in them comes from a list.
        style => Value::from_safe_string(STYLE.to_owned()),
        script => Value::from_safe_string(SCRIPT.concat()),
        payload => Value::from_safe_string(data),
    })?)
}

fn first_time(input: &ReportInput) -> f64 {
    let times = input.campaign.epochs.iter().map(|e| e.time.yr());
    times.fold(f64::INFINITY, f64::min)
}

fn last_time(input: &ReportInput) -> f64 {
    let times = input.campaign.epochs.iter().map(|e| e.time.yr());
    times.fold(f64::NEG_INFINITY, f64::max)
}
