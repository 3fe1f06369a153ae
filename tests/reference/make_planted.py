"""Batches with one planted error each, for hypotheses.py.

    python make_planted.py hazel-quay ferrow-bridge corrow-mill alder-weir
    # writes <plant>.planted.batches.ndjson and <plant>.planted.json

A biased tag is the true reading, noise, and so many sigmas.  A leak or a loss is in the
truth: the state nearest to the plant's true state that balances with it, checked against
every relation.  Noise and rounding are those of make_batches.py.
"""

import copy
import json
import sys

import numpy as np

import estimate
import make_batches
import make_truth
from plant import Relation
from reference import HERE, load
from suspects import hypotheses, planted_relations

PLANS = {
    "hazel-quay": [
        {"batch": "2031-04-02T11:05Z", "seed": 111, "cause": "bias", "of": "FT-107", "side": None,
         "sigmas": 8.0},
        {"batch": "2031-04-02T11:10Z", "seed": 112, "cause": "leak", "of": "turbine", "side": "flow",
         "size": 0.9},
    ],
    "ferrow-bridge": [
        {"batch": "2031-04-03T07:05Z", "seed": 121, "cause": "leak-between", "of": "heater-2",
         "side": "tube into steam", "size": 2.5},
    ],
    "corrow-mill": [
        {"batch": "2031-04-04T23:05Z", "seed": 131, "cause": "heat-loss", "of": "lp-header",
         "side": None, "size": 700.0},
    ],
    "alder-weir": [
        {"batch": "2031-04-05T15:05Z", "seed": 141, "cause": "passing", "of": "bypass", "side": None,
         "size": 2.2},
        {"batch": "2031-04-05T15:10Z", "seed": 142, "cause": "passing", "of": "drain", "side": None,
         "size": 1.6},
    ],
}


def balanced(plant, truth, hypothesis, size):
    """The state nearest to the truth in which the leak or loss is real.

    What the assumptions say is held: a pump that changed its efficiency would be a second error.
    """
    leaking = copy.copy(plant)
    leaking.relations = planted_relations(plant, hypothesis, size)
    for name, measure in plant.assumptions.items():
        held = complex(measure.value(truth.astype(complex))).real
        leaking.relations.append(Relation(
            name, "", None, None, measure.touches,
            lambda x, measure=measure, held=held: measure.value(x) - held))
    x = make_truth.project(leaking, truth, make_truth.weights(plant, truth))
    residuals, _ = estimate.evaluate([(r.residual, r.touches) for r in leaking.relations], x)
    if np.max(np.abs(residuals)) > 1e-8:
        raise RuntimeError(f"{plant.name}: residual {np.max(np.abs(residuals)):.1e}")
    return x


def plant_error(plant, truth, plan):
    """(batch, what is planted)."""
    keys = ("cause", "of", "side")
    hypothesis = next(h for h in hypotheses(plant) if all(getattr(h, k) == plan[k] for k in keys))
    size, state, plan = plan.get("size"), truth, dict(plan)
    if hypothesis.observation:
        tag = plan["of"]
        reading = make_batches.true_readings(plant, truth)[tag]
        size = plan["sigmas"] * make_batches.sigma_of(plant.tags[tag], reading)
        plan["bias"] = {tag: plan["sigmas"]}
    else:
        state = balanced(plant, truth, hypothesis, size)
    planted = {k: plan[k] for k in keys} | {"unit": hypothesis.unit, "size": float(size)}
    return make_batches.make(plant, state, plan), planted


def main(names):
    for name in names:
        plant, truth, _ = load(name)
        made = [plant_error(plant, truth, plan) for plan in PLANS[name]]
        lines = "\n".join(json.dumps(batch) for batch, _ in made)
        (HERE / f"{name}.planted.batches.ndjson").write_text(lines + "\n")
        planted = {batch["batch"]: what for batch, what in made}
        (HERE / f"{name}.planted.json").write_text(json.dumps(planted, indent=1) + "\n")


if __name__ == "__main__":
    main(sys.argv[1:])
