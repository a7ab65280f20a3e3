//! truewidth corrects scanning-probe height maps for the finite probe tip and measures
//! dimensions on them, as scanned and corrected, with uncertainties that hold.

#![deny(missing_docs)]

pub mod cli;
pub mod dimensions;
pub mod error;
pub mod files;
pub mod heightmap;
pub mod job;
pub mod leveling;
pub mod morphology;
pub mod progress;
pub mod record;
pub mod tip;
pub mod uncertainty;
pub mod units;
pub mod virtual_scan;
#[cfg(feature = "window")]
pub mod window;

pub use error::{Error, ErrorKind, Result};
