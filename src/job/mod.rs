//! The job: its file, its ordered stages, what must be recomputed when a setting changes. The only
//! door that the window and the command line use.

mod demo;
mod ghost;
mod known;
mod spec;
mod stages;
#[cfg(test)]
mod tests;
mod tips;
mod worker;

pub use demo::{data_folder, demo};
pub use ghost::{GhostTip, ghost_tip};
pub use known::{KnownShape, KnownSpec, Way};
pub use spec::{
    Job, JobFile, LevelMethod, LevelSpec, ScanSpec, Threshold, TipFrom, TipShape, TipSpec,
};
pub use stages::{Outcome, Reliability, Stages, SurfaceResult, TipOrReason, TipResult, open_tip};
pub use tips::{ShapeFigures, compare_tips, open_any_tip, plan, shape_figures};
pub use worker::Worker;
