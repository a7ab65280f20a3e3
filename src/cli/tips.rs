//! `truewidth compare` and `truewidth reach`: tips on their own.

use super::args::Common;
use super::show::Show;
use crate::error::{Error, ErrorKind, Result};
use crate::files;
use crate::heightmap::HeightMap;
use crate::job::{self, TipResult};
use crate::record;
use crate::tip::compare::Settings;
use crate::tip::model::Model;
use crate::tip::reach::{self, Feature, Known, Need, Plan, Probe};
use crate::units::Length;
use clap::Args;
use std::path::{Path, PathBuf};
use std::sync::Arc;

/// What `compare` understands.
#[derive(Debug, Args)]
pub struct CompareArgs {
    /// The earlier tip: a tip file, or a job (.toml) whose tip is found first.
    #[arg(value_name = "FIRST")]
    first: PathBuf,
    /// The later tip, likewise.
    #[arg(value_name = "SECOND")]
    second: PathBuf,
    /// Standard uncertainty of the surface of tips that are files.
    #[arg(long, value_name = "LENGTH")]
    uncertainty: Option<Length>,
    /// Compare down to this depth below the apex [default: as deep as both are known].
    #[arg(long, value_name = "LENGTH")]
    depth: Option<Length>,
    /// Shift the second tip sideways to the best fit, beside registration by the apex.
    #[arg(long)]
    best_shift: bool,
    /// The file to write the difference map to: second minus first, void where not compared.
    #[arg(long, value_name = "MAP")]
    out: Option<PathBuf>,
    /// As JSON.
    #[arg(long)]
    json: bool,
}

/// What `reach` understands.
#[derive(Debug, Args)]
#[command(group = clap::ArgGroup::new("probe").required(true).args(["tip", "radius"]))]
#[command(group = clap::ArgGroup::new("feature").required(true)
    .args(["trench_width", "ridge_width", "particle"]))]
pub struct ReachArgs {
    /// The tip: a tip file, or a job (.toml) whose tip is found first.
    #[arg(long, value_name = "TIP")]
    tip: Option<PathBuf>,
    /// Apex radius of a sphere-cone, instead of a tip.
    #[arg(
        long,
        value_name = "LENGTH",
        requires = "half_angle",
        conflicts_with = "tip"
    )]
    radius: Option<Length>,
    /// Half-angle of the sphere-cone, degrees from its axis.
    #[arg(long, value_name = "DEGREES", requires = "radius")]
    half_angle: Option<f64>,
    /// A trench of this width at half depth.
    #[arg(long, value_name = "LENGTH", requires = "depth")]
    trench_width: Option<Length>,
    /// A ridge of this width at half height.
    #[arg(long, value_name = "LENGTH", requires = "height")]
    ridge_width: Option<Length>,
    /// A particle of this diameter.
    #[arg(long, value_name = "LENGTH")]
    particle: Option<Length>,
    /// Depth of the trench.
    #[arg(long, value_name = "LENGTH", requires = "trench_width")]
    depth: Option<Length>,
    /// Height of the ridge.
    #[arg(long, value_name = "LENGTH", requires = "ridge_width")]
    height: Option<Length>,
    /// Ridges side by side at this pitch.
    #[arg(long, value_name = "LENGTH", requires = "ridge_width")]
    grating_pitch: Option<Length>,
    /// Angle of the walls, degrees from the horizontal.
    #[arg(long, value_name = "DEGREES", default_value_t = 90.0)]
    wall_angle: f64,
    /// Azimuth across the feature, degrees from +x towards +y; for a tip.
    #[arg(
        long,
        value_name = "DEGREES",
        default_value_t = 0.0,
        allow_negative_numbers = true
    )]
    azimuth: f64,
    /// Height fractions at which widths are told.
    #[arg(long, value_name = "FRACTION", value_delimiter = ',', default_values_t = [0.1, 0.5, 0.9])]
    at: Vec<f64>,
    /// Width excess at half height that you accept, for the bluntest tip.
    #[arg(long, value_name = "LENGTH")]
    excess: Option<Length>,
    /// As JSON.
    #[arg(long)]
    json: bool,
}

fn open(
    path: &Path,
    uncertainty: Option<Length>,
    common: &Common,
    show: &Show,
) -> Result<Arc<TipResult>> {
    let options = files::OpenOptions {
        pitch: common.pitch,
        height_unit: common.height_unit.clone(),
        map: common.map,
    };
    let name = path.file_name().unwrap_or_default().to_string_lossy();
    show.during(&name, |progress| {
        job::open_any_tip(path, &options, uncertainty, progress)
    })
}

/// `truewidth compare`
pub fn compare(args: &CompareArgs, common: &Common, show: &Show) -> Result<()> {
    let first = open(&args.first, args.uncertainty, common, show)?;
    let second = open(&args.second, args.uncertainty, common, show)?;
    let settings = Settings {
        depth_nm: args.depth.map(Length::nm),
        best_shift: args.best_shift,
    };
    let found = job::compare_tips(&first, &second, &settings)?;
    if let Some(path) = &args.out {
        let map = HeightMap::new(found.difference.clone(), found.pitch)?;
        files::write(path, &map)?;
        show.note(&format!("wrote {}", path.display()));
    }
    if args.json {
        println!("{:#}", record::comparison_json(&found));
    } else {
        print!("{}", record::comparison_text(&found));
    }
    Ok(())
}

/// `truewidth reach`
pub fn reach(args: &ReachArgs, common: &Common, show: &Show) -> Result<()> {
    let feature = args.feature()?;
    let need = Need {
        excess_nm: args.excess.map(Length::nm),
        at: 0.5,
    };
    let plan: Plan = match (&args.tip, args.radius, args.half_angle) {
        (Some(path), _, _) => {
            let tip = open(path, None, common, show)?;
            job::plan(&tip, args.azimuth, &feature, &args.at, &need)?
        }
        (None, Some(radius), Some(half_angle)) => {
            let radius = radius.nm();
            let model = Model::SphereCone { radius, half_angle }.checked()?;
            let known = Known {
                probe: Probe::Formula(model),
                band: None,
                exercised_depth_nm: None,
                radius_nm: Some(radius),
                half_angle_deg: Some(half_angle),
            };
            reach::plan(&known, &feature, &args.at, &need)?
        }
        _ => {
            return Err(Error::new(ErrorKind::Setting, "no tip was given")
                .remedy("Give --tip, or --radius and --half-angle"));
        }
    };
    if args.json {
        println!("{:#}", record::reach_json(&plan));
    } else {
        print!("{}", record::reach_text(&plan));
    }
    Ok(())
}

impl ReachArgs {
    fn feature(&self) -> Result<Feature> {
        let wall_angle = self.wall_angle;
        let nm = |length: Option<Length>| length.map_or(f64::NAN, Length::nm);
        let feature = match (self.trench_width, self.ridge_width, self.grating_pitch) {
            (Some(width), _, _) => Feature::Trench {
                width: width.nm(),
                depth: nm(self.depth),
                wall_angle,
            },
            (None, Some(width), None) => Feature::Ridge {
                width: width.nm(),
                height: nm(self.height),
                wall_angle,
            },
            (None, Some(width), Some(pitch)) => Feature::Grating {
                pitch: pitch.nm(),
                width: width.nm(),
                height: nm(self.height),
                wall_angle,
            },
            (None, None, _) => Feature::Particle {
                diameter: nm(self.particle),
            },
        };
        feature.checked()
    }
}
