//! Sums of the shape `sum n_k x^I_k y^J_k`, in which every equation of IAPWS-IF97 is written,
//! together with all first and second derivatives in one pass over the coefficients.
//!
//! Multiplying a derivative by its own variables leaves each term a multiple of itself,
//! `x y f_xy = sum I_k J_k t_k` with `t_k = n_k x^I_k y^J_k`, so one product per term serves six sums.
//! The powers come from a table that halves exponents (`x^k = x^(k/2) x^(k - k/2)`): few roundings, no `powf`.

/// One term of a table, its exponents resolved to places in the two tables of powers.
#[derive(Clone, Copy)]
pub(super) struct Term {
    n: f64,
    i: f64,
    j: f64,
    x_place: u8,
    y_place: u8,
}

/// A sum and its derivatives, each multiplied by the variables it is taken by.
#[derive(Clone, Copy, Default)]
pub(super) struct Sums {
    pub f: f64,
    /// `x f_x`
    pub x: f64,
    /// `x^2 f_xx`
    pub xx: f64,
    /// `y f_y`
    pub y: f64,
    /// `y^2 f_yy`
    pub yy: f64,
    /// `x y f_xy`
    pub xy: f64,
}

/// Turns rows `(I, J, n)` into terms, for tables of powers whose first entries are
/// `x^-x_below` and `y^-y_below`. Evaluated at compile time.
pub(super) const fn terms<const N: usize>(
    rows: [(i32, i32, f64); N],
    x_below: i32,
    y_below: i32,
) -> [Term; N] {
    let mut out = [Term {
        n: 0.0,
        i: 0.0,
        j: 0.0,
        x_place: 0,
        y_place: 0,
    }; N];
    let mut k = 0;
    while k < N {
        let (i, j, n) = rows[k];
        out[k] = Term {
            n,
            i: i as f64,
            j: j as f64,
            x_place: (i + x_below) as u8,
            y_place: (j + y_below) as u8,
        };
        k += 1;
    }
    out
}

/// The powers `x^-BELOW, ..., x^-1, 1, x, ...`, `N` in all.
#[inline]
pub(super) fn powers<const N: usize, const BELOW: usize>(x: f64) -> [f64; N] {
    let mut table = [1.0; N];
    if BELOW > 0 {
        table[BELOW - 1] = x.recip();
        for k in 2..=BELOW {
            table[BELOW - k] = table[BELOW - k / 2] * table[BELOW - (k - k / 2)];
        }
    }
    if N > BELOW + 1 {
        table[BELOW + 1] = x;
        for k in 2..N - BELOW {
            table[BELOW + k] = table[BELOW + k / 2] * table[BELOW + k - k / 2];
        }
    }
    table
}

/// The value of the sum alone.
#[inline]
pub(super) fn value(terms: &[Term], x: &[f64], y: &[f64]) -> f64 {
    terms
        .iter()
        .map(|t| t.n * x[usize::from(t.x_place)] * y[usize::from(t.y_place)])
        .sum()
}

/// The value and all first and second derivatives.
#[inline]
pub(super) fn sums(terms: &[Term], x: &[f64], y: &[f64]) -> Sums {
    let mut total = Sums::default();
    for term in terms {
        let t = term.n * x[usize::from(term.x_place)] * y[usize::from(term.y_place)];
        let it = term.i * t;
        let jt = term.j * t;
        total.f += t;
        total.x += it;
        total.xx += (term.i - 1.0) * it;
        total.y += jt;
        total.yy += (term.j - 1.0) * jt;
        total.xy += term.j * it;
    }
    total
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn powers_reach_both_ways() {
        let table = powers::<8, 3>(2.0);
        assert_eq!(table, [0.125, 0.25, 0.5, 1.0, 2.0, 4.0, 8.0, 16.0]);
    }

    /// f = 3 x^2 y^-1 - x y^3 at (2, 3): worked by hand.
    #[test]
    fn sums_carry_every_derivative() {
        let terms = terms([(2, -1, 3.0), (1, 3, -1.0)], 0, 1);
        let s = sums(&terms, &powers::<3, 0>(2.0), &powers::<5, 1>(3.0));
        let near = |a: f64, b: f64| assert!((a - b).abs() < 1e-12, "{a} is not {b}");
        near(s.f, 4.0 - 54.0);
        near(s.x, 8.0 - 54.0);
        near(s.xx, 8.0);
        near(s.y, -4.0 - 162.0);
        near(s.yy, 8.0 - 324.0);
        near(s.xy, -8.0 - 162.0);
        near(
            value(&terms, &powers::<3, 0>(2.0), &powers::<5, 1>(3.0)),
            s.f,
        );
    }
}
