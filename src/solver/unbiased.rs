//! The selected inverse of the augmented matrix without the bias of the
//! regularisation that its factor needs.
//!
//! The inverse of the regularised matrix is off by a fraction of about d P,
//! where d is the regularisation and P a variance in scaled units, and by
//! rounding of about 1e-16 / d, which is why d is not smaller. Of weakly
//! determined unknowns it is taken out again by updates of rank one.

use super::factor::WrongSign;
use super::selected::Selected;
use super::system::System;

/// Regularisation of a scaled state that no observation measures alone: less
/// than in the solve, because here the matrix is regular.
const STATE_REGULARISATION: f64 = 1e-8;
/// Regularisation of a normalised relation.
const RELATION_REGULARISATION: f64 = 1e-12;
/// Diagonal of a scaled unknown above which it needs no regularisation.
const MEASURED: f64 = 1e-4;
/// Fraction of a variance that regularisation may take before it is taken out.
const WEAK: f64 = 1e-5;
/// Unknowns that it is taken out of one by one.
const MOST_WEAK: usize = 256;
/// Least part of a variance that regularisation must leave for this to be accurate.
const LEAST_LEFT: f64 = 1e-4;

/// Factors what `system` holds and gives the selected inverse; false where
/// regularisation still shows in it.
pub(super) fn inverse(system: &mut System) -> (Selected, bool) {
    regularise(system);
    system.factorise(WrongSign::Replace);
    let mut selected = Selected::of(system.symbolic, &system.factor);
    let unbiased = remove_weak_regularisation(system, &mut selected);
    (selected, unbiased)
}

/// Takes the regularisation out of the inverse where it matters, one unknown
/// after another; false where that is too much or too inaccurate.
///
/// (K - e u u')^-1 = Z + z z' / (1 / e - z_u) with Z = K^-1 and z = Z u
/// (Sherman and Morrison 1950).
fn remove_weak_regularisation(system: &System, selected: &mut Selected) -> bool {
    let symbolic = system.symbolic;
    let fraction = |place: usize| system.regularisation[place] * selected.diagonal(place);
    let weak: Vec<usize> = (0..symbolic.dimension())
        .filter(|&place| fraction(place) > WEAK || fraction(place).is_nan())
        .collect();
    if weak.len() > MOST_WEAK {
        return false;
    }
    let mut updates: Vec<(f64, Vec<f64>)> = Vec::with_capacity(weak.len());
    for place in weak {
        let mut column = vec![0.0; symbolic.dimension()];
        column[place] = 1.0;
        system.factor.solve(symbolic, &mut column);
        for (weight, earlier) in &updates {
            let factor = weight * earlier[place];
            column
                .iter_mut()
                .zip(earlier)
                .for_each(|(value, z)| *value += factor * z);
        }
        let regularisation = system.regularisation[place];
        let left = 1.0 - regularisation * column[place];
        if left.is_nan() || left < LEAST_LEFT {
            return false;
        }
        updates.push((regularisation / left, column));
    }
    for (weight, column) in &updates {
        selected.add_outer_product(symbolic, *weight, column);
    }
    true
}

/// Regularises only what has nothing of its own on the diagonal.
fn regularise(system: &mut System) {
    for place in 0..system.regularisation.len() {
        let own = system.diagonal(place).abs();
        system.regularisation[place] = match system.regularisation[place] {
            _ if own > MEASURED => 0.0,
            value if value > 0.0 => STATE_REGULARISATION,
            value if value < 0.0 => -RELATION_REGULARISATION,
            _ => 0.0,
        };
    }
}
