"""Solves network files with CasADi's IPOPT and with ours, in alternation, and prints the ratio of the medians.

usage: compare.py OURS_BINARY ROUNDS FILE...
       compare.py --objectives FILE...      prints IPOPT's objectives as JSON, for tests/data/networks/ipopt.json

Fair play: same file, same start, one thread, scaled relations to 1e-8 or better, same objective to 1e-6. IPOPT gets
exact derivatives and its own scaled variables; the time to build its problem is not counted, nor is our symbolic
analysis. Each round runs IPOPT a few times, then ours a few times; the median over the rounds counts.
"""
import json, os, platform, statistics, subprocess, sys, time

os.environ["OMP_NUM_THREADS"] = "1"
import casadi as ca
import numpy as np
import scipy.sparse as sp

A_H, B_H, T0 = 4.0, 8e-4, 273.15


class Network:
    """A problem file as a CasADi solver in scaled variables z = x / xscale."""

    def __init__(self, path):
        file = json.load(open(path))
        n = file["n"]
        x0 = np.array(file["x0"])
        scale = np.array(file.get("xscale") or np.concatenate([np.abs(x0[:n]), np.full(n, 100.0)]))
        measured = np.array(file["meas"], bool)
        self.start = x0 / scale
        z = ca.SX.sym("z", 2 * n)
        x = z * ca.DM(scale)
        m, t = x[:n], x[n:] - T0
        # One sparse product each for flows, enthalpy flows and temperatures.
        flow, heat, same = ([], [], []), ([], [], []), ([], [], [])
        for k, (kind, a, b) in enumerate(file["eqs"]):
            if kind == "teq":
                terms, into = [(a, 1.0), (b, -1.0)], same
            else:
                terms = [(i, 1.0) for i in a] + [(i, -1.0) for i in b]
                into = flow if kind == "mass" else heat
            for i, sign in terms:
                into[0].append(sign / file["escale"][k]); into[1].append(k); into[2].append(i)
        matrix = lambda e: ca.DM(sp.csr_matrix((e[0], (e[1], e[2])), shape=(len(file["eqs"]), n)).tocsc())
        g = matrix(flow) @ m + matrix(heat) @ (m * (A_H * t + B_H * t * t)) + matrix(same) @ t
        where = np.flatnonzero(measured).tolist()
        y, sigma = np.array(file["y"])[where], np.array(file["sigma"])[where]
        r = (x[where] - ca.DM(y)) / ca.DM(sigma)
        options = {"print_time": 0, "ipopt": {"print_level": 0, "sb": "yes", "tol": 1e-9, "linear_solver": "mumps", "max_iter": 300}}
        self.solver = ca.nlpsol("network", "ipopt", {"x": z, "f": ca.sumsqr(r), "g": g}, options)

    def solve(self):
        begun = time.perf_counter()
        answer = self.solver(x0=self.start, lbg=0, ubg=0)
        ms = (time.perf_counter() - begun) * 1e3
        return ms, float(answer["f"]), float(np.abs(np.array(answer["g"])).max()), self.solver.stats()["return_status"]


def objectives(paths):
    made = {"casadi": ca.__version__, "solver": "IPOPT as bundled with CasADi, MUMPS, tol 1e-9", "python": platform.python_version()}
    out = {"made_with": made, "objective": {}}
    for path in paths:
        _, objective, violation, status = Network(path).solve()
        assert violation < 1e-8, (path, violation, status)
        out["objective"][os.path.basename(path).removesuffix(".json")] = objective
    print(json.dumps(out, indent=1))


def compare(binary, rounds, paths):
    print(f"{'file':>12} {'IPOPT ms':>9} {'ours ms':>9} {'ratio':>7} {'objective IPOPT':>18} {'ours':>18}")
    for path in paths:
        network = Network(path)
        network.solve()
        theirs, ours = [], []
        for _ in range(rounds):
            for _ in range(3):
                ms, objective, violation, status = network.solve()
                theirs.append(ms)
            line = json.loads(subprocess.run([binary, path, "15"], capture_output=True, text=True, check=True).stdout)
            assert line["status"] == "Converged", line
            ours.append(line["ms"])
        a, b = statistics.median(theirs), statistics.median(ours)
        name = os.path.basename(path).removesuffix(".json")
        print(f"{name:>12} {a:9.3f} {b:9.4f} {a / b:7.1f} {objective:18.9f} {line['objective']:18.9f}  ({status}, |f| {violation:.1e})")


if __name__ == "__main__":
    if sys.argv[1] == "--objectives":
        objectives(sys.argv[2:])
    else:
        compare(sys.argv[1], int(sys.argv[2]), sys.argv[3:])
