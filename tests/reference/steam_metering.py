"""The linear test bed of gross-error identification: a published steam-metering network.

    python steam_metering.py     # writes steam-metering.md and the trials' fixture

Network, true flows and sigmas are those of Serth and Heenan 1986 (28 streams, 11 nodes) as
tests/data/published/net-serth-heenan.json has them; its `value_origin` says from where.
Trials are simulated and identified here by the serial generalised likelihood ratio
(Narasimhan and Mah 1987): one hypothesis at a time, all recomputed after each.

Mathematics: node imbalances r = A y have covariance H = A V A'.  A bias of stream j has
signature A e_j in them, a leak out of node i has e_i.  With L L' = H and G the signatures
through L^-1, J(S) = min |L^-1 r - G_S b|^2, and the ratio of a further hypothesis j is
T_j = J(S) - J(S + j).  Leaks are one-sided: only one that would be positive is a candidate.

Measures (as Narasimhan and Mah define them; sums over all trials):
- overall power = gross errors correctly identified / gross errors simulated;
- type I = hypotheses wrongly identified / trials;
- selectivity = gross errors correctly identified / hypotheses identified.

Hypotheses of parallel signatures cannot be told apart by anything, and more become parallel
beside suspects already chosen (two of three biases in a loop).  They are one accusation,
correct where any of them is.  Ties go to the first: biases before leaks, by number.  What
follows a tie of the second kind (sizes, the backward step) hangs on that choice.
"""

import json
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.stats import norm

HERE = Path(__file__).parent
PUBLISHED = HERE.parent / "data" / "published"
CONFIDENCE = 0.95
HARDLY = 1e-3          # redundancy below which a stream's bias is never a hypothesis
PARALLEL = 1e-9        # of 1 - |cosine| of two signatures
DEPENDENT = 1e-9       # squared length left of a unit signature beside those chosen
DRAWS = 200_000        # clean draws for the critical value
TRIALS = 200
SEED = 19860733        # every stream of random numbers is (SEED, purpose, case)
SIZES = (5.0, 25.0)    # uniform; in sigmas of the reading, or of the node's own imbalance
SERIAL = (7, 5)        # most suspects
FIXTURE_BIASED, FIXTURE_LEAKS = 4, 12   # trials kept: of each number of biases, with a leak


class Network:
    def __init__(self, incidence, sigma, streams=None):
        self.A, self.sigma = np.array(incidence, float), np.array(sigma, float)
        self.nodes, self.streams = self.A.shape
        self.H = (self.A * self.sigma ** 2) @ self.A.T
        self.L = np.linalg.cholesky(self.H)
        self.node_sigma = np.sqrt(np.diag(self.H))
        signatures = np.linalg.solve(self.L, self.A)
        self.redundancy = self.sigma ** 2 * np.sum(signatures ** 2, axis=0)
        names = streams or [str(j + 1) for j in range(self.streams)]
        biases = [(("bias", names[j], j), signatures[:, j]) for j in range(self.streams)
                  if self.redundancy[j] >= HARDLY]
        leaks = [(("leak", str(i + 1), i), column)
                 for i, column in enumerate(np.linalg.inv(self.L).T)]
        self.sets = {"biases": Hypotheses(biases), "biases-and-leaks": Hypotheses(biases + leaks)}

    def whiten(self, y):
        return np.linalg.solve(self.L, self.A @ np.asarray(y))


class Hypotheses:
    """Signatures in whitened imbalances, and the classes of parallel ones."""

    def __init__(self, listed):
        self.names = [name for name, _ in listed]
        self.G = np.column_stack([column for _, column in listed])
        self.leak = np.array([name[0] == "leak" for name in self.names])
        self.unit = self.G / np.linalg.norm(self.G, axis=0)
        self.number = {name[::2]: k for k, name in enumerate(self.names)}
        self.critical = None

    def simulate_critical(self, rng):
        """95 % quantile of the largest of all statistics on clean readings (leaks one-sided)."""
        largest = []
        for _ in range(DRAWS // 10_000):
            z = rng.standard_normal((10_000, self.unit.shape[0])) @ self.unit
            largest.append(np.where(self.leak, z, np.abs(z)).max(axis=1))
        self.critical = float(np.quantile(np.concatenate(largest), CONFIDENCE))

    def sidak(self):
        count = len(self.names)
        return float(norm.isf((1 - CONFIDENCE ** (1 / count)) / 2))


def fit(hypotheses, chosen, w):
    """(J, sizes, sigmas) with the chosen hypotheses as unknowns."""
    if not chosen:
        return float(w @ w), np.empty(0), np.empty(0)
    q, r = np.linalg.qr(hypotheses.G[:, chosen])
    sizes = np.linalg.solve(r, q.T @ w)
    rest = w - hypotheses.G[:, chosen] @ sizes
    return float(rest @ rest), sizes, np.linalg.norm(np.linalg.inv(r), axis=1)


def candidates(hypotheses, chosen, w):
    """z of every hypothesis beside the chosen ones, and the unit signatures left.

    z is zero where a signature depends on those chosen or the sign is one that a leak cannot have.
    """
    unit = hypotheses.unit
    if chosen:
        q, _ = np.linalg.qr(hypotheses.G[:, chosen])
        w, unit = w - q @ (q.T @ w), unit - q @ (q.T @ unit)
    left = np.sum(unit ** 2, axis=0)
    unit = np.where(left > DEPENDENT, unit / np.sqrt(np.maximum(left, DEPENDENT)), 0.0)
    z = unit.T @ w
    return np.where(hypotheses.leak & (z < 0), 0.0, z), unit


@dataclass
class Accusation:
    """One step of the serial search."""
    chosen: int
    alike: list       # all that are parallel beside those chosen before, this one too
    z: float          # as it entered


def forward(hypotheses, w, most):
    """Suspects in order, and how near any decision was to another."""
    found, margin = [], np.inf
    while len(found) < most:
        z, unit = candidates(hypotheses, [a.chosen for a in found], w)
        size = np.abs(z)
        best = int(np.flatnonzero(size >= size.max() * (1 - 1e-9))[0])
        margin = min(margin, abs(size[best] - hypotheses.critical))
        if size[best] <= hypotheses.critical:
            break
        parallel = np.abs(unit.T @ unit[:, best]) > 1 - PARALLEL
        margin = min(margin, size[best] - size[~parallel].max(initial=0.0))
        alike = np.flatnonzero(parallel & (size > 0))
        found.append(Accusation(best, alike.tolist(), float(z[best])))
    return found, margin


def leaving(hypotheses, chosen, w):
    """z of each chosen suspect as the last to enter: its size over its sigma, all others kept."""
    _, sizes, sigmas = fit(hypotheses, chosen, w)
    return sizes / sigmas


def backward(hypotheses, found, w):
    """The suspects that are still needed: the weakest one at or below the critical value goes."""
    found, margin = list(found), np.inf
    while found:
        z = np.abs(leaving(hypotheses, [a.chosen for a in found], w))
        weakest = int(np.argmin(z))
        margin = min(margin, abs(z[weakest] - hypotheses.critical))
        if z[weakest] > hypotheses.critical:
            break
        del found[weakest]
    return found, margin


# ---- trials --------------------------------------------------------------


def balanced(network, flows, imbalance=None):
    """The flows nearest to those given (in sigmas) with this imbalance of each node."""
    gap = network.A @ flows - (0 if imbalance is None else imbalance)
    return flows - network.sigma ** 2 * (network.A.T @ np.linalg.solve(network.H, gap))


def draw(network, flows, rng, biases=0, leaks=0, among=None):
    """One trial.  Draws, in this order: streams, their sizes, their signs, nodes, their sizes, noise."""
    among = np.arange(network.streams) if among is None else among
    streams = np.sort(rng.choice(among, biases, replace=False))
    sizes = rng.uniform(*SIZES, biases) * rng.choice([-1.0, 1.0], biases)
    nodes = np.sort(rng.choice(network.nodes, leaks, replace=False))
    leaked = np.zeros(network.nodes)
    leaked[nodes] = rng.uniform(*SIZES, leaks) * network.node_sigma[nodes]
    true = balanced(network, flows, leaked)
    y = true + network.sigma * rng.standard_normal(network.streams)
    y[streams] += sizes * network.sigma[streams]
    planted = [("bias", int(j), float(s * network.sigma[j])) for j, s in zip(streams, sizes)]
    planted += [("leak", int(i), float(leaked[i])) for i in nodes]
    return np.round(y, 6), planted


def score(hypotheses, found, planted, strict=False):
    """(simulated errors identified, hypotheses wrongly identified).

    Strictly, ties of the second kind do not count: the first has to be it.
    """
    left = [hypotheses.number.get((cause, index)) for cause, index, _ in planted]
    right = []
    for accusation in found:
        alike = accusation.alike
        if strict:
            cosine = np.abs(hypotheses.unit[:, alike].T @ hypotheses.unit[:, accusation.chosen])
            alike = [k for k, c in zip(alike, cosine) if c > 1 - PARALLEL]
        right += [k for k in alike if k in left and k not in right][:1]
    return right, len(found) - len(right)


def limit(network, cause, index, critical):
    """Smallest size found with 80 % power, by the design's formula."""
    if cause == "bias":
        sigma = network.sigma[index] / network.redundancy[index] ** 0.5
    else:
        sigma = 1 / np.linalg.norm(np.linalg.inv(network.L)[:, index])
    return (critical + 0.842) * sigma


def measure(network, label, most, trials):
    """Measures of one kind of trial under one set of hypotheses, forward and with the backward step."""
    hypotheses = network.sets[label]
    totals = {"serial": np.zeros(6), "serial-and-backward": np.zeros(6)}
    simulated, large = 0, 0
    for y, planted in trials:
        w = network.whiten(y)
        seen = [hypotheses.number.get((cause, index)) for cause, index, size in planted
                if abs(size) >= limit(network, cause, index, hypotheses.critical)]
        simulated, large = simulated + len(planted), large + len(seen)
        first, _ = forward(hypotheses, w, most)
        for name, found in (("serial", first),
                            ("serial-and-backward", backward(hypotheses, first, w)[0])):
            right, wrong = score(hypotheses, found, planted)
            strictly, _ = score(hypotheses, found, planted, strict=True)
            perfect = len(right) == len(planted) and not wrong
            totals[name] += (len(right), len(strictly), wrong, sum(k in right for k in seen),
                             perfect, bool(found))
    return {name: measures_of(total, simulated, large, len(trials)) for name, total in totals.items()}


def measures_of(total, simulated, large, count):
    right, strictly, wrong, large_right, perfect, any_accused = total
    return {"overall_power": round(right / simulated, 4) if simulated else None,
            "overall_power_strict": round(strictly / simulated, 4) if simulated else None,
            "power_above_limit": round(large_right / large, 4) if large else None,
            "simulated": simulated, "above_limit": large,
            "type_1_per_trial": round(wrong / count, 4),
            "selectivity": round(right / (right + wrong), 4) if simulated else None,
            "all_right": round(perfect / count, 4), "any_accused": round(any_accused / count, 4)}


# ---- what is written -------------------------------------------------------


def load():
    """(network, balanced true flows)."""
    text = json.loads((PUBLISHED / "net-serth-heenan.json").read_text())
    case, known = text["problem"], text["expected"]["computed"]
    incidence = np.zeros((len(case["nodes_signed_streams"]), len(case["true_flows"])))
    for i, streams in enumerate(case["nodes_signed_streams"]):
        for s in streams:
            incidence[i, abs(s) - 1] = np.sign(s)
    network = Network(incidence, case["sigma"])
    for k, hypotheses in enumerate(network.sets.values()):
        hypotheses.simulate_critical(np.random.default_rng([SEED, 0, k]))
    w, hypotheses = network.whiten(case["measured"]), network.sets["biases"]
    z = np.abs(hypotheses.unit.T @ w)
    theirs = np.array([known["measurement_z"][index] for _, _, index in hypotheses.names])
    if abs(w @ w - known["J"]) > 1e-5 or np.max(np.abs(z - theirs)) > 1e-5:
        raise SystemExit("statistics of the published readings differ from the case's file")
    return network, balanced(network, np.array(case["true_flows"]))


def cases(network):
    """name -> (purpose, arguments of draw, trials)."""
    fair = np.flatnonzero(network.redundancy >= HARDLY)
    listed = {"clean": (1, {}, 2000)}
    for n in range(1, 8):
        listed[f"{n} biased"] = (10 + n, {"biases": n, "among": fair}, TRIALS)
    for n in range(1, 8):
        listed[f"{n} biased, of all streams"] = (20 + n, {"biases": n}, TRIALS)
    listed["1 leak"] = (31, {"leaks": 1}, TRIALS)
    for n in (1, 2, 3):
        listed[f"1 leak and {n} biased"] = (31 + n, {"leaks": 1, "biases": n, "among": fair}, TRIALS)
    return listed


def trials_of(network, flows, purpose, arguments, count):
    rng = np.random.default_rng([SEED, 2, purpose])
    return [draw(network, flows, rng, **arguments) for _ in range(count)]


def accusation(network, label, y, most):
    """What the fixture says of one trial under one set of hypotheses."""
    hypotheses = network.sets[label]
    w = network.whiten(y)
    found, margin = forward(hypotheses, w, most)
    kept, margin_back = backward(hypotheses, found, w)
    statistic = fit(hypotheses, [], w)[0]
    lines = [{**name_of(hypotheses, a.chosen), "z": round(a.z, 9),
              "alike": [name_of(hypotheses, k) for k in a.alike if k != a.chosen]} for a in found]
    after, sizes, sigmas = fit(hypotheses, [a.chosen for a in kept], w)
    final = [{**name_of(hypotheses, a.chosen), "size": ten(b), "sigma": ten(s), "z": ten(b / s)}
             for a, b, s in zip(kept, sizes, sigmas)]
    return {"statistic": ten(statistic), "serial": lines, "after_backward": final,
            "statistic_after": ten(after),
            "narrowest_decision": float(f"{min(margin, margin_back):.3g}")}


def ten(number):
    return float(f"{number:.10g}")


def name_of(hypotheses, k):
    return {"cause": hypotheses.names[k][0], "of": hypotheses.names[k][1]}


def fixture(network, flows, all_cases):
    kept = []
    for name, (purpose, arguments, count) in all_cases.items():
        if name.endswith("biased") and "leak" not in name:
            number = FIXTURE_BIASED
        elif name == "1 leak":
            number = FIXTURE_LEAKS
        else:
            continue
        for y, planted in trials_of(network, flows, purpose, arguments, count)[:number]:
            trial = {"case": name, "measured": y.tolist(),
                     "planted": [{"cause": c, "of": str(n + 1), "size": float(f"{s:.10g}")}
                                 for c, n, s in planted]}
            for label in network.sets:
                trial[label] = {f"at_most_{most}": accusation(network, label, y, most)
                                for most in SERIAL}
            kept.append(trial)
    return kept


def bypass():
    """The bypass network with its published biased reading: both sets of hypotheses."""
    case = json.loads((PUBLISHED / "ged-nj-bypass-biased.json").read_text())
    problem, known = case["problem"], case["expected"]["computed"]
    network = Network(problem["incidence"], problem["sigma"])
    found = {}
    for k, (label, hypotheses) in enumerate(network.sets.items()):
        hypotheses.simulate_critical(np.random.default_rng([SEED, 3, k]))
        w = network.whiten(problem["measured"])
        T = (hypotheses.unit.T @ w) ** 2
        for leak, key in ((False, "glr_measurement_T"), (True, "glr_leak_T")):
            mine = T[hypotheses.leak == leak]
            if len(mine) and np.max(np.abs(mine - known[key])) > 1e-9:
                raise SystemExit(f"{key} differs from the published case's file")
        found[label] = {"critical_value": round(hypotheses.critical, 6),
                        **accusation(network, label, problem["measured"], 2)}
    return found


def table(measures):
    """The forward search's measures, one row each; at most five only where it can matter."""
    fields = {"overall_power": "overall power", "overall_power_strict": "strict",
              "power_above_limit": "above the limit", "type_1_per_trial": "type I per trial",
              "selectivity": "selectivity", "any_accused": "anything accused"}
    lines = ["| trials | hypotheses | at most | " + " | ".join(fields.values()) + " |",
             "|---" * (len(fields) + 3) + "|"]
    for row in measures:
        if row["method"] != "serial" or (row["at_most"] < 7 and row["case"][0] not in "567"):
            continue
        cells = ["-" if row[f] is None else f"{row[f]:.3f}" for f in fields]
        lines.append(f"| {row['case']} | {row['hypotheses']} | {row['at_most']} | "
                     + " | ".join(cells) + " |")
    return "\n".join(lines) + "\n"


def main():
    network, flows = load()
    all_cases = cases(network)
    measures = []
    for name, (purpose, arguments, count) in all_cases.items():
        trials = trials_of(network, flows, purpose, arguments, count)
        for label in network.sets:
            for most in SERIAL:
                for method, row in measure(network, label, most, trials).items():
                    measures.append({"case": name, "hypotheses": label, "at_most": most,
                                     "method": method, "trials": count, **row})
    (HERE / "steam-metering.md").write_text(preface(network) + table(measures))
    kept = fixture(network, flows, all_cases)
    critical = {label: {"critical_value": round(h.critical, 6), "sidak": round(h.sidak(), 6),
                        "hypotheses": len(h.names)} for label, h in network.sets.items()}
    text = {
        "id": "steam-metering-trials",
        "area": "identification of several gross errors",
        "source": "network: Serth & Heenan, AIChE J. 32 (1986) 733; method: Narasimhan & Mah, "
                  "AIChE J. 33 (1987) 1514",
        "value_origin": "network as in net-serth-heenan.json; readings simulated and everything else "
                        "computed by tests/reference/steam_metering.py; no published figure is used",
        "critical_values": critical, "measures": measures,
        "not_hypotheses": [str(j + 1) for j in np.flatnonzero(network.redundancy < HARDLY)],
        "node_sigma": [float(f"{s:.10g}") for s in network.node_sigma],
        "true_flows_balanced": [float(f"{x:.12g}") for x in flows],
        "bypass": bypass(), "trials": kept,
        "tolerance": "accused sets and their order exact but for members of `alike`; z 1e-6",
        "notes": "critical_value: 95 % quantile of the largest statistic over 200 000 clean draws, "
                 "leaks one-sided; it is the same at every step. z of `serial` is that at entering; `alike` "
                 "are parallel beside those before (where they are not so alone, sizes and the backward "
                 "step hang on the choice, which is the first: biases before leaks, by number). "
                 "narrowest_decision is in z, over all comparisons but those ties."}
    head = {k: v for k, v in text.items() if k != "trials"}
    body = json.dumps(head, indent=1)[:-2] + ',\n "trials": [\n'
    body += ",\n".join("  " + json.dumps(t) for t in kept) + "\n ]\n}\n"
    (PUBLISHED / "steam-metering-trials.json").write_text(body)
    narrow = min(t[label][f"at_most_{most}"]["narrowest_decision"]
                 for t in kept for label in network.sets for most in SERIAL)
    print(f"{len(kept)} trials kept; the narrowest of their decisions is {narrow:.1e} in z")


def preface(network):
    lines = ["# Steam-metering network: serial identification, measured\n",
             "Made by `steam_metering.py`, which says what is simulated and how the measures are defined.",
             f"{TRIALS} seeded trials of each kind (2000 clean ones), forward search; the fixture has the",
             "backward step's figures too, which hardly differ. A tie beside suspects already chosen is",
             "right where any of its members is; under `strict` only where the first is. `above the limit`:",
             "overall power over the errors above their 80 % limit, (c + 0.842) sigma / root of redundancy.",
             ""]
    for label, h in network.sets.items():
        parallel = np.triu(np.abs(h.unit.T @ h.unit) > 1 - PARALLEL, 1)
        told = "; ".join(" = ".join(" ".join(h.names[k][:2]) for k in pair)
                         for pair in np.argwhere(parallel)) or "none"
        lines.append(f"- {label}: {len(h.names)} hypotheses, critical value {h.critical:.4f} (simulated; "
                     f"Sidak's would be {h.sidak():.4f}); cannot be told apart: {told}.")
    hardly = ", ".join(f"{j + 1} ({network.redundancy[j]:.1e})"
                       for j in np.flatnonzero(network.redundancy < HARDLY)) or "none"
    lines += [f"- Streams whose redundancy is below {HARDLY:g}, never hypotheses: {hardly}. Trials biased "
              "`of all streams` may bias them all the same.",
              "- A leak of size 1 is one sigma of the node's own imbalance, the root of the sum of "
              "squares of its streams' sigmas.",
              "- Figures published for this network: none that is remembered for certain.", "", ""]
    return "\n".join(lines)


if __name__ == "__main__":
    main()
