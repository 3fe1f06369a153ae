//! The equations of Pai and Fisher (AIChE J. 34, 1988, 873) with their gradients.

use super::case::Function;

/// The six equations in x1..x5, u1..u3; gradient by hand.
pub fn relations() -> Vec<(Function, Vec<usize>)> {
    let all: Vec<usize> = (0..8).collect();
    let with = |function: fn(&[f64]) -> (f64, Vec<f64>)| -> (Function, Vec<usize>) {
        (Box::new(function), all.clone())
    };
    vec![
        with(|v| {
            let [x1, x2, x3, _, _, u1, u2, u3] = states(v);
            let f =
                0.5 * x1 * x1 - 0.7 * x2 + x3 * u1 + x2 * x2 * u1 * u2 + 2.0 * x3 * u3 * u3 - 255.8;
            let dx2 = -0.7 + 2.0 * x2 * u1 * u2;
            (
                f,
                vec![
                    x1,
                    dx2,
                    u1 + 2.0 * u3 * u3,
                    0.0,
                    0.0,
                    x3 + x2 * x2 * u2,
                    x2 * x2 * u1,
                    4.0 * x3 * u3,
                ],
            )
        }),
        with(|v| {
            let [x1, x2, x3, _, _, u1, u2, u3] = states(v);
            let f = x1 - 2.0 * x2 + 3.0 * x1 * x3 - 2.0 * x2 * u1 - x2 * u2 * u3 + 111.2;
            let dx2 = -2.0 - 2.0 * u1 - u2 * u3;
            (
                f,
                vec![
                    1.0 + 3.0 * x3,
                    dx2,
                    3.0 * x1,
                    0.0,
                    0.0,
                    -2.0 * x2,
                    -x2 * u3,
                    -x2 * u2,
                ],
            )
        }),
        with(|v| {
            let [x1, x2, x3, _, _, u1, u2, u3] = states(v);
            let f = x3 * u1 - x1 + 3.0 * x2 + x1 * u2 - x3 * u3.sqrt() - 33.57;
            (
                f,
                vec![
                    u2 - 1.0,
                    3.0,
                    u1 - u3.sqrt(),
                    0.0,
                    0.0,
                    x3,
                    x1,
                    -0.5 * x3 / u3.sqrt(),
                ],
            )
        }),
        with(|v| {
            let [x1, _, x3, x4, _, _, u2, u3] = states(v);
            (
                x4 - x1 - x3 * x3 + u2 + 3.0 * u3,
                vec![-1.0, 0.0, -2.0 * x3, 1.0, 0.0, 0.0, 1.0, 3.0],
            )
        }),
        with(|v| {
            let [_, _, x3, _, x5, _, u2, u3] = states(v);
            (
                x5 - 2.0 * x3 * u2 * u3,
                vec![
                    0.0,
                    0.0,
                    -2.0 * u2 * u3,
                    0.0,
                    1.0,
                    0.0,
                    -2.0 * x3 * u3,
                    -2.0 * x3 * u2,
                ],
            )
        }),
        with(|v| {
            let [x1, x2, x3, _, _, u1, u2, u3] = states(v);
            (
                2.0 * x1 + x2 * x3 * u1 + u2 - u3 - 126.6,
                vec![2.0, x3 * u1, x2 * u1, 0.0, 0.0, x2 * x3, 1.0, -1.0],
            )
        }),
    ]
}

fn states(v: &[f64]) -> [f64; 8] {
    v.try_into().expect("eight states")
}
