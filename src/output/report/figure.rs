//! Figures for papers: the field, and one track, as SVG with dark ink on white.
//!
//! The same conventions as on the page: north up, east to the left, blue for tracks without
//! rivals, orange for confused ones, and a shape for everything that colour alone would say.

use std::fmt::Write as _;

use super::ReportInput;
use super::data::{confused, orbit_place};
use super::path::sample;
use super::select::{Budget, Scope, member_ranges, select};
use crate::model::motion::MotionKind;
use crate::model::result::Track;

/// Size of a figure.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct FigureStyle {
    /// Width in user units; lines and letters keep their size.
    pub width: f64,
}

impl Default for FigureStyle {
    fn default() -> Self {
        Self { width: 640.0 }
    }
}

const CALM: &str = "#2b5d9b";
const DOUBT: &str = "#b05200";
const MERGED: &str = "#7a2f8f";
const INK: &str = "#1c2230";

/// The field at the reference epoch: paths over the years seen, places, the central mass.
#[must_use]
pub fn field_map(input: &ReportInput, scope: &Scope, style: FigureStyle) -> String {
    let everything = Budget {
        detections: usize::MAX,
        tracks: usize::MAX,
    };
    let chosen = select(input, scope, everything);
    let tracks: Vec<&Track> = chosen
        .tracks
        .iter()
        .map(|&k| &input.solution.tracks[k])
        .collect();
    let x_limits = limits(tracks.iter().map(|t| t.x_mean_mas), 20.0);
    let y_limits = limits(tracks.iter().map(|t| t.y_mean_mas), 20.0);
    let plot = Plot::new(
        style.width,
        style.width,
        x_limits,
        y_limits,
        Axes {
            title: &input.campaign.name,
            x_label: "x, east (mas)",
            y_label: "y, north (mas)",
            flip_x: true,
            flip_y: false,
            equal: true,
        },
    );
    let mut area = String::new();
    let mags = limits(tracks.iter().filter_map(|t| t.mag), 0.1);
    for t in &tracks {
        let colour = if t.tangle.is_some() || confused(t.flags) {
            DOUBT
        } else {
            CALM
        };
        let path = path_of(input, t, t.first_yr, t.last_yr);
        polyline(
            &mut area,
            &plot,
            path.iter().map(|p| (p[1], p[2])),
            colour,
            0.7,
        );
        let place = place_of(input, t, input.campaign.reference.yr());
        let bright = t
            .mag
            .map_or(0.0, |m| (mags[1] - m) / (mags[1] - mags[0]).max(0.1));
        let _ = writeln!(
            area,
            r#"<circle cx="{:.2}" cy="{:.2}" r="{:.2}" fill="{colour}"/>"#,
            plot.px(place[0]),
            plot.py(place[1]),
            0.8 + 2.2 * bright.clamp(0.0, 1.0)
        );
    }
    if let Some(c) = &input.campaign.central {
        let (x, y) = (plot.px(c.x_mas), plot.py(c.y_mas));
        let _ = writeln!(
            area,
            r#"<path d="M{x:.2} {:.2}v14M{:.2} {y:.2}h14" stroke="{INK}" stroke-width="1.2"/>"#,
            y - 7.0,
            x - 7.0
        );
    }
    plot.document(&area)
}

/// One track in four plots: x, y, residuals in both, magnitude, against time.
#[must_use]
pub fn track_plot(input: &ReportInput, track: usize, style: FigureStyle) -> Option<String> {
    let t = input.solution.tracks.get(track)?;
    let range = member_ranges(input).get(track)?.clone();
    let members = &input.solution.members[range];
    let mut holders = std::collections::BTreeMap::new();
    for m in &input.solution.members {
        *holders.entry((m.epoch, m.row)).or_insert(0_usize) += 1;
    }
    let rows: Vec<Row> = members
        .iter()
        .filter_map(|m| {
            let e = input.epochs.get(m.epoch)?;
            let cov = e.cov_mas2.get(m.row)?;
            Some(Row {
                t: e.time.yr(),
                place: [e.x_mas[m.row], e.y_mas[m.row]],
                err: [cov.xx.max(0.0).sqrt(), cov.yy.max(0.0).sqrt()],
                residual: [m.dx_mas, m.dy_mas],
                mag: e.mag[m.row],
                mag_err: e.mag_err[m.row],
                merged: holders[&(m.epoch, m.row)] > 1,
                doubtful: m.probability < 0.9,
            })
        })
        .collect();
    let span = limits([t.first_yr, t.last_yr].into_iter(), 0.3);
    let path = path_of(input, t, span[0], span[1]);
    let (w, h) = (style.width, style.width * 0.42);
    let mut sheets = Vec::new();
    for (axis, label) in [(0, "x (mas)"), (1, "y (mas)")] {
        let values = rows.iter().map(|r| r.place[axis]);
        let y = limits(values.chain(path.iter().map(|p| p[1 + axis])), 2.0);
        let title = if axis == 0 { t.name.as_str() } else { "" };
        let plot = Plot::new(w, h, span, y, Axes::time(title, label));
        let mut area = band(&plot, &path, axis, false);
        polyline(
            &mut area,
            &plot,
            path.iter().map(|p| (p[0], p[1 + axis])),
            CALM,
            1.2,
        );
        for r in &rows {
            r.draw(&mut area, &plot, r.place[axis], r.err[axis]);
        }
        sheets.push((plot, area));
    }
    for (axis, label) in [(0, "dx (mas)"), (1, "dy (mas)")] {
        let ends = rows.iter().flat_map(|r| {
            [
                r.residual[axis] - r.err[axis],
                r.residual[axis] + r.err[axis],
            ]
        });
        let y = limits(ends.chain([0.0]), 0.5);
        let plot = Plot::new(w, h * 0.75, span, y, Axes::time("", label));
        let mut area = band(&plot, &path, axis, true);
        polyline(
            &mut area,
            &plot,
            span.iter().map(|&x| (x, 0.0)),
            "#777",
            0.8,
        );
        for r in &rows {
            r.draw(&mut area, &plot, r.residual[axis], r.err[axis]);
        }
        sheets.push((plot, area));
    }
    let seen = || rows.iter().filter(|r| r.mag.is_finite());
    if seen().count() > 0 {
        let y = limits(
            seen().flat_map(|r| {
                let e = if r.mag_err.is_finite() {
                    r.mag_err
                } else {
                    0.0
                };
                [r.mag - e, r.mag + e]
            }),
            0.2,
        );
        let mut axes = Axes::time("", "magnitude");
        axes.flip_y = true;
        let plot = Plot::new(w, h * 0.75, span, y, axes);
        let mut area = String::new();
        if let Some(m) = t.mag {
            polyline(&mut area, &plot, span.iter().map(|&x| (x, m)), CALM, 1.2);
        }
        for r in seen() {
            let e = if r.mag_err.is_finite() {
                r.mag_err
            } else {
                0.0
            };
            r.draw(&mut area, &plot, r.mag, e);
        }
        sheets.push((plot, area));
    }
    Some(stack(w, &sheets))
}

struct Row {
    t: f64,
    place: [f64; 2],
    err: [f64; 2],
    residual: [f64; 2],
    mag: f64,
    mag_err: f64,
    merged: bool,
    doubtful: bool,
}

impl Row {
    fn draw(&self, area: &mut String, plot: &Plot, value: f64, err: f64) {
        let (x, y) = (plot.px(self.t), plot.py(value));
        let _ = writeln!(
            area,
            r#"<path d="M{x:.2} {:.2}V{:.2}" stroke="{INK}" stroke-width="0.8"/>"#,
            plot.py(value - err),
            plot.py(value + err)
        );
        let (fill, stroke) = match (self.merged, self.doubtful) {
            (true, _) => (MERGED, "none"),
            (false, true) => ("#fff", DOUBT),
            (false, false) => (INK, "none"),
        };
        let _ = writeln!(
            area,
            r#"<circle cx="{x:.2}" cy="{y:.2}" r="2.4" fill="{fill}" stroke="{stroke}"/>"#
        );
        if self.merged {
            let _ = writeln!(
                area,
                r#"<circle cx="{x:.2}" cy="{y:.2}" r="4.4" fill="none" stroke="{MERGED}"/>"#
            );
        }
    }
}

/// Points of a predicted path: time, x, y, x_err, y_err.
fn path_of(input: &ReportInput, t: &Track, t0: f64, t1: f64) -> Vec<[f64; 5]> {
    if t1 <= t0 {
        let p = place_of(input, t, t0);
        return vec![[t0, p[0], p[1], p[2], p[3]]];
    }
    let path = sample(t0, t1, &|time| place_of(input, t, time));
    (0..path.t_yr.len())
        .map(|k| {
            [
                path.t_yr[k],
                path.x_mas[k],
                path.y_mas[k],
                path.x_err_mas[k],
                path.y_err_mas[k],
            ]
        })
        .collect()
}

/// Predicted place with errors: x, y, x_err, y_err \[mas\].
fn place_of(input: &ReportInput, t: &Track, time: f64) -> [f64; 4] {
    if let (MotionKind::Keplerian, Some(mass)) = (t.motion.kind, &input.campaign.central) {
        return orbit_place(&t.motion, mass, time);
    }
    let dt = time - input.campaign.reference.yr();
    let d = [1.0, dt, 0.5 * dt * dt];
    let mut out = [0.0; 4];
    for axis in 0..2 {
        for i in 0..3 {
            out[axis] += d[i] * t.sky.p[axis + 2 * i];
            for j in 0..3 {
                out[2 + axis] += d[i] * d[j] * t.sky.cov[axis + 2 * i][axis + 2 * j];
            }
        }
    }
    [
        out[0],
        out[1],
        out[2].max(0.0).sqrt(),
        out[3].max(0.0).sqrt(),
    ]
}

fn limits(values: impl Iterator<Item = f64>, least: f64) -> [f64; 2] {
    let (low, high) = values
        .filter(|v| v.is_finite())
        .fold((f64::MAX, f64::MIN), |(a, b), v| (a.min(v), b.max(v)));
    if low > high {
        return [-1.0, 1.0];
    }
    let pad = (0.05 * (high - low)).max(least);
    [low - pad, high + pad]
}

fn polyline(
    area: &mut String,
    plot: &Plot,
    points: impl Iterator<Item = (f64, f64)>,
    colour: &str,
    width: f64,
) {
    let mut d = String::new();
    for (k, (x, y)) in points.enumerate() {
        let letter = if k == 0 { 'M' } else { 'L' };
        let _ = write!(d, "{letter}{:.2} {:.2}", plot.px(x), plot.py(y));
    }
    let _ = writeln!(
        area,
        r#"<path d="{d}" fill="none" stroke="{colour}" stroke-width="{width}"/>"#
    );
}

fn band(plot: &Plot, path: &[[f64; 5]], axis: usize, about_zero: bool) -> String {
    let edge = |p: &[f64; 5], sign: f64| {
        let middle = if about_zero { 0.0 } else { p[1 + axis] };
        format!(
            "{:.2} {:.2}",
            plot.px(p[0]),
            plot.py(middle + sign * p[3 + axis])
        )
    };
    let up = path.iter().map(|p| edge(p, 1.0));
    let down = path.iter().rev().map(|p| edge(p, -1.0));
    let points: Vec<String> = up.chain(down).collect();
    format!(
        "<path d=\"M{}Z\" fill=\"{CALM}\" fill-opacity=\"0.18\"/>\n",
        points.join("L")
    )
}

struct Axes<'a> {
    title: &'a str,
    x_label: &'a str,
    y_label: &'a str,
    flip_x: bool,
    flip_y: bool,
    equal: bool,
}

impl<'a> Axes<'a> {
    fn time(title: &'a str, y_label: &'a str) -> Self {
        Self {
            title,
            x_label: "time (yr)",
            y_label,
            flip_x: false,
            flip_y: false,
            equal: false,
        }
    }
}

struct Plot<'a> {
    width: f64,
    height: f64,
    x: [f64; 2],
    y: [f64; 2],
    axes: Axes<'a>,
}

const LEFT: f64 = 64.0;
const RIGHT: f64 = 12.0;
const TOP: f64 = 24.0;
const BOTTOM: f64 = 40.0;

impl<'a> Plot<'a> {
    fn new(width: f64, height: f64, x: [f64; 2], y: [f64; 2], axes: Axes<'a>) -> Self {
        let mut plot = Self {
            width,
            height,
            x,
            y,
            axes,
        };
        if plot.axes.equal {
            let (w, h) = (width - LEFT - RIGHT, height - TOP - BOTTOM);
            let per = ((x[1] - x[0]) / w).max((y[1] - y[0]) / h);
            for (limits, pixels) in [(&mut plot.x, w), (&mut plot.y, h)] {
                let middle = 0.5 * (limits[0] + limits[1]);
                *limits = [middle - 0.5 * per * pixels, middle + 0.5 * per * pixels];
            }
        }
        plot
    }

    fn px(&self, x: f64) -> f64 {
        let share = (x - self.x[0]) / (self.x[1] - self.x[0]);
        let share = if self.axes.flip_x { 1.0 - share } else { share };
        LEFT + share * (self.width - LEFT - RIGHT)
    }

    fn py(&self, y: f64) -> f64 {
        let share = (y - self.y[0]) / (self.y[1] - self.y[0]);
        let share = if self.axes.flip_y { 1.0 - share } else { share };
        self.height - BOTTOM - share * (self.height - TOP - BOTTOM)
    }

    /// Frame, ticks and labels around what was drawn; `clip` names the clipping area.
    fn body(&self, area: &str, clip: usize) -> String {
        let (r, b) = (self.width - RIGHT, self.height - BOTTOM);
        let mut s = format!(
            "<clipPath id=\"a{clip}\"><rect x=\"{LEFT}\" y=\"{TOP}\" width=\"{:.2}\" \
             height=\"{:.2}\"/></clipPath>\n<g clip-path=\"url(#a{clip})\">\n{area}</g>\n\
             <path d=\"M{LEFT} {TOP}H{r:.2}V{b:.2}H{LEFT}Z\" fill=\"none\" stroke=\"{INK}\"/>\n",
            r - LEFT,
            b - TOP
        );
        for (v, text) in ticks(self.x, ((r - LEFT) / 90.0).max(2.0)) {
            let x = self.px(v);
            let _ = writeln!(
                s,
                r#"<path d="M{x:.2} {b:.2}v-5" stroke="{INK}"/><text x="{x:.2}" y="{:.2}" text-anchor="middle">{text}</text>"#,
                b + 15.0
            );
        }
        for (v, text) in ticks(self.y, ((b - TOP) / 45.0).max(2.0)) {
            let y = self.py(v);
            let _ = writeln!(
                s,
                r#"<path d="M{LEFT} {y:.2}h5" stroke="{INK}"/><text x="{:.2}" y="{:.2}" text-anchor="end">{text}</text>"#,
                LEFT - 6.0,
                y + 4.0
            );
        }
        let _ = writeln!(
            s,
            r#"<text x="{:.2}" y="{:.2}" text-anchor="middle">{}</text>"#,
            0.5 * (LEFT + r),
            self.height - 8.0,
            escaped(self.axes.x_label)
        );
        let middle = 0.5 * (TOP + b);
        let _ = writeln!(
            s,
            r#"<text transform="translate(14 {middle:.2}) rotate(-90)" text-anchor="middle">{}</text>"#,
            escaped(self.axes.y_label)
        );
        let _ = writeln!(
            s,
            r#"<text x="{LEFT}" y="16" font-weight="bold">{}</text>"#,
            escaped(self.axes.title)
        );
        s
    }

    fn document(&self, area: &str) -> String {
        document(self.width, self.height, &self.body(area, 0))
    }
}

fn stack(width: f64, sheets: &[(Plot, String)]) -> String {
    let mut body = String::new();
    let mut y = 0.0;
    for (k, (plot, area)) in sheets.iter().enumerate() {
        let _ = writeln!(
            body,
            "<g transform=\"translate(0 {y:.1})\">\n{}</g>",
            plot.body(area, k)
        );
        y += plot.height;
    }
    document(width, y, &body)
}

fn document(width: f64, height: f64, body: &str) -> String {
    format!(
        "<svg xmlns=\"http://www.w3.org/2000/svg\" viewBox=\"0 0 {width} {height:.0}\" \
         width=\"{width}\" height=\"{height:.0}\" font-family=\"sans-serif\" font-size=\"12\" \
         fill=\"{INK}\">\n<rect width=\"100%\" height=\"100%\" fill=\"#fff\"/>\n{body}</svg>\n"
    )
}

/// Round steps of 1, 2 or 5 times a power of ten.
fn ticks([low, high]: [f64; 2], wanted: f64) -> Vec<(f64, String)> {
    let rough = (high - low) / wanted;
    let power = 10_f64.powf(rough.log10().floor());
    let step = [1.0, 2.0, 5.0, 10.0]
        .into_iter()
        .map(|f| f * power)
        .find(|&s| s >= rough)
        .unwrap_or(10.0 * power);
    let decimals = (-(step.log10() + 1e-9).floor()).max(0.0) as usize;
    let mut out = Vec::new();
    let mut k = (low / step).ceil();
    while k * step <= high && out.len() < 100 {
        // Adding 0 turns a negative zero into zero.
        let v = k * step + 0.0;
        out.push((v, format!("{v:.decimals$}")));
        k += 1.0;
    }
    out
}

fn escaped(text: &str) -> String {
    text.replace('&', "&amp;")
        .replace('<', "&lt;")
        .replace('>', "&gt;")
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tick_labels() {
        let text: Vec<String> = ticks([-0.3, 0.3], 3.0).into_iter().map(|t| t.1).collect();
        assert_eq!(text, ["-0.2", "0.0", "0.2"]);
        assert_eq!(ticks([1995.9, 2020.1], 6.0)[0].1, "2000");
    }

    #[test]
    fn names_are_escaped() {
        assert_eq!(escaped("<a & b>"), "&lt;a &amp; b&gt;");
    }
}
