//! A made-up campaign as files: campaign file, lists, and the truth beside them.

use std::fmt::Write as _;
use std::io::{self, Write};
use std::path::Path;

use super::settings::{MockBlend, MockUnit};
use super::{MockCampaign, MockEpoch};
use crate::io::run_dir::{Existing, OutputError, RunDir};

/// Writes the campaign into a directory, whole or not at all.
///
/// # Errors
/// When the directory may not be replaced or cannot be written.
pub fn write_campaign(
    campaign: &MockCampaign,
    target: &Path,
    existing: Existing<'_>,
) -> Result<(), OutputError> {
    let out = RunDir::begin(target, existing)?;
    out.write("campaign.toml", |w| {
        w.write_all(campaign_text(campaign).as_bytes())
    })?;
    for (k, epoch) in campaign.epochs.iter().enumerate() {
        out.write(&list_name(k), |w| list(w, epoch))?;
    }
    out.write("truth/recipe.toml", |w| recipe(w, campaign))?;
    out.write("truth/stars.csv", |w| stars(w, campaign))?;
    out.write("truth/members.csv", |w| members(w, campaign))?;
    out.write("truth/orbits.csv", |w| orbits(w, campaign))?;
    out.write("truth/epochs.csv", |w| epochs(w, campaign))?;
    out.write("truth/classes.csv", |w| classes(w, campaign))?;
    out.finish()
}

/// The recipe, with the command that makes the campaign from it again.
fn recipe(w: &mut dyn Write, c: &MockCampaign) -> io::Result<()> {
    writeln!(
        w,
        "# asterskein mock --recipe recipe.toml --seed {} --out DIR",
        c.seed
    )?;
    let text = c.settings.to_toml().map_err(io::Error::other)?;
    w.write_all(text.as_bytes())
}

fn list_name(epoch: usize) -> String {
    format!("lists/e{epoch:03}.csv")
}

fn campaign_text(c: &MockCampaign) -> String {
    let s = &c.settings;
    let mut t = String::new();
    let mut line = |text: String| {
        t.push_str(&text);
        t.push('\n');
    };
    line("[field]".to_owned());
    line(format!("name = {:?}", s.name));
    line(format!("reference_epoch = {:?}", s.reference_epoch));
    line(format!(
        "origin = {{ ra_deg = {:?}, dec_deg = {:?} }}",
        s.ra_deg, s.dec_deg
    ));
    if let Some(m) = s.mass() {
        line(format!(
            "\n[central_mass]\nmass_msun = {:?}\ndistance_pc = {:?}\nx_mas = 0.0\ny_mas = 0.0",
            m.mass_msun, m.distance_pc
        ));
    }
    line(format!(
        "\n[stars]\nspeed_mas_yr = {:.1}",
        c.sky.speed_mas_yr()
    ));
    let used = |k: usize| c.epochs.iter().any(|e| e.plan.instrument == k);
    for (_, i) in s.instrument.iter().enumerate().filter(|(k, _)| used(*k)) {
        let unit = match i.unit {
            MockUnit::Mas => "mas",
            MockUnit::Arcsec => "arcsec",
            MockUnit::Pixel => "pixel",
        };
        let blend = match i.blend {
            MockBlend::Psf => "psf",
            MockBlend::Centroid => "centroid",
        };
        line(format!("\n[instrument.{}]", i.name));
        line(format!("fwhm_mas = {:?}", i.fwhm_mas));
        line(format!("limit_mag = {:?}", i.limit_mag));
        line(format!("unit = \"{unit}\""));
        if i.unit == MockUnit::Pixel {
            line(format!("scale_mas = {:?}", i.scale_mas));
            line(format!("angle_deg = {:?}", i.angle_deg));
        }
        line(format!("frame = {:?}", i.frame));
        line(format!("blend = \"{blend}\""));
    }
    for (k, e) in c.epochs.iter().enumerate() {
        line(format!("\n[[epoch]]\ntime = {:?}", e.plan.time_yr));
        line(format!("file = \"{}\"", list_name(k)));
        line(format!(
            "instrument = \"{}\"",
            s.instrument[e.plan.instrument].name
        ));
    }
    t
}

fn list(w: &mut dyn Write, epoch: &MockEpoch) -> io::Result<()> {
    let lie = &epoch.plan.lie;
    // Thousandths of a mas in whatever unit the list has.
    let digits = 3 + lie.unit_mas.log10().round().max(0.0) as usize;
    let mut text = String::from("id,x,y,x_err,y_err,mag,mag_err\n");
    for (d, id) in epoch.detected.iter().zip(&epoch.ids) {
        let p = lie.to_list(d.at_mas);
        let err = d.err_mas.map(|e| e / lie.unit_mas);
        let _ = writeln!(
            text,
            "{id},{:.digits$},{:.digits$},{:.digits$},{:.digits$},{:.4},{:.4}",
            p[0], p[1], err[0], err[1], d.mag, d.mag_err
        );
    }
    w.write_all(text.as_bytes())
}

fn stars(w: &mut dyn Write, c: &MockCampaign) -> io::Result<()> {
    writeln!(
        w,
        "star,kind,mag,x_mas,y_mas,vx_mas_yr,vy_mas_yr,ax_mas_yr2,ay_mas_yr2"
    )?;
    for (k, s) in c.sky.stars.iter().enumerate() {
        let kind = if s.curved { "kepler" } else { "linear" };
        let a = c.sky.acceleration_mas_yr2(k);
        writeln!(
            w,
            "{k},{kind},{},{},{},{},{},{},{}",
            s.mag, s.r_mas[0], s.r_mas[1], s.v_mas_yr[0], s.v_mas_yr[1], a[0], a[1]
        )?;
    }
    Ok(())
}

fn members(w: &mut dyn Write, c: &MockCampaign) -> io::Result<()> {
    writeln!(w, "epoch,id,star,share")?;
    for (epoch, e) in c.epochs.iter().enumerate() {
        for (d, id) in e.detected.iter().zip(&e.ids) {
            for (star, share) in &d.parts {
                writeln!(w, "{epoch},{id},{star},{share:.4}")?;
            }
            if d.parts.is_empty() {
                writeln!(w, "{epoch},{id},,0")?;
            }
        }
    }
    Ok(())
}

fn orbits(w: &mut dyn Write, c: &MockCampaign) -> io::Result<()> {
    writeln!(
        w,
        "star,a_mas,ecc,inc_rad,node_rad,peri_rad,t0_yr,period_yr"
    )?;
    let curved = c.sky.stars.iter().enumerate().filter(|(_, s)| s.curved);
    for (k, o) in curved.filter_map(|(k, s)| Some((k, s.orbit?))) {
        writeln!(
            w,
            "{k},{},{},{},{},{},{},{}",
            o.semi_major_mas,
            o.eccentricity,
            o.inclination_rad,
            o.node_rad,
            o.arg_pericentre_rad,
            o.t_pericentre_yr,
            o.period_yr
        )?;
    }
    Ok(())
}

/// Transformations as list = c0 + c1 x + c2 y + c3 x^2 + c4 xy + c5 y^2, quadratic terms zero.
fn epochs(w: &mut dyn Write, c: &MockCampaign) -> io::Result<()> {
    let names: Vec<String> = (0..12).map(|k| format!("c{}{}", k / 6, k % 6)).collect();
    writeln!(w, "epoch,unit_mas,{}", names.join(","))?;
    for (k, e) in c.epochs.iter().enumerate() {
        let row: Vec<String> = (e.plan.lie.coef.iter())
            .map(|[c0, c1, c2]| format!("{c0},{c1},{c2},0,0,0"))
            .collect();
        writeln!(w, "{k},{},{}", e.plan.lie.unit_mas, row.join(","))?;
    }
    Ok(())
}

fn classes(w: &mut dyn Write, c: &MockCampaign) -> io::Result<()> {
    writeln!(w, "star,n_det,strong,encounter,departure_mas")?;
    for (k, s) in c.classes.iter().enumerate() {
        writeln!(
            w,
            "{k},{},{},{},{:.3}",
            s.n_det,
            u8::from(s.strong),
            u8::from(s.encounter),
            s.departure_mas
        )?;
    }
    Ok(())
}
