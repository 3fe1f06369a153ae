"""Checks that would catch a wrong reference.  Run: python check.py [plant ...]

Each prints the largest disagreement it found and fails beyond the bound beside it.

- properties: T and s against CoolProp's IF97 backend, over seeded states;
- derivatives: complex step against central differences, at the truth and moved states;
- covariance and multiplier variances: null-space formulas against the inverse of the
  whole Karush-Kuhn-Tucker matrix (where that is regular);
- minimum: against scipy's least_squares with the relations as heavily weighted rows;
- multipliers: against central differences of the objective with a balance set to epsilon;
- redundancies sum to the degrees of freedom;
- scaling: other state scales, same results;
- a tag split into two of root-two sigma: one more degree of freedom, nothing else;
- statistic: mean over seeded batches (tags and assumptions drawn around the truth);
- likelihood ratios of hypotheses.py against adjustments and imbalances of reference.py.
"""

import copy
import json
import sys

import numpy as np
from CoolProp.CoolProp import PropsSI
from scipy.optimize import least_squares

import estimate
import properties as fluid
import reference as ref
from estimate import Problem

FAILED = []


def verdict(what, worst, bound):
    good = worst <= bound
    print(f"  {'ok  ' if good else 'FAIL'} {what}: {worst:.2e} (bound {bound:.0e})")
    if not good:
        FAILED.append(what)


def properties():
    random = np.random.default_rng(1)
    worst = 0.0
    for _ in range(400):
        p, h = 10 ** random.uniform(-1.9, 2.2), random.uniform(60, 3600)
        try:
            t = fluid.temperature(p, h).real
        except fluid.OutOfRange:
            continue
        if fluid.phase(p, h) == fluid.WET:
            worst = max(worst, abs(PropsSI("T", "P", p * 1e5, "Q", 0.5, "IF97::Water") - t) / 100)
            continue
        worst = max(worst, abs(PropsSI("H", "P", p * 1e5, "T", t, "IF97::Water") / 1e3 - h) / 1e3,
                    abs(PropsSI("S", "P", p * 1e5, "T", t, "IF97::Water") / 1e3
                        - fluid.entropy(p, h).real))
    verdict("properties against CoolProp IF97 (relative)", worst, 1e-9)


def derivatives(plant, truth):
    """Central differences with Richardson extrapolation; steps that cross a phase edge are skipped."""
    random = np.random.default_rng(2)
    scale, worst = ref.scale_of(plant, truth), 0.0
    formulas = [(r.residual, r.touches) for r in plant.relations]
    formulas += [(m.value, m.touches) for m in (*plant.tags.values(), *plant.assumptions.values())]
    for moved in (0.0, 0.002):
        x = truth * (1 + moved * random.uniform(-1, 1, len(truth)))
        _, exact = estimate.evaluate(formulas, x)
        for row, (function, touches) in enumerate(formulas):
            for i in touches:
                def central(step, i=i, function=function):
                    z = x.astype(complex)
                    z[i] = x[i] + step
                    up = complex(function(z)).real
                    z[i] = x[i] - step
                    return (up - complex(function(z)).real) / (2 * step)
                if near_edge(plant, x, i):
                    continue
                step = 2e-5 * scale[i]
                rough = (4 * central(step / 2) - central(step)) / 3
                size = np.max(np.abs(exact[row] * scale))
                worst = max(worst, abs(rough - exact[row, i]) * scale[i] / size)
    verdict("derivatives against central differences (scaled)", worst, 1e-6)


def near_edge(plant, x, i):
    quantity, _, stream = plant.states[i].partition(":")
    if quantity not in "ph" or stream not in plant.streams:
        return False
    p, h = (x[plant.index[f"{q}:{stream}"]] for q in "ph")
    if p >= fluid.P_SATURATION:
        return False
    return min(abs(h - fluid.h_liquid(p).real), abs(h - fluid.h_steam(p).real)) < 1.0


def whole_matrix(solution):
    """[[1, A, 0], [A', 0, F'], [0, F, 0]]: its inverse holds minus C and the multipliers' covariance."""
    F, A = solution.linear.F, solution.linear.A
    if solution.unobservable_directions or solution.implied.any():
        return
    (m, n), k0 = A.shape, len(F)
    zero = np.zeros
    matrix = np.block([[np.eye(m), A, zero((m, k0))], [A.T, zero((n, n)), F.T],
                       [zero((k0, m)), F, zero((k0, k0))]])
    balance = np.ones(len(matrix))
    for _ in range(20):
        balance /= np.sqrt(np.max(np.abs(matrix * balance * balance[:, None]), axis=1))
    inverse = np.linalg.inv(matrix * balance * balance[:, None]) * balance * balance[:, None]
    here = np.sum(A @ solution.covariance * A, axis=1)
    there = np.sum(A @ -inverse[m:m + n, m:m + n] * A, axis=1)
    verdict("variances of fitted values against the whole KKT matrix", np.max(np.abs(here - there)), 1e-7)
    worst = 0.0
    for k, relation in enumerate(solution.plant.relations):
        found = relation.balance and solution.imbalance(k)
        if found:
            variance = inverse[m + n + k, m + n + k]
            here = (solution.linear.size[k] / found[1]) ** 2
            worst = max(worst, abs(variance / here - 1))
    verdict("variances of multipliers against the whole KKT matrix", worst, 1e-5)


def heavy_rows(solution, problem, truth):
    """An independent minimiser; relations weighted 1e7 beside observations of weight one.

    What nothing determines is pinned, which changes no minimum and keeps the iteration in range.
    """
    scale, null, end = problem.scale, solution.null.T, solution.x / problem.scale

    def rows(z):
        try:
            lin = problem.linearise(z * scale)
        except fluid.OutOfRange:
            return np.full(len(problem.relations) + len(problem.y) + len(null), 1e12)
        return np.concatenate([1e7 * lin.f, lin.r, null @ (z - end)])

    def jacobian(z):
        lin = problem.linearise(z * scale)
        return np.vstack([1e7 * lin.F, -lin.A, null])
    fit = least_squares(rows, truth / scale, jac=jacobian, xtol=1e-15, ftol=1e-15, gtol=1e-15)
    size = max(1.0, solution.objective)
    verdict("objective against least_squares", abs(2 * fit.cost - solution.objective) / size, 1e-5)


def multipliers(plant, solution, problem, count=4):
    """d(objective)/d(epsilon) of a balance set to epsilon is -2 multiplier."""
    worst, done = 0.0, 0
    for k, relation in enumerate(plant.relations):
        found = relation.balance and solution.imbalance(k)
        if not found or done == count or abs(found[0] / found[1]) < 0.05:
            continue
        done += 1
        step, ends = 1e-3 * found[1], []
        for epsilon in (step, -step):
            moved = copy.copy(relation)
            moved.residual = lambda x, e=epsilon, r=relation.residual: r(x) - e
            relations = [*problem.relations]
            relations[k] = moved
            other = Problem(relations, problem.measures, problem.y, problem.sigma, problem.scale)
            ends.append(estimate.solve(other, solution.x)[1])
        slope = (ends[0] - ends[1]) / (2 * step)
        worst = max(worst, abs(slope / (-2 * found[0] / found[1] ** 2) - 1))
    verdict(f"multipliers of {done} balances against objective differences", worst, 1e-4)


def other_scale(plant, solution, truth):
    random = np.random.default_rng(3)
    scale = ref.scale_of(plant, truth) * 10 ** random.uniform(-1, 1, len(truth))
    problem = solution.observations.problem(scale)
    x, objective = estimate.solve(problem, truth)
    other = ref.Solution(plant, solution.observations, x, objective, scale)
    same = (other.degrees_of_freedom == solution.degrees_of_freedom
            and np.array_equal(other.checked, solution.checked))
    worst = max(abs(a[3] - b[3]) for a, b in zip(solution.adjusted.values(), other.adjusted.values()))
    verdict("redundancies under another scale", worst if same else np.inf, 1e-8)


def split_tag(plant, solution, problem):
    k = max(range(len(problem.y)), key=lambda i: list(solution.adjusted.values())[i][3])
    measures, y = [*problem.measures, problem.measures[k]], np.append(problem.y, problem.y[k])
    sigma = np.append(problem.sigma, problem.sigma[k] * 2 ** 0.5)
    sigma[k] *= 2 ** 0.5
    double = Problem(problem.relations, measures, y, sigma, problem.scale)
    x, objective = estimate.solve(double, solution.x)
    worst = max(abs(objective - solution.objective),
                np.max(np.abs((x - solution.x) / problem.scale))
                if not solution.unobservable_directions else 0.0)
    verdict("one tag split into two", worst, 1e-7)


def mean_statistic(plant, truth, solution, problem, draws=60):
    """Observations drawn around the truth: the statistic has mean dof, variance 2 dof."""
    random = np.random.default_rng(4)
    true = np.array([complex(m.value(truth.astype(complex))).real for m in problem.measures])
    values = []
    for _ in range(draws):
        y = true + problem.sigma * random.standard_normal(len(true))
        drawn = Problem(problem.relations, problem.measures, y, problem.sigma, problem.scale)
        values.append(estimate.solve(drawn, truth)[1])
    dof = solution.degrees_of_freedom
    error = (2 * dof / draws) ** 0.5
    print(f"       mean statistic {np.mean(values):.2f}, dof {dof}, variance {np.var(values):.1f}")
    verdict("mean statistic, in standard errors", abs(np.mean(values) - dof) / error, 3.3)


def ratios(name):
    """Likelihood ratios of hypotheses.py against adjustments and imbalances of reference.py.

    A bias is minus the standardised adjustment; an unstated loss, and a leak that has a mass
    row alone, is the imbalance of that balance.  One adds a column, the other takes a row away.
    """
    def lines(file):
        return [json.loads(line) for line in (ref.HERE / file).read_text().splitlines()]
    expected = {r["batch"]: r for r in lines(f"{name}.expected.ndjson")}
    equipment, worst, compared = ref.load(name)[0].equipment, 0.0, 0
    for line in lines("hypotheses.expected.ndjson"):
        report = expected.get(line["batch"])
        for each in line["hypotheses"] if report and line["plant"] == name else ():
            of, entry = each["of"], None
            if each["cause"] in ("bias", "departure") and of != "barometer":
                entry = report["tags" if each["cause"] == "bias" else "assumptions"][of]
                known = entry["class"] == "redundant"
                pairs = [(entry["standardised_adjustment"], each["z"] and -each["z"])]
            elif each["cause"] == "heat-loss":
                entry = report["equipment"][of]["imbalance"]["energy"]
            elif each["cause"] == "leak" and equipment[of]["kind"] in ("valve", "splitter"):
                entry = report["equipment"][of]["imbalance"]["mass"]["main"]
            if entry is None:
                continue
            if "standardised" in entry:
                known = entry["standardised"] is not None
                pairs = [(entry["standardised"], each["z"]), (entry["value"], each["size"])]
            if known != each["testable"]:
                worst = np.inf
                print("       testable or not:", line["batch"], each)
            elif known:
                compared += len(pairs)
                worst = max(worst, *(abs(a - b) / max(1.0, abs(a)) for a, b in pairs))
    verdict(f"{compared} figures of hypotheses against adjustments and imbalances", worst, 1e-7)


def main(names):
    properties()
    for name in names:
        plant, truth, batches = ref.load(name)
        print(name)
        ratios(name)
        derivatives(plant, truth)
        for number, batch in enumerate(batches):
            solution, _ = ref.reconcile(plant, truth, batch, starts=[truth])
            problem = solution.observations.problem(solution.scale)
            print(f" {batch['batch']}")
            total = sum(entry[3] for entry in solution.adjusted.values())
            verdict("sum of redundancies minus dof", abs(total - solution.degrees_of_freedom), 1e-8)
            whole_matrix(solution)
            other_scale(plant, solution, truth)
            if solution.degrees_of_freedom:
                heavy_rows(solution, problem, truth)
                multipliers(plant, solution, problem)
                split_tag(plant, solution, problem)
            if number == 0:
                mean_statistic(plant, truth, solution, problem)
    sys.exit(1 if FAILED else 0)


if __name__ == "__main__":
    main(sys.argv[1:] or ["hazel-quay", "ferrow-bridge", "corrow-mill", "alder-weir"])
