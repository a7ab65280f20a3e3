//! What else speaks for or against a dimension, besides its budget.

use super::model_fit::ModelFit;
use crate::morphology::Reliability;
use serde::Serialize;

/// Second opinions and reliability; each `None` where it was not asked for or could not be had.
#[derive(Debug, Clone, PartialEq, Default, Serialize)]
pub struct Evidence {
    /// Fractions of the dimension's region that the tip touched.
    pub reliability: Option<Reliability>,
    /// A fitted model of the feature.
    pub model_fit: Option<ModelFit>,
    /// The whole chain, drawn many times.
    pub monte_carlo: Option<MonteCarlo>,
}

/// What many draws of the whole chain give for one corrected value (JCGM 101:2008).
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct MonteCarlo {
    /// Trials made.
    pub trials: usize,
    /// Trials that gave this value.
    pub count: usize,
    /// Mean of the draws.
    pub mean: f64,
    /// Standard deviation of the draws.
    pub u: f64,
    /// Lower end of the 95 % interval, one-sided effects of the tip included as in the budget's.
    pub low: f64,
    /// Its upper end.
    pub high: f64,
    /// Lower end of the shortest 95 % interval, the same added.
    pub shortest_low: f64,
    /// Its upper end.
    pub shortest_high: f64,
    /// By how much the ends may differ from the budget's before they disagree: numerical tolerance
    /// of one digit of u, and twice the doubt of the ends from the number of trials.
    pub tolerance: f64,
    /// Whether they agree; `None` where the budget gives no interval.
    pub agrees: Option<bool>,
}
