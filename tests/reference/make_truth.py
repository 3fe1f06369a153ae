"""True states of the invented plants: a guess moved onto the relations.

    python make_truth.py hazel-quay       # <plant>.guess.toml -> <plant>.truth.json

The state nearest to the guess (weighted: 1 % of a flow, 0.1 % of a pressure, 3 kJ/kg,
free work, heat and power, losses and holdup changes almost held) that meets every
relation, found by Gauss-Newton to rounding.  Every state is checked against the
properties, so the truth is an exact balance.
"""

import json
import sys
import tomllib

import numpy as np

import estimate
import properties as fluid
from plant import Plant
from reference import HERE, phase_word

FREE = 1e4  # kW


def enthalpy(spec):
    p = spec["p"]
    if "h" in spec:
        return spec["h"]
    if "x" in spec:
        low, high = fluid.h_liquid(p).real, fluid.h_steam(p).real
        return low + spec["x"] * (high - low)
    t = spec["T"] + 273.15
    liquid = p >= fluid.P_SATURATION or t < fluid.t_sat(p).real
    return fluid.h_pt(1 if liquid else 2, complex(p), complex(t)).real


def project(plant, guess, weight):
    """The state nearest to `guess` in units of `weight` with every relation met."""
    x = guess.copy()
    for _ in range(200):
        f, jacobian = estimate.evaluate([(r.residual, r.touches) for r in plant.relations], x)
        scaled = jacobian * weight
        size = np.linalg.norm(scaled, axis=1)
        u, s, vt, rank, _ = estimate.decompose(scaled / size[:, None])
        towards = (guess - x) / weight
        met = -vt[:rank].T @ ((u[:, :rank].T @ (f / size)) / s[:rank])
        along = towards - vt[:rank].T @ (vt[:rank] @ towards)
        step = (met + along) * weight
        x = x + step
        if np.max(np.abs(step) / np.maximum(np.abs(x), 1e-3)) < 1e-13:
            break
    return x


def weights(plant, state):
    """How far each state may move for one unit of the distance to `state`."""
    weight = np.full(len(plant.states), FREE)
    for i, name in enumerate(plant.states):
        quantity, _, of = name.partition(":")
        if of in plant.streams:
            weight[i] = {"m": 0.01 * (state[i] or 1.0), "p": 0.001 * state[i], "h": 3.0}[quantity]
        elif quantity in ("loss", "holdup", "barometer"):
            weight[i] = max(1e-4 * abs(state[i]), 1e-4)
    return weight


def main(name):
    plant = Plant(HERE / f"{name}.toml")
    with open(HERE / f"{name}.guess.toml", "rb") as file:
        spec = tomllib.load(file)
    guess = np.zeros(len(plant.states))
    for i, state in enumerate(plant.states):
        quantity, _, of = state.partition(":")
        if of in plant.streams:
            stream = spec["streams"][of]
            guess[i] = enthalpy(stream) if quantity == "h" else stream[quantity]
        elif quantity in ("loss", "holdup", "barometer"):
            guess[i] = spec.get("own", {}).get(state, 0.0)
    x = project(plant, guess, weights(plant, guess))
    for stream, each in plant.streams.items():
        if each.get("normally-closed"):
            x[plant.index["m:" + stream]] = 0.0  # not 1e-17
    f, _ = estimate.evaluate([(r.residual, r.touches) for r in plant.relations], x)
    for stream in plant.streams:
        m, p, h = (x[plant.index[f"{q}:{stream}"]] for q in "mph")
        print(f"{stream:20s} {m:10.4f} kg/s {p:10.4f} bar {h:10.3f} kJ/kg "
              f"{fluid.temperature(p, h).real - 273.15:8.2f} Cel  {phase_word(p, h)}")
    for state in plant.states:
        if state.partition(":")[2] not in plant.streams:
            print(f"{state:30s} {x[plant.index[state]]:12.4f}")
    read = {}
    for label, measure in {**plant.tags, **plant.assumptions}.items():
        held, _ = estimate.evaluate([(measure.value, measure.touches)], x)
        read[label] = float(held[0])
        print(f"{label:25s} {held[0]:12.5f} {measure.unit:8s} {measure.spec.get('value', '')}")
    print("largest residual", np.max(np.abs(f)))
    text = {"plant": name, "units": "kg/s, bar, kJ/kg, kW", "largest_residual": float(np.max(np.abs(f))),
            "states": dict(zip(plant.states, map(float, x))), "readings": read}
    (HERE / f"{name}.truth.json").write_text(json.dumps(text, indent=1) + "\n")


if __name__ == "__main__":
    for each in sys.argv[1:]:
        main(each)
