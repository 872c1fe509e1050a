//! What a made-up campaign is made of: every number has a default, and a TOML file may change
//! any of them.

use serde::{Deserialize, Serialize};

/// The whole recipe. Numbers and laws are invented; they are meant to be like real data, not
/// like any one data set.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct MockSettings {
    pub name: String,
    pub reference_epoch: f64,
    pub ra_deg: f64,
    pub dec_deg: f64,
    pub times: Times,
    pub central_mass: Mass,
    pub stars: StarSettings,
    pub noise: NoiseSettings,
    pub blends: BlendSettings,
    pub falses: FalseSettings,
    /// In the order of the campaign file.
    pub instrument: Vec<MockInstrument>,
}

impl Default for MockSettings {
    fn default() -> Self {
        Self {
            name: "Lantern core".to_owned(),
            reference_epoch: 2007.5,
            ra_deg: 197.15,
            dec_deg: -41.02,
            times: Times::default(),
            central_mass: Mass::default(),
            stars: StarSettings::default(),
            noise: NoiseSettings::default(),
            blends: BlendSettings::default(),
            falses: FalseSettings::default(),
            instrument: default_instruments(),
        }
    }
}

impl MockSettings {
    /// A field without a central mass.
    #[must_use]
    pub fn plain() -> Self {
        let mut s = Self {
            name: "Harbour field".to_owned(),
            central_mass: Mass {
                mass_msun: 0.0,
                ..Mass::default()
            },
            ..Self::default()
        };
        s.stars.count = 1200;
        s.stars.radius_mas = 9000.0;
        s.stars.speed_mas_yr = 3.5;
        s.stars.foreground_fraction = 0.02;
        s.times.epochs = 12;
        s
    }

    /// Reads a TOML text; keys that are not given keep the values of `base`'s defaults.
    ///
    /// # Errors
    /// When the text is not TOML, a key is unknown or a value is out of range; the message
    /// carries line and column.
    pub fn from_toml(text: &str) -> Result<Self, SettingsError> {
        let settings: Self = toml::from_str(text)?;
        settings.check()?;
        Ok(settings)
    }

    /// The whole recipe as TOML, from which [`MockSettings::from_toml`] makes the same one.
    ///
    /// # Errors
    /// Never for values that TOML knows.
    pub fn to_toml(&self) -> Result<String, toml::ser::Error> {
        toml::to_string(self)
    }

    /// The central mass, where there is one.
    #[must_use]
    pub fn mass(&self) -> Option<&Mass> {
        (self.central_mass.mass_msun > 0.0).then_some(&self.central_mass)
    }

    /// Is every number usable?
    ///
    /// # Errors
    /// Names the first key whose value is not.
    pub fn check(&self) -> Result<(), SettingsError> {
        let positive = |key: &'static str, value: f64| {
            if value > 0.0 && value.is_finite() {
                Ok(())
            } else {
                Err(SettingsError::Range {
                    key,
                    value,
                    wanted: "a number above 0",
                })
            }
        };
        let fraction = |key: &'static str, value: f64| {
            if (0.0..=1.0).contains(&value) {
                Ok(())
            } else {
                Err(SettingsError::Range {
                    key,
                    value,
                    wanted: "a fraction between 0 and 1",
                })
            }
        };
        positive("stars.count", self.stars.count as f64)?;
        positive("stars.radius_mas", self.stars.radius_mas)?;
        positive("stars.speed_mas_yr", self.stars.speed_mas_yr)?;
        positive("stars.slope_dex_mag", self.stars.slope_dex_mag)?;
        if self.stars.slope_dex_mag >= 0.8 {
            return Err(SettingsError::Range {
                key: "stars.slope_dex_mag",
                value: self.stars.slope_dex_mag,
                wanted: "less than 0.8, or the light of unseen stars has no limit",
            });
        }
        positive(
            "stars.faint_mag - bright_mag",
            self.stars.faint_mag - self.stars.bright_mag,
        )?;
        positive("stars.min_semi_major_mas", self.stars.min_semi_major_mas)?;
        positive(
            "stars.max_semi_major_mas - min_semi_major_mas",
            self.stars.max_semi_major_mas - self.stars.min_semi_major_mas,
        )?;
        positive("3 - stars.cusp", 3.0 - self.stars.cusp)?;
        fraction("stars.variable_fraction", self.stars.variable_fraction)?;
        fraction("stars.foreground_fraction", self.stars.foreground_fraction)?;
        positive("times.epochs", self.times.epochs as f64)?;
        positive(
            "times.last_yr - first_yr",
            self.times.last_yr - self.times.first_yr,
        )?;
        fraction("times.season_start", self.times.season_start)?;
        fraction("times.season_end", self.times.season_end)?;
        positive(
            "times.season_end - season_start",
            self.times.season_end - self.times.season_start,
        )?;
        if self.central_mass.mass_msun != 0.0 {
            positive("central_mass.mass_msun", self.central_mass.mass_msun)?;
            positive("central_mass.distance_pc", self.central_mass.distance_pc)?;
        }
        for i in &self.instrument {
            positive("instrument.fwhm_mas", i.fwhm_mas)?;
            positive("instrument.resolution", i.resolution)?;
            positive("instrument.to_yr - from_yr", i.to_yr - i.from_yr)?;
            positive("instrument.scale_mas", i.scale_mas)?;
        }
        positive("number of instruments", self.instrument.len() as f64)
    }
}

/// What is wrong with a recipe.
#[derive(Debug, thiserror::Error)]
pub enum SettingsError {
    #[error(transparent)]
    Toml(#[from] toml::de::Error),
    #[error("{key} is {value}, expected {wanted}")]
    Range {
        key: &'static str,
        value: f64,
        wanted: &'static str,
    },
}

/// When exposures are taken: one season a year, as evenly spread over the years as possible.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct Times {
    pub first_yr: f64,
    pub last_yr: f64,
    pub epochs: usize,
    /// The season as fractions of a year.
    pub season_start: f64,
    pub season_end: f64,
}

impl Default for Times {
    fn default() -> Self {
        Self {
            first_yr: 1997.2,
            last_yr: 2017.7,
            epochs: 48,
            season_start: 0.2,
            season_end: 0.66,
        }
    }
}

/// The central mass, at rest at the origin; with `mass_msun = 0` there is none, and all stars are
/// on straight lines.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct Mass {
    pub mass_msun: f64,
    pub distance_pc: f64,
}

impl Default for Mass {
    fn default() -> Self {
        Self {
            mass_msun: 3.4e6,
            distance_pc: 7600.0,
        }
    }
}

/// The stars. Near a mass their orbits follow a cusp; elsewhere they are spread evenly.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct StarSettings {
    pub count: usize,
    /// Radius of the field (half-width without a mass).
    pub radius_mas: f64,
    /// Space density r^-cusp.
    pub cusp: f64,
    pub min_semi_major_mas: f64,
    pub max_semi_major_mas: f64,
    /// Further stars on tight orbits, semi-major axes up to `inner_semi_major_mas`.
    pub inner: usize,
    pub inner_semi_major_mas: f64,
    pub bright_mag: f64,
    pub faint_mag: f64,
    /// log10 of the number of stars per magnitude rises by this much a magnitude.
    pub slope_dex_mag: f64,
    pub variable_fraction: f64,
    pub variable_mag: f64,
    /// One-dimensional dispersion without a mass.
    pub speed_mas_yr: f64,
    /// Stars on straight lines that do not belong to the cluster.
    pub foreground_fraction: f64,
    pub foreground_speed_mas_yr: f64,
}

impl Default for StarSettings {
    fn default() -> Self {
        Self {
            count: 450,
            radius_mas: 1400.0,
            cusp: 1.75,
            min_semi_major_mas: 55.0,
            max_semi_major_mas: 8000.0,
            inner: 0,
            inner_semi_major_mas: 350.0,
            bright_mag: 10.4,
            faint_mag: 18.1,
            slope_dex_mag: 0.28,
            variable_fraction: 0.05,
            variable_mag: 0.35,
            speed_mas_yr: 5.0,
            foreground_fraction: 0.0,
            foreground_speed_mas_yr: 25.0,
        }
    }
}

/// How measurements err.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct NoiseSettings {
    /// Signal to noise at which a source is listed.
    pub threshold: f64,
    /// Scatter (ln) of the threshold from place to place.
    pub threshold_scatter: f64,
    /// Share of positions with `wing_factor` times the usual error.
    pub wing_fraction: f64,
    pub wing_factor: f64,
    /// Scatter of the photometric zero point from epoch to epoch, and of single magnitudes.
    pub zero_point_mag: f64,
    pub flat_field_mag: f64,
    /// Scatter (ln) of stated over true error, by epoch and by detection.
    pub stated_epoch: f64,
    pub stated_detection: f64,
    /// Part of the crowding error that stated errors know of.
    pub stated_crowding: f64,
    /// Multiplies the crowding error by stars fainter than any in the truth.
    pub crowding: f64,
}

impl Default for NoiseSettings {
    fn default() -> Self {
        Self {
            threshold: 5.0,
            threshold_scatter: 0.08,
            wing_fraction: 0.04,
            wing_factor: 3.0,
            zero_point_mag: 0.02,
            flat_field_mag: 0.015,
            stated_epoch: 0.08,
            stated_detection: 0.15,
            stated_crowding: 0.6,
            crowding: 1.0,
        }
    }
}

/// How neighbours disturb one another.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct BlendSettings {
    /// Softness of the resolution limit, relative.
    pub softness: f64,
    /// Pull between pairs just resolved, in fwhm, and its range beyond the limit.
    pub pull_fwhm: f64,
    pub pull_range_fwhm: f64,
    /// Growth of the error of pairs just resolved.
    pub blur: f64,
    /// A star is lost in the light of a brighter one at u fwhm when it is fainter by more than
    /// `halo_mag + halo_slope_mag * log10(u)`.
    pub halo_mag: f64,
    pub halo_slope_mag: f64,
    pub halo_softness_mag: f64,
}

impl Default for BlendSettings {
    fn default() -> Self {
        Self {
            softness: 0.08,
            pull_fwhm: 0.07,
            pull_range_fwhm: 0.3,
            blur: 0.6,
            halo_mag: 1.9,
            halo_slope_mag: 4.2,
            halo_softness_mag: 0.35,
        }
    }
}

/// Detections that are no stars.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct FalseSettings {
    /// Uniform ones, as a fraction of the list.
    pub uniform_fraction: f64,
    /// Number per epoch around every star brighter than the limit by `bright_mag`.
    pub ring: f64,
    pub bright_mag: f64,
    /// Share of those bright stars with an artefact that keeps them company for years.
    pub companion_fraction: f64,
    pub companion_seen: f64,
}

impl Default for FalseSettings {
    fn default() -> Self {
        Self {
            uniform_fraction: 0.012,
            ring: 0.1,
            bright_mag: 4.0,
            companion_fraction: 0.15,
            companion_seen: 0.6,
        }
    }
}

/// Where the position of a blend lies.
#[derive(Clone, Copy, Debug, Deserialize, Serialize, PartialEq, Eq)]
#[serde(rename_all = "lowercase")]
pub enum MockBlend {
    Psf,
    Centroid,
}

/// Unit of a list.
#[derive(Clone, Copy, Debug, Deserialize, Serialize, PartialEq, Eq)]
#[serde(rename_all = "lowercase")]
pub enum MockUnit {
    Mas,
    Arcsec,
    Pixel,
}

/// One instrument and what is unknown about its pointing.
#[derive(Clone, Debug, Deserialize, Serialize)]
#[serde(default, deny_unknown_fields)]
pub struct MockInstrument {
    pub name: String,
    pub from_yr: f64,
    pub to_yr: f64,
    pub fwhm_mas: f64,
    pub limit_mag: f64,
    /// Error of the brightest stars.
    pub floor_mas: f64,
    /// Resolution limit relative to the limit of two peaks (1: blends are told by eye).
    pub resolution: f64,
    pub blend: MockBlend,
    pub unit: MockUnit,
    /// mas per pixel.
    pub scale_mas: f64,
    /// Position angle of +y.
    pub angle_deg: f64,
    /// What the campaign file says: known, shift, similarity, affine.
    pub frame: String,
    /// Scatter of the true pointing, orientation, scale and shear about the nominal ones.
    pub pointing_mas: f64,
    pub turn_deg: f64,
    pub stretch: f64,
}

impl Default for MockInstrument {
    fn default() -> Self {
        Self {
            name: "camera".to_owned(),
            from_yr: 1900.0,
            to_yr: 2100.0,
            fwhm_mas: 52.0,
            limit_mag: 16.8,
            floor_mas: 0.6,
            resolution: 0.72,
            blend: MockBlend::Psf,
            unit: MockUnit::Mas,
            scale_mas: 13.0,
            angle_deg: 0.0,
            frame: "known".to_owned(),
            pointing_mas: 0.0,
            turn_deg: 0.0,
            stretch: 0.0,
        }
    }
}

fn default_instruments() -> Vec<MockInstrument> {
    vec![
        MockInstrument {
            name: "speckle".to_owned(),
            to_yr: 2003.8,
            fwhm_mas: 66.0,
            limit_mag: 15.7,
            floor_mas: 1.5,
            resolution: 0.95,
            blend: MockBlend::Centroid,
            unit: MockUnit::Arcsec,
            ..MockInstrument::default()
        },
        MockInstrument {
            from_yr: 2003.0,
            to_yr: 2010.9,
            ..MockInstrument::default()
        },
        MockInstrument {
            name: "laser".to_owned(),
            from_yr: 2010.0,
            fwhm_mas: 47.0,
            limit_mag: 17.3,
            floor_mas: 0.35,
            resolution: 0.66,
            ..MockInstrument::default()
        },
    ]
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_recipe_survives_being_written() {
        for s in [MockSettings::default(), MockSettings::plain()] {
            let back = MockSettings::from_toml(&s.to_toml().unwrap()).unwrap();
            assert_eq!(format!("{s:?}"), format!("{back:?}"));
        }
    }

    #[test]
    fn defaults_are_usable_and_faults_are_named() {
        MockSettings::default().check().unwrap();
        MockSettings::plain().check().unwrap();
        let s = MockSettings::from_toml("name = \"x\"\n[stars]\ncount = 7\n").unwrap();
        assert_eq!((s.stars.count, s.times.epochs), (7, 48));
        let e = MockSettings::from_toml("[stars]\ncuont = 7\n")
            .unwrap_err()
            .to_string();
        assert!(e.contains("cuont") && e.contains("line 2"), "{e}");
        let e = MockSettings::from_toml("[stars]\nslope_dex_mag = 0.9\n").unwrap_err();
        assert!(
            e.to_string().starts_with("stars.slope_dex_mag is 0.9"),
            "{e}"
        );
    }
}
