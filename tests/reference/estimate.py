"""Dense estimator: minimise sum ((y - g(x)) / sigma)^2 subject to f(x) = 0.

Gauss-Newton with null-space projection.  At each point the linearised relations
F dx = -f are met by their minimum-norm solution, and the rest of the step is the
least-squares solution in the null space of F.  Everything is scaled by a believable
state, ranks come from singular values of row-normalised matrices, and directions that
nothing determines are left where they are.  A fixed point is a stationary point of
the Lagrangian; the caller tries several starts to be sure of the minimum.
"""

from dataclasses import dataclass

import numpy as np

import properties as fluid

STEP = 1e-20          # complex step
RANK = 1e-9           # singular values below this fraction of the largest are zero
TOLERANCE = 1e-11     # of the scaled step
LONGEST = 0.15        # longest scaled step


class NotConverged(RuntimeError):
    pass


def evaluate(formulas, x):
    """Values and dense Jacobian of [(function, touched states)] at x."""
    z = x.astype(complex)
    values = np.empty(len(formulas))
    jacobian = np.zeros((len(formulas), len(x)))
    for row, (function, touches) in enumerate(formulas):
        values[row] = complex(function(z)).real
        for i in touches:
            z[i] += 1j * STEP
            jacobian[row, i] = complex(function(z)).imag / STEP
            z[i] = x[i]
    return values, jacobian


@dataclass
class Problem:
    """Relations and the observations used; y and sigma in each observation's unit."""
    relations: list
    measures: list
    y: np.ndarray
    sigma: np.ndarray
    scale: np.ndarray

    def linearise(self, x):
        f, jf = evaluate([(r.residual, r.touches) for r in self.relations], x)
        g, jg = evaluate([(m.value, m.touches) for m in self.measures], x)
        size = np.linalg.norm(jf * self.scale, axis=1)
        return Linear(f / size, jf * self.scale / size[:, None], size,
                      (self.y - g) / self.sigma, jg * self.scale / self.sigma[:, None])


def decompose(matrix):
    """SVD with numerical rank, and the gap that the rank stands on."""
    u, s, vt = np.linalg.svd(matrix, full_matrices=True)
    rank = int(np.sum(s > RANK * s[0])) if len(s) else 0
    dropped = s[rank] if rank < len(s) else 0.0
    return u, s, vt, rank, (s[rank - 1] if rank else 0.0, dropped)


def normalise(matrix):
    return matrix / np.linalg.norm(matrix, axis=1)[:, None]


@dataclass
class Linear:
    """The problem at one point, scaled: relations normalised by row, observations by sigma."""
    f: np.ndarray
    F: np.ndarray
    size: np.ndarray
    r: np.ndarray
    A: np.ndarray

    def free(self, keep=slice(None)):
        """Null space of the relations kept, with the determined part of its least squares.

        Returns (Z, P): Z spans the null space; P is the pseudo-inverse of A Z, cut
        at the number of directions the observations determine.
        """
        F = self.F[keep]
        _, _, vt, rank_f, _ = decompose(F)
        Z = vt[rank_f:].T
        rank = decompose(np.vstack([F, normalise(self.A)]))[3]
        u, s, wt = np.linalg.svd(self.A @ Z, full_matrices=False)
        k = rank - rank_f
        return Z, wt[:k].T @ (u[:, :k] / s[:k]).T

    def particular(self):
        u, s, vt, rank, _ = decompose(self.F)
        return -vt[:rank].T @ ((u[:, :rank].T @ self.f) / s[:rank])

    def step(self):
        met = self.particular()
        Z, P = self.free()
        return met + Z @ (P @ (self.r - self.A @ met))


def move(problem, x, step):
    """x after a step (scaled), shortened until it stays in range: (x, linearised there)."""
    length = np.max(np.abs(step))
    step = step * min(1.0, LONGEST / length) if length else step
    for _ in range(30):
        try:
            trial = x + step * problem.scale
            return trial, problem.linearise(trial)
        except fluid.OutOfRange:
            step = step * 0.5
    raise NotConverged("no step stays where the properties are valid")


def solve(problem, start):
    """A stationary point reached from `start`; (x, objective).

    The relations are met first: away from them ranks are not those of the problem, and
    what nothing determines could seem determined.
    """
    x, linear = start, problem.linearise(start)
    for _ in range(60):
        step = linear.particular()
        if np.max(np.abs(step)) < TOLERANCE:
            break
        x, linear = move(problem, x, step)
    for _ in range(100):
        step = linear.step()
        x, linear = move(problem, x, step)
        if np.max(np.abs(step)) < TOLERANCE:
            return x, float(linear.r @ linear.r)
    raise NotConverged(f"scaled step {np.max(np.abs(step)):.2e}")


def best(problem, starts):
    """The lowest of the minima reached, and how the starts fared: [(objective or reason)]."""
    found, fared = [], []
    for start in starts:
        try:
            x, objective = solve(problem, start)
            found.append((objective, len(found), x))
            fared.append(objective)
        except (NotConverged, fluid.OutOfRange) as reason:
            fared.append(str(reason))
    if not found:
        raise NotConverged("; ".join(fared))
    objective, _, x = min(found, key=lambda each: each[:2])
    return x, objective, fared
