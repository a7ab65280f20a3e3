//! The job: its file, its ordered stages, what must be recomputed when a setting changes. The only
//! door that the window and the command line use.

mod demo;
mod ghost;
mod monte_carlo;
mod spec;
mod stages;
#[cfg(test)]
mod tests;
mod worker;

pub use crate::morphology::Reliability;
pub use demo::{data_folder, demo};
pub use ghost::{GhostTip, ghost_tip};
pub use spec::{
    Job, JobFile, LevelMethod, LevelSpec, MonteCarloSpec, ScanSpec, Threshold, TipFrom, TipShape,
    TipSpec,
};
pub use stages::{Outcome, Stages, SurfaceResult, TipOrReason, TipResult, open_tip};
pub use worker::Worker;
