//! What the command line understands. Parsing has no side effect.

use crate::heightmap::Pitch;
use crate::job::Threshold;
use crate::units::Length;
use clap::{Args, Parser, Subcommand};
use std::path::PathBuf;

/// Corrects scanning-probe height maps for the finite probe tip and measures dimensions on them,
/// as scanned and corrected, each with an uncertainty.
#[derive(Debug, Parser)]
#[command(
    name = "truewidth",
    version,
    about,
    long_about = "Corrects scanning-probe height maps for the finite probe tip and measures \
dimensions on them, as scanned and corrected, each with an uncertainty.\n\n\
Without a command it opens the window on FILE (a scan or a job), or on the demo job. Where there \
is no display it says so and runs the job headless instead.",
    after_help = "Exit status: 0 all done; 1 an input failed (the others are done); 2 wrong usage.\n\
Results go to stdout, progress and messages to stderr.\n\
The estimate is no substitute for a calibrated instrument, local procedures or accredited practice.",
    args_conflicts_with_subcommands = true,
    subcommand_negates_reqs = true
)]
pub struct Cli {
    /// What to do; the window without one.
    #[command(subcommand)]
    pub command: Option<Command>,

    /// A scan or a job file (.toml) to open in the window; the demo job without one.
    pub file: Option<PathBuf>,

    /// What holds for every command.
    #[command(flatten)]
    pub common: Common,
}

/// Options of every command.
#[derive(Debug, Clone, Default, Args)]
pub struct Common {
    /// Pixel pitch for files that carry none: "2nm", or "2nm,4nm" for x and y.
    #[arg(long, global = true, value_name = "LENGTH[,LENGTH]", value_parser = parse_pitch)]
    pub pitch: Option<Pitch>,

    /// Unit of the heights for files that carry none: pm, nm, um, mm, m.
    #[arg(long, global = true, value_name = "UNIT", value_parser = parse_unit)]
    pub height_unit: Option<String>,

    /// Which map of a file that holds several, counted from 0.
    #[arg(long, global = true, value_name = "N")]
    pub map: Option<usize>,

    /// No progress and no messages except errors.
    #[arg(long, short, global = true)]
    pub quiet: bool,

    /// Number of computing threads [default: all].
    #[arg(long, global = true, value_name = "N", value_parser = clap::value_parser!(u16).range(1..))]
    pub threads: Option<u16>,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Run every stage of each job, headless, and write its record.
    ///
    /// Per job the folder DIR/STEM/ (the stem of the job file) gets result.json, report.html, surface.npy,
    /// certainty.npy and tip.npy. A scan may stand in place of a job: everything is then left to
    /// the program.
    Run {
        /// Job files (.toml) or scans.
        #[arg(required = true, value_name = "JOB")]
        jobs: Vec<PathBuf>,
        /// Folder for the records.
        #[arg(long, value_name = "DIR", default_value = "results")]
        out: PathBuf,
        /// Jobs run at the same time.
        #[arg(long, value_name = "N", default_value_t = 1, value_parser = clap::value_parser!(u16).range(1..))]
        workers: u16,
        /// Draw the whole chain N times (100 or more) for a second interval beside each budget's.
        #[arg(long, value_name = "N")]
        monte_carlo: Option<usize>,
        /// Fit a model of each feature to the scan as a second opinion.
        #[arg(long)]
        model_fit: bool,
    },
    /// Say what a file holds: format, size, pitch, unit, height range, voids, noise, SHA-256.
    Inspect {
        /// The file.
        file: PathBuf,
        /// As JSON.
        #[arg(long)]
        json: bool,
    },
    /// Convert from one open format to another, by ending.
    Convert {
        /// The file to read.
        #[arg(value_name = "IN")]
        input: PathBuf,
        /// The file to write (.tiff, .npy, .png; a tip also .stl, .ply: closed mesh, nm).
        #[arg(value_name = "OUT")]
        output: PathBuf,
    },
    /// Estimate the tip from a scan: blindly, or with --known from a certified shape.
    Tip {
        /// The scan; levelled before the estimate.
        scan: PathBuf,
        /// The file to write the tip to (.npy, .tiff, .stl, .ply).
        #[arg(long, value_name = "TIP")]
        out: PathBuf,
        /// Full width of the tip grid [default: from the scan].
        #[arg(long, value_name = "LENGTH")]
        support: Option<Length>,
        /// Noise threshold: "auto" or a length.
        #[arg(long, value_name = "auto|LENGTH", default_value = "auto")]
        threshold: Threshold,
        /// Smoothing before the blind estimate, standard deviation [default: matched to the noise].
        #[arg(long, value_name = "LENGTH", conflicts_with = "known")]
        smoothing: Option<Length>,
        /// Apex radius of the scan's sharpest feature, where it is known: it is taken off.
        #[arg(long, value_name = "LENGTH", conflicts_with = "known")]
        feature_radius: Option<Length>,
        /// The published iteration with a threshold, without smoothing, for comparison.
        #[arg(long, conflicts_with = "known")]
        textbook: bool,
        /// The certified shape that the scan shows: a file with the keys of a job's known shape,
        /// and model and use where wanted.
        #[arg(long, value_name = "FILE.toml", conflicts_with = "threshold")]
        known: Option<PathBuf>,
        /// Print the tip object of result.json.
        #[arg(long)]
        json: bool,
    },
    /// Compare two tips: whether the later one is worn.
    Compare(super::tips::CompareArgs),
    /// Tell what a tip reaches of a planned feature, and the bluntest tip that would do.
    Reach(super::tips::ReachArgs),
    /// Take the tip's effect off a scan: erosion and certainty.
    Reconstruct {
        /// The scan; taken as it is, without levelling.
        scan: PathBuf,
        /// The tip (.npy or a height map, apex up).
        #[arg(long, value_name = "TIP")]
        tip: PathBuf,
        /// The file to write the surface to.
        #[arg(long, value_name = "SURFACE")]
        out: PathBuf,
        /// The file to write the certainty map to (.npy, uint8).
        #[arg(long, value_name = "MAP")]
        certainty: Option<PathBuf>,
    },
    /// Make the scan that a tip records of a surface: dilation.
    Simulate {
        /// The surface.
        surface: PathBuf,
        /// The tip (.npy or a height map, apex up).
        #[arg(long, value_name = "TIP")]
        tip: PathBuf,
        /// The file to write the scan to.
        #[arg(long, value_name = "SCAN")]
        out: PathBuf,
    },
    /// Print the completions for a shell.
    Completions {
        /// The shell.
        shell: clap_complete::Shell,
    },
    /// Print the manual page (roff).
    Manual,
}

fn parse_pitch(text: &str) -> Result<Pitch, String> {
    let length = |part: &str| part.parse::<Length>().map_err(|e| e.to_string());
    let pitch = match text.split_once(',') {
        Some((x, y)) => Pitch {
            x: length(x)?.nm(),
            y: length(y)?.nm(),
        },
        None => Pitch::square(length(text)?.nm()),
    };
    pitch.checked().map_err(|e| e.to_string())
}

fn parse_unit(text: &str) -> Result<String, String> {
    crate::units::nanometres_per(text)
        .map(|_| text.to_owned())
        .ok_or_else(|| "give one of pm, nm, um, mm, m".to_owned())
}

#[cfg(test)]
mod tests {
    use super::*;
    use clap::CommandFactory;

    #[test]
    fn the_definitions_hold_together() {
        Cli::command().debug_assert();
    }

    #[test]
    fn a_pitch_for_both_axes_or_for_each() {
        assert_eq!(parse_pitch("2nm"), Ok(Pitch::square(2.0)));
        assert_eq!(parse_pitch("2nm,0.5 um"), Ok(Pitch { x: 2.0, y: 500.0 }));
        assert!(parse_pitch("2").unwrap_err().contains("no unit"));
        assert!(parse_pitch("0nm").is_err());
    }

    #[test]
    fn a_bare_file_opens_the_window() {
        let cli = Cli::parse_from(["truewidth", "scan.tiff", "--pitch", "2nm"]);
        assert!(cli.command.is_none());
        assert_eq!(cli.file, Some(PathBuf::from("scan.tiff")));
        assert_eq!(cli.common.pitch, Some(Pitch::square(2.0)));
    }
}
