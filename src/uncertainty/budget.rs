//! Combination of a budget: law of propagation, effective degrees of freedom, coverage factor.

use super::{Component, Distribution};
use statrs::distribution::{ContinuousCDF, StudentsT};

/// Components of one result, with the correlations between them.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Budget {
    components: Vec<Component>,
    /// `(i, j, r)`: correlation coefficient between inputs i and j.
    correlations: Vec<(usize, usize, f64)>,
}

/// What a budget adds up to.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Combined {
    /// Combined standard uncertainty.
    pub u: f64,
    /// Effective degrees of freedom; `None` = infinite.
    pub degrees_of_freedom: Option<f64>,
    /// Coverage factor: Student's t for the degrees of freedom truncated to an integer.
    pub k: f64,
    /// Expanded uncertainty `k u`.
    pub expanded: f64,
}

impl Budget {
    /// An empty budget: uncertainty 0.
    pub fn new() -> Self {
        Self::default()
    }

    /// Adds a component and returns its index. Components that are not finite are left out
    /// (their index still stands, with u = 0), those of zero size are kept out of the list only
    /// by the caller.
    pub fn add(&mut self, mut component: Component) -> usize {
        if !(component.u.is_finite() && component.sensitivity.is_finite()) {
            component.u = 0.0;
            component.sensitivity = 0.0;
        }
        self.components.push(component);
        self.components.len() - 1
    }

    /// Adds a component of infinite degrees of freedom.
    pub fn push(&mut self, source: &str, u: f64, distribution: Distribution, sensitivity: f64) {
        self.add(Component {
            source: source.to_owned(),
            u,
            distribution,
            sensitivity,
            degrees_of_freedom: None,
        });
    }

    /// Adds a bound on one side of size `bound` (>= 0). Its `u` is the root mean square distance
    /// from the bounded end when all places within the bound are equally likely: bound / sqrt 3.
    pub fn push_one_sided(&mut self, source: &str, bound: f64) {
        let u = bound.abs() / 3f64.sqrt();
        self.push(source, u, Distribution::OneSided, 1.0);
    }

    /// States the correlation coefficient between two inputs (clamped to -1..=1).
    pub fn correlate(&mut self, i: usize, j: usize, r: f64) {
        if i != j && i < self.components.len() && j < self.components.len() && r.is_finite() {
            self.correlations.push((i, j, r.clamp(-1.0, 1.0)));
        }
    }

    /// The components in the order they were added.
    pub fn components(&self) -> &[Component] {
        &self.components
    }

    /// Gives up the components, largest contribution first.
    pub fn into_components(mut self) -> Vec<Component> {
        let size = |c: &Component| (c.u * c.sensitivity).abs();
        self.components.sort_by(|a, b| size(b).total_cmp(&size(a)));
        self.components
    }

    /// Everything together, with the coverage factor for `coverage` (0.95 for 95 %).
    ///
    /// `u^2 = sum (c u)^2 + 2 sum r c_i u_i c_j u_j`; effective degrees of freedom by
    /// Welch-Satterthwaite, truncated to the next lower integer (JCGM 100:2008, 5.2.2, G.4).
    pub fn combined(&self, coverage: f64) -> Combined {
        self.combine(coverage, |_| true)
    }

    /// The same without the one-sided components: what to put around a bounded interval.
    pub fn symmetric(&self, coverage: f64) -> Combined {
        self.combine(coverage, |c| c.distribution != Distribution::OneSided)
    }

    /// The interval with `coverage` around `value` that may lie up to `below` lower and up to
    /// `above` higher (both >= 0) for one-sided reasons: the symmetric part is added outside.
    pub fn interval(&self, value: f64, below: f64, above: f64, coverage: f64) -> (f64, f64) {
        let expanded = self.symmetric(coverage).expanded;
        (
            value - below.max(0.0) - expanded,
            value + above.max(0.0) + expanded,
        )
    }

    fn combine(&self, coverage: f64, used: impl Fn(&Component) -> bool) -> Combined {
        let part = |c: &Component| if used(c) { c.u * c.sensitivity } else { 0.0 };
        let mut variance: f64 = self.components.iter().map(|c| part(c).powi(2)).sum();
        for &(i, j, r) in &self.correlations {
            variance += 2.0 * r * part(&self.components[i]) * part(&self.components[j]);
        }
        // Inconsistent correlations could make it negative by rounding.
        let variance = variance.max(0.0);
        let spread: f64 = self
            .components
            .iter()
            .filter_map(|c| Some(part(c).powi(4) / c.degrees_of_freedom?.max(f64::MIN_POSITIVE)))
            .sum();
        let degrees_of_freedom = (spread > 0.0 && variance > 0.0)
            .then(|| variance * variance / spread)
            .filter(|v| v.is_finite());
        let u = variance.sqrt();
        let k = coverage_factor(coverage, degrees_of_freedom);
        Combined {
            u,
            degrees_of_freedom,
            k,
            expanded: k * u,
        }
    }
}

/// Two-sided coverage factor: Student's t with `degrees_of_freedom` truncated to an integer
/// (at least 1), the normal distribution for `None`. JCGM 100:2008, G.3, G.4.
pub fn coverage_factor(coverage: f64, degrees_of_freedom: Option<f64>) -> f64 {
    // Beyond 10^5 degrees of freedom t and normal agree to 5 digits.
    let freedom = degrees_of_freedom
        .unwrap_or(f64::INFINITY)
        .floor()
        .clamp(1.0, 1e5);
    let upper = 0.5 + 0.5 * coverage.clamp(0.0, 1.0 - 1e-9);
    StudentsT::new(0.0, 1.0, freedom).map_or(1.96, |t| t.inverse_cdf(upper))
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Student's t and the normal distribution by scipy.stats (tests/python_golden.py).
    #[test]
    fn coverage_factors_agree_with_scipy() {
        let path =
            std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/golden/coverage.npy");
        let table: ndarray::Array2<f64> = ndarray_npy::read_npy(path).unwrap();
        assert_eq!(table.dim(), (54, 3));
        for row in table.rows() {
            let freedom = row[1].is_finite().then_some(row[1]);
            let k = coverage_factor(row[0], freedom);
            assert!((k / row[2] - 1.0).abs() < 5e-5, "{row}: {k}");
        }
    }

    fn component(u: f64, c: f64, freedom: Option<f64>) -> Component {
        Component {
            source: String::new(),
            u,
            distribution: Distribution::Normal,
            sensitivity: c,
            degrees_of_freedom: freedom,
        }
    }

    /// JCGM 100:2008, H.1 (end-gauge calibration), its table of components in nm.
    #[test]
    fn end_gauge_calibration_of_the_guide() {
        let mut budget = Budget::new();
        for (u, freedom) in [
            (25.0, Some(18.0)), // standard's length
            (5.8, Some(24.0)),  // repeated observations
            (3.9, Some(5.0)),   // random effects of the comparator
            (6.7, Some(8.0)),   // systematic effects of the comparator
            (2.9, Some(50.0)),  // difference of expansion coefficients
            (16.6, Some(2.0)),  // difference of temperatures
        ] {
            budget.add(component(u, 1.0, freedom));
        }
        let all = budget.combined(0.99);
        assert!((all.u - 31.71).abs() < 0.05, "{}", all.u);
        let freedom = all.degrees_of_freedom.unwrap();
        assert!((freedom - 16.7).abs() < 0.15, "{freedom}");
        assert!((all.k - 2.92).abs() < 0.005, "{}", all.k);
        assert!((all.expanded - 93.0).abs() < 0.6, "{}", all.expanded);
    }

    /// JCGM 100:2008, 5.2.2, note 1: with all r = +1 the sum is linear.
    #[test]
    fn fully_correlated_components_add_linearly() {
        let mut budget = Budget::new();
        let i = budget.add(component(3.0, 1.0, None));
        let j = budget.add(component(2.0, 2.0, None));
        budget.correlate(i, j, 1.0);
        assert!((budget.combined(0.95).u - 7.0).abs() < 1e-12);
        let mut budget = Budget::new();
        let i = budget.add(component(3.0, 1.0, None));
        let j = budget.add(component(3.0, -1.0, None));
        budget.correlate(i, j, 1.0);
        assert_eq!(budget.combined(0.95).u, 0.0);
    }

    /// Table G.2 of JCGM 100:2008.
    #[test]
    fn student_factors_of_the_guide() {
        for (freedom, t95) in [(1.0, 12.71), (5.0, 2.57), (10.0, 2.23), (50.9, 2.01)] {
            let k = coverage_factor(0.95, Some(freedom));
            assert!((k - t95).abs() < 0.005, "{freedom}: {k}");
        }
        assert!((coverage_factor(0.95, None) - 1.960).abs() < 1e-3);
    }

    #[test]
    fn one_sided_components_widen_the_interval_on_their_side_only() {
        let mut budget = Budget::new();
        budget.add(component(1.0, 1.0, None));
        budget.push_one_sided("bound", 6.0);
        let (low, high) = budget.interval(10.0, 0.0, 6.0, 0.95);
        assert!((low - 8.04).abs() < 1e-3 && (high - 17.96).abs() < 1e-3);
        assert!((budget.combined(0.95).u - 13f64.sqrt()).abs() < 1e-12);
    }

    #[test]
    fn an_empty_budget_is_certain_and_nan_is_left_out() {
        let mut budget = Budget::new();
        assert_eq!(budget.combined(0.95).u, 0.0);
        budget.add(component(f64::NAN, 1.0, Some(0.0)));
        let all = budget.combined(0.95);
        assert_eq!((all.u, all.degrees_of_freedom), (0.0, None));
    }
}
