//! The command line: definitions, and headless runs. Holds no logic of its own.

mod args;
mod maps;
mod run;
mod show;
mod tips;

pub use args::{Cli, Command, Common};

use crate::error::{ErrorKind, Result};
use clap::CommandFactory;
use show::Show;
use std::io::Write;
use std::path::Path;
use std::process::ExitCode;

/// All done.
const DONE: u8 = 0;
/// An input failed; the others are done.
const INPUT_FAILED: u8 = 1;
/// Wrong usage.
const WRONG_USAGE: u8 = 2;

/// Does what `cli` asks for and says how it went; see the contract for the exit status.
pub fn execute(cli: &Cli) -> ExitCode {
    let show = Show::new(cli.common.quiet);
    if let Some(threads) = cli.common.threads {
        // Fails only when a pool is there already, which the first lines of the program rule out.
        let _ = rayon::ThreadPoolBuilder::new()
            .num_threads(usize::from(threads))
            .build_global();
    }
    let done = match &cli.command {
        None => open_window(cli, &show),
        Some(command) => headless(command, &cli.common, &show),
    };
    ExitCode::from(done.unwrap_or_else(|error| {
        show.error(&error.to_string());
        match error.kind() {
            ErrorKind::Setting => WRONG_USAGE,
            _ => INPUT_FAILED,
        }
    }))
}

fn headless(command: &Command, common: &Common, show: &Show) -> Result<u8> {
    match command {
        Command::Run {
            jobs,
            out,
            workers,
            monte_carlo,
            model_fit,
        } => {
            let opinions = run::Opinions {
                monte_carlo: *monte_carlo,
                model_fit: *model_fit,
            };
            let failed = run::run_all(jobs, out, *workers, opinions, common, show)?;
            if failed > 0 {
                show.note(&format!("{failed} of {} jobs failed", jobs.len()));
                return Ok(INPUT_FAILED);
            }
        }
        Command::Inspect { file, json } => maps::inspect(file, *json, common)?,
        Command::Convert { input, output } => maps::convert(input, output, common, show)?,
        Command::Tip {
            scan,
            out,
            support,
            threshold,
            smoothing,
            feature_radius,
            textbook,
            known,
            json,
        } => {
            let how = maps::TipOptions {
                support: *support,
                threshold: *threshold,
                smoothing: *smoothing,
                feature_radius: *feature_radius,
                textbook: *textbook,
                known: known.as_deref(),
            };
            maps::tip(scan, out, &how, *json, common, show)?;
        }
        Command::Compare(args) => tips::compare(args, common, show)?,
        Command::Reach(args) => tips::reach(args, common, show)?,
        Command::Reconstruct {
            scan,
            tip,
            out,
            certainty,
        } => {
            maps::reconstruct(scan, tip, out, certainty.as_deref(), common, show)?;
        }
        Command::Simulate { surface, tip, out } => {
            maps::simulate(surface, tip, out, common, show)?;
        }
        Command::Completions { shell } => {
            let mut text = Vec::new();
            clap_complete::generate(*shell, &mut Cli::command(), "truewidth", &mut text);
            print_bytes(&text);
        }
        Command::Manual => print_bytes(&manual()),
    }
    Ok(DONE)
}

/// The manual: the program's page and one section for each command, from the same definitions.
fn manual() -> Vec<u8> {
    let mut text = Vec::new();
    let command = Cli::command();
    let mut pages = vec![command.clone()];
    pages.extend(command.get_subcommands().map(|sub| {
        let name = format!("truewidth-{}", sub.get_name());
        sub.clone().name(name.clone()).display_name(name)
    }));
    for page in pages {
        // Writing to a vector cannot fail.
        let _ = clap_mangen::Man::new(page).render(&mut text);
    }
    text
}

fn print_bytes(bytes: &[u8]) {
    // A closed pipe is the reader's choice.
    let _ = std::io::stdout().lock().write_all(bytes);
}

/// Opens the window on the file or on the demo job; where there is none, runs the job headless.
fn open_window(cli: &Cli, show: &Show) -> Result<u8> {
    let Some(why) = window_or_why(cli)? else {
        return Ok(DONE);
    };
    show.note(&format!("{why}; running the job headless"));
    let job = opening_job(cli)?;
    let stem = job.path.clone().unwrap_or_else(|| job.scan_path());
    let folder = Path::new("results").join(stem.file_stem().unwrap_or_default());
    let text = show.during("job", |progress| run::run_job(&job, &folder, progress))?;
    println!("{text}");
    Ok(DONE)
}

fn opening_job(cli: &Cli) -> Result<crate::job::Job> {
    match &cli.file {
        Some(path) => run::open_job(path, &cli.common),
        None => crate::job::demo(),
    }
}

/// Runs the window until it is closed; where it cannot be opened, says why.
#[cfg(feature = "window")]
fn window_or_why(cli: &Cli) -> Result<Option<String>> {
    use crate::window::{self, Start};
    let common = &cli.common;
    let bare = common.pitch.is_none() && common.height_unit.is_none() && common.map.is_none();
    let start = match &cli.file {
        // A file that cannot be opened as it is becomes a question in the window.
        Some(path) if bare => Start::file(path),
        _ => Start::InMemory(Box::new(opening_job(cli)?)),
    };
    Ok(window::run(start).err().map(|why| why.to_string()))
}

/// Says why there is no window.
#[cfg(not(feature = "window"))]
fn window_or_why(_cli: &Cli) -> Result<Option<String>> {
    Ok(Some("no display: this build has no window".to_owned()))
}
