"""Reference values for averaging: time-weighted means, spikes and von Neumann's
ratio of a few fixed series, by NumPy and SciPy.

    python make_averaging.py > averaging.json

Written from the definitions alone: means by numerical quadrature of the
interpolated signal over each piece, Hampel's filter by
scipy.stats.median_abs_deviation over full windows (samples nearer than k to an
end are not judged), the tail of von Neumann's ratio by adaptive quadrature of
Imhof's integral.
"""

import json
import sys

import numpy as np
import scipy
from scipy.integrate import quad
from scipy.interpolate import interp1d
from scipy.stats import median_abs_deviation

rng = np.random.default_rng(20260317)
LENGTH = 300.0


def means(times, values):
    """Means over [0, LENGTH]; the last value holds to the end."""
    t = np.append(times, LENGTH)
    v = np.append(values, values[-1])
    out = []
    for kind in ("previous", "linear"):
        signal = interp1d(t, v, kind=kind)
        knots = np.unique(np.concatenate([[0.0], t[(t > 0) & (t < LENGTH)], [LENGTH]]))
        total = 0.0
        for a, b in zip(knots[:-1], knots[1:]):
            # Gauss points lie inside the piece, where the signal is smooth.
            total += quad(signal, a, b, epsabs=0, epsrel=1e-13)[0]
        out.append(total / LENGTH)
    return out


def hampel(values, k, n):
    found = []
    for i in range(k, len(values) - k):
        window = values[i - k : i + k + 1]
        scale = median_abs_deviation(window, scale="normal")
        if abs(values[i] - np.median(window)) > n * scale:
            found.append(i)
    return found


def ratio(values):
    return float(np.sum(np.diff(values) ** 2) / np.sum((values - values.mean()) ** 2))


def tail(n, x):
    a = 2 - 2 * np.cos(np.pi * np.arange(1, n) / n) - x

    def integrand(u):
        angle = 0.5 * np.arctan(a * u).sum()
        return np.sin(angle) / (u * np.exp(0.25 * np.log1p((a * u) ** 2).sum()))

    edges = np.concatenate([[0.0], np.logspace(-3, 8, 56)])
    parts = [quad(integrand, lo, hi, limit=500)[0] for lo, hi in zip(edges[:-1], edges[1:])]
    return 0.5 - sum(parts) / np.pi


def case(name, times, values):
    times, values = np.round(times, 3), np.round(values, 3)
    stepped, linear = means(times, values)
    return {
        "name": name,
        "times": times.tolist(),
        "values": values.tolist(),
        "stepped": stepped,
        "linear": linear,
        "ratio": ratio(values),
        "spikes": hampel(values, 5, 4.0),
    }


def with_spikes(values, places, size):
    values = values.copy()
    values[places] += size
    return values


every5 = np.arange(-5.0, LENGTH, 5.0)
white = 350 + rng.standard_normal(len(every5))
uneven = np.sort(np.concatenate([[-12.5], rng.uniform(0, LENGTH, 40)]))
drift = 40 + 0.01 * uneven + 0.2 * rng.standard_normal(len(uneven))
swing = 12 + 3 * np.sin(2 * np.pi * every5 / 90) + 0.3 * rng.standard_normal(len(every5))
few = np.array([-40.0, 30.0, 31.0, 200.0])

cases = [
    case("white noise", every5, white),
    case("white noise with spikes", every5, with_spikes(white, [10, 30, 31, 47], 25.0)),
    case("uneven and drifting", uneven, drift),
    case("swinging", every5, with_spikes(swing, [22], -18.0)),
    case("exceptions", few, np.array([10.0, 12.0, 11.0, 14.5])),
]
tails = [
    {"count": n, "ratio": x, "probability": tail(n, x)}
    for n in (5, 8, 13, 20, 30)
    for x in (0.45, 0.8, 1.0, 1.3, 2.0, 2.6)
]
json.dump(
    {
        "numpy": np.__version__,
        "scipy": scipy.__version__,
        "length": LENGTH,
        "cases": cases,
        "tails": tails,
    },
    sys.stdout,
    indent=1,
)
print()
