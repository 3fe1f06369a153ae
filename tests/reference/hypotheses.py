"""Generalised likelihood ratios of every hypothesis: reference results for suspects.

    python hypotheses.py [plant ...]   # writes their lines of hypotheses.expected.ndjson

For each batch, at its solution without suspects, the linear least-squares problem is solved
twice: as it is, and with the hypothesis' size as one more unknown (suspects.py).  T is what
the objective falls by, the size is that unknown's value and sigma comes from its covariance;
z is the root of T with the size's sign.  There is no multiplier in it and no inverse of
the whole system.  A hypothesis is testable where the degrees of freedom fall by one with it
and the data determine its size; a tag or assumption moreover has to have a redundancy
(sigma / sigma of its bias)^2 of 1e-3.

The batches with a planted error (make_planted.py) are solved again, nonlinearly from
several starts with the right hypothesis, and from two with the largest of the others.
"""

import json
import sys

import numpy as np

import estimate
import reference as ref
from reference import HERE, HARDLY, significant
from suspects import changed_problem, hypotheses, natural_width

UNOBSERVABLE = 1e-7   # of a unit column along directions that nothing determines
FAR = {"m": 1.0, "loss": 1000.0}  # least scale, kg/s and kW, where a suspect is let go
RIVALS = 6            # hypotheses solved again beside the planted one
ALIKE = 1e-6          # T by difference, by the change of residuals and as (size / sigma)^2


class Gaps:
    """How far from its threshold each decision stood."""

    def __init__(self):
        self.kept, self.dropped = np.inf, 0.0
        self.determined, self.free = 0.0, np.inf
        self.alike = 0.0
        self.edges = []

    def rank(self, gap):
        self.kept, self.dropped = min(self.kept, gap[0]), max(self.dropped, gap[1])


def unit_last_column(linear):
    """The linear problem with its last column scaled to length one, and that length."""
    length = np.hypot(np.linalg.norm(linear.F[:, -1]), np.linalg.norm(linear.A[:, -1]))
    F, A = linear.F.copy(), linear.A.copy()
    F[:, -1] /= length
    A[:, -1] /= length
    return estimate.Linear(linear.f, F, linear.size, linear.r, A), length


def degrees_of_freedom(linear):
    """Degrees of freedom, the null directions of everything observed, and the gaps of both ranks."""
    _, _, _, rank_f, gap_f = estimate.decompose(linear.F)
    stack = np.vstack([linear.F, estimate.normalise(linear.A)])
    _, _, vt, rank, gap = estimate.decompose(stack)
    return rank_f + len(linear.r) - rank, vt[rank:].T, (gap_f, gap)


def ratio(solution, hypothesis, gaps):
    """{z, size, sigma, ratio} by linear theory, or None where it is not testable."""
    plant, observations = solution.plant, solution.observations
    width = natural_width(plant, observations, hypothesis)
    problem = changed_problem(plant, observations, solution.scale, hypothesis, width)
    if problem is None:
        return None
    plain = solution.linear
    linear, length = unit_last_column(problem.linearise(np.append(solution.x, 0.0)))
    dof, null, both = degrees_of_freedom(linear)
    if not hypothesis.observation:  # of the others redundancy decides, far from any rank
        gaps.rank(both[0])
        gaps.rank(both[1])
    along = float(np.linalg.norm(null[-1])) if null.size else 0.0
    if along > UNOBSERVABLE:
        gaps.free = min(gaps.free, along)
        return None
    gaps.determined = max(gaps.determined, along)
    if dof != solution.degrees_of_freedom - 1:
        return None
    step = plain.step()
    before = plain.r - plain.A @ step
    step = linear.step()
    after = linear.r - linear.A @ step
    Z, P = linear.free()
    unit = width / length
    size = step[-1] * unit
    sigma = np.linalg.norm(Z[-1] @ P) * unit
    if hypothesis.observation:
        redundancy = (width / sigma) ** 2
        gaps.edges.append((redundancy, hypothesis.of))
        if redundancy < HARDLY:
            return None
    moved = before - after
    fall = float(moved @ moved)  # the difference of the objectives, free of cancellation
    difference = float(before @ before - after @ after)
    size_of_all = max(fall, 1e-6 * solution.objective)
    gaps.alike = max(gaps.alike, abs(fall - difference) / size_of_all,
                     abs(fall - (size / sigma) ** 2) / size_of_all)
    return {"z": float(np.copysign(fall ** 0.5, size)), "size": float(size),
            "sigma": float(sigma), "ratio": fall}


def again(plant, truth, solution, hypothesis, size, starts):
    """The batch solved nonlinearly with the hypothesis as an unknown, from all these starts and
    from the solution without it."""
    width = max(abs(size), natural_width(plant, solution.observations, hypothesis))
    scale = solution.scale.copy()
    for i, name in enumerate(plant.states):  # what is no longer held may go far
        scale[i] = max(scale[i], FAR.get(name.partition(":")[0], 0.0))
    problem = changed_problem(plant, solution.observations, scale, hypothesis, width)
    starts = [np.append(s, size) for s in starts]
    line = {"cause": hypothesis.cause, "of": hypothesis.of, "side": hypothesis.side,
            "unit": hypothesis.unit, "objective": None, "ratio": None, "size": None, "sigma": None}
    try:
        x, objective, fared = estimate.best(problem, [np.append(solution.x, 0.0), *starts])
    except estimate.NotConverged as reason:
        return line, [str(reason)]
    Z, P = problem.linearise(x).free()
    sigma = float(np.linalg.norm(Z[-1] @ P)) * width
    return line | {"objective": significant(objective),
                   "ratio": significant(solution.objective - objective),
                   "size": significant(x[-1]), "sigma": significant(sigma)}, fared


def entry(hypothesis, found):
    line = {"cause": hypothesis.cause, "of": hypothesis.of, "side": hypothesis.side,
            "unit": hypothesis.unit, "z": None, "size": None, "sigma": None,
            "testable": found is not None}
    for key in ("z", "size", "sigma"):
        if found:
            line[key] = significant(found[key])
    return line


def same(hypothesis, planted):
    return all(getattr(hypothesis, key) == planted[key] for key in ("cause", "of", "side"))


def of_batch(plant, truth, batch, planted, gaps):
    solution, _ = ref.reconcile(plant, truth, batch)
    listed = [(h, ratio(solution, h, gaps)) for h in hypotheses(plant)]
    result = {"plant": plant.name, "batch": batch["batch"],
              "statistic": significant(solution.objective),
              "degrees_of_freedom": solution.degrees_of_freedom,
              "hypotheses": [entry(h, found) for h, found in listed]}
    tested = sorted(((h, found) for h, found in listed if found),
                    key=lambda each: -round(abs(each[1]["z"]), 6))  # ties by file order
    print(plant.name, batch["batch"], f"statistic {solution.objective:.4f}",
          f"dof {solution.degrees_of_freedom}, testable {len(tested)} of {len(listed)}")
    for h, found in tested[:5]:
        print(f"    {h.cause} {h.of} {h.side or ''}: z {found['z']:.3f}, "
              f"size {found['size']:.4g} +/- {found['sigma']:.4g} {h.unit}")
    if planted:
        result["planted"] = planted
        result["solved_again"] = []
        right = [(h, found) for h, found in tested if same(h, planted)]
        for h, found in right + [each for each in tested if each not in right][:RIVALS]:
            starts = list(ref.starts_around(plant, truth)) if same(h, planted) else [truth]
            line, fared = again(plant, truth, solution, h, found["size"], starts)
            result["solved_again"].append(line)
            print("    again", line, "starts:",
                  sorted({f if isinstance(f, str) else round(f, 5) for f in fared}, key=str),
                  flush=True)
    return result


def kept_lines(names):
    """Lines of the plants that are not asked for."""
    path = HERE / "hypotheses.expected.ndjson"
    lines = path.read_text().splitlines() if path.exists() else []
    return [line for line in lines if json.loads(line)["plant"] not in names]


def main(names):
    gaps, lines = Gaps(), kept_lines(names)
    for name in names:
        plant, truth, batches = ref.load(name)
        planted = json.loads((HERE / f"{name}.planted.json").read_text())
        more = (HERE / f"{name}.planted.batches.ndjson").read_text().splitlines()
        work = [(b, None) for b in batches]
        work += [(b, planted[b["batch"]]) for b in map(json.loads, more)]
        lines += [json.dumps(of_batch(plant, truth, b, p, gaps)) for b, p in work]
    (HERE / "hypotheses.expected.ndjson").write_text("\n".join(lines) + "\n")
    print(f"smallest singular value kept {gaps.kept:.1e}, largest dropped {gaps.dropped:.1e}")
    print(f"part of a size along what nothing determines: below {gaps.determined:.1e} "
          f"or above {gaps.free:.1e}")
    edges = sorted(((float(r), of) for r, of in gaps.edges), key=lambda each: abs(np.log(each[0] / HARDLY)))[:4]
    print("redundancies nearest the edge:", edges)
    print(f"T by three routes agrees to {gaps.alike:.1e}")
    if gaps.alike > ALIKE:
        sys.exit("the routes to T differ")


if __name__ == "__main__":
    main(sys.argv[1:] or ["hazel-quay", "ferrow-bridge", "corrow-mill", "alder-weir"])
