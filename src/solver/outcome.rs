//! What a solve is asked for and what it answers.

use super::problem::Evaluation;

/// How a solve is to go.
#[derive(Clone, Debug, PartialEq)]
pub struct Options {
    /// A relation holds when |f| is below this times its scale.
    pub tolerance_relation: f64,
    /// A solve is done when the steps left, as they shrink, are below this in
    /// units of the state scale.
    pub tolerance_step: f64,
    /// Steps before the solve is given up.
    pub max_iterations: usize,
    /// Extra weight on the start in the first steps.
    pub hold: Option<Hold>,
}

impl Default for Options {
    fn default() -> Self {
        Options {
            tolerance_relation: 1e-10,
            tolerance_step: 1e-9,
            max_iterations: 100,
            hold: None,
        }
    }
}

/// Holds the states near where each step starts, while the steps are few.
#[derive(Clone, Debug, PartialEq)]
pub struct Hold {
    /// Extra diagonal weight of each scaled state: 1 weighs like an instrument
    /// whose sigma is the state's scale.
    pub weights: Vec<f64>,
    /// Number of steps that are held.
    pub steps: usize,
}

/// Whether a solve found what it was asked for.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Status {
    /// The relations hold and the last step was negligible.
    Converged,
    /// No solution was found; the outcome holds the last point.
    NotConverged(Reason),
}

/// Why a solve did not converge.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum Reason {
    /// The steps allowed were used up.
    IterationLimit,
    /// No step improves the point, and the relations do not hold or the steps do not shrink.
    Stalled,
    /// The start, or every step however short, leaves the domain of a function at this state.
    OutsideDomain {
        /// The state to blame.
        state: usize,
    },
    /// The linear system has no usable solution.
    Singular,
    /// No set of active bounds was found that agrees with its own multipliers.
    BoundsCycle,
}

/// The answer of a solve; where it did not converge, the last point reached.
#[derive(Clone, Debug)]
pub struct Outcome {
    /// Whether `x` is a solution.
    pub status: Status,
    /// States, in their own units.
    pub x: Vec<f64>,
    /// Multipliers of L = 1/2 sum r^2 + sum multiplier f, per unit of f.
    /// Those of relations out of use are zero; where relations depend on each
    /// other theirs is one choice of many (see [`super::Covariance::multipliers`]).
    pub multipliers: Vec<f64>,
    /// Sum of squared residuals.
    pub objective: f64,
    /// Residuals and Jacobians at `x`.
    pub evaluation: Evaluation,
    /// Beside `structure.bounds`: true where the bound is held as an equation.
    pub active_bounds: Vec<bool>,
    /// Steps taken.
    pub iterations: usize,
    /// Numeric factorisations made.
    pub factorisations: usize,
    /// The relation in use that is furthest from zero for its scale, if there is any.
    pub worst_relation: Option<usize>,
    /// How far that is: |f| / scale.
    pub worst_residual_scaled: f64,
}
