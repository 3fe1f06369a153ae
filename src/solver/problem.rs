//! What the solver is given: a sparse constrained least-squares problem that
//! knows nothing of tags, fluids or units.
//!
//! Find x that minimises  sum over observations of r_i(x)^2  subject to
//! f_k(x) = 0 for every relation, and f_k(x) >= 0 for those relations that are
//! bounds. The residuals r come whitened (divided by their sigma), with
//! r = (y - g(x)) / sigma; `g_values` hold the Jacobian of g(x) / sigma, so
//! that dr = -G dx.
//!
//! A row that is out of use (a tag that is missing, a relation that others
//! imply, a bound that is not active) keeps its place in the structure and is
//! filled with zeros: the symbolic factorisation of one structure then serves
//! every batch.

/// A set of sparse rows: which states each row depends on, in CSR form.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Rows {
    /// `start[i]..start[i + 1]` is the range of `index` that belongs to row i.
    pub start: Vec<usize>,
    /// States, in any order but without repetition within a row.
    pub index: Vec<usize>,
}

impl Rows {
    /// Builds the rows from one list of states each.
    pub fn from_lists<I: AsRef<[usize]>>(lists: &[I]) -> Self {
        let mut rows = Rows {
            start: vec![0],
            index: Vec::new(),
        };
        for list in lists {
            rows.index.extend_from_slice(list.as_ref());
            rows.start.push(rows.index.len());
        }
        rows
    }

    /// Number of rows.
    pub fn len(&self) -> usize {
        self.start.len().saturating_sub(1)
    }

    /// True where there is no row.
    pub fn is_empty(&self) -> bool {
        self.len() == 0
    }

    /// Range of `index` (and of the values beside it) that row `i` takes up.
    pub fn range(&self, i: usize) -> std::ops::Range<usize> {
        self.start[i]..self.start[i + 1]
    }

    /// The states of row `i`.
    pub fn row(&self, i: usize) -> &[usize] {
        &self.index[self.range(i)]
    }
}

/// The structure of a problem: it stays the same from batch to batch.
#[derive(Clone, Debug, Default, PartialEq, Eq)]
pub struct Structure {
    /// Number of states.
    pub states: usize,
    /// One row per relation, bounds included.
    pub relations: Rows,
    /// One row per observation.
    pub observations: Rows,
    /// Relations that are bounds (f >= 0, out of use until they are active).
    pub bounds: Vec<usize>,
    /// Pairs of states whose covariance is wanted beside the diagonal.
    pub pairs: Vec<(usize, usize)>,
}

/// Values at one point; the buffers are laid out by the [`Structure`].
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Evaluation {
    /// Residual of each relation, in its own scale (see [`Problem::relation_scale`]).
    pub f: Vec<f64>,
    /// df/dx beside `relations.index`.
    pub f_values: Vec<f64>,
    /// Whitened residual (y - g) / sigma of each observation.
    pub r: Vec<f64>,
    /// d(g / sigma)/dx beside `observations.index`.
    pub g_values: Vec<f64>,
}

impl Evaluation {
    /// Zeroed buffers for a structure.
    pub fn for_structure(structure: &Structure) -> Self {
        Evaluation {
            f: vec![0.0; structure.relations.len()],
            f_values: vec![0.0; structure.relations.index.len()],
            r: vec![0.0; structure.observations.len()],
            g_values: vec![0.0; structure.observations.index.len()],
        }
    }
}

/// The point lies outside the domain of a function of the problem.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub struct Outside {
    /// A state that is to blame.
    pub state: usize,
}

/// A constrained least-squares problem.
pub trait Problem {
    /// The sparsity; the same at every point.
    fn structure(&self) -> &Structure;

    /// Fills residuals and Jacobians at `x`.
    ///
    /// Relations that are bounds are always evaluated; the solver decides
    /// which of them take part.
    ///
    /// # Errors
    /// [`Outside`] where a function has no value at `x`; the buffers are then
    /// not to be used. The solver answers with a shorter step.
    fn evaluate(&self, x: &[f64], into: &mut Evaluation) -> Result<(), Outside>;

    /// A typical uncertainty of each state (the sigma of its instrument, or a
    /// per cent of its size): the solver works in x / scale.
    fn state_scale(&self) -> &[f64];

    /// A typical size of the terms of each relation: a relation holds when
    /// |f| is below the tolerance times this scale.
    fn relation_scale(&self) -> &[f64];

    /// Shortens or bends `step` in place so that `x + step` is a valid state
    /// and no further from `x` than the linearisation can be trusted.
    fn limit(&self, x: &[f64], step: &mut [f64]);

    /// Second derivatives of sum_k multiplier_k f_k, as (row, column, value)
    /// of the lower triangle, where the problem can give them. Rows and
    /// columns must be among `structure().pairs` or the diagonal.
    fn curvature(
        &self,
        _x: &[f64],
        _multipliers: &[f64],
        _into: &mut Vec<(usize, usize, f64)>,
    ) -> bool {
        false
    }
}
