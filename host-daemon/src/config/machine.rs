//! The machine file: one TOML file holds all that is known of one machine, from which come the controller's profile,
//! the settings of the watch, and the columns of a recorded file.

use super::{
    curve::{self, BestEfficiency, Curve, ImpellerReport},
    error::{self, ConfigError},
    reader::{Bounds, Document, Kind, top_level_kind},
    review,
    sensors::{self, Columns, Sensors},
    settings,
    units::{self, Dimension},
};
use crate::watch::WatchSettings;
use offcurve_core::{head::Taps, machine::Profile};
use std::path::{Path, PathBuf};

/// Standard acceleration of free fall, m/s²: taken where a site states none.
const STANDARD_GRAVITY: f64 = 9.806_65;
/// Relative standard uncertainty of a density that states none: cold water between 5 and 25 °C varies by 0.3 % in all.
/// Our choice.
const DENSITY_UNCERTAINTY: f64 = 0.001;

/// One machine, checked.
#[derive(Clone, Debug)]
#[non_exhaustive]
pub struct Machine {
    /// Its name, as people say it.
    pub name: String,
    /// The file it came from.
    pub file: PathBuf,
    /// What controller and daemon compute with.
    pub profile: Profile,
    /// How it is watched.
    pub watch: WatchSettings,
    /// How a recorded file of it is read.
    pub columns: Columns,
    /// The curve's point of best efficiency.
    pub best_efficiency: BestEfficiency,
    /// What was made of the impeller's dimensions, where there are any.
    pub impeller: Option<ImpellerReport>,
    /// What a person should know before trusting this file; it can be used all the same.
    pub warnings: Vec<String>,
}

impl Machine {
    /// Reads and checks a machine file.
    ///
    /// # Errors
    /// [`ConfigError::Read`], or [`ConfigError::Invalid`] with every problem found.
    pub fn load(path: &Path) -> Result<Self, ConfigError> {
        Self::parse(&error::read(path)?, path)
    }

    /// Checks the text of a machine file; `path` is for messages.
    ///
    /// # Errors
    /// [`ConfigError::Invalid`] with every problem found.
    pub fn parse(text: &str, path: &Path) -> Result<Self, ConfigError> {
        let document = Document::parse(text, path)?;
        if let Some(Kind::Plant) = top_level_kind(text) {
            let message =
                "this is a plant file; a machine file is wanted, one of those that its [[controller]] tables name";
            return Err(ConfigError::one(path, None, "", message));
        }
        let machine = read(&document, path);
        if machine.is_none() && document.is_clean() {
            // Every `None` above reports a problem; this is the net below.
            document.problem(None, "", "cannot be used, for a reason that has no message");
        }
        document.finish()?;
        machine.ok_or_else(|| ConfigError::one(path, None, "", "cannot be used"))
    }
}

fn read(document: &Document<'_>, path: &Path) -> Option<Machine> {
    let mut root = document.root();
    let name = root.require_text("machine", "Well pump 2");
    let tag = root.require_integer("tag", 0..=255);
    let kind = root.word("kind", &[("centrifugal pump", ())]);

    let gravity_there;
    let mut gravity = None;
    match root.section("site") {
        Some(mut site) => {
            gravity_there = site.has("gravity");
            gravity = site.quantity("gravity", Dimension::Acceleration, Bounds(9.7, 9.9));
            site.finish();
        }
        None => gravity_there = false,
    }
    let gravity = if gravity_there { gravity } else { Some(STANDARD_GRAVITY) };

    let (mut density, mut density_deviation) = (None, None);
    if let Some(mut fluid) = root.require_section("fluid") {
        density = fluid.require_quantity("density", Dimension::Density, Bounds(0.1, 20_000.0));
        let stated = fluid.uncertainty("density_uncertainty", Dimension::Density);
        let stated = if fluid.has("density_uncertainty") {
            stated
        } else {
            Some(units::Uncertainty { relative: DENSITY_UNCERTAINTY, constant: 0.0 })
        };
        density_deviation = density.zip(stated).map(|(rho, u)| (u.relative * rho).hypot(u.constant));
        if let (Some(deviation), Some(density)) = (density_deviation, density)
            && deviation > density
        {
            fluid.problem("density_uncertainty", "larger than the density");
            density_deviation = None;
        }
        fluid.finish();
    }

    let mut taps = None;
    if let Some(mut section) = root.require_section("taps") {
        let bore = Bounds(0.005, 10.0);
        let suction = section.require_quantity("suction_bore", Dimension::Length, bore);
        let discharge = section.require_quantity("discharge_bore", Dimension::Length, bore);
        let height = Bounds(-100.0, 100.0);
        let height = section.require_quantity("discharge_gauge_above_suction_gauge", Dimension::Length, height);
        section.finish();
        taps = (|| Some(Taps::from_bores(suction?, discharge?, height?, gravity?)))();
    }

    // A wrong gravity or density is already reported; the curve is then read with usual values to find its own mistakes.
    let curve: Option<Curve> = root
        .require_section("curve")
        .and_then(|section| curve::curve(section, gravity.unwrap_or(STANDARD_GRAVITY), density.or(Some(1000.0))));

    let impeller_there = root.has("impeller");
    let impeller = root.section("impeller").and_then(curve::impeller);

    let sensors_there = root.has("sensors");
    let mut sensors: Option<Sensors> = match root.section("sensors") {
        None if sensors_there => None,
        section => sensors::sensors(section),
    };
    let mut warnings = Vec::new();
    let limits_section = root.section("limits");
    let limits = settings::limits(limits_section);
    let controller_section = root.section("controller");
    let schedule = settings::schedule(controller_section, &mut warnings);
    let watch_section = root.section("watch");
    let watch = settings::watch(watch_section);
    let replay_section = root.section("replay");
    let columns = sensors::replay(replay_section, sensors.as_mut());
    root.finish();

    let (curve, sensors) = (curve?, sensors?);
    if impeller_there && impeller.is_none() {
        return None;
    }
    kind?;
    let table = match curve.points.table() {
        Ok(table) => table,
        Err(_) => {
            document.problem(None, "curve", "the points do not make a curve in the controller's precision");
            return None;
        }
    };
    let profile = Profile {
        machine: u8::try_from(tag?).ok()?,
        gravity: gravity? as f32,
        density: density? as f32,
        density_deviation: density_deviation? as f32,
        taps: taps?,
        reference_speed: curve.speed as f32,
        reference_density: curve.density as f32,
        best_efficiency_flow: curve.best.flow as f32,
        head_curve_deviation: curve.head_uncertainty as f32,
        power_curve_deviation: curve.power_uncertainty as f32,
        curve: table,
        impeller: impeller.map(|(impeller, _)| impeller),
        speed: sensors[0].setup,
        flow: sensors[1].setup,
        suction_pressure: sensors[2].setup,
        discharge_pressure: sensors[3].setup,
        shaft_torque: sensors[4].setup,
        limits: limits?,
        schedule: schedule?,
    };
    if let Err(refusal) = profile.check() {
        document.problem(None, "", format!("the controller would refuse this machine: {refusal:?}"));
        return None;
    }
    review::review(&profile, &curve, &sensors, &mut warnings);
    let torque_at_best = review::torque_at_best(&profile, &curve, &mut warnings);
    Some(Machine {
        name: name?.to_owned(),
        file: path.to_owned(),
        profile,
        watch: watch?,
        columns: columns?,
        best_efficiency: curve.best,
        impeller: impeller.map(|(_, report)| ImpellerReport { torque_at_best, ..report }),
        warnings,
    })
}
