//! Budget, propagation, coverage. Knows nothing of what is measured.
//! Sources: JCGM 100:2008, JCGM 101:2008.

mod budget;
mod joint;
pub mod monte_carlo;
#[cfg(test)]
mod outside;
mod sample;

pub use budget::{Budget, Combined, coverage_factor};
pub use joint::Joint;
pub use sample::{Pooled, Series};

use serde::Serialize;

/// Shape of the distribution behind a component.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Distribution {
    /// Normal.
    Normal,
    /// Rectangular: half-width a gives u = a / sqrt 3.
    Rectangular,
    /// Triangular: half-width a gives u = a / sqrt 6.
    Triangular,
    /// A bound on one side; `u` is what enters the combination, the bound itself the interval.
    OneSided,
}

/// One line of a budget.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Component {
    /// What it is ("axis calibration").
    pub source: String,
    /// Standard uncertainty of the input, in the input's unit.
    pub u: f64,
    /// Its distribution.
    pub distribution: Distribution,
    /// Derivative of the result with respect to the input.
    pub sensitivity: f64,
    /// Degrees of freedom; `None` = infinite.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub degrees_of_freedom: Option<f64>,
}
