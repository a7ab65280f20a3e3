//! truewidth corrects scanning-probe height maps for the finite probe tip and measures
//! dimensions on them, as scanned and corrected, with uncertainties that hold.
//!
//! # Map
//!
//! The path is Scan, Tip, Surface, Dimensions, Record. Data flows downwards in this list; nothing
//! imports upwards. [`error`], [`units`] and [`progress`] serve every room.
//!
//! - [`heightmap`]: the one data type all rooms share. Knows no file format and no widget.
//! - [`files`]: readers and writers of open formats. Never levels, measures, or guesses a unit.
//! - [`leveling`]: planes, polynomials, rows, noise and drift. Never touches a file.
//! - [`morphology`]: the engine. No I/O, no clock, no widget, no panic on data.
//! - [`tip`]: models, blind estimate, read-outs, band.
//! - [`uncertainty`]: budgets and coverage. Does not know what a line is.
//! - [`dimensions`]: one small file per kind of measurand.
//! - [`virtual_scan`]: scans whose truth is known and finer than the pixel; for samples, tests and
//!   validation only.
//! - [`job`]: the job file, the ordered stages, what is recomputed when a setting changes. The only
//!   door that `window` and [`cli`] use.
//! - [`record`]: `result.json`, report, tables, figures. Computes no result.
//! - [`cli`] and `window`: two ways in. Hold no method of measurement.
//!
//! # Invariants
//!
//! - Heights are `[[row, col]]` in nm, row = slow axis (y), col = fast axis (x); a void is NaN.
//!   Lengths are bare numbers in nm, angles in degrees, parsed and formatted at the edge.
//! - A tip is odd by odd, apex 0 at the centre, heights at most 0, `-inf` outside.
//! - Voids and all that lies outside a map constrain nothing.
//! - What cannot be had is `None` with the reason beside it: no number is invented.
//! - The same job gives the same bytes for any number of threads, apart from the time of writing.
//! - Long work takes a [`progress::Progress`], reports to it and answers its cancel.

#![deny(missing_docs)]
// The fast loops rest on safe vectors; nothing here needs a sanitizer.
#![deny(unsafe_code)]

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
