"""Batches of the invented plants: true readings plus seeded noise, rounded as a historian would.

    python make_batches.py hazel-quay     # <plant>.truth.json -> <plant>.batches.ndjson

Noise is normal with the sigma that the plant file gives at the true reading.  A plan may
add a gross error in sigmas, drop tags, set qualities or readings, add foreign tags, or thin the tags out until
nothing is redundant (one tag after another is dropped, always the one of highest redundancy).
"""

import json
import sys

import numpy as np

import estimate
import units
from reference import HERE, load, reconcile

PLANS = {
    "hazel-quay": [
        {"batch": "2031-04-02T10:05Z", "seed": 11},
        {"batch": "2031-04-02T10:10Z", "seed": 12, "drop": ["TT-106", "PT-103"],
         "quality": {"FT-107": "uncertain", "TT-112": "bad"}},
        {"batch": "2031-04-02T10:15Z", "seed": 13, "bias": {"FT-113": 8.0}},
        {"batch": "2031-04-02T10:20Z", "seed": 14, "thin": True},
        {"batch": "2031-04-02T10:25Z", "seed": 15, "set": {"FT-114": 0.0}},
    ],
    "ferrow-bridge": [
        {"batch": "2031-04-03T06:00Z", "seed": 21},
        {"batch": "2031-04-03T06:05Z", "seed": 22, "drop": ["TT-225", "PT-219"],
         "quality": {"FT-201B": 1073741824, "TT-209": "uncertain", "FT-214": 2147483648,
                     "PT-205": "bad", "TT-201": 0},
         "foreign": {"ZZ-999": 1.5}},
        {"batch": "2031-04-03T06:10Z", "seed": 23, "bias": {"FT-222": 9.0}},
        {"batch": "2031-04-03T06:15Z", "seed": 24, "thin": True},
    ],
    "corrow-mill": [
        {"batch": "2031-04-04T22:00Z", "seed": 31},
        {"batch": "2031-04-04T22:05Z", "seed": 32, "drop": ["PT-900", "FT-312"],
         "quality": {"TT-305": "uncertain", "FT-301": "uncertain"}},
        {"batch": "2031-04-04T22:10Z", "seed": 33, "bias": {"FT-303": 10.0}},
        {"batch": "2031-04-04T22:15Z", "seed": 34, "thin": True},
    ],
    "alder-weir": [{"batch": "2031-04-05T14:00Z", "seed": 41}],
}


def true_readings(plant, truth):
    formulas = [(m.value, m.touches) for m in plant.tags.values()]
    values, _ = estimate.evaluate(formulas, truth)
    return dict(zip(plant.tags, values))


def sigma_of(measure, reading):
    spec = measure.spec
    span = spec["range"][1] - spec["range"][0] if "range" in spec else None
    return units.uncertainty(spec["uncertainty"], reading, measure.unit, span) / units.COVERAGE


def make(plant, truth, plan):
    random = np.random.default_rng(plan["seed"])
    readings = []
    for tag, true in true_readings(plant, truth).items():
        sigma = sigma_of(plant.tags[tag], true)
        noise = random.standard_normal() + plan.get("bias", {}).get(tag, 0.0)
        value = plan.get("set", {}).get(tag, float(f"{true + sigma * noise:.6g}"))
        if tag in plan.get("drop", ()):
            continue
        readings.append({"tag": tag, "value": value,
                         "quality": plan.get("quality", {}).get(tag, "good")})
    readings += [{"tag": t, "value": v, "quality": "good"} for t, v in plan.get("foreign", {}).items()]
    start = plan["batch"].replace("Z", ":00Z")
    minute = int(start[14:16]) + 5
    batch = {"batch": plan["batch"], "start": start,
             "end": f"{start[:14]}{minute:02d}:00Z", "readings": readings}
    return thin(plant, truth, batch) if plan.get("thin") else batch


def thin(plant, truth, batch):
    """Drop redundant tags one by one, the best checked first, until none is left."""
    while True:
        solution, _ = reconcile(plant, truth, batch, starts=[truth])
        redundant = [(entry[3], name) for (group, name), entry in solution.adjusted.items()
                     if group == "tags" and entry[4]]
        if not redundant:
            return batch
        drop = max(redundant)[1]
        batch = dict(batch, readings=[r for r in batch["readings"] if r["tag"] != drop])


def main(names):
    for name in names:
        plant, truth, _ = load(name)
        lines = [json.dumps(make(plant, truth, plan)) for plan in PLANS[name]]
        (HERE / f"{name}.batches.ndjson").write_text("\n".join(lines) + "\n")


if __name__ == "__main__":
    main(sys.argv[1:])
