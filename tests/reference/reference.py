"""Reference reconciliation: plant file and batches in, expected reports out.

    python reference.py hazel-quay        # writes hazel-quay.expected.ndjson

Reads <plant>.toml, <plant>.truth.json (a believable state to start from and to scale
by) and <plant>.batches.ndjson.  The mathematics is in estimate.py; this module makes the
observations, and the statistics at the solution: classes by rank, covariance
C = Z (Z' A'A Z)^-1 Z' on the null space of the relations, redundancies, and the
imbalance of each balance, found by solving the linear problem again without it.
"""

import json
import sys
from pathlib import Path

import numpy as np
from scipy.stats import chi2

import estimate
import properties as fluid
import units
from plant import Plant

HERE = Path(__file__).parent
CONFIDENCE = 0.95
OBSERVABLE = 1e-10    # of a normalised gradient along directions that nothing determines
BY_RANK = 1e-11       # of a unit row in the left null space
HARDLY = 1e-3
ROUNDING = 1e-13      # what a state held at zero by its own relation may show
STARTS = 6


def quality_of(code):
    """good, uncertain or bad, from the word or the OPC UA status code's severity bits."""
    if isinstance(code, int):
        return ("good", "uncertain", "bad", "bad")[code >> 30]
    return code


def significant(number, digits=13):
    return float(f"{number:.{digits}g}")


class Observations:
    """What one batch says: the readings used, and why the others are not."""

    def __init__(self, plant, batch):
        self.plant = plant
        self.measured, self.reason, self.used = {}, {}, []
        readings = {r["tag"]: r for r in batch["readings"]}
        self.ignored = [t for t in readings if t not in plant.tags]
        for tag, measure in plant.tags.items():
            self._take(tag, measure, readings.get(tag))
        for name, measure in plant.assumptions.items():
            value = units.split(measure.spec["value"])[0]
            self._use("assumptions", name, measure, value, 1.0)
        if plant.barometer_value:
            value = units.split(plant.barometer_value.spec["value"])[0]
            self._use("barometer", "barometer", plant.barometer_value, value, 1.0)

    def _take(self, tag, measure, reading):
        self.measured[tag] = None
        if reading is None or reading["value"] is None:
            self.reason[tag] = "missing"
            return
        self.measured[tag] = reading["value"]
        quality = quality_of(reading.get("quality", "good"))
        if quality == "bad":
            self.reason[tag] = "bad"
            return
        widen = self.plant.uncertain_factor if quality == "uncertain" else 1.0
        self._use("tags", tag, measure, reading["value"], widen)

    def _use(self, group, name, measure, value, widen):
        spec = measure.spec
        span = spec["range"][1] - spec["range"][0] if "range" in spec else None
        wide = widen * units.uncertainty(spec["uncertainty"], value, measure.unit, span)
        if wide == 0.0:
            self.reason[name] = "zero uncertainty"
            return
        self.used.append((group, name, measure, value, wide / units.COVERAGE))

    def problem(self, scale):
        return estimate.Problem(self.plant.relations, [u[2] for u in self.used],
                                np.array([u[3] for u in self.used]),
                                np.array([u[4] for u in self.used]), scale)


def scale_of(plant, truth):
    """1000 kJ/kg for enthalpies; else the true value, at least one unit for what is no stream's."""
    scale = np.maximum(np.abs(truth), 1.0)
    for i, name in enumerate(plant.states):
        if name.startswith("h:"):
            scale[i] = 1000.0
        elif name.startswith(("m:", "p:")):
            scale[i] = abs(truth[i]) or 1.0  # a normally closed stream has no flow
    return scale


def starts_around(plant, truth):
    """The truth, seeded neighbours, and the truth with each nearly wet stream on the other side."""
    yield truth
    random = np.random.default_rng(20310402)
    for _ in range(STARTS):
        near = truth.copy()
        for i, name in enumerate(plant.states):
            near[i] *= 1 + {"m:": 0.05, "p:": 0.02, "h:": 0.005}.get(name[:2], 0.05) * random.uniform(-1, 1)
        yield near
    for stream in plant.streams:
        p, h = (truth[plant.index[f"{q}:{stream}"]] for q in "ph")
        if fluid.phase(p, h) == fluid.LIQUID:
            continue
        now, dry = fluid.phase(p, h), fluid.h_steam(p).real
        if now == fluid.WET and fluid.quality(p, h).real > 0.5:
            other = dry + 15.0
        elif now == fluid.STEAM and h < dry + 40.0:
            other = dry - 15.0
        else:
            continue
        flipped = truth.copy()
        flipped[plant.index["h:" + stream]] = other
        yield flipped


class Solution:
    """Everything known at the minimum."""

    def __init__(self, plant, observations, x, objective, scale):
        self.plant, self.observations, self.x, self.scale = plant, observations, x, scale
        self.objective = objective
        problem = observations.problem(scale)
        self.linear = linear = problem.linearise(x)
        stack = np.vstack([linear.F, estimate.normalise(linear.A)])
        u, _, vt, rank, self.rank_gap = estimate.decompose(stack)
        uf, _, _, rank_f, self.rank_gap_relations = estimate.decompose(linear.F)
        self.unobservable_directions = len(x) - rank
        self.degrees_of_freedom = (rank_f + len(problem.y) - len(x)
                                   + self.unobservable_directions)
        self.null = vt[rank:].T
        self.checked = np.linalg.norm(u[:, rank:], axis=1) > BY_RANK
        self.implied = np.linalg.norm(uf[:, rank_f:], axis=1) > BY_RANK
        Z, P = linear.free()
        self.covariance = Z @ P @ P.T @ Z.T   # scaled
        # I - A C A' is a projector: the squared length of a row is its diagonal, free of cancellation
        left = np.eye(len(problem.y)) - linear.A @ Z @ P
        self.adjusted = {}
        for k, (group, name, measure, y, sigma) in enumerate(observations.used):
            redundancy = left[k] @ left[k]
            by_rank = self.checked[len(linear.F) + k]
            self.adjusted[group, name] = (y, sigma, linear.r[k], redundancy, by_rank)

    def function(self, value, touches):
        """(value, 95 % uncertainty) of a formula, or None where nothing determines it."""
        held, jacobian = estimate.evaluate([(value, touches)], self.x)
        row = jacobian[0] * self.scale
        size = np.linalg.norm(row)
        if size and np.linalg.norm(row @ self.null) > OBSERVABLE * size:
            return None
        variance = max(row @ self.covariance @ row, 0.0)
        return held[0], units.COVERAGE * variance ** 0.5

    def imbalance(self, k):
        """(value, sigma) of relation k let go alone, or None where it cannot be said."""
        if self.implied[k] or not self.checked[k]:
            return None
        keep = np.arange(len(self.linear.F)) != k
        Z, P = self.linear.free(keep)
        row = self.linear.F[k] @ Z @ P * self.linear.size[k]
        return row @ self.linear.r, np.linalg.norm(row)


def reconcile(plant, truth, batch, starts=None):
    observations = Observations(plant, batch)
    scale = scale_of(plant, truth)
    starts = starts or starts_around(plant, truth)
    x, objective, fared = estimate.best(observations.problem(scale), starts)
    return Solution(plant, observations, x, objective, scale), fared


# ---- the report ---------------------------------------------------------


def observation_report(solution, group, name, measure):
    observations = solution.observations
    entry = {"measured": observations.measured.get(name), "reconciled": None, "adjustment": None,
             "unit": measure.unit, "uncertainty_measured": None, "uncertainty_reconciled": None,
             "redundancy": None, "standardised_adjustment": None, "class": "unused"}
    known = solution.function(measure.value, measure.touches)
    if known:
        entry["reconciled"], entry["uncertainty_reconciled"] = map(significant, known)
    if (group, name) not in solution.adjusted:
        entry["reason"] = observations.reason[name]
        return entry
    y, sigma, r, redundancy, by_rank = solution.adjusted[group, name]
    entry["measured"] = y
    entry["uncertainty_measured"] = significant(sigma * units.COVERAGE)
    if not by_rank:
        entry.update({"class": "not-redundant", "redundancy": 0.0, "adjustment": 0.0})
        return entry
    entry["adjustment"] = significant(-r * sigma)
    entry["redundancy"] = significant(redundancy)
    entry["standardised_adjustment"] = significant(-r / redundancy ** 0.5)
    entry["class"] = "redundant" if redundancy >= HARDLY else "hardly-redundant"
    return entry


def quantity_report(solution, value, touches, unit):
    known = solution.function(value, touches)
    if known is None:
        return {"value": None, "uncertainty": None, "unit": unit, "class": "unobservable"}
    value, wide = (significant(n) if abs(n) > ROUNDING else 0.0 for n in known)
    return {"value": value, "uncertainty": wide, "unit": unit, "class": "observable"}


def stream_report(solution, stream):
    m, p, h = (solution.plant.index[f"{q}:{stream}"] for q in "mph")

    def celsius(x):
        return fluid.temperature(x[p], x[h]) - 273.15
    entry = {"mass_flow": quantity_report(solution, lambda x: x[m], [m], "kg/s"),
             "pressure": quantity_report(solution, lambda x: x[p], [p], "bar"),
             "temperature": quantity_report(solution, celsius, [p, h], "Cel"),
             "enthalpy": quantity_report(solution, lambda x: x[h], [h], "kJ/kg")}
    both = entry["pressure"]["class"] == entry["enthalpy"]["class"] == "observable"
    entry["phase"] = phase_word(solution.x[p], solution.x[h]) if both else None
    return entry


def phase_word(p, h):
    """The phase, where a stream held on the saturation line is told apart."""
    if p < fluid.P_SATURATION:
        if abs(h - fluid.h_liquid(p).real) < 1e-6:
            return "saturated-liquid"
        if abs(h - fluid.h_steam(p).real) < 1e-6:
            return "saturated-steam"
    return fluid.phase(p, h)


def equipment_report(solution, name):
    plant, entry = solution.plant, {}
    for state in plant.own[name]:
        i = plant.index[f"{state}:{name}"]
        unit = "kg/s" if state == "holdup" else "kW"
        field = "holdup_change" if state == "holdup" else state
        entry[field] = quantity_report(solution, lambda x, i=i: x[i], [i], unit)
    entry["imbalance"] = {"mass": {}}
    for k, relation in enumerate(plant.relations):
        if relation.equipment != name or not relation.balance:
            continue
        unit = "kg/s" if relation.balance == "mass" else "kW"
        report = imbalance_report(solution.imbalance(k), unit)
        if relation.balance == "mass":
            entry["imbalance"]["mass"][relation.side] = report
        else:
            entry["imbalance"]["energy"] = report
    return entry


def imbalance_report(found, unit):
    if found is None:
        return {"value": None, "uncertainty": None, "unit": unit, "standardised": None,
                "multiplier": None, "multiplier_variance": None}
    value, sigma = found
    return {"value": significant(value), "uncertainty": significant(sigma * units.COVERAGE),
            "unit": unit, "standardised": significant(value / sigma),
            "multiplier": significant(value / sigma ** 2),
            "multiplier_variance": significant(sigma ** -2)}


def report(solution, batch):
    plant, dof = solution.plant, solution.degrees_of_freedom
    critical = chi2.ppf(CONFIDENCE, dof) if dof else None
    verdict = ("not-redundant" if not dof
               else "inconsistent" if solution.objective > critical else "consistent")
    result = {
        "plant": plant.name, "batch": batch["batch"], "verdict": verdict,
        "global_test": {
            "statistic": significant(solution.objective), "degrees_of_freedom": dof,
            "critical_value": critical and significant(critical),
            "p_value": significant(chi2.sf(solution.objective, dof)) if dof else None,
            "confidence": CONFIDENCE},
        "unobservable_directions": solution.unobservable_directions,
        "ignored_tags": solution.observations.ignored,
        "tags": {n: observation_report(solution, "tags", n, m) for n, m in plant.tags.items()},
        "assumptions": {n: observation_report(solution, "assumptions", n, m)
                        for n, m in plant.assumptions.items()},
    }
    if plant.barometer_value:
        result["barometer"] = observation_report(solution, "barometer", "barometer",
                                                 plant.barometer_value)
    result["streams"] = {s: stream_report(solution, s) for s in plant.streams}
    result["equipment"] = {n: equipment_report(solution, n) for n in plant.equipment}
    return result


def load(name):
    """(plant, true state, batches)."""
    plant = Plant(HERE / f"{name}.toml")
    states = json.loads((HERE / f"{name}.truth.json").read_text())["states"]
    truth = np.array([states[s] for s in plant.states])
    path = HERE / f"{name}.batches.ndjson"
    batches = [json.loads(line) for line in path.read_text().splitlines()] if path.exists() else []
    return plant, truth, batches


def main(names):
    for name in names:
        plant, truth, batches = load(name)
        lines = []
        for batch in batches:
            solution, fared = reconcile(plant, truth, batch)
            result = report(solution, batch)
            lines.append(json.dumps(result))
            print(name, batch["batch"], result["verdict"], result["global_test"])
            print("  starts:", [f if isinstance(f, str) else round(f, 6) for f in fared])
            print("  rank gaps:", solution.rank_gap_relations, solution.rank_gap,
                  "unobservable directions:", solution.unobservable_directions)
        (HERE / f"{name}.expected.ndjson").write_text("\n".join(lines) + "\n")


if __name__ == "__main__":
    main(sys.argv[1:])
