//! The job: its file, its ordered stages, what must be recomputed when a setting changes. The only
//! door that the window and the command line use.

mod demo;
mod ghost;
mod known;
mod monte_carlo;
mod pairs;
mod spec;
mod stages;
#[cfg(test)]
mod tests;
mod tips;
mod worker;

pub use crate::morphology::Reliability;
pub use demo::{data_folder, demo};
pub use ghost::{GhostTip, ghost_tip};
pub use known::{KnownShape, KnownSpec, Way};
pub use pairs::{Further, Pairs};
pub use spec::{
    Job, JobFile, LevelMethod, LevelSpec, MonteCarloSpec, ScanSpec, Threshold, TipFrom, TipShape,
    TipSpec,
};
pub use stages::{Outcome, Stages, SurfaceResult, TipOrReason, TipResult, open_tip};
pub use tips::{ShapeFigures, compare_tips, open_any_tip, plan, shape_figures};
pub use worker::Worker;
